"""Baselines searched afresh: what each may hold, that luck does not order them, that nothing but the seed counts.

The searches here are of one design's hardware, whose tables are made in milliseconds: what they find can be
compared with a sweep of every voltage.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from archopt.model.canonical import buses_used
from archopt.model.evaluator import Evaluator
from archopt.model.parameters import FIXED_RATIO
from archopt.model.space import FIXED, Designs
from archopt.search.genome import Genome
from archopt.search.published import publish
from archopt.search.replicates import Settings, search_all
from archopt.trade.afresh import (
    RATIO,
    Boards,
    baseline_row,
    fixed_problem,
    following_problem,
    gain_of,
    habitual_problem,
    members,
    nothing,
    remarks,
    search_afresh,
)
from archopt.trade.baselines import BEST_FIXED, FOLLOWS_ANNOUNCED, FOLLOWS_STUDY, FOLLOWS_UNANNOUNCED, HABIT
from archopt.trade.money import lifetime_costs
from archopt.trade.pinned import pinned_problem
from archopt.trade.schedules import best_fixed

TINY = Settings(evaluations=64, population=16, seed=3, stagnation_generations=99)


@pytest.fixture(scope="module")
def told(wide):
    whole, today = wide
    problem = pinned_problem(whole, today)
    evaluator = Evaluator(problem)
    found = search_all(evaluator, TINY, seeds_rows=today[None]).together
    published = publish(evaluator, found)
    front = Boards(published.rows, published.objectives, found.evaluations)
    seen: list[str] = []
    answer = search_afresh(
        problem, TINY, found, front, today=today, progress=lambda name, state: seen.append(name)
    )  # fmt: skip
    again = search_afresh(problem, TINY, found, front, today=today)
    return problem, answer, again, seen


def rows_of(answer):
    return {row["baseline"]: row for row in answer.rows}


@pytest.mark.parametrize("make", [fixed_problem, habitual_problem, following_problem])
def test_a_baseline_decodes_into_its_own_kind_alone(telecom, make) -> None:
    """Genomes at random become boards of the kind, whatever they hold."""
    problem, _ = telecom
    other = make(problem)
    genome = Genome(other)
    rng = np.random.default_rng(5)
    low = np.array([gene.low for gene in genome.genes])
    high = np.array([gene.high for gene in genome.genes])
    plan = genome.decode(low + (high - low) * rng.random((200, len(low))))
    kinds = problem.converters.kind[np.maximum(plan.bus["converter"] - 1, 0)]
    assert not ((kinds == FIXED_RATIO) & (plan.bus["converter"] > 0)).any()
    if make is following_problem:
        assert not (plan.bus["control"] == FIXED).any()
    else:
        assert (plan.bus["control"] == FIXED).all()
    if make is habitual_problem:
        assert set(problem.grid_v[plan.bus["nominal_v"]].ravel()) == {problem.study.control.habitual_v}


def test_every_baseline_is_of_its_kind(told) -> None:
    problem, answer, _, _ = told
    rows = rows_of(answer)
    assert list(rows) == [HABIT, BEST_FIXED, RATIO, FOLLOWS_UNANNOUNCED, FOLLOWS_STUDY, FOLLOWS_ANNOUNCED]
    assert rows[HABIT]["volts"] == problem.study.control.habitual_v
    assert isinstance(rows[BEST_FIXED]["volts"], float)
    for name in (FOLLOWS_UNANNOUNCED, FOLLOWS_STUDY, FOLLOWS_ANNOUNCED):
        assert isinstance(rows[name]["volts"], list)
        assert rows[name]["choices"]["bus_a.control"] != "fixed"
    for name in (HABIT, BEST_FIXED, FOLLOWS_STUDY):
        assert rows[name]["feasible"]
        assert rows[name]["evaluations"] >= TINY.evaluations


def test_a_weaker_demand_never_costs_more(told) -> None:
    _, answer, _, _ = told
    rows = rows_of(answer)
    orders = ((BEST_FIXED, HABIT), (FOLLOWS_ANNOUNCED, FOLLOWS_STUDY), (FOLLOWS_STUDY, FOLLOWS_UNANNOUNCED))
    for weaker, harder in orders:
        for key in ("lifetime_cost", "least_energy_kwh_per_year", "least_cost"):
            assert rows[weaker][key] <= rows[harder][key] * (1 + 1e-12)


def test_the_best_fixed_bus_is_the_one_a_sweep_of_every_voltage_finds(told, wide) -> None:
    problem, answer, _, _ = told
    row = rows_of(answer)[BEST_FIXED]
    swept = best_fixed(Evaluator(problem), wide[1])
    assert row["energy_loss_kwh_per_year"] == pytest.approx(float(swept.objectives[0]), rel=1e-9)
    assert row["cost_per_board"] == pytest.approx(float(swept.objectives[1]), rel=1e-9)


def test_the_gain_is_quoted_against_the_best_fixed_bus(told) -> None:
    problem, answer, _, _ = told
    rows = rows_of(answer)
    against = rows[BEST_FIXED]
    price = problem.study.economics.energy_price_per_kwh * problem.study.economics.cooling_overhead
    price *= problem.study.economics.life_years / problem.study.economics.upstream_efficiency
    for gain in answer.gains:
        own = rows[gain["of"]]
        life = [row["cost_per_board"] + price * row["energy_loss_kwh_per_year"] for row in (own, against)]
        assert gain["lifetime_cost_less"] == pytest.approx(life[1] - life[0], rel=1e-9)
        assert gain["energy_less_kwh"] == pytest.approx(
            against["energy_loss_kwh_per_year"] - own["energy_loss_kwh_per_year"], rel=1e-9
        )
        assert gain["cost_more"] == pytest.approx(own["cost_per_board"] - against["cost_per_board"], rel=1e-9)


def test_the_same_budget_and_seed_give_the_same_and_each_search_is_told(told) -> None:
    _, answer, again, seen = told
    assert answer.as_dict() == again.as_dict()
    # the study's jump is 100 %, so that every jump unannounced is no search of its own
    assert list(dict.fromkeys(seen)) == [HABIT, BEST_FIXED, FOLLOWS_STUDY, FOLLOWS_ANNOUNCED]


def test_equal_cost_is_a_share_of_the_fixed_boards_loss(telecom) -> None:
    """By hand: at 100 the moving board loses 50 against 80, at 120 40 against 60."""
    problem, _ = telecom
    none = np.zeros((2, problem.layout.width), dtype=np.int64)
    fixed = Boards(none, np.array([[80.0, 100.0, 60.0], [60.0, 120.0, 60.0]]))
    moving = Boards(none, np.array([[50.0, 100.0, 60.0], [40.0, 120.0, 60.0]]))
    gain = gain_of(problem, "moving", moving, fixed)
    assert gain["energy_less_at_equal_cost_percent"] == pytest.approx([100 / 3, (100 / 3 + 37.5) / 2, 37.5], rel=2e-3)


def test_a_bus_that_may_not_move_and_a_stopped_run_are_said(wide) -> None:
    whole, today = wide
    problem = pinned_problem(whole, today)
    still = replace(problem, study=replace(problem.study, control=replace(problem.study.control, kinds=("fixed",))))
    evaluator = Evaluator(problem)
    found = search_all(evaluator, replace(TINY, evaluations=24), seeds_rows=today[None]).together
    empty = replace(found, fixed_rows=found.fixed_rows[:0], kinds={})
    answer = search_afresh(still, TINY, empty, nothing(problem, ""), stop=lambda: True)
    rows = rows_of(answer)
    assert rows[HABIT]["note"] == "not searched: the run was stopped"
    assert rows[FOLLOWS_STUDY]["note"] == "the study does not allow a bus that follows the load"
    assert not rows[FOLLOWS_STUDY]["feasible"]
    assert answer.gains == []


def test_fixed_boards_that_beat_the_whole_front_are_remarked(telecom) -> None:
    problem, _ = telecom
    one = np.zeros((1, problem.layout.width), dtype=np.int64)
    good, bad = (Boards(one, np.array([[kwh, 100.0, 60.0]])) for kwh in (50.0, 60.0))
    assert remarks(problem, bad, good) == []
    (said,) = remarks(problem, good, bad)
    less = float(np.diff(lifetime_costs(problem.study, np.array([[50.0, 100.0], [60.0, 100.0]])))[0])
    assert f"{less:.2f} EUR less" in said


def test_members_need_a_bus(telecom) -> None:
    problem, today = telecom
    row = today[None]
    assert members(fixed_problem(problem), row).all()
    assert members(habitual_problem(problem), row).all()
    assert not members(following_problem(problem), row).any()
    direct = row.copy()
    Designs(problem.layout, direct).rail("feed")[:] = 0
    assert not buses_used(Designs(problem.layout, direct)).any()
    assert not members(fixed_problem(problem), direct).any()
    assert baseline_row(problem, HABIT, nothing(problem, "why"))["note"] == "why"
