"""Staircases: lower-left fronts of (cost, energy), added, joined and crossed without ever losing their lower bound."""

from __future__ import annotations

import numpy as np

from archopt.physics.arrays import FloatArray

MOST_STEPS = 400
RAIL_STEPS = 120


def front(cost: FloatArray, energy: FloatArray) -> FloatArray:
    """Return the points no other equals or beats, by cost, (N, 2); what is not finite is left out."""
    keep = np.isfinite(energy) & np.isfinite(cost)
    cost, energy = cost[keep], energy[keep]
    order = np.lexsort((energy, cost))
    cost, energy = cost[order], energy[order]
    least = np.minimum.accumulate(energy)
    better = np.ones(len(cost), dtype=bool)
    better[1:] = energy[1:] < least[:-1]
    return np.stack([cost[better], energy[better]], axis=1)


def coarser(points: FloatArray, most: int = MOST_STEPS) -> FloatArray:
    """Return a staircase of at most so many points nowhere above the given one.

    Neighbours are gathered where they differ least and stand for each other by the lower left corner they share.
    """
    if len(points) <= most:
        return points
    span = np.ptp(points, axis=0)
    along = np.abs(np.diff(points, axis=0)) / np.where(span > 0, span, 1.0)
    path = np.concatenate([[0.0], np.cumsum(along.sum(axis=1))])
    box = np.minimum((path / path[-1] * most).astype(np.int64), most - 1)
    first = np.flatnonzero(np.diff(box, prepend=-1))
    last = np.concatenate([first[1:], [len(points)]]) - 1
    return np.stack([points[first, 0], points[last, 1]], axis=1)


def added(first: FloatArray, second: FloatArray) -> FloatArray:
    """Return the staircase of every sum of a point of each."""
    if not len(first) or not len(second):
        return np.zeros((0, 2))
    sums = (first[:, None, :] + second[None, :, :]).reshape(-1, 2)
    return coarser(front(sums[:, 0], sums[:, 1]))


def joined(parts: list[FloatArray]) -> FloatArray:
    """Return the staircase below which no point of any part lies: what bounds designs of several classes."""
    every = np.concatenate([*parts, np.zeros((0, 2))])
    return coarser(front(every[:, 0], every[:, 1]))


def crossed(first: FloatArray, second: FloatArray) -> FloatArray:
    """Return the staircase on or above both: what two bounds of the same designs say together."""
    if not len(first) or not len(second):
        return np.zeros((0, 2))
    cost = np.union1d(first[:, 0], second[:, 0])
    energy = np.maximum(height(first, cost), height(second, cost))
    return coarser(front(cost, energy))


def height(points: FloatArray, cost: FloatArray) -> FloatArray:
    """Return the least energy a staircase leaves at some costs; inf left of it."""
    place = np.searchsorted(points[:, 0], cost, side="right") - 1
    return np.where(place >= 0, points[np.maximum(place, 0), 1], np.inf)
