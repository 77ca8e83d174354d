"""A square grid over a sheet: which stretch of every cell face is copper, what of a cell hangs together.

Positions are in pitches from the grid's corner, so grid lines are whole numbers. Every face is measured
exactly against the polygons. A cell that a slot cuts in two becomes two nodes, so that a slot narrower than
the pitch still cuts and a neck narrower than the pitch still conducts with its own width.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.physics.arrays import FloatArray, IntArray
from archopt.physics.sheet_parts import line_crossings, part_of_cell
from archopt.physics.sheet_shape import Sheet, polygon_area_m2

#: Cells in the outline unless pads are small; the most for small pads; cells across the smallest pad.
DEFAULT_CELLS = 40_000
MOST_CELLS = 120_000
PAD_CELLS = 4.0
#: Where the outline's corner lies in its cell, in pitches; unequal, so that 45 degree edges miss crossings.
OFFSET = (0.3719, 0.4173)
#: Corners nearer than this to a grid line are moved off it (pitches); shifts a length by as much.
NUDGE = 1e-7
#: Stretches of copper shorter than this are rounding (pitches).
SHORTEST = 1e-9


@dataclass(frozen=True, slots=True)
class Grid:
    """Square cells: corner (m), pitch (m), counts along x and y; cell number is row x columns + column."""

    x_m: float
    y_m: float
    pitch_m: float
    columns: int
    rows: int

    def to_grid(self, points_m: FloatArray) -> FloatArray:
        """Points (m), shape (N, 2), in pitches from the corner."""
        scaled: FloatArray = (np.asarray(points_m) - np.array([self.x_m, self.y_m])) / self.pitch_m
        return scaled

    def to_metres(self, points: FloatArray) -> FloatArray:
        """Points in pitches from the corner, shape (N, 2), in metres."""
        scaled: FloatArray = points * self.pitch_m + np.array([self.x_m, self.y_m])
        return scaled

    def centres_m(self) -> tuple[FloatArray, FloatArray]:
        """x of every column's middle, shape (columns,), and y of every row's middle, shape (rows,) (m)."""
        x_m: FloatArray = self.x_m + self.pitch_m * (np.arange(self.columns, dtype=np.float64) + 0.5)
        y_m: FloatArray = self.y_m + self.pitch_m * (np.arange(self.rows, dtype=np.float64) + 0.5)
        return x_m, y_m


@dataclass(frozen=True, slots=True)
class Faces:
    """Stretches of cell face that are copper, each joining two nodes; every array has shape (F, ...).

    Attributes
    ----------
    node : (F, 2), the nodes on the left or lower and on the right or upper side
    axis : 0 where the stretch is crossed along x, 1 along y
    length : its length (pitches)
    middle : (F, 2), its middle (pitches)
    node_cell : (nodes,), the cell of every node
    """

    node: IntArray
    axis: IntArray
    length: FloatArray
    middle: FloatArray
    node_cell: IntArray


def default_pitch_m(sheet: Sheet) -> float:
    """Pitch (m) that gives one per cent on ordinary boards: see :data:`DEFAULT_CELLS`.

    It does not depend on the cut-outs, so that sheets which differ in them alone are compared on one grid.
    """
    area_m2 = polygon_area_m2(sheet.outline_m)
    finest_m = (area_m2 / MOST_CELLS) ** 0.5
    narrowest_m = min(pad.least_size_m for pad in sheet.pads)
    return float(max(finest_m, min((area_m2 / DEFAULT_CELLS) ** 0.5, narrowest_m / PAD_CELLS)))


def lay_grid(sheet: Sheet, pitch_m: float) -> Grid:
    """Lay a grid over the outline; it depends on the outline and the pitch (m) alone, not on cut-outs."""
    low, high = sheet.outline_m.min(axis=0), sheet.outline_m.max(axis=0)
    corner = low - np.array(OFFSET) * pitch_m
    columns, rows = (int(count) for count in np.floor((high - corner) / pitch_m) + 1)
    return Grid(float(corner[0]), float(corner[1]), pitch_m, columns, rows)


def _polygons(sheet: Sheet, grid: Grid) -> list[FloatArray]:
    """Outline and cut-outs in pitches, with corners moved off the grid lines."""
    scaled = [grid.to_grid(polygon) for polygon in sheet.polygons_m]
    return [
        np.where(np.abs(polygon - np.round(polygon)) < NUDGE, np.round(polygon) + NUDGE, polygon)
        for polygon in scaled
    ]


def _along_lines(
    polygons: list[FloatArray], axis: int, offset: float
) -> tuple[IntArray, FloatArray, FloatArray]:
    """Copper along the lines of an axis: line, from and to (pitches) of every unbroken stretch."""
    lines, places, outer, holes = [], [], [], []
    for number, polygon in enumerate(polygons):
        edge, line, share = line_crossings(polygon, axis, offset)
        other, onward = polygon[:, 1 - axis], np.roll(polygon[:, 1 - axis], -1)
        place = other[edge] + share * (onward[edge] - other[edge])
        order = np.lexsort((place, line))
        # every line crosses a closed polygon an even number of times: in, out, in, out
        sign = np.where(np.arange(len(order)) % 2 == 0, 1, -1)
        lines.append(line[order])
        places.append(place[order])
        outer.append(sign if number == 0 else np.zeros_like(sign))
        holes.append(np.zeros_like(sign) if number == 0 else sign)
    line, place = np.concatenate(lines), np.concatenate(places)
    order = np.lexsort((place, line))
    line, place = line[order], place[order]
    copper = (np.cumsum(np.concatenate(outer)[order]) == 1) & (np.cumsum(np.concatenate(holes)[order]) == 0)
    onward = np.append(place[1:], 0.0)
    kept = copper & (onward - place > SHORTEST)
    return line[kept], place[kept], onward[kept]


def _cut_at_cells(
    line: IntArray, low: FloatArray, high: FloatArray
) -> tuple[IntArray, IntArray, FloatArray, FloatArray]:
    """Stretches along lines, cut where they pass from cell to cell: line, cell along it, from and to."""
    first = np.floor(low).astype(np.int_)
    count = np.ceil(high).astype(np.int_) - first
    source = np.repeat(np.arange(len(line)), count)
    cell = np.arange(len(source)) - np.repeat(np.cumsum(count) - count, count) + first[source]
    start, end = np.maximum(low[source], cell), np.minimum(high[source], cell + 1.0)
    kept = end - start > SHORTEST
    return line[source][kept], cell[kept], start[kept], end[kept]


def copper_share(sheet: Sheet, grid: Grid) -> FloatArray:
    """Share of every cell that is copper, shape (rows, columns), by Simpson's rule over three lines."""
    polygons = _polygons(sheet, grid)
    share = np.zeros((grid.rows, grid.columns + 2))
    for offset, weights in ((0.0, (1.0, 1.0)), (0.5, (4.0, 0.0))):
        line, row, low, high = _cut_at_cells(*_along_lines(polygons, 0, offset))
        inside = (line >= 0) & (line <= grid.columns) & (row >= 0) & (row < grid.rows)
        line, row, length = line[inside], row[inside], (high - low)[inside]
        # a line between two cells counts for both: column numbers are shifted by one to keep the first
        np.add.at(share, (row, line + 1), weights[0] / 6.0 * length)
        np.add.at(share, (row, line), weights[1] / 6.0 * length)
    return share[:, 1:-1]


def cut_faces(sheet: Sheet, grid: Grid) -> Faces:
    """Measure every cell face against the polygons and number the nodes.

    A node is the copper of one cell, or one part of it where boundaries part it.
    """
    polygons = _polygons(sheet, grid)
    cells, lengths, middles, axes = [], [], [], []
    for axis in (0, 1):
        line, along, low, high = _cut_at_cells(*_along_lines(polygons, axis, 0.0))
        step = 1 if axis == 0 else grid.columns
        upper = along * grid.columns + line if axis == 0 else line * grid.columns + along
        middle = 0.5 * (low + high)
        cells.append(np.stack([upper - step, upper], axis=1))
        lengths.append(high - low)
        middles.append(np.stack([line, middle] if axis == 0 else [middle, line], axis=1))
        axes.append(np.full(len(line), axis))
    cell, middle, face_axis = np.concatenate(cells), np.concatenate(middles), np.concatenate(axes)
    label = part_of_cell(polygons, grid.columns, grid.rows, cell, middle)
    parts = int(label.max(initial=0)) + 1
    numbers, node = np.unique(cell * parts + label, return_inverse=True)
    return Faces(node.reshape(-1, 2), face_axis, np.concatenate(lengths), middle, numbers // parts)
