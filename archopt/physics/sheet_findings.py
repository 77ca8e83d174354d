"""What is wrong with a sheet, found before it is solved, each with the thing it concerns."""

from __future__ import annotations

from collections.abc import Iterator
from dataclasses import dataclass, replace
from itertools import combinations

import numpy as np

from archopt.physics.arrays import BoolArray, FloatArray
from archopt.physics.sheet_grid import cut_faces, default_pitch_m, lay_grid
from archopt.physics.sheet_neck import neck_stretch
from archopt.physics.sheet_network import Network, build_network, joined_to
from archopt.physics.sheet_shape import (
    DiscPad,
    Pad,
    RectanglePad,
    Sheet,
    distance_to_segments,
    edges,
    near_pairs,
    on_copper,
    polygon_area_m2,
    segments_cross,
)

#: Lengths below this share of the outline's size are rounding.
ROUNDING = 1e-9
#: Share of a pad's size that may stick out over the edge of the copper: pads lie flush with it.
FLUSH = 1e-6


@dataclass(frozen=True, slots=True)
class SheetFinding:
    """One thing wrong with a sheet.

    Attributes
    ----------
    kind : what sort of thing, the same words for the same fault
    thing : ``outline``, ``cutout``, ``pad``, ``port`` or ``neck``
    number : which cut-out, pad, load port or neck, counted from zero; 0 for the outline and the source
    message : what is wrong, with positions in mm, and what would be right
    """

    kind: str
    thing: str
    number: int
    message: str

    def __str__(self) -> str:
        return f"{self.kind}: {self.message}"


def findings(sheet: Sheet, pitch_m: float | None = None) -> tuple[SheetFinding, ...]:
    """Everything wrong with a sheet; empty where it can be solved on a grid of a pitch (m), or the default.

    Later checks wait for earlier ones: pads are looked at on a sound outline, connection between sound pads.
    """
    found = shape_findings(sheet)
    if found:
        return found
    grid = lay_grid(sheet, default_pitch_m(sheet) if pitch_m is None else pitch_m)
    return connection_findings(sheet, build_network(sheet, grid, cut_faces(sheet, grid)), grid.pitch_m)


def shape_findings(sheet: Sheet) -> tuple[SheetFinding, ...]:
    """What is wrong with outline, cut-outs, pads and necks, before any grid is laid."""
    for check in (_polygon_findings, _pad_findings, _neck_findings):
        found = tuple(check(sheet))
        if found:
            return found
    return ()


def _without_repeats(corners_m: FloatArray) -> FloatArray:
    """A polygon (m) without corners that repeat the one before."""
    size_m = float(np.ptp(corners_m, axis=0).max())
    apart: BoolArray = np.linalg.norm(corners_m - np.roll(corners_m, 1, axis=0), axis=1) > ROUNDING * size_m
    return corners_m[apart]


def _polygon_findings(sheet: Sheet) -> Iterator[SheetFinding]:
    for number, given in enumerate(sheet.polygons_m):
        thing, place = ("outline", 0) if number == 0 else ("cutout", number - 1)
        name = "the outline" if number == 0 else f"cut-out {place + 1}"
        if given.ndim != 2 or given.shape[1] != 2 or len(given) < 3 or not np.isfinite(given).all():
            yield SheetFinding(
                "no polygon", thing, place, f"{name} needs three corners or more, two numbers each"
            )
            continue
        corners = _without_repeats(given)
        size_m = float(np.ptp(given, axis=0).max())
        if len(corners) < 3:
            yield SheetFinding("no polygon", thing, place, f"{name} encloses no area")
            continue
        crossing, touching = _meetings_with_itself(corners, ROUNDING * size_m)
        if len(crossing):
            at = _spot(crossing[0])
            yield SheetFinding(f"self-crossing {thing}", thing, place, f"{name} crosses itself near {at}")
        elif polygon_area_m2(corners) <= ROUNDING * size_m**2:
            yield SheetFinding("no polygon", thing, place, f"{name} encloses no area")
        elif len(touching):
            message = f"{name} touches itself at {_spot(touching[0])}; leave copper or a gap"
            yield SheetFinding("zero-width neck", thing, place, message)


