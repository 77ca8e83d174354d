"""What must hold of every sheet: a symmetric, positive matrix, reciprocity, superposition, Rayleigh's law."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from archopt.physics.arrays import FloatArray
from archopt.physics.sheet import solve
from archopt.physics.sheet_fields import drop_v, link_current_a, neck_flow
from archopt.physics.sheet_shape import DiscPad, Neck, Pad, RectanglePad, Sheet

MM = 1e-3
PITCH_M = 0.93 * MM
FEW = settings(max_examples=25, deadline=None, derandomize=True)
OUTLINE_M = MM * np.array([[0, 0], [50, 0], [50, 24], [38, 36], [0, 36.0]])


def span(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(low, high, allow_nan=False, allow_subnormal=False)


@st.composite
def pads(draw: st.DrawFn) -> tuple[Pad, ...]:
    """A source and three loads, each somewhere in its own part of the board."""
    made: list[Pad] = []
    for name, x, y in (("source", 5.0, 30.0), ("one", 44.0, 6.0), ("two", 5.0, 6.0), ("three", 40.0, 27.0)):
        at = x * MM + draw(span(-MM, MM)), y * MM + draw(span(-MM, MM))
        size = draw(span(2.0 * MM, 4.0 * MM))
        if draw(st.booleans()):
            made.append(DiscPad(name, *at, size))
        else:
            made.append(RectanglePad(name, *at, size, draw(span(2.0 * MM, 4.0 * MM)), draw(span(0.0, 1.5))))
    return tuple(made)


@st.composite
def holes(draw: st.DrawFn, least: float = 0.2) -> FloatArray:
    """A slanted four-sided hole, from a hair to a sixth of the board, clear of pads, never right across."""
    centre = np.array([draw(span(17.0, 28.0)), draw(span(10.0, 27.0))])
    along, across, turn = draw(span(least, 3.5)), draw(span(0.05, 3.5)), draw(span(0.0, 3.1))
    turned = np.array([[np.cos(turn), np.sin(turn)], [-np.sin(turn), np.cos(turn)]])
    made: FloatArray = MM * (
        centre + np.array([[-along, -across], [along, -across], [along, across], [-along, across]]) @ turned
    )
    return made


@st.composite
def sheets(draw: st.DrawFn) -> Sheet:
    return Sheet(OUTLINE_M, draw(pads()), "source", tuple(draw(st.lists(holes(), max_size=2))))


@FEW
@given(sheets())
def test_matrix_is_symmetric_and_positive(sheet: Sheet) -> None:
    squares = solve(sheet, PITCH_M).squares
    # reciprocity of a passive network; the solver does not make the matrix symmetric, the physics does
    assert squares == pytest.approx(squares.T, rel=1e-8)
    assert np.linalg.eigvalsh(squares).min() > 0.05
    # no drop between two points is more than at the point where the ampere is drawn (maximum principle)
    assert (squares > 0.0).all()
    assert (squares <= np.diag(squares) * (1 + 1e-9)).all()


@FEW
@given(sheets())
def test_any_port_may_be_the_source(sheet: Sheet) -> None:
    from_source = solve(sheet, PITCH_M).squares
    turned = solve(replace(sheet, source="one"), PITCH_M)
    others = [turned.ports.index(name) for name in ("source", "two", "three")]
    from_one = turned.squares[np.ix_(others, others)]
    # resistance between two ports by either matrix; the drop at a port by the other's
    assert from_one[0, 0] == pytest.approx(from_source[0, 0], rel=1e-7)
    for index, other in ((1, 1), (2, 2)):
        between = from_source[0, 0] + from_source[other, other] - 2 * from_source[0, other]
        assert from_one[index, index] == pytest.approx(between, rel=1e-7)


currents = st.lists(span(0.1, 60.0), min_size=3, max_size=3).map(np.array)


@FEW
@given(sheets(), currents, currents)
def test_loads_superpose_and_heat_is_what_the_matrix_says(
    sheet: Sheet, one: FloatArray, other: FloatArray
) -> None:
    solution = solve(sheet, PITCH_M)
    both = drop_v(solution, one + other, 1e-3)
    assert np.isfinite(both).any()
    apart = drop_v(solution, one, 1e-3) + drop_v(solution, other, 1e-3)
    assert both[np.isfinite(both)] == pytest.approx(apart[np.isfinite(both)], rel=1e-9, abs=1e-15)
    # Tellegen: heat of all links is the current drawn times its drop
    heat = np.nansum(link_current_a(solution, one) ** 2 / solution.network.conductance)
    assert heat == pytest.approx(one @ solution.squares @ one, rel=1e-7)


@FEW
@given(sheets(), holes())
def test_taking_copper_away_never_lowers_a_resistance(sheet: Sheet, hole: FloatArray) -> None:
    # Rayleigh's monotonicity law, for every mix of currents
    before = solve(sheet, PITCH_M).squares
    after = solve(replace(sheet, cutouts_m=(*sheet.cutouts_m, hole)), PITCH_M).squares
    assert np.linalg.eigvalsh(after - before).min() > -1e-9 * np.linalg.eigvalsh(before).max()


@FEW
@given(sheets(), span(0.2, 5.0))
def test_squares_do_not_know_the_size(sheet: Sheet, scale: float) -> None:
    def scaled(pad: Pad) -> Pad:
        if isinstance(pad, DiscPad):
            return DiscPad(pad.port, scale * pad.x_m, scale * pad.y_m, scale * pad.diameter_m)
        sides = scale * pad.x_m, scale * pad.y_m, scale * pad.width_m, scale * pad.height_m
        return RectanglePad(pad.port, *sides, pad.angle_rad)

    other = Sheet(
        scale * sheet.outline_m,
        tuple(scaled(pad) for pad in sheet.pads),
        sheet.source,
        tuple(scale * cutout for cutout in sheet.cutouts_m),
    )
    assert solve(other, scale * PITCH_M).squares == pytest.approx(solve(sheet, PITCH_M).squares, rel=1e-6)


@FEW
@given(pads(), holes(least=1.0))
def test_necks_under_and_over_a_hole_share_the_current(made: tuple[Pad, ...], hole: FloatArray) -> None:
    # Kirchhoff: what is drawn right of the hole passes under it or over it, and nothing else does
    sheet = Sheet(OUTLINE_M, made, "source", (hole,))
    solution = solve(sheet, PITCH_M)
    x = float(hole[:, 0].mean())
    under = neck_flow(solution, Neck("under", x, 0.3 * MM, x, 0.6 * MM))
    over = neck_flow(solution, Neck("over", x, 35.4 * MM, x, 35.7 * MM))
    assert 0.0 < under.width_m + over.width_m < 36.0 * MM
    right = [float(name in {"one", "three"}) for name in solution.ports]
    assert -(under.share + over.share) == pytest.approx(right, rel=1e-8, abs=1e-8)
