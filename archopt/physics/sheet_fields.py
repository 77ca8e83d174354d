"""Drop and current density over a solved sheet, and the current through a marked neck."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.ndimage import convolve

from archopt.physics.arrays import BoolArray, FloatArray
from archopt.physics.sheet import SheetSolution
from archopt.physics.sheet_cut import cut_along
from archopt.physics.sheet_grid import copper_share
from archopt.physics.sheet_neck import neck_stretch
from archopt.physics.sheet_shape import Neck

#: Diameter over which current density is averaged (m): the peak at a sharp corner diverges with the grid.
DISC_M = 3e-3
#: Points a cell is sampled by along each side where a disc's edge cuts it.
SAMPLES = 8


def drop_v(solution: SheetSolution, currents_a: FloatArray, sheet_ohm: float) -> FloatArray:
    """Drop below the source (V) in every cell, shape (rows, columns), for currents (A) drawn, shape (P,).

    Not a number where there is no copper, or none that hangs together with the source.
    """
    faces, cells = solution.faces, solution.grid.rows * solution.grid.columns
    drop = sheet_ohm * (solution.node_squares @ currents_a)[solution.network.copper_node]
    weight = np.bincount(faces.node.ravel(), np.repeat(faces.length, 2), faces.node_cell.size)
    total = np.bincount(faces.node_cell, weight, cells)
    mean = np.full(cells, np.nan)
    np.divide(np.bincount(faces.node_cell, weight * drop, cells), total, out=mean, where=total > 0.0)
    return mean.reshape(solution.grid.rows, solution.grid.columns)


def link_current_a(solution: SheetSolution, currents_a: FloatArray) -> FloatArray:
    """Current (A) in every link towards its right or upper end, shape (L,); currents (A) drawn, (P,)."""
    drop = solution.node_squares @ currents_a
    node = solution.network.node
    current: FloatArray = solution.network.conductance * (drop[node[:, 1]] - drop[node[:, 0]])
    return current


def density_a_per_m(solution: SheetSolution, currents_a: FloatArray) -> FloatArray:
    """Current per metre of width (A/m) in every cell, shape (rows, columns), for currents (A) drawn, (P,).

    The size of the vector whose parts are the means over the copper of opposite faces. It grows without
    bound at inner corners on finer grids: use :func:`averaged_density_a_per_m` against a limit.
    Not a number off the copper and on pads, where the current leaves the sheet.
    """
    faces, network = solution.faces, solution.network
    nodes, cells = faces.node_cell.size, solution.grid.rows * solution.grid.columns
    current = np.nan_to_num(link_current_a(solution, currents_a))
    end = faces.node[network.face]
    free = network.inner & (network.copper_node[end] >= network.port_count)
    square, weight = np.zeros(nodes), np.zeros(nodes)
    for axis in (0, 1):
        here = free & (faces.axis[network.face] == axis)[:, None]
        width = np.bincount(
            end[here], np.broadcast_to(faces.length[network.face][:, None], end.shape)[here], nodes
        )
        total = np.bincount(end[here], np.broadcast_to(current[:, None], end.shape)[here], nodes)
        square += (total / np.maximum(width * solution.grid.pitch_m, 1e-300)) ** 2 * (width > 0.0)
        weight += width
    total_weight = np.bincount(faces.node_cell, weight, cells)
    density = np.full(cells, np.nan)
    sums = np.bincount(faces.node_cell, weight * np.sqrt(square), cells)
    np.divide(sums, total_weight, out=density, where=total_weight > 0.0)
    return density.reshape(solution.grid.rows, solution.grid.columns)


def _disc(diameter_cells: float) -> FloatArray:
    """Share of every cell under a disc centred on the middle one, square, odd size."""
    reach = int(np.ceil(0.5 * diameter_cells - 0.5))
    fine = (np.arange((2 * reach + 1) * SAMPLES) + 0.5) / SAMPLES - reach - 0.5
    under = np.add.outer(fine**2, fine**2) <= (0.5 * diameter_cells) ** 2
    share: FloatArray = under.reshape(2 * reach + 1, SAMPLES, 2 * reach + 1, SAMPLES).mean(axis=(1, 3))
    return share


def averaged_density_a_per_m(
    solution: SheetSolution, currents_a: FloatArray, disc_m: float = DISC_M
) -> FloatArray:
    """Current density (A/m) averaged over the copper under a disc (diameter, m) about every cell.

    Shape (rows, columns); currents (A) drawn, shape (P,). Pads and cut-outs under the disc do not thin the
    mean. A disc smaller than a cell is the cell. Not a number off the copper and on pads.
    """
    density = density_a_per_m(solution, currents_a)
    share = np.where(np.isnan(density), 0.0, copper_share(solution.sheet, solution.grid))
    kernel = _disc(max(disc_m / solution.grid.pitch_m, 1.0))
    total = convolve(share, kernel, mode="constant")
    mean = np.full(density.shape, np.nan)
    kept = ~np.isnan(density) & (total > 0.0)
    np.divide(convolve(share * np.nan_to_num(density), kernel, mode="constant"), total, out=mean, where=kept)
    return mean


@dataclass(frozen=True, slots=True)
class NeckFlow:
    """Current through a marked neck.

    Attributes
    ----------
    width_m : width of the copper along the marked line (m)
    share : shape (P,), current through the neck for one ampere drawn at each load port; positive where it
        runs from the right to the left of the line as seen from its first end
    """

    width_m: float
    share: FloatArray

    def density_a_per_m(self, currents_a: FloatArray) -> float:
        """Mean current density (A/m) in the neck for currents (A) drawn at the ports, shape (P,)."""
        return abs(float(self.share @ currents_a)) / self.width_m


def neck_flow(solution: SheetSolution, neck: Neck) -> NeckFlow:
    """Current through a marked neck for every load port: the links through faces that cut the copper there.

    Raises
    ------
    SheetError
        If the grid is too coarse to see the edges the neck ends at, as a hole that crosses no cell face.
    """
    faces, network, grid = solution.faces, solution.network, solution.grid
    stretch = neck_stretch(solution.sheet, neck)
    start, end = grid.to_grid(np.array([stretch.start_m, stretch.end_m]))
    at_pad = np.zeros(len(faces.length), dtype=bool)
    at_pad[network.face[~network.inner.all(axis=1)]] = True
    usable: BoolArray = ~at_pad & (network.copper_node[faces.node].min(axis=1) >= network.port_count)
    polygons = [grid.to_grid(polygon) for polygon in solution.sheet.polygons_m]
    face, sense = cut_along(faces, usable, polygons, start, end)
    signs = np.zeros(len(faces.length))
    signs[face] = sense
    sign = signs[network.face]
    under = sign != 0.0
    drop = solution.node_squares[network.node[under]]
    current = network.conductance[under, None] * (drop[:, 1] - drop[:, 0])
    return NeckFlow(stretch.width_m, (sign[under, None] * current).sum(axis=0))
