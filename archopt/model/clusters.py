"""Clusters of load moments: split where they scatter most, never across a band or a pattern of rails off."""

from __future__ import annotations

import numpy as np

from archopt.model.parameters import BoolArray, FloatArray, IntArray


def split_groups(band: IntArray, off: BoolArray) -> list[IntArray]:
    """Return the moments that may share a cluster: same band, same rails off."""
    pattern = off @ (0.5 ** np.arange(1, off.shape[1] + 1))  # a binary fraction: exact up to 52 rails
    _, kind = np.unique(pattern, return_inverse=True)
    _, inverse = np.unique(band * (int(kind.max()) + 1) + kind, return_inverse=True)
    return [np.flatnonzero(inverse == k) for k in range(int(inverse.max()) + 1)]


def scatter(members: IntArray, hours: FloatArray, feature: FloatArray) -> tuple[float, int, float]:
    """Return the hour-weighted scatter of a cluster, the dimension that scatters most and its mean there."""
    weight = hours[members]
    total = weight.sum()
    if total <= 0 or len(members) < 2:
        return 0.0, 0, 0.0
    values = feature[members]
    mean = weight @ values / total
    spread = weight @ (values - mean) ** 2
    axis = int(np.argmax(spread))
    return float(spread.sum()), axis, float(mean[axis])


def cluster(groups: list[IntArray], hours: FloatArray, feature: FloatArray, count: int) -> list[IntArray]:
    """Return clusters of moments, splitting the one with the largest scatter at its mean until ``count``."""
    clusters = list(groups)
    measures = [scatter(members, hours, feature) for members in clusters]
    while len(clusters) < count:
        worst = int(np.argmax([m[0] for m in measures]))
        spread, axis, mean = measures[worst]
        if spread <= 0:
            break
        members = clusters[worst]
        upper = feature[members, axis] > mean
        if not upper.any() or upper.all():
            measures[worst] = (0.0, 0, 0.0)
            continue
        clusters[worst], fresh = members[~upper], members[upper]
        clusters.append(fresh)
        measures[worst] = scatter(clusters[worst], hours, feature)
        measures.append(scatter(fresh, hours, feature))
    return clusters
