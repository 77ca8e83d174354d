"""Where nets of a floorplan lie above one another: which of them, and a spot that names the place."""

from __future__ import annotations

from dataclasses import dataclass
from functools import lru_cache

import numpy as np

from archopt.inputs.floorplan_shape import BUSES, Floorplan, Region, metres
from archopt.model.parameters import BoolArray, FloatArray
from archopt.physics.sheet_shape import inside_polygon, polygon_area_m2

#: Points the board is looked at; regions that overlap by less than their pitch (2 mm on 1000 cm2) pass as apart.
POINTS = 20_000


@dataclass(frozen=True)
class Overlaps:
    """Places where nets lie above one another, G of them, none of which another one covers.

    holds (G, 2 + R): whether a net is there, buses first; names (G,): the spot, mm.
    """

    holds: FloatArray
    names: tuple[str, ...]


def covers(region: Region, points_m: FloatArray) -> BoolArray:
    """Return which points (N, 2) m have copper of a net."""
    found: BoolArray = inside_polygon(points_m, metres(region.outline_mm))
    for hole in region.cutouts_mm:
        found &= ~inside_polygon(points_m, metres(hole))
    return found


@lru_cache(maxsize=16)
def overlaps(plan: Floorplan | None, rails: tuple[str, ...]) -> Overlaps:
    """Return the places where two nets or more lie above one another; none without a floorplan.

    Parameters
    ----------
    rails : rails with a stage of their own
    """
    nets = (*BUSES, *rails)
    if plan is None:
        return Overlaps(np.zeros((0, len(nets))), ())
    outline = metres(plan.outline_mm)
    pitch_m = (polygon_area_m2(outline) / POINTS) ** 0.5
    low, high = outline.min(axis=0), outline.max(axis=0)
    axes = [np.arange(low[k] + 0.5 * pitch_m, high[k], pitch_m) for k in range(2)]
    points = np.stack(np.meshgrid(*axes, indexing="ij"), axis=2).reshape(-1, 2)
    drawn = [plan.region(net) for net in nets]
    there = np.stack(
        [np.zeros(len(points), dtype=bool) if region is None else covers(region, points) for region in drawn], axis=1
    )
    kinds, first = np.unique(there, axis=0, return_index=True)
    kept = [k for k in np.argsort(first).tolist() if kinds[k].sum() > 1 and not _within_another(kinds, k)]
    spots = points[first[kept]] * 1e3
    return Overlaps(kinds[kept].astype(np.float64), tuple(f"({x:.0f}, {y:.0f}) mm" for x, y in spots.tolist()))


def _within_another(kinds: BoolArray, k: int) -> bool:
    """Return whether all nets of one place lie at another place too, with more of them."""
    return bool(((kinds >= kinds[k]).all(axis=1) & (kinds.sum(axis=1) > kinds[k].sum())).any())
