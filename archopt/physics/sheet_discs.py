"""Mean current density under a disc wherever it is greatest near a cell, nearly the same on every grid.

The density is put together between the faces of the cells, where the solved network gives it, and averaged over
points of the disc that lie on copper; the disc may stand between cells.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.physics.arrays import BoolArray, FloatArray
from archopt.physics.sheet import SheetSolution
from archopt.physics.sheet_shape import Sheet, on_copper

#: Points a disc is sampled by from edge to edge.
ACROSS = 16


@dataclass(frozen=True, slots=True)
class FaceDensity:
    """Density across the faces of the cells for one ampere at each of P loads.

    Attributes
    ----------
    along_x : (rows, columns + 1, P), across the faces on the left of every column and behind the last (1/m)
    along_y : (rows + 1, columns, P), across those below every row and above the last (1/m)
    open_x, open_y : the same without P, copper along each face (pitches)
    """

    along_x: FloatArray
    along_y: FloatArray
    open_x: FloatArray
    open_y: FloatArray


def face_density(solution: SheetSolution) -> FaceDensity:
    """Density across every cell face; where a pad lies between two cells the mean of either side of it."""
    grid, faces, network = solution.grid, solution.faces, solution.network
    drop = solution.node_squares[network.node]
    current = np.nan_to_num(network.conductance[:, None] * (drop[:, 1] - drop[:, 0]))
    count = len(faces.length)
    sides = np.maximum(np.bincount(network.face, minlength=count), 1)
    through = np.zeros((count, current.shape[1]))
    np.add.at(through, network.face, current)
    through /= sides[:, None]
    known = np.bincount(network.face, minlength=count) > 0
    row, column = np.divmod(faces.node_cell[faces.node[:, 1]], grid.columns)
    found = []
    for axis, shape in ((0, (grid.rows, grid.columns + 1)), (1, (grid.rows + 1, grid.columns))):
        here = known & (faces.axis == axis)
        total, length = np.zeros((*shape, current.shape[1])), np.zeros(shape)
        np.add.at(total, (row[here], column[here]), through[here])
        np.add.at(length, (row[here], column[here]), faces.length[here])
        found.append((total / np.maximum(length * grid.pitch_m, 1e-300)[..., None] * (length > 0.0)[..., None], length))
    return FaceDensity(found[0][0], found[1][0], found[0][1], found[1][1])


def _between(values: FloatArray, weight: FloatArray, first: FloatArray, second: FloatArray) -> FloatArray:
    """Values (rows, columns, P) at places in rows and columns (N,), linear between those with a weight, (N, P)."""
    total, share = np.zeros((len(first), values.shape[2])), np.zeros(len(first))
    low_first, low_second = np.floor(first).astype(np.int64), np.floor(second).astype(np.int64)
    for up in (0, 1):
        for on in (0, 1):
            i, j = low_first + up, low_second + on
            near = (1.0 - np.abs(first - i)) * (1.0 - np.abs(second - j))
            inside = (i >= 0) & (i < weight.shape[0]) & (j >= 0) & (j < weight.shape[1])
            i, j = np.where(inside, i, 0), np.where(inside, j, 0)
            near = np.where(inside, near, 0.0) * weight[i, j]
            total += near[:, None] * values[i, j]
            share += near
    return np.asarray(total / np.maximum(share, 1e-300)[:, None] * (share > 0.0)[:, None])


def density_at(solution: SheetSolution, field: FaceDensity, points_m: FloatArray) -> FloatArray:
    """Density (1/m) at points (N, 2) m on free copper for one ampere at each load, both parts, (N, 2, P)."""
    at = solution.grid.to_grid(points_m)
    x = _between(field.along_x, field.open_x, at[:, 1] - 0.5, at[:, 0])
    y = _between(field.along_y, field.open_y, at[:, 1], at[:, 0] - 0.5)
    return np.stack([x, y], axis=1)


def free_copper(sheet: Sheet, points_m: FloatArray) -> BoolArray:
    """Which points (N, 2) m lie on copper and on no pad."""
    free = on_copper(points_m, sheet)
    for pad in sheet.pads:
        free &= ~pad.contains(points_m)
    return free


def worst_disc(
    solution: SheetSolution, field: FaceDensity, centre_m: FloatArray, mix_a: FloatArray, disc_m: float
) -> FloatArray:
    """Mean density under the disc (diameter, m) that carries a mix of currents (P,) A most densely near a place.

    The disc's middle is on free copper within a cell of ``centre_m`` (2,) or a sixteenth of the disc. Returns what
    one ampere at each load makes there, (P,) 1/m: every load's density averaged by itself, so that their sum is
    at least the density of all together.
    """
    step_m = disc_m / ACROSS
    wander = max(int(np.ceil(solution.grid.pitch_m / step_m)), 1)
    reach = wander + ACROSS // 2
    ticks = np.arange(-reach, reach + 1)
    lattice = np.stack(np.meshgrid(ticks, ticks, indexing="ij"), axis=2).reshape(-1, 2)
    points = centre_m + lattice * step_m
    free = free_copper(solution.sheet, points)
    middle = free & (np.abs(lattice) <= wander).all(axis=1)
    parts = density_at(solution, field, points[free])
    size = np.hypot(parts[:, 0], parts[:, 1])
    apart = ((lattice[middle][:, None] - lattice[free][None]) ** 2).sum(axis=2)
    under = (apart <= (0.5 * ACROSS) ** 2).astype(np.float64)
    mean = np.einsum("mn,np->mp", under, size) / under.sum(axis=1)[:, None]
    worst: FloatArray = mean[int((mean @ mix_a).argmax())]
    return worst
