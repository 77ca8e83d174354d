"""What sets the adaptive limits: against steps made by hand, and against a continuous descent of the voltage."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from archopt.model.board import DirectStages
from archopt.model.evaluator import Evaluator, evaluate_in
from archopt.model.limits import INDEX
from archopt.model.space import TWO_LEVELS, Designs
from archopt.trade.adaptive_limits import adaptive_limits
from archopt.trade.pinned import pinned_problem, with_jump
from archopt.trade.schedules import best_fixed, best_schedule

SIDES = {"lower": -1, "upper": 1}


@pytest.fixture(scope="module")
def following(wide):
    """The line card on a bus that reaches from 5 V up, following the load with every jump announced."""
    problem, row = wide
    pinned = with_jump(pinned_problem(problem, row), 0.0)
    evaluator = Evaluator(pinned)
    return pinned, evaluator, best_schedule(evaluator, row).row


@pytest.fixture(scope="module")
def told(following):
    problem, _, row = following
    (bus,) = adaptive_limits(problem, row)
    return bus


def stepped(problem, row, band: int, step: int):
    """The row with bus A one grid position away in one band."""
    moved = row.copy()
    moved[problem.layout.volts.start + band] += step
    return moved


def exactly(problem, row):
    return evaluate_in(
        problem, problem.states, Designs(problem.layout, row[None]), DirectStages(problem, problem.states),
        exact=True, explain=True,
    ).evaluation  # fmt: skip


def test_every_step_is_what_direct_physics_says_of_it(following, told) -> None:
    problem, _, row = following
    own = exactly(problem, row)
    assert own.violation[0] == 0.0
    assert [entry["band"] for entry in told["bands"]] == list(range(1, problem.states.bands + 1))
    for band, entry in enumerate(told["bands"]):
        for side, step in SIDES.items():
            there = row[problem.layout.volts.start + band] + step
            if not 0 <= there < len(problem.grid_v):
                assert entry[side]["reason"] == "grid end"
                continue
            found = exactly(problem, stepped(problem, row, band, step))
            change = float(found.objectives[0, 0] - own.objectives[0, 0])
            assert entry[side]["volts"] == problem.grid_v[there]
            assert entry[side]["energy_change_kwh"] == pytest.approx(change, rel=1e-9, abs=1e-12)
            assert (entry[side]["reason"] == "limit") == (found.violation[0] > 0)
            if entry[side]["reason"] == "limit":
                assert entry[side]["limit"]["slack"] < 0
                assert entry[side]["more_limits"] + 1 == int((found.slack[0] < 0).sum())
            elif entry[side]["reason"] == "waste":
                assert change > 0


def test_the_limit_named_is_the_one_a_falling_voltage_meets_first(following, told) -> None:
    """The grid position of the step is given voltages between, until the first limit gives way."""
    problem, _, row = following
    limited = [
        (band, side) for band, entry in enumerate(told["bands"]) for side in SIDES
        if entry[side]["reason"] == "limit" and entry[side]["limit"]["limit"] != "choices that fit together"
    ]  # fmt: skip
    tested = 0
    for band, side in limited:
        at = row[problem.layout.volts.start + band]
        target = at + SIDES[side]
        moved = stepped(problem, row, band, SIDES[side])
        others = np.delete(row[problem.layout.volts][: problem.states.bands], band)
        if target in others:  # another band stands there and would move too
            continue
        tested += 1
        low, high = 0.0, 1.0
        first = np.flatnonzero(exactly(problem, moved).slack[0] < 0)
        for _ in range(12):
            share = 0.5 * (low + high)
            grid = problem.grid_v.copy()
            grid[target] = (1.0 - share) * problem.grid_v[at] + share * problem.grid_v[target]
            found = exactly(replace(problem, grid_v=grid), moved)
            broken = np.flatnonzero(found.slack[0] < 0)
            low, high = (low, share) if len(broken) else (share, high)
            first = broken if len(broken) else first
        assert INDEX[told["bands"][band][side]["limit"]["limit"]] in first
    assert tested


def test_the_ends_speak_of_the_lowest_and_highest_voltage(told) -> None:
    volts = [entry["volts"] for entry in told["bands"]]
    assert told["control"] == "follow_load"
    assert told["lower"]["from_volts"] == min(volts)
    assert told["upper"]["from_volts"] == max(volts)
    for side in SIDES:
        step = told["bands"][told[side]["band"] - 1][side]
        assert {key: told[side][key] for key in step} == step


def test_the_grid_ends_where_the_study_ends_it(following) -> None:
    problem, _, row = following
    low = row.copy()
    low[problem.layout.volts.start] = 0
    (bus,) = adaptive_limits(problem, low)
    assert bus["bands"][0]["lower"] == {
        "volts": None, "reason": "grid end", "limit": None, "more_limits": 0, "energy_change_kwh": None,
    }  # fmt: skip


def test_a_limit_the_design_does_not_meet_counts_where_a_step_makes_it_worse(following, told) -> None:
    """A band is put one step beyond what stops it: another step meets the same limit, worse."""
    problem, _, row = following
    band, side = next(
        (band, side) for band, entry in enumerate(told["bands"]) for side in SIDES
        if entry[side]["reason"] == "limit" and 1 < row[problem.layout.volts.start + band] < len(problem.grid_v) - 2
    )  # fmt: skip
    beyond = stepped(problem, row, band, SIDES[side])
    assert exactly(problem, beyond).violation[0] > 0
    (bus,) = adaptive_limits(problem, beyond)
    before, after = told["bands"][band][side], bus["bands"][band][side]
    assert after["reason"] == "limit"
    assert after["limit"]["slack"] < before["limit"]["slack"] < 0
    assert bus["bands"][band]["lower" if side == "upper" else "upper"]["reason"] != "limit"


def test_a_level_moves_whole(following) -> None:
    problem, _, row = following
    layout = problem.layout
    two = row.copy()
    volts = two[layout.volts][: problem.states.bands]
    low, high = volts.min(), volts.max()
    two[layout.volts.start : layout.volts.start + problem.states.bands] = np.where(
        np.arange(problem.states.bands) < 2, low, high
    )
    designs = Designs(layout, two[None])
    designs.bus("control")[0, 0] = TWO_LEVELS
    designs.bus("lower_v")[0, 0], designs.bus("upper_v")[0, 0] = low, high
    (bus,) = adaptive_limits(problem, two)
    assert [entry["band"] for entry in bus["bands"]] == [None, None]
    down = two.copy()
    down[layout.volts.start : layout.volts.start + 2] -= 1
    change = exactly(problem, down).objectives[0, 0] - exactly(problem, two).objectives[0, 0]
    assert bus["lower"]["energy_change_kwh"] == pytest.approx(float(change), rel=1e-9, abs=1e-12)


def test_a_fixed_bus_has_no_adaptive_limits(following) -> None:
    problem, evaluator, row = following
    assert adaptive_limits(problem, best_fixed(evaluator, row).row) == []
