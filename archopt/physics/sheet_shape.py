"""What a sheet of copper is made of: an outline, cut-outs, pads that feed and load it, and marked necks."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from archopt.physics.arrays import BoolArray, FloatArray, IntArray


class SheetError(ValueError):
    """A sheet that cannot be solved; the message names the culprit and says what would be right."""


@dataclass(frozen=True, slots=True)
class RectanglePad:
    """A rectangular contact, at one potential all over.

    Parameters
    ----------
    port : the port it belongs to; pads of one port are joined outside the sheet and may overlap
    x_m, y_m : its centre (m)
    width_m, height_m : its sides (m), along x and y before it is turned
    angle_rad : turned anticlockwise about its centre (rad)
    """

    port: str
    x_m: float
    y_m: float
    width_m: float
    height_m: float
    angle_rad: float = 0.0

    @property
    def least_size_m(self) -> float:
        """Its shorter side (m)."""
        return min(self.width_m, self.height_m)

    @property
    def reach_m(self) -> float:
        """Distance (m) from its centre to its farthest point."""
        return 0.5 * float(np.hypot(self.width_m, self.height_m))

    def corners_m(self, shrink: float = 0.0) -> FloatArray:
        """Its four corners (m), shape (4, 2), anticlockwise; ``shrink`` is the share taken off every side."""
        half = 0.5 * (1.0 - shrink) * np.array([self.width_m, self.height_m])
        local = np.array([[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]]) * half
        cosine, sine = np.cos(self.angle_rad), np.sin(self.angle_rad)
        turned: FloatArray = local @ np.array([[cosine, sine], [-sine, cosine]])
        placed: FloatArray = turned + np.array([self.x_m, self.y_m])
        return placed

    def _local(self, vector_m: FloatArray) -> FloatArray:
        """A vector, shape (N, 2), along the pad's own sides, in half sides."""
        cosine, sine = np.cos(self.angle_rad), np.sin(self.angle_rad)
        turned: FloatArray = vector_m @ np.array([[cosine, -sine], [sine, cosine]])
        scaled: FloatArray = turned / (0.5 * np.array([self.width_m, self.height_m]))
        return scaled

    def contains(self, points_m: FloatArray) -> BoolArray:
        """Whether points (m), shape (N, 2), lie on the pad."""
        local = np.abs(self._local(points_m - np.array([self.x_m, self.y_m])))
        inside: BoolArray = (local[:, 0] <= 1.0) & (local[:, 1] <= 1.0)
        return inside

    def span(self, start_m: FloatArray, step_m: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Where lines ``start + t step`` enter and leave the pad.

        Parameters
        ----------
        start_m, step_m : (m), shape (N, 2)

        Returns
        -------
        t on entry and on exit, shape (N,) each; infinity and minus infinity where the line misses the pad.
        """
        start = self._local(start_m - np.array([self.x_m, self.y_m]))
        step = self._local(step_m)
        flat = np.abs(step) < 1e-12 * np.abs(step).max(initial=1e-300)
        safe = np.where(flat, 1.0, step)
        one, other = (-1.0 - start) / safe, (1.0 - start) / safe
        beside = np.where(
            np.abs(start) <= 1.0, -np.inf, np.inf
        )  # a line along a side is in its slab or never
        enter = np.where(flat, beside, np.minimum(one, other)).max(axis=1)
        leave = np.where(flat, -beside, np.maximum(one, other)).min(axis=1)
        hit = enter < leave
        return np.where(hit, enter, np.inf), np.where(hit, leave, -np.inf)


@dataclass(frozen=True, slots=True)
class DiscPad:
    """A round contact, at one potential all over.

    Parameters
    ----------
    port : the port it belongs to; pads of one port are joined outside the sheet and may overlap
    x_m, y_m : its centre (m)
    diameter_m : its diameter (m)
    """

    port: str
    x_m: float
    y_m: float
    diameter_m: float

    @property
    def least_size_m(self) -> float:
        """Its diameter (m)."""
        return self.diameter_m

    @property
    def reach_m(self) -> float:
        """Its radius (m)."""
        return 0.5 * self.diameter_m

    def contains(self, points_m: FloatArray) -> BoolArray:
        """Whether points (m), shape (N, 2), lie on the pad."""
        offset = points_m - np.array([self.x_m, self.y_m])
        inside: BoolArray = (offset**2).sum(axis=1) <= self.reach_m**2
        return inside

    def span(self, start_m: FloatArray, step_m: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Where lines ``start + t step`` enter and leave the pad; see :meth:`RectanglePad.span`."""
        start = start_m - np.array([self.x_m, self.y_m])
        square = (step_m**2).sum(axis=1)
        middle = -(start * step_m).sum(axis=1) / square
        under_root = middle**2 - ((start**2).sum(axis=1) - self.reach_m**2) / square
        half = np.sqrt(np.maximum(under_root, 0.0))
        hit = under_root > 0.0
        return np.where(hit, middle - half, np.inf), np.where(hit, middle + half, -np.inf)


Pad = RectanglePad | DiscPad


@dataclass(frozen=True, slots=True)
class Neck:
    """A line marked across the copper, through which the current is wanted.

    Parameters
    ----------
    name : what a person calls it
    x1_m, y1_m, x2_m, y2_m : its ends (m); the copper around its middle counts, edge to edge
    """

    name: str
    x1_m: float
    y1_m: float
    x2_m: float
    y2_m: float


@dataclass(frozen=True, slots=True)
class Sheet:
    """A sheet of even thickness with its contacts.

    Parameters
    ----------
    outline_m : corners of the copper's outer edge (m), shape (N, 2), in order either way round, not closed
    pads : the contacts
    source : the port everything is measured against
    cutouts_m : holes, each as the outline; they may overlap one another and reach over the outline's edge
    necks : lines through which current is wanted
    """

    outline_m: FloatArray
    pads: tuple[Pad, ...]
    source: str
    cutouts_m: tuple[FloatArray, ...] = field(default=())
    necks: tuple[Neck, ...] = field(default=())

    @property
    def load_ports(self) -> tuple[str, ...]:
        """Every port but the source, in the order in which the pads name them first."""
        return tuple(dict.fromkeys(pad.port for pad in self.pads if pad.port != self.source))

    @property
    def polygons_m(self) -> tuple[FloatArray, ...]:
        """The outline, then the cut-outs (m)."""
        return (self.outline_m, *self.cutouts_m)


def polygon_area_m2(corners_m: FloatArray) -> float:
    """Area (m2) inside a polygon, corners (m) of shape (N, 2), either way round (shoelace formula)."""
    x, y = corners_m[:, 0], corners_m[:, 1]
    return 0.5 * abs(float(x @ np.roll(y, -1) - y @ np.roll(x, -1)))


def inside_polygon(points: FloatArray, corners: FloatArray) -> BoolArray:
    """Whether points, shape (N, 2), lie inside a polygon, corners of shape (M, 2); even-odd rule."""
    start, end = corners, np.roll(corners, -1, axis=0)
    x, y = points[:, 0, None], points[:, 1, None]
    spans = (start[:, 1] <= y) != (end[:, 1] <= y)
    rise = end[:, 1] - start[:, 1]
    crossing = start[:, 0] + (y - start[:, 1]) * (end[:, 0] - start[:, 0]) / np.where(rise == 0.0, 1.0, rise)
    inside: BoolArray = (spans & (crossing > x)).sum(axis=1) % 2 == 1
    return inside


def on_copper(points_m: FloatArray, sheet: Sheet) -> BoolArray:
    """Whether points (m), shape (N, 2), lie inside the outline and in no cut-out."""
    inside = inside_polygon(points_m, sheet.outline_m)
    low_m, high_m = points_m.min(axis=0), points_m.max(axis=0)
    for cutout_m in sheet.cutouts_m:
        if (cutout_m.min(axis=0) > high_m).any() or (cutout_m.max(axis=0) < low_m).any():
            continue
        inside = inside & ~inside_polygon(points_m, cutout_m)
    return inside


def edges(corners: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Start and end of every side of a polygon, corners of shape (N, 2), any unit; shape (N, 2) each."""
    return corners, np.roll(corners, -1, axis=0)


def _turn(origin: FloatArray, one: FloatArray, other: FloatArray) -> FloatArray:
    """Twice the signed area of the triangle of three points; positive anticlockwise."""
    first, second = one - origin, other - origin
    turn: FloatArray = first[..., 0] * second[..., 1] - first[..., 1] * second[..., 0]
    return turn


def segments_cross(
    start: FloatArray, end: FloatArray, other_start: FloatArray, other_end: FloatArray
) -> BoolArray:
    """Whether segments cross away from their ends; points of shapes (..., 2) that broadcast."""
    apart: BoolArray = (_turn(start, end, other_start) * _turn(start, end, other_end) < 0.0) & (
        _turn(other_start, other_end, start) * _turn(other_start, other_end, end) < 0.0
    )
    return apart


def distance_to_segments(points: FloatArray, start: FloatArray, end: FloatArray) -> FloatArray:
    """Distance from points to segments; shapes (..., 2) that broadcast."""
    along, offset = end - start, points - start
    square = np.maximum((along**2).sum(axis=-1), 1e-300)
    share = np.clip((offset * along).sum(axis=-1) / square, 0.0, 1.0)
    distance: FloatArray = np.linalg.norm(offset - share[..., None] * along, axis=-1)
    return distance


def near_pairs(low: FloatArray, high: FloatArray) -> IntArray:
    """Pairs of boxes that meet, shape (pairs, 2), each once; lower and upper corners of shape (N, 2)."""
    order = np.argsort(low[:, 0], kind="stable")
    start = np.arange(len(order))
    count = np.searchsorted(low[order, 0], high[order, 0], side="right") - start - 1
    count = np.maximum(count, 0)
    one = np.repeat(start, count)
    other = one + 1 + np.arange(len(one)) - np.repeat(np.cumsum(count) - count, count)
    pairs: IntArray = np.stack([order[one], order[other]], axis=1)
    meet = (low[pairs[:, 0], 1] <= high[pairs[:, 1], 1]) & (low[pairs[:, 1], 1] <= high[pairs[:, 0], 1])
    meeting: IntArray = pairs[meet]
    return meeting
