"""The stretch of copper that a marked line crosses."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.physics.arrays import FloatArray
from archopt.physics.sheet_shape import Neck, Sheet, edges

#: A line within this share of its length beside an edge runs along the edge.
GRAZE = 1e-7


@dataclass(frozen=True, slots=True)
class NeckStretch:
    """Copper along a marked line, around its middle.

    Attributes
    ----------
    start_m, end_m : (x, y) where it meets the copper's edge at either end (m)
    """

    start_m: tuple[float, float]
    end_m: tuple[float, float]

    @property
    def width_m(self) -> float:
        """Its length along the line: the width of the neck (m)."""
        return float(np.hypot(self.end_m[0] - self.start_m[0], self.end_m[1] - self.start_m[1]))


def neck_stretch(sheet: Sheet, neck: Neck) -> NeckStretch:
    """Copper along a marked line, from edge to edge around its middle, which must lie on copper.

    A line that runs on along an edge ends where the edge begins.
    """
    origin = np.array([neck.x1_m, neck.y1_m])
    along = np.array([neck.x2_m, neck.y2_m]) - origin
    length_m = float(np.hypot(*along))
    along /= length_m
    low, high = max(
        (_between_edges(sheet, origin, along, 0.5 * length_m, aside * length_m) for aside in (-GRAZE, GRAZE)),
        key=lambda ends: ends[0] - ends[1],
    )
    first, last = origin + low * along, origin + high * along
    return NeckStretch((float(first[0]), float(first[1])), (float(last[0]), float(last[1])))


def _between_edges(
    sheet: Sheet, origin_m: FloatArray, along: FloatArray, middle_m: float, aside_m: float
) -> tuple[float, float]:
    """Nearest edges before and after the middle of a line, along it (m); the line is moved aside (m)."""
    normal = np.array([-along[1], along[0]])
    places = []
    for polygon in sheet.polygons_m:
        start, end = edges(polygon - origin_m)
        before, after = start @ normal - aside_m, end @ normal - aside_m
        crossed = (before <= 0.0) != (after <= 0.0)
        share = before[crossed] / (before - after)[crossed]
        places.append((start[crossed] + share[:, None] * (end - start)[crossed]) @ along)
    place = np.sort(np.concatenate(places))
    upper = int(np.searchsorted(place, middle_m))
    return float(place[upper - 1]), float(place[upper])
