"""Density under a disc that may stand between cells: closed forms, and hardly a word from the grid."""

from __future__ import annotations

import numpy as np
import pytest

from archopt.physics.arrays import FloatArray
from archopt.physics.sheet import SheetSolution, solve
from archopt.physics.sheet_discs import FaceDensity, density_at, face_density, free_copper, worst_disc
from archopt.physics.sheet_fields import DISC_M, averaged_density_a_per_m
from archopt.physics.sheet_shape import DiscPad, RectanglePad, Sheet

MM = 1e-3
ONE = np.ones(1)


def rectangle(x1: float, y1: float, x2: float, y2: float) -> FloatArray:
    return MM * np.array([[x1, y1], [x2, y1], [x2, y2], [x1, y2]])


def bar(port: str, x1: float, y1: float, x2: float, y2: float) -> RectanglePad:
    return RectanglePad(port, MM * (x1 + x2) / 2, MM * (y1 + y2) / 2, MM * (x2 - x1), MM * (y2 - y1))


SOURCE = bar("source", 2, 2, 6, 38)
PLATE = rectangle(0, 0, 60, 40)
SHEETS = {
    "round pad": Sheet(PLATE, (SOURCE, DiscPad("load", 40.3 * MM, 20.1 * MM, 4 * MM)), "source"),
    "square pad": Sheet(PLATE, (SOURCE, bar("load", 40, 18, 44, 22)), "source"),
    "long pad": Sheet(PLATE, (SOURCE, bar("load", 40, 10, 44, 31)), "source"),
}


def densest(solution: SheetSolution) -> float:
    """The greatest mean under a disc, looked for about the worst cells."""
    density = np.nan_to_num(averaged_density_a_per_m(solution, ONE))
    field = face_density(solution)
    x_m, y_m = solution.grid.centres_m()
    found = []
    for cell in np.argsort(-density.ravel())[:3]:
        row, column = np.divmod(cell, solution.grid.columns)
        found.append(worst_disc(solution, field, np.array([x_m[column], y_m[row]]), ONE, DISC_M)[0])
    return float(max(found))


def test_an_even_strip_is_one_over_its_width() -> None:
    # closed form; the field itself, then its mean
    sheet = Sheet(rectangle(0, 0, 60, 20), (bar("source", 0, 0, 5, 20), bar("load", 55, 0, 60, 20)), "source")
    solution = solve(sheet, 0.9 * MM)
    field = face_density(solution)
    assert isinstance(field, FaceDensity)
    points = MM * np.array([[30.0, 10.0], [30.3, 0.2], [12.0, 19.9], [5.1, 7.0]])
    parts = density_at(solution, field, points)
    np.testing.assert_allclose(np.abs(parts[:, 0, 0]), 50.0, rtol=1e-6)
    np.testing.assert_allclose(parts[:, 1, 0], 0.0, atol=1e-4)
    assert worst_disc(solution, field, points[0], ONE, DISC_M)[0] == pytest.approx(50.0, rel=1e-6)


def test_a_round_pad_draws_along_its_radius() -> None:
    # closed form I / (2 pi r), averaged over the free half of a disc at the pad's edge by numerical integration
    far = tuple(
        RectanglePad("source", MM * 29 * np.cos(t), MM * 29 * np.sin(t), MM, 3 * MM, t)
        for t in (2 * np.pi / 60 * np.arange(60)).tolist()
    )
    turn = 2 * np.pi / 720 * np.arange(720)
    outline = MM * 30 * np.stack([np.cos(turn), np.sin(turn)], axis=1)
    solution = solve(Sheet(outline, (*far, DiscPad("load", 0.0, 0.0, 6 * MM)), "source"), 0.7 * MM)
    local = np.linspace(-1.5, 1.5, 601) * MM
    dx, dy = (axis.ravel() for axis in np.meshgrid(local, local))
    radius = np.hypot(3 * MM + dx, dy)[np.hypot(dx, dy) <= 1.5 * MM]
    expected = np.mean(1 / (2 * np.pi * radius[radius >= 3 * MM]))
    assert densest(solution) == pytest.approx(expected, rel=0.03)


@pytest.mark.parametrize("name", SHEETS)
def test_refining_the_grid_hardly_moves_it(name: str) -> None:
    found = [densest(solve(SHEETS[name], pitch * MM)) for pitch in (0.75, 0.6, 0.31)]
    assert max(found) <= 1.03 * min(found)


def test_discs_stand_on_free_copper() -> None:
    sheet = Sheet(PLATE, SHEETS["round pad"].pads, "source", (rectangle(20, 10, 25, 30),))
    points = MM * np.array([[4.0, 20.0], [22.0, 20.0], [40.3, 21.0], [30.0, 20.0], [70.0, 20.0]])
    assert free_copper(sheet, points).tolist() == [False, False, False, True, False]


def test_ports_add_up_to_no_less_than_both_together() -> None:
    pads = (SOURCE, bar("east", 50, 18, 54, 22), bar("north", 30, 34, 34, 38))
    solution = solve(Sheet(PLATE, pads, "source"), MM)
    field, both = face_density(solution), np.ones(2)
    at = np.array([29 * MM, 34 * MM])
    alone = worst_disc(solution, field, at, both, DISC_M)
    summed = FaceDensity(
        field.along_x.sum(axis=2, keepdims=True), field.along_y.sum(axis=2, keepdims=True), field.open_x, field.open_y
    )
    assert alone.shape == (2,)
    assert worst_disc(solution, summed, at, ONE, DISC_M)[0] <= alone.sum() * (1 + 1e-9)
