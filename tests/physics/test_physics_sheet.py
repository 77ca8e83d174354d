"""What is found wrong with a sheet, and the shapes it is made of."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from archopt.physics import (
    sheet_cut,
    sheet_findings,
    sheet_grid,
    sheet_neck,
    sheet_network,
    sheet_parts,
    sheet_shape,
)
from archopt.physics.arrays import FloatArray
from archopt.physics.sheet import SheetSolution, solve
from archopt.physics.sheet_fields import NeckFlow, drop_v
from archopt.physics.sheet_shape import DiscPad, Neck, RectanglePad, Sheet, SheetError

MM = 1e-3


def rectangle(x1: float, y1: float, x2: float, y2: float) -> FloatArray:
    return MM * np.array([[x1, y1], [x2, y1], [x2, y2], [x1, y2]])


SOURCE = RectanglePad("source", 3 * MM, 10 * MM, 4 * MM, 6 * MM)
LOAD = DiscPad("load", 35 * MM, 10 * MM, 4 * MM)
GOOD = Sheet(rectangle(0, 0, 40, 20), (SOURCE, LOAD), "source", (rectangle(15, 5, 17, 12),))
BOW_TIE = MM * np.array([[20.0, 2.0], [24.0, 6.0], [24.0, 2.0], [20.0, 6.0]])
TOUCHING = MM * np.array([[0, 0], [40, 0], [40, 20], [30, 20], [20, 0], [10, 20], [0, 20.0]])
LINE = MM * np.array([[1.0, 1.0], [2.0, 1.0], [3.0, 1.0]])
DIVIDED = rectangle(19.0, -1.0, 19.2, 21.0)


def far(name: str, x_mm: float) -> DiscPad:
    return DiscPad(name, x_mm * MM, 10 * MM, 4 * MM)


def bar(x: float, y: float, width: float, height: float, turn: float = 0.0) -> RectanglePad:
    return RectanglePad("load", x * MM, y * MM, width * MM, height * MM, turn)


def neck(x1: float, y1: float, x2: float, y2: float) -> Neck:
    return Neck("n", x1 * MM, y1 * MM, x2 * MM, y2 * MM)


def with_pads(*pads: sheet_shape.Pad) -> Sheet:
    return replace(GOOD, pads=pads)


BAD = {
    "no polygon": (replace(GOOD, outline_m=GOOD.outline_m[:2]), "outline", 0, "three corners"),
    "no area": (replace(GOOD, cutouts_m=(LINE,)), "cutout", 0, "no area"),
    "not finite": (replace(GOOD, outline_m=GOOD.outline_m * np.nan), "outline", 0, "two numbers"),
    "outline crosses": (replace(GOOD, outline_m=BOW_TIE), "outline", 0, "crosses itself near"),
    "cut-out crosses": (replace(GOOD, cutouts_m=(*GOOD.cutouts_m, BOW_TIE)), "cutout", 1, "crosses itself"),
    "touches": (replace(GOOD, outline_m=TOUCHING), "outline", 0, "touches itself at (20.000, 0.000) mm"),
    "no source": (replace(GOOD, source="elsewhere"), "port", 0, "no pad belongs to the source elsewhere"),
    "no load": (replace(GOOD, pads=(SOURCE,)), "port", 0, "no pad belongs to a load"),
    "no size": (with_pads(SOURCE, replace(LOAD, diameter_m=0.0)), "pad", 1, "no size"),
    "outside": (with_pads(SOURCE, far("load", 39.0)), "pad", 1, "(39.000, 10.000) mm is not on copper"),
    "on a hole": (with_pads(replace(SOURCE, x_m=14 * MM), LOAD), "pad", 0, "not on copper"),
    "round a hole": (with_pads(SOURCE, bar(19, 8, 12, 12)), "pad", 1, "not on copper"),
    "overlap": (with_pads(SOURCE, LOAD, far("other", 32.0)), "pad", 2, "touches a pad of load"),
    "mixed overlap": (with_pads(SOURCE, LOAD, far("other", 5.5)), "pad", 2, "touches a pad of source"),
    "bars overlap": (with_pads(SOURCE, bar(7, 10, 3, 9, 0.7)), "pad", 1, "touches a pad of source"),
    "cut off": (replace(GOOD, cutouts_m=(DIVIDED,)), "port", 0, "no copper joins load to the source source"),
    "neck of no length": (replace(GOOD, necks=(neck(0, 0, 0, 0),)), "neck", 0, "has no length"),
    "neck on a hole": (replace(GOOD, necks=(neck(15, 8, 17, 8),)), "neck", 0, "not on copper"),
    "neck at a pad": (replace(GOOD, necks=(neck(2, 0, 2, 10),)), "neck", 0, "a pad of source"),
}


@pytest.mark.parametrize("case", sorted(BAD))
def test_each_fault_is_found_and_placed(case: str) -> None:
    # common practice: each fault is written into a sheet that is otherwise sound
    sheet, thing, number, words = BAD[case]
    assert sheet_findings.findings(GOOD) == ()
    found = sheet_findings.findings(sheet)
    assert [(finding.thing, finding.number) for finding in found] == [(thing, number)]
    assert words in found[0].message
    with pytest.raises(SheetError, match=found[0].kind):
        solve(sheet)


def test_several_faults_are_told_at_once() -> None:
    pads = (SOURCE, far("load", 39.0), far("other", 6.0), replace(LOAD, diameter_m=-1.0))
    found = sheet_findings.shape_findings(replace(GOOD, pads=pads))
    assert [finding.number for finding in found] == [1, 3, 2]
    assert all(isinstance(finding, sheet_findings.SheetFinding) for finding in found)
    assert "pad 3 of other" in str(found[2])


def test_grid_too_coarse_for_a_pad() -> None:
    small = replace(LOAD, diameter_m=0.2 * MM)
    sheet = replace(GOOD, pads=(SOURCE, small))
    kinds = {finding.kind for finding in sheet_findings.findings(sheet, 5.3 * MM)}
    assert kinds == {"grid too coarse"}
    assert sheet_findings.findings(sheet) == ()
    with pytest.raises(SheetError, match="pitch of 0"):
        solve(sheet, 0.0)


def test_pads_flush_with_the_edge_and_pads_of_one_port_may_overlap() -> None:
    flush = RectanglePad("load", 38 * MM, 10 * MM, 4 * MM, 20 * MM)
    again = DiscPad("load", 36 * MM, 10 * MM, 4 * MM)
    solution = solve(replace(GOOD, pads=(SOURCE, flush, again)))
    assert isinstance(solution, SheetSolution)
    assert solution.ports == ("load",)
    assert solution.squares.shape == (1, 1)


def test_cut_outs_may_overlap_and_reach_over_the_edge() -> None:
    # closed form: copper left is the same whether the hole is one piece or two
    one = replace(GOOD, cutouts_m=(rectangle(15, 12, 19, 20),))
    two = replace(GOOD, cutouts_m=(rectangle(15, 12, 18, 23), rectangle(16.5, 12, 19, 20)))
    expected = solve(one, 0.7 * MM).squares
    assert solve(two, 0.7 * MM).squares == pytest.approx(expected, rel=1e-9)
    notch = MM * np.array([[0, 0], [40, 0], [40, 20], [19, 20], [19, 12], [15, 12], [15, 20], [0, 20.0]])
    in_outline = replace(GOOD, outline_m=notch, cutouts_m=())
    assert solve(in_outline, 0.7 * MM).squares == pytest.approx(expected, rel=1e-6)


def test_islands_without_pads_are_left_out() -> None:
    # closed form: copper inside a closed moat carries nothing, so that moat and island count as one hole
    sides = (20, 3, 30, 3.5), (20, 16.5, 30, 17), (20, 3, 20.5, 17), (29.5, 3, 30, 17)
    moat = replace(GOOD, cutouts_m=tuple(rectangle(*side) for side in sides))
    around = solve(moat, 0.4 * MM)
    whole = solve(replace(GOOD, cutouts_m=(rectangle(20, 3, 30, 17),)), 0.4 * MM)
    assert around.squares == pytest.approx(whole.squares, rel=1e-9)
    drop = drop_v(around, np.ones(1), 1e-3)
    x_m, y_m = around.grid.centres_m()
    island = np.ix_((y_m > 4 * MM) & (y_m < 16 * MM), (x_m > 21 * MM) & (x_m < 29 * MM))
    beside = np.ix_((y_m > 4 * MM) & (y_m < 16 * MM), (x_m > 31 * MM) & (x_m < 39 * MM))
    assert np.isnan(drop[island]).all()
    assert np.isfinite(drop[beside]).all()


@pytest.mark.parametrize(
    "pad", [RectanglePad("p", 2.0, 1.0, 3.0, 1.0, 0.6), DiscPad("p", 2.0, 1.0, 1.7)], ids=type
)
def test_lines_meet_a_pad_where_its_points_begin(pad: sheet_shape.Pad) -> None:
    # closed form: a fine walk along each line, in and out of the pad
    turn = np.linspace(0.0, 6.0, 13)
    start = np.stack([-np.cos(turn), np.sin(turn)], axis=1) * 4.0 + [2.0, 1.0]
    step = np.array([2.2, 0.9]) - start
    enter, leave = pad.span(start, 2.0 * step)
    walk = np.linspace(0.0, 1.0, 20001)
    for index in range(len(turn)):
        inside = pad.contains(start[index] + 2.0 * walk[:, None] * step[index])
        assert walk[inside][[0, -1]] == pytest.approx([enter[index], leave[index]], rel=1e-3)
    missed = pad.span(np.array([[10.0, 10.0]]), np.array([[1.0, 0.0]]))
    assert (missed[0][0], missed[1][0]) == (np.inf, -np.inf)
    assert pad.least_size_m <= 2 * pad.reach_m


def test_polygons() -> None:
    # closed form: an L of 40 x 40 less 30 x 30
    corners = MM * np.array([[0, 0], [40, 0], [40, 10], [10, 10], [10, 40], [0, 40.0]])
    assert sheet_shape.polygon_area_m2(corners) == pytest.approx(700e-6, rel=1e-9)
    points = MM * np.array([[5, 35], [35, 5], [20, 20], [-1, 5.0]])
    assert sheet_shape.inside_polygon(points, corners).tolist() == [True, True, False, False]
    assert sheet_shape.on_copper(MM * np.array([[16.0, 8], [10, 8]]), GOOD).tolist() == [False, True]
    start, end = sheet_shape.edges(corners)
    assert (start[1:] == end[:-1]).all()
    assert sheet_shape.distance_to_segments(points[2], start, end).min() == pytest.approx(10 * MM, rel=1e-9)
    assert sheet_shape.segments_cross(start[0], end[0], points[0], points[1] - [0.0, 10 * MM])
    rng = np.random.default_rng(3)
    low = rng.random((60, 2))
    high = low + 0.2 * rng.random((60, 2))
    meet = (low[:, None] <= high[None]).all(axis=2)
    pairs = {tuple(sorted(pair)) for pair in sheet_shape.near_pairs(low, high).tolist()}
    assert pairs == {tuple(pair) for pair in np.argwhere(np.triu(meet & meet.T, 1)).tolist()}


def test_neck_runs_from_edge_to_edge_around_its_middle() -> None:
    # closed form: between the hole's upper side and the outline
    stretch = sheet_neck.neck_stretch(GOOD, Neck("n", 16 * MM, 11 * MM, 16 * MM, 19 * MM))
    assert isinstance(stretch, sheet_neck.NeckStretch)
    assert stretch.width_m == pytest.approx(8 * MM, rel=1e-9)
    assert stretch.start_m == pytest.approx((16 * MM, 12 * MM), rel=1e-9)
    assert NeckFlow(0.5, np.array([1.0, -1.0])).density_a_per_m(np.array([1.0, 3.0])) == pytest.approx(
        4.0, rel=1e-9
    )


def test_cells_hold_the_copper_of_the_sheet() -> None:
    # closed form: area of the outline less the hole; open faces of a full cell are whole
    grid = sheet_grid.lay_grid(GOOD, 0.61 * MM)
    assert isinstance(grid, sheet_grid.Grid)
    share = sheet_grid.copper_share(GOOD, grid)
    assert share.shape == (grid.rows, grid.columns)
    assert share.sum() * grid.pitch_m**2 == pytest.approx((800 - 14) * 1e-6, rel=2e-3)
    faces = sheet_grid.cut_faces(GOOD, grid)
    assert isinstance(faces, sheet_grid.Faces)
    assert faces.length.max() == pytest.approx(1.0, rel=1e-9)
    # one line a face: lengths along x and along y both add up to the area, within a column's width
    for axis in (0, 1):
        area = faces.length[faces.axis == axis].sum() * grid.pitch_m**2
        assert area == pytest.approx((800 - 14) * 1e-6, rel=0.03)
    assert sheet_grid.default_pitch_m(GOOD) == pytest.approx((800e-6 / 40_000) ** 0.5, rel=1e-9)
    network = sheet_network.build_network(GOOD, grid, faces)
    assert isinstance(network, sheet_network.Network)
    assert sheet_findings.connection_findings(GOOD, network, grid.pitch_m) == ()


def test_a_slit_makes_two_nodes_of_a_cell() -> None:
    # closed form: a unit cell with a slit right through it, and one with a slit that ends within
    through = np.array([[0.5, -1.0], [0.6, -1.0], [0.6, 2.0], [0.5, 2.0]]) + 1.0
    outline = np.array([[0.2, 0.2], [2.8, 0.2], [2.8, 2.8], [0.2, 2.8]])
    cell, middle = np.array([[3, 4], [4, 5]]), np.array([[1.0, 1.5], [2.0, 1.5]])
    part = sheet_parts.part_of_cell([outline, through], 3, 3, cell, middle)
    assert part[0, 1] != part[1, 0]
    within = np.minimum(through, [9.0, 1.7])
    part = sheet_parts.part_of_cell([outline, within], 3, 3, cell, middle)
    assert part[0, 1] == part[1, 0]
    edge, line, share = sheet_parts.line_crossings(outline, 0, 0.0)
    assert sorted(zip(edge.tolist(), line.tolist(), strict=True)) == [(0, 1), (0, 2), (2, 1), (2, 2)]
    assert share[(edge == 0) & (line == 1)] == pytest.approx([0.8 / 2.6], rel=1e-9)


@pytest.mark.parametrize("pitch", [0.61, 1.7])
def test_a_cut_runs_from_edge_to_edge(pitch: float) -> None:
    # closed form: faces across a strip from its lower to its upper edge add up to its width
    sheet = replace(GOOD, cutouts_m=())
    grid = sheet_grid.lay_grid(sheet, pitch * MM)
    faces = sheet_grid.cut_faces(sheet, grid)
    ends = grid.to_grid(MM * np.array([[20.0, 0.0], [20.0, 20.0]]))
    everywhere = np.ones(len(faces.length), dtype=bool)
    polygons = [grid.to_grid(sheet.outline_m)]
    face, sense = sheet_cut.cut_along(faces, everywhere, polygons, *ends)
    assert (faces.axis[face] == 0).all()
    assert faces.length[face].sum() * pitch == pytest.approx(20.0, rel=1e-6)
    assert (sense == -1.0).all()
    with pytest.raises(SheetError, match="finer pitch"):
        sheet_cut.cut_along(faces, ~everywhere, polygons, *ends)
