"""The stretch of copper that a marked line crosses."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.physics.sheet_shape import Neck, Sheet, edges


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
    """Copper along a marked line, from edge to edge around its middle, which must lie on copper."""
    origin = np.array([neck.x1_m, neck.y1_m])
    along = np.array([neck.x2_m, neck.y2_m]) - origin
    length_m = float(np.hypot(*along))
    along /= length_m
    normal = np.array([-along[1], along[0]])
    places = [np.array([-np.inf, np.inf])]
    for polygon in sheet.polygons_m:
        start, end = edges(polygon - origin)
        before, after = start @ normal, end @ normal
        crossed = (before <= 0.0) != (after <= 0.0)
        share = before[crossed] / (before - after)[crossed]
        places.append((start[crossed] + share[:, None] * (end - start)[crossed]) @ along)
    place = np.sort(np.concatenate(places))
    upper = int(np.searchsorted(place, 0.5 * length_m))
    low, high = float(place[upper - 1]), float(place[upper])
    first, last = origin + low * along, origin + high * along
    return NeckStretch((float(first[0]), float(first[1])), (float(last[0]), float(last[1])))