def _meetings_with_itself(corners_m: FloatArray, rounding_m: float) -> tuple[FloatArray, FloatArray]:
    """Where sides of a polygon cross each other, and corners that lie on sides not their own (m), (N, 2)."""
    start, end = edges(corners_m)
    last = len(corners_m) - 1
    low, high = np.minimum(start, end) - rounding_m, np.maximum(start, end) + rounding_m
    one, other = near_pairs(low, high).T
    crossed = segments_cross(start[one], end[one], start[other], end[other])
    crossing = 0.5 * (start[one] + end[one])[crossed]
    first, second = np.concatenate([one, other]), np.concatenate([other, one])
    ahead = (first - second) % (last + 1)
    # the first corner of a side also belongs to the side before it
    foreign = (ahead != 0) & (ahead != 1)
    first, second = first[foreign], second[foreign]
    touched = distance_to_segments(start[first], start[second], end[second]) <= rounding_m
    return crossing, start[first][touched]


def _spot(point_m: FloatArray) -> str:
    """A point (m), for a person."""
    return f"({1e3 * float(point_m[0]):.3f}, {1e3 * float(point_m[1]):.3f}) mm"


def _pad_findings(sheet: Sheet) -> Iterator[SheetFinding]:
    if not any(pad.port == sheet.source for pad in sheet.pads):
        yield SheetFinding("no source", "port", 0, f"no pad belongs to the source {sheet.source}")
    if not sheet.load_ports:
        yield SheetFinding("no load", "port", 0, "no pad belongs to a load; a resistance needs two ends")
    sound: list[tuple[int, Pad]] = []
    for number, pad in enumerate(sheet.pads):
        if not (pad.least_size_m > 0.0 and np.isfinite([pad.x_m, pad.y_m, pad.reach_m]).all()):
            yield SheetFinding(
                "no size", "pad", number, f"pad {number + 1} of {pad.port} has no size; give its sides"
            )
        elif not _lies_on_copper(pad, sheet):
            at = _spot(np.array([pad.x_m, pad.y_m]))
            message = f"pad {number + 1} of {pad.port} at {at} is not on copper all over; move it or the edge"
            yield SheetFinding("pad outside the copper", "pad", number, message)
        else:
            sound.append((number, pad))
    for (_, one), (number, other) in combinations(sound, 2):
        if one.port != other.port and _touch(one, other):
            at = _spot(np.array([other.x_m, other.y_m]))
            message = f"pad {number + 1} of {other.port} at {at} touches a pad of {one.port}"
            yield SheetFinding("overlapping pads", "pad", number, message)


def _lies_on_copper(pad: Pad, sheet: Sheet) -> bool:
    """Whether a pad lies on copper all over; flush with an edge is on it."""
    start, end = (np.concatenate(ends) for ends in zip(*map(edges, sheet.polygons_m), strict=True))
    centre = np.array([[pad.x_m, pad.y_m]])
    if not on_copper(centre, sheet)[0]:
        return False
    if isinstance(pad, DiscPad):
        return bool(distance_to_segments(centre, start, end).min() >= pad.reach_m * (1.0 - FLUSH))
    corners = pad.corners_m(FLUSH)
    smaller = replace(pad, width_m=pad.width_m * (1.0 - FLUSH), height_m=pad.height_m * (1.0 - FLUSH))
    first, last = edges(corners)
    crossed = segments_cross(first[:, None], last[:, None], start, end)
    clear = not crossed.any() and not smaller.contains(start).any()
    return bool(clear and on_copper(corners, sheet).all())


