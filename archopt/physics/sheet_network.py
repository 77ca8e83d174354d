"""From measured cell faces and pads to a network of conductances, and its solution."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from scipy.sparse import coo_array, csc_array
from scipy.sparse.csgraph import connected_components
from scipy.sparse.linalg import splu

from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.physics.sheet_grid import Faces, Grid
from archopt.physics.sheet_shape import Pad, Sheet, edges, segments_cross

#: Least distance from a node to a pad's edge, in pitches; bounds the conductance of a node beside a pad.
LEAST_GAP = 1e-6


@dataclass(frozen=True, slots=True)
class Network:
    """Conductances between nodes, for a sheet of one ohm a square.

    Nodes 0 to P are the ports, the source first; the copper's nodes follow.

    Attributes
    ----------
    node : (L, 2), left or lower end and right or upper end
    conductance : (L,), what joins them
    face : (L,), the face each link crosses
    inner : (L, 2), whether that end is the face's own node, and not a pad that the face's line meets first
    port_count : P + 1
    copper_node : (face nodes,), network node of every face node: its own, or its pad's port
    """

    node: IntArray
    conductance: FloatArray
    face: IntArray
    inner: BoolArray
    port_count: int
    copper_node: IntArray

    @property
    def node_count(self) -> int:
        """Ports and nodes of the copper together."""
        return self.port_count + self.copper_node.size


def _node_places(faces: Faces) -> FloatArray:
    """A point of every node's copper (pitches), shape (nodes, 2): the mean of its open faces' middles."""
    count = faces.node_cell.size
    nodes, weight = faces.node.T.ravel(), np.tile(faces.length, 2)
    total = np.bincount(nodes, weight, count)
    mean = [np.bincount(nodes, weight * np.tile(faces.middle[:, axis], 2), count) / total for axis in (0, 1)]
    return np.stack(mean, axis=1)


def build_network(sheet: Sheet, grid: Grid, faces: Faces) -> Network:
    """Join the nodes across their faces and to the pads.

    A face of length l joins two nodes one pitch apart by l/pitch; where the line between them meets a pad at
    a share t of the pitch, it joins the node to the pad's port by l/(t pitch). Both are exact for even flow
    along the grid; for curved edges the error falls with the square of the pitch (cut-cell and ghost-point
    schemes of the immersed-boundary literature; measured in the tests).
    """
    names = (sheet.source, *sheet.load_ports)
    places_m = grid.to_metres(_node_places(faces))
    port = np.full(faces.node_cell.size, -1)
    for pad in sheet.pads:
        port[pad.contains(places_m)] = names.index(pad.port)
    copper_node = np.where(port >= 0, port, len(names) + np.arange(port.size))

    start = faces.middle - np.where(faces.axis[:, None] == np.arange(2), 0.5, 0.0)
    step_m = np.where(faces.axis[:, None] == np.arange(2), grid.pitch_m, 0.0)
    meets = _Meetings(len(faces.length))
    wall_starts_m, wall_ends_m = (
        np.concatenate(ends) for ends in zip(*map(edges, sheet.polygons_m), strict=True)
    )
    for pad in sheet.pads:
        near = (
            np.abs(grid.to_metres(faces.middle) - np.array([pad.x_m, pad.y_m])) <= pad.reach_m + grid.pitch_m
        ).all(axis=1)
        index = np.flatnonzero(near)
        walls = _walls_near(pad, wall_starts_m, wall_ends_m, grid.pitch_m)
        enter, leave = _span_in_copper(
            pad, walls, grid.to_metres(start[index]), step_m[index], grid.to_metres(faces.middle[index])
        )
        meets.add(index, enter, leave, names.index(pad.port), port[faces.node[index]])
    return _link(faces, port, copper_node, meets, len(names))


def _walls_near(
    pad: Pad, start_m: FloatArray, end_m: FloatArray, pitch_m: float
) -> tuple[FloatArray, FloatArray]:
    """Sides of the polygons (m) that a line of one pitch towards the pad may cross."""
    low = np.array([pad.x_m, pad.y_m]) - pad.reach_m - 2.0 * pitch_m
    high = np.array([pad.x_m, pad.y_m]) + pad.reach_m + 2.0 * pitch_m
    near = (np.minimum(start_m, end_m) <= high).all(axis=1) & (np.maximum(start_m, end_m) >= low).all(axis=1)
    return start_m[near], end_m[near]


def _span_in_copper(
    pad: Pad,
    walls_m: tuple[FloatArray, FloatArray],
    start_m: FloatArray,
    step_m: FloatArray,
    middle_m: FloatArray,
) -> tuple[FloatArray, FloatArray]:
    """Where faces' lines enter and leave a pad; missed where a cut-out lies between the face and the pad."""
    enter, leave = pad.span(start_m, step_m)
    for place, missed in ((enter, np.inf), (leave, -np.inf)):
        hit = np.flatnonzero(np.isfinite(place))
        meeting_m = start_m[hit] + np.clip(place[hit], 0.0, 1.0)[:, None] * step_m[hit]
        blocked = segments_cross(middle_m[hit, None], meeting_m[:, None], *walls_m).any(axis=1)
        place[hit[blocked]] = missed
    return enter, leave


