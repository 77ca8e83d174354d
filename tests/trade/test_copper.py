"""The copper question: every point is direct physics, money is counted right, nothing fits that does not."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from numpy.typing import NDArray

from archopt.errors import OutputError
from archopt.model.evaluator import Evaluator
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.physics.copper import resistivity_ohm_m
from archopt.trade.copper import (
    WEIGHT,
    CopperAnswer,
    CopperPoint,
    copper_question,
    holds,
    last_worth,
    pair_rows,
    spread_pairs,
    with_months,
    with_stack,
)
from archopt.trade.money import money_per_kwh
from trade.conftest import compiled


@cache
def decided() -> tuple[Problem, NDArray[np.int64]]:
    problem, row = compiled("compute_sixteen")
    return problem, Evaluator(problem).decide(row[None])[0]


@cache
def answer() -> CopperAnswer:
    problem, row = decided()
    return copper_question(problem, row, design="incumbent")


def test_every_net_and_every_weight_is_swept() -> None:
    problem, _ = decided()
    assert list(answer().sweeps()) == [WEIGHT, "bus_a", *problem.rails.names]
    assert [point.amount for point in answer().sweeps()[WEIGHT]] == [1.0, 2.0, 3.0]
    assert [point.amount for point in answer().sweeps()["bus_a"]] == [1.0, 2.0, 3.0, 4.0]


def test_the_design_itself_is_on_every_sweep() -> None:
    problem, row = decided()
    loss = Evaluator(problem).evaluate(row[None], exact=True).objectives[0]
    for points in answer().sweeps().values():
        here = [point for point in points if point.here]
        assert len(here) == 1
        assert here[0].loss_kwh == pytest.approx(float(loss[0]), rel=1e-12)
        assert here[0].cost == pytest.approx(float(loss[1]), rel=1e-12)


def test_points_are_direct_physics_with_nothing_else_changed() -> None:
    problem, row = decided()
    for pairs, changed in pair_rows(problem, row, "core_west"):
        point = answer().sweeps()["core_west"][pairs - 1]
        exact = Evaluator(problem).evaluate(changed[None], exact=True).objectives[0]
        assert point.loss_kwh == pytest.approx(float(exact[0]), rel=1e-12)
        moved = np.flatnonzero(changed != row)
        assert set(moved) <= {problem.layout.rail("pairs").start + problem.rails.names.index("core_west")}


def test_more_copper_never_loses_more() -> None:
    for points in answer().sweeps().values():
        assert np.all(np.diff([point.copper_kwh for point in points]) < 0.0)
        assert np.all(np.diff([point.drop_percent for point in points]) <= 0.0)
        assert np.all(np.diff([point.rise_k for point in points]) <= 0.0)


def test_losses_of_the_nets_are_all_the_copper_there_is() -> None:
    problem, row = decided()
    solution = Evaluator(problem).detail(row[None], exact=True).solution
    every = (solution.plane_w.sum(axis=2) + solution.pour_w.sum(axis=2))[0] @ problem.states.hours * 1e-3
    assert sum(net.loss_kwh for net in answer().nets) == pytest.approx(float(every), rel=1e-12)


def test_halving_a_pour_doubles_its_sheet_but_not_its_vias() -> None:
    # closed form: loop = 2 (squares x sheet / pairs + vias), both as warm as the pour
    problem, row = decided()
    k = problem.rails.names.index("core_west")
    stack = int(row[problem.layout.board("stack")])
    sheet_ohm = float(problem.rails.squares[k] * problem.sheet_ohm[stack])
    ohm = [sheet_ohm / pairs + float(problem.rails.pour_via_ohm[k]) for pairs in (2, 4)]
    points = [answer().sweeps()["core_west"][n - 1] for n in (2, 4)]
    supply = problem.study.supply
    warm = [float(resistivity_ohm_m(supply.hottest_inlet_degc + supply.local_rise_k + p.rise_k)) for p in points]
    assert points[0].rise_k > points[1].rise_k
    expected = ohm[0] * warm[0] / (ohm[1] * warm[1])
    assert points[0].drop_percent / points[1].drop_percent == pytest.approx(expected, rel=1e-9)


def test_rise_is_the_permitted_one_at_the_limit() -> None:
    """IPC-2221 inverted: where a sweep misses ampacity its rise is above the permitted one, and only there."""
    problem, _ = decided()
    permitted = problem.study.board.copper_rise_k
    for sweep, points in answer().sweeps().items():
        if sweep == WEIGHT:
            continue
        for point in points:
            if "copper ampacity" in point.missed:
                assert point.rise_k > permitted
            else:
                assert point.rise_k <= permitted


def test_months_by_hand() -> None:
    problem, _ = decided()
    rate = money_per_kwh(problem.study)
    one, two = answer().sweeps()[WEIGHT][:2]
    assert one.months is None
    assert two.months == pytest.approx(12.0 * (two.cost - one.cost) / ((one.loss_kwh - two.loss_kwh) * rate), rel=1e-12)


def point(amount: float, loss: float, cost: float, missed: tuple[str, ...] = ()) -> CopperPoint:
    return CopperPoint(WEIGHT, amount, "stack", False, loss, 1.0, cost, 1.0, 1.0, None, missed)


def test_where_the_next_step_stops_paying() -> None:
    """100, 90, 88 kWh at 10, 11, 20: at 0.5 a kWh the steps take 2.4 and 108 months."""
    points = with_months([point(1, 100, 10), point(2, 90, 11), point(3, 88, 20)], 0.5)
    assert [p.months for p in points] == [None, pytest.approx(2.4), pytest.approx(108.0)]
    for life, amount in ((2.0, 1), (60.0, 2), (120.0, 3)):
        best = last_worth(points, life)
        assert best is not None
        assert best.amount == amount


def test_steps_that_cost_nothing_save_nothing_or_are_no_design() -> None:
    points = with_months([point(1, 100, 10, ("rail drop",)), point(2, 90, 10), point(3, 95, 9), point(4, 80, 9)], 0.5)
    assert [p.months for p in points[1:]] == [0.0, None, 0.0]
    best = last_worth(points, 60.0)
    assert best is not None
    assert best.amount == 2
    assert last_worth([points[0]], 60.0) is None


def test_a_limit_the_design_misses_itself_stops_no_step() -> None:
    own = replace(point(1, 100, 10, ("rail drop",)), here=True)
    points = with_months([own, point(2, 90, 10, ("rail drop",)), point(3, 80, 10, ("rail drop", "bus drop"))], 0.5)
    best = last_worth(points, 60.0)
    assert best is not None
    assert best.amount == 2


def test_a_net_that_bursts_its_stack_moves_and_pays() -> None:
    """On a stack it just fits, one more pair needs the next stack of the same weight, at its price."""
    problem, row = decided()
    tight = with_stack(problem, row, problem.stacks.names.index("14_layers_4_pairs_2_oz"))
    designs = Designs(problem.layout, tight[None])
    designs.rail("pairs")[0] = 4
    designs.rail("feed")[0, problem.rails.names.index("memory_2v5")] = 2
    designs.bus("converter")[0, 1] = designs.bus("converter")[0, 0]
    designs.bus("pairs")[0] = 3, 1
    assert holds(problem, tight)
    found = dict(pair_rows(problem, tight, "bus_a"))
    moved = found[4][problem.layout.board("stack")]
    assert problem.stacks.names[moved] == "16_layers_5_pairs_2_oz"
    grown = copper_question(problem, tight, net="bus_a").sweeps()["bus_a"]
    area = problem.study.board.area_cm2
    assert grown[3].cost - grown[2].cost == pytest.approx((0.148 - 0.122) * area, rel=1e-9)
    assert grown[3].months is not None
    assert grown[3].months > 12.0


def test_layers_shared_out_anew_still_fit() -> None:
    problem, row = decided()
    spread = spread_pairs(problem, row)
    assert holds(problem, spread)
    changed = np.flatnonzero(spread != row)
    pairs = problem.layout.rail("pairs")
    assert set(changed) <= set(range(pairs.start, pairs.stop))


def test_a_cheaper_stack_that_holds_the_design_is_named() -> None:
    assert answer().cheaper_stack == "14_layers_4_pairs_2_oz"
    assert answer().cheaper_by == pytest.approx((0.148 - 0.122) * 1000.0, rel=1e-9)


def test_an_unknown_net_is_refused() -> None:
    problem, row = decided()
    with pytest.raises(OutputError, match="did you mean 'core_west'"):
        copper_question(problem, row, net="core_wets")
