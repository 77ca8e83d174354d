"""Resistance of a plane between its pads, in squares, and where its current runs.

The sheet's conductance is laid on a square grid, solved once, and handed back as a matrix that needs only the
sheet resistance to give every load's drop from every load's current: for every layer count, weight and
temperature the same.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.physics.arrays import FloatArray
from archopt.physics.sheet_findings import SheetFinding, connection_findings, shape_findings
from archopt.physics.sheet_grid import Faces, Grid, cut_faces, default_pitch_m, lay_grid
from archopt.physics.sheet_network import Network, build_network, solve_network
from archopt.physics.sheet_shape import Sheet, SheetError


@dataclass(frozen=True, slots=True)
class SheetSolution:
    """A solved sheet with P load ports.

    Attributes
    ----------
    ports : names of the load ports, the order of every P below
    squares : shape (P, P), resistance between every pair of loads and the source, in squares:
        drop below the source (V) = sheet resistance (ohm) x squares @ currents drawn (A)
    node_squares : shape (nodes, P), the same for every node of the network
    sheet, grid, faces, network : what was solved
    """

    ports: tuple[str, ...]
    squares: FloatArray
    node_squares: FloatArray
    sheet: Sheet
    grid: Grid
    faces: Faces
    network: Network


def solve(sheet: Sheet, pitch_m: float | None = None) -> SheetSolution:
    """Solve a sheet for one ampere drawn at every load port in turn.

    Parameters
    ----------
    sheet : outline, cut-outs, pads
    pitch_m : side of a cell (m); by default 40,000 cells in the outline, up to 120,000 for small pads

    Raises
    ------
    SheetError
        If :func:`archopt.physics.sheet_findings.findings` has anything to say; the message holds all of it.

    Notes
    -----
    Laplace's equation in the copper, no current through its edges, every pad at one potential; finite
    volumes. Resistances converge with about the 4/3 power of the pitch where copper has inner corners,
    faster where it has none (the field at a corner of 270 degrees goes as its distance to minus one third).
    Taking copper away never lowers a resistance of the network by more than rounding, on one grid and away
    from the pads (Rayleigh).
    """
    _refuse(shape_findings(sheet))
    if pitch_m is not None and not pitch_m > 0.0:
        raise SheetError(f"a pitch of {pitch_m} m is none; give a positive one or leave it out")
    grid = lay_grid(sheet, default_pitch_m(sheet) if pitch_m is None else pitch_m)
    faces = cut_faces(sheet, grid)
    network = build_network(sheet, grid, faces)
    _refuse(connection_findings(sheet, network, grid.pitch_m))
    ports = sheet.load_ports
    loads = np.arange(1, len(ports) + 1)
    potential = solve_network(network.node, network.conductance, network.node_count, 0, loads)
    return SheetSolution(ports, potential[loads], potential, sheet, grid, faces, network)


def _refuse(found: tuple[SheetFinding, ...]) -> None:
    """Raise what was found, if anything."""
    if found:
        raise SheetError("; ".join(str(finding) for finding in found))