class _Meetings:
    """Where every face's line, from node (0) to node (1), first and last meets a pad, from free ends."""

    def __init__(self, count: int) -> None:
        self.first = np.full(count, np.inf)
        self.last = np.full(count, -np.inf)
        self.first_port = np.full(count, -1)
        self.last_port = np.full(count, -1)

    def add(self, index: IntArray, enter: FloatArray, leave: FloatArray, port: int, ends: IntArray) -> None:
        """Take in one pad's meetings; ``ends`` are the ports the two nodes lie on, -1 where on none."""
        on_line = (enter < 1.0) & (leave > 0.0)
        # a pad that holds the left node is where the line starts, not what it meets
        meets = on_line & (ends[:, 0] != port) & (enter < self.first[index])
        self.first[index[meets]], self.first_port[index[meets]] = enter[meets], port
        leaves = on_line & (ends[:, 1] != port) & (leave > self.last[index])
        self.last[index[leaves]], self.last_port[index[leaves]] = leave[leaves], port


def _link(faces: Faces, port: IntArray, copper_node: IntArray, meets: _Meetings, port_count: int) -> Network:
    """Turn faces into links: node to node, node to pad, or one to each side of a pad that lies between."""
    left, right = port[faces.node].T
    plain = copper_node[faces.node]
    parts: list[tuple[IntArray, IntArray, FloatArray, tuple[bool, bool]]] = []

    def take(where: BoolArray, node: IntArray, distance: FloatArray, inner: tuple[bool, bool]) -> None:
        face = np.flatnonzero(where)
        gap = np.clip(distance[face], LEAST_GAP, 1.0)
        parts.append((face, node[face], faces.length[face] / gap, inner))

    met = meets.first_port >= 0
    met_back = meets.last_port >= 0
    free_left, free_right = left < 0, right < 0
    to_first = np.stack([plain[:, 0], meets.first_port], axis=1)
    from_last = np.stack([meets.last_port, plain[:, 1]], axis=1)
    one = np.ones(len(faces.length))
    take(free_left & free_right & ~met, plain, one, (True, True))
    take(free_left & free_right & met, to_first, meets.first, (True, False))
    take(free_left & free_right & met_back, from_last, 1.0 - meets.last, (False, True))
    take(free_left & ~free_right & met, to_first, meets.first, (True, False))
    take(free_left & ~free_right & ~met, plain, one, (True, True))
    take(~free_left & free_right & met_back, from_last, 1.0 - meets.last, (False, True))
    take(~free_left & free_right & ~met_back, plain, one, (True, True))
    between = ~free_left & ~free_right & (left != right)
    take(between, plain, np.where(met & met_back, meets.first - meets.last, 1.0), (True, True))
    face = np.concatenate([part[0] for part in parts])
    inner = np.concatenate([np.tile(part[3], (len(part[0]), 1)) for part in parts])
    node = np.concatenate([part[1] for part in parts])
    return Network(node, np.concatenate([part[2] for part in parts]), face, inner, port_count, copper_node)


def joined_to(node: IntArray, node_count: int, start: int) -> BoolArray:
    """Which of so many nodes links, shape (L, 2), join to ``start``; shape (node_count,)."""
    matrix = coo_array((np.ones(len(node)), (node[:, 0], node[:, 1])), shape=(node_count, node_count))
    _, part = connected_components(matrix, directed=False)
    joined: BoolArray = part == part[start]
    return joined


def solve_network(
    node: IntArray, conductance: FloatArray, node_count: int, grounded: int, injected: IntArray
) -> FloatArray:
    """Potential of every node for one ampere into each of several nodes in turn, out of the grounded one.

    Parameters
    ----------
    node : shape (L, 2), the nodes each link joins
    conductance : shape (L,), positive (1/ohm)
    node_count : how many nodes there are
    grounded : the node held at zero
    injected : shape (P,), nodes the ampere goes into; each must hang together with the grounded one

    Returns
    -------
    Shape (node_count, P) (V per A); not a number where a node does not hang together with the grounded one.

    Notes
    -----
    Kirchhoff's laws, one sparse factorisation (symmetric positive definite) for all columns.
    """
    live = joined_to(node, node_count, grounded)
    live[grounded] = False
    number = np.cumsum(live) - 1
    diagonal = np.bincount(node.ravel(), np.repeat(conductance, 2), node_count)[live]
    both = live[node].all(axis=1)
    row, column = number[node[both]].T
    size = int(live.sum())
    values = np.concatenate([-conductance[both], -conductance[both], diagonal])
    rows = np.concatenate([row, column, np.arange(size)])
    columns = np.concatenate([column, row, np.arange(size)])
    matrix = csc_array(coo_array((values, (rows, columns)), shape=(size, size)))
    factors = splu(matrix, permc_spec="MMD_AT_PLUS_A", diag_pivot_thresh=0.0, options={"SymmetricMode": True})
    current = np.zeros((size, len(injected)))
    current[number[injected], np.arange(len(injected))] = 1.0
    potential = np.full((node_count, len(injected)), np.nan)
    potential[grounded] = 0.0
    potential[live] = factors.solve(current)
    return potential
