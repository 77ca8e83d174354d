"""The bus voltage of every band: a non-decreasing function of the band, the cheapest of those that are legal."""

from __future__ import annotations

import math

import numpy as np

from archopt.inputs.resolved import ResolvedStudy
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.space import FIXED, TWO_LEVELS

ILLEGAL_KWH = 1e7  # a band at an illegal voltage costs this much: the fewest illegal bands win


def choose_schedule(
    energy_kwh: FloatArray, legal: BoolArray, lower: IntArray, upper: IntArray, nominal: IntArray,
    control: IntArray, deadband: int = 0,
) -> IntArray:  # fmt: skip
    """Return the schedule, (M, B) grid indices, of M buses from (M, B, G) energies and legal voltages.

    Parameters
    ----------
    lower, upper, nominal, control : (M,) adaptive limits, nominal voltage and kind of control
    deadband : least change from band to band in grid steps, where there is one at all
    """
    grid = np.arange(energy_kwh.shape[2])
    price = energy_kwh + np.where(legal, 0.0, ILLEGAL_KWH)
    inside = (grid >= lower[:, None]) & (grid <= upper[:, None])
    held = np.where(inside[:, None, :], price, np.inf)
    follow = climb(held, deadband)
    return np.where(
        (control == FIXED)[:, None],
        nominal[:, None],
        np.where((control == TWO_LEVELS)[:, None], two_levels(price, lower, upper, deadband), follow),
    )


def deadband_steps(study: ResolvedStudy) -> int:
    """Return the least change of bus voltage from band to band in steps of the study's grid, 0 where any is."""
    return math.ceil(study.control.deadband_v / study.control.grid_v - 1e-9)


def climb(price: FloatArray, deadband: int = 0) -> IntArray:
    """Return the cheapest non-decreasing path through (M, B, G), first on ties, (M, B).

    From band to band it stays or rises by the deadband, in grid steps, at least.
    """
    count, bands, width = price.shape
    total = price[:, 0].copy()
    came = np.zeros((count, bands, width), dtype=np.int64)
    grid = np.arange(width)
    for band in range(1, bands):
        least = np.minimum.accumulate(total, axis=1)
        fresh = np.concatenate([np.ones((count, 1), dtype=bool), total[:, 1:] < least[:, :-1]], axis=1)
        best = np.maximum.accumulate(np.where(fresh, grid, 0), axis=1)
        if deadband > 1:
            none = min(deadband, width)  # voltages that no other can rise to
            far = np.concatenate([np.full((count, none), np.inf), least[:, : width - none]], axis=1)
            best = np.concatenate([np.zeros((count, none), dtype=np.int64), best[:, : width - none]], axis=1)
            best, least = np.where(far <= total, best, grid), np.minimum(far, total)
        came[:, band] = best
        total = price[:, band] + least
    path = np.zeros((count, bands), dtype=np.int64)
    path[:, -1] = total.argmin(axis=1)
    for band in range(bands - 1, 0, -1):
        path[:, band - 1] = came[np.arange(count), band, path[:, band]]
    return path


def two_levels(price: FloatArray, lower: IntArray, upper: IntArray, deadband: int = 0) -> IntArray:
    """Return the cheapest schedule of lower limit below one threshold and upper limit above, (M, B).

    Levels nearer than the deadband, in grid steps, are not changed between: the bus stays at one of them.
    """
    rows = np.arange(len(price))
    low = price[rows, :, lower]
    high = price[rows, :, upper]
    bands = price.shape[1]
    below = np.concatenate([np.zeros((len(price), 1)), np.cumsum(low, axis=1)], axis=1)
    above = np.concatenate([np.zeros((len(price), 1)), np.cumsum(high[:, ::-1], axis=1)], axis=1)[:, ::-1]
    both = below + above
    both[:, 1:-1] = np.where((upper - lower < deadband)[:, None], np.inf, both[:, 1:-1])
    threshold = both.argmin(axis=1)
    return np.where(np.arange(bands) < threshold[:, None], lower[:, None], upper[:, None])
