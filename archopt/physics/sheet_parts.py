"""Which stretches of a cell's rim hang together through the cell's copper; positions in pitches."""

from __future__ import annotations

import numpy as np
from scipy.sparse import coo_array
from scipy.sparse.csgraph import connected_components

from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.physics.sheet_shape import (
    distance_to_segments,
    edges,
    inside_polygon,
    near_pairs,
    segments_cross,
)

#: Boundaries nearer to each other than this touch (pitches).
TOUCH = 1e-6
#: Points along each side of a cell in which boundaries cross; copper narrower than this is lost there.
RASTER = 23


def line_crossings(polygon: FloatArray, axis: int, offset: float) -> tuple[IntArray, IntArray, FloatArray]:
    """Edge, line and share of the edge where a polygon crosses the lines ``offset + whole number``."""
    start, end = polygon[:, axis], np.roll(polygon[:, axis], -1)
    first = np.ceil(np.minimum(start, end) - offset).astype(np.int_)
    count = np.ceil(np.maximum(start, end) - offset).astype(np.int_) - first
    edge = np.repeat(np.arange(len(polygon)), count)
    line = np.arange(len(edge)) - np.repeat(np.cumsum(count) - count, count) + np.repeat(first, count)
    rise = end[edge] - start[edge]
    return edge, line, (line + offset - start[edge]) / rise


def _chains(polygon: FloatArray, columns: int, rows: int) -> tuple[IntArray, FloatArray]:
    """Walk a polygon: cell of every passage through one, and where on the cell's rim it comes and goes.

    The rim runs from 0 to 4 anticlockwise from the lower left corner. A polygon within one cell has none.
    """
    edges, shares = [np.arange(len(polygon))], [np.zeros(len(polygon))]
    for axis in (0, 1):
        edge, _, share = line_crossings(polygon, axis, 0.0)
        edges.append(edge)
        shares.append(share)
    edge, share = np.concatenate(edges), np.concatenate(shares)
    order = np.lexsort((share, edge))
    edge, share = edge[order], share[order]
    onward = np.where(np.roll(edge, -1) == edge, np.roll(share, -1), 1.0)
    start, step = polygon[edge], (np.roll(polygon, -1, axis=0) - polygon)[edge]
    cell = np.floor(start + 0.5 * (share + onward)[:, None] * step).astype(np.int_)
    first = np.flatnonzero((cell != np.roll(cell, 1, axis=0)).any(axis=1))
    point = (start + share[:, None] * step)[first]
    column, row = cell[first].T
    rim = np.stack([_rim(point, cell[first]), _rim(np.roll(point, -1, axis=0), cell[first])], axis=1)
    held = (column >= 0) & (column < columns) & (row >= 0) & (row < rows)
    return (row * columns + column)[held], rim[held]


def _rim(point: FloatArray, cell: IntArray) -> FloatArray:
    """Place on a cell's rim, 0 to 4, of points (pitches) that lie on it; both of shape (N, 2)."""
    x, y = np.clip((point - cell).T, 0.0, 1.0)
    nearest = np.argmin(np.stack([y, 1.0 - x, 1.0 - y, x]), axis=0)
    place: FloatArray = np.choose(nearest, [x, 1.0 + y, 3.0 - x, 4.0 - y])
    return place