def _touch(one: Pad, other: Pad) -> bool:
    """Whether two pads touch or overlap."""
    if isinstance(one, DiscPad) and isinstance(other, DiscPad):
        return bool(np.hypot(one.x_m - other.x_m, one.y_m - other.y_m) <= one.reach_m + other.reach_m)
    if isinstance(one, RectanglePad) and isinstance(other, RectanglePad):
        return _rectangles_touch(one.corners_m(), other.corners_m())
    disc, rectangle = (one, other) if isinstance(one, DiscPad) else (other, one)
    if not isinstance(rectangle, RectanglePad):
        return False
    centre = np.array([[disc.x_m, disc.y_m]])
    near = distance_to_segments(centre, *edges(rectangle.corners_m())).min() <= disc.reach_m
    return bool(near or rectangle.contains(centre)[0])


def _rectangles_touch(one: FloatArray, other: FloatArray) -> bool:
    """Whether two convex shapes meet: no side of either parts them (separating-axis theorem)."""
    for corners in (one, other):
        start, end = edges(corners)
        normal = (end - start)[:, ::-1] * np.array([1.0, -1.0])
        first, second = one @ normal.T, other @ normal.T
        if ((first.max(axis=0) < second.min(axis=0)) | (second.max(axis=0) < first.min(axis=0))).any():
            return False
    return True


def _neck_findings(sheet: Sheet) -> Iterator[SheetFinding]:
    for number, neck in enumerate(sheet.necks):
        ends = np.array([[neck.x1_m, neck.y1_m], [neck.x2_m, neck.y2_m]])
        if not np.isfinite(ends).all() or np.linalg.norm(ends[1] - ends[0]) <= 0.0:
            yield SheetFinding(
                "zero-width neck", "neck", number, f"neck {neck.name} has no length; give two ends"
            )
            continue
        if not on_copper(ends.mean(axis=0)[None], sheet)[0]:
            message = f"the middle of neck {neck.name}, {_spot(ends.mean(axis=0))}, is not on copper"
            yield SheetFinding("zero-width neck", "neck", number, message)


def connection_findings(sheet: Sheet, network: Network, pitch_m: float) -> tuple[SheetFinding, ...]:
    """Ports that a grid of a pitch (m) lost or no copper joins to the source, and necks too near a pad."""
    found = []
    used = np.bincount(network.node.ravel(), minlength=network.node_count)[: network.port_count] > 0
    joined = joined_to(network.node, network.node_count, 0)[: network.port_count]
    names = (sheet.source, *sheet.load_ports)
    for number in np.flatnonzero(~used).tolist():
        message = (
            f"the pads of {names[number]} are lost on a grid of {1e3 * pitch_m:.3g} mm; use a finer pitch"
        )
        found.append(SheetFinding("grid too coarse", "port", max(number - 1, 0), message))
    for number in np.flatnonzero(used & ~joined).tolist() if used[0] else ():
        message = f"no copper joins {names[number]} to the source {sheet.source}"
        found.append(SheetFinding("port cut off", "port", number - 1, message))
    for index, neck in enumerate(sheet.necks):
        stretch = neck_stretch(sheet, neck)
        start = np.array([stretch.start_m])
        for pad in sheet.pads:
            enter, leave = _grown(pad, 2.0 * pitch_m).span(start, np.array([stretch.end_m]) - start)
            if enter[0] < 1.0 and leave[0] > 0.0:
                message = (
                    f"neck {neck.name} runs through a pad of {pad.port} or within two cells of it; "
                    f"mark it {2e3 * pitch_m:.3g} mm away or use a finer pitch"
                )
                found.append(SheetFinding("neck at a pad", "neck", index, message))
    return tuple(found)


def _grown(pad: Pad, margin_m: float) -> Pad:
    """A pad with a margin (m) all round."""
    if isinstance(pad, DiscPad):
        return replace(pad, diameter_m=pad.diameter_m + 2.0 * margin_m)
    return replace(pad, width_m=pad.width_m + 2.0 * margin_m, height_m=pad.height_m + 2.0 * margin_m)