def part_of_cell(
    polygons: list[FloatArray], columns: int, rows: int, cell: IntArray, middle: FloatArray
) -> IntArray:
    """Which part of its cell either side of every face belongs to; 0 where the cell is one part.

    Parameters
    ----------
    polygons : outline and cut-outs, corners of shape (N, 2)
    columns, rows : size of the grid
    cell : shape (F, 2), the cell on either side of every open face
    middle : shape (F, 2), the face's middle

    Notes
    -----
    A boundary that comes into a cell at one place of its rim and leaves at another parts the rim in two; two
    stretches of rim hang together exactly if no boundary parts them. Where boundaries cross or touch each
    other within the cell that does not hold, and sight lines between points of the copper tell.
    """
    walks = [_chains(polygon, columns, rows) for polygon in polygons]
    chain_cell = np.concatenate([walk[0] for walk in walks])
    rim = np.sort(np.concatenate([walk[1] for walk in walks]), axis=1)
    found, count = np.unique(chain_cell, return_counts=True)
    met = set(_meeting_cells(polygons, columns).tolist())
    several = np.union1d(found[count > 1], np.array(sorted(met), dtype=np.int_))
    label = np.zeros(cell.shape, dtype=np.int_)
    sides = np.argwhere(np.isin(cell, several))
    order = np.argsort(cell[sides[:, 0], sides[:, 1]], kind="stable")
    sides = sides[order]
    numbers, first = np.unique(cell[sides[:, 0], sides[:, 1]], return_index=True)
    by_chain = np.argsort(chain_cell, kind="stable")
    low = np.searchsorted(chain_cell[by_chain], numbers, side="left")
    high = np.searchsorted(chain_cell[by_chain], numbers, side="right")
    used = 0
    for index, group in enumerate(np.split(sides, first[1:])):
        number = int(numbers[index]) if len(numbers) else -1
        corner = np.array([number % columns, number // columns])
        places = middle[group[:, 0]]
        if number in met:
            part = _parts_by_sight(polygons, corner, places)
        else:
            rims = rim[by_chain[low[index] : high[index]]] if len(numbers) else rim[:0]
            part = _parts_by_rim(rims, _rim(places, np.broadcast_to(corner, places.shape)))
        label[group[:, 0], group[:, 1]] = used + part
        used += int(part.max(initial=-1)) + 1
    return label


def _parts_by_rim(rim: FloatArray, place: FloatArray) -> IntArray:
    """Part of every place on a cell's rim, shape (S,), from where boundaries come and go, shape (C, 2)."""
    parted = (rim[None, :, 0] < place[:, None]) & (place[:, None] < rim[None, :, 1])
    _, part = np.unique(parted, axis=0, return_inverse=True)
    return part.ravel()


def _meeting_cells(polygons: list[FloatArray], columns: int) -> IntArray:
    """Cells in which the boundaries of two polygons cross or touch each other."""
    start, end = (np.concatenate(ends) for ends in zip(*map(edges, polygons), strict=True))
    owner = np.repeat(np.arange(len(polygons)), [len(polygon) for polygon in polygons])
    one, other = near_pairs(np.minimum(start, end) - TOUCH, np.maximum(start, end) + TOUCH).T
    foreign = owner[one] != owner[other]
    one, other = one[foreign], other[foreign]
    crossed = segments_cross(start[one], end[one], start[other], end[other])
    first, second = one[crossed], other[crossed]
    step, onward, away = end[first] - start[first], end[second] - start[second], start[second] - start[first]
    across = step[:, 0] * onward[:, 1] - step[:, 1] * onward[:, 0]
    share = (away[:, 0] * onward[:, 1] - away[:, 1] * onward[:, 0]) / across
    points = [start[first] + share[:, None] * step]
    for corner, side in ((one, other), (other, one)):
        touching = distance_to_segments(start[corner], start[side], end[side]) < TOUCH
        points.append(start[corner][touching])
    column, row = np.floor(np.concatenate(points)).astype(np.int_).T
    return np.unique(row * columns + column)


def _parts_by_sight(polygons: list[FloatArray], corner: IntArray, places: FloatArray) -> IntArray:
    """Part of every place on a cell's rim, shape (S, 2): places and raster points in sight are one."""
    here = [
        polygon
        for number, polygon in enumerate(polygons)
        if number == 0
        or ((polygon.min(axis=0) <= corner + 1).all() and (polygon.max(axis=0) >= corner).all())
    ]
    start, end = (np.concatenate(ends) for ends in zip(*map(edges, here), strict=True))
    close = (np.minimum(start, end) <= corner + 1).all(axis=1) & (np.maximum(start, end) >= corner).all(
        axis=1
    )
    walls = start[close], end[close]
    steps = (np.arange(RASTER) + 0.5137) / (RASTER + 0.0311)
    points = corner + np.stack(np.meshgrid(steps, steps, indexing="ij"), axis=-1).reshape(-1, 2)
    copper = inside_polygon(points, here[0])
    for cutout in here[1:]:
        copper &= ~inside_polygon(points, cutout)
    number = np.arange(RASTER**2).reshape(RASTER, RASTER)
    pairs = np.concatenate(
        [
            np.stack([number[1:].ravel(), number[:-1].ravel()], axis=1),
            np.stack([number[:, 1:].ravel(), number[:, :-1].ravel()], axis=1),
            np.stack(np.meshgrid(RASTER**2 + np.arange(len(places)), number.ravel()), axis=-1).reshape(-1, 2),
        ]
    )
    copper = np.append(copper, np.ones(len(places), dtype=bool))
    points = np.concatenate([points, places])
    pairs = pairs[copper[pairs].all(axis=1)]
    crossed = segments_cross(points[pairs[:, 0], None], points[pairs[:, 1], None], *walls)
    seen: BoolArray = crossed.sum(axis=1) == 0
    size = len(points)
    matrix = coo_array((np.ones(int(seen.sum())), tuple(pairs[seen].T)), shape=(size, size))
    _, part = connected_components(matrix, directed=False)
    _, numbered = np.unique(part[RASTER**2 :], return_inverse=True)
    return numbered.ravel()
