"""Designs in time against their closed forms and limits; a design that cannot survive its jump is refused."""

from __future__ import annotations

import json
from dataclasses import replace
from itertools import pairwise
from typing import Any

import numpy as np
import pytest
from numpy.typing import NDArray

from archopt.model.evaluator import Evaluator
from archopt.model.explain import explain_many
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.physics.averaged_bus import bus_wave
from archopt.present.compiled_record import compiled_record
from archopt.present.plain import plain
from archopt.trade.circuits import bus_case, bus_step, jump_of, jump_rises, waves_of
from archopt.trade.pinned import pinned_problem, unmet_limits, with_jump
from archopt.trade.rebuilt import detail_of, problem_of, row_of
from archopt.trade.schedule_rows import schedule_rows
from archopt.trade.schedules import best_schedule
from archopt.trade.waveforms import recheck, settled

Rows = NDArray[np.int64]
LEAN = {"bus_a.converter": "wide_bus_150w", "bus_a.bulk": "ceramic_22u_25v", "bus_a.bulk_count": "4"}


@pytest.fixture(scope="module")
def lean(telecom: tuple[Problem, Rows]) -> tuple[Problem, Rows]:
    """The line card's hardware with little bulk capacitance, its bus free to follow the load."""
    problem, row = telecom
    row = problem.space.encode(LEAN, row)
    return pinned_problem(problem, row), row


@pytest.fixture(scope="module")
def blind(lean: tuple[Problem, Rows]) -> Rows:
    """What a schedule that knows nothing of jumps settles on."""
    problem, row = lean
    found = best_schedule(Evaluator(with_jump(problem, 0.0)), row)
    assert found.feasible
    return found.row


@pytest.fixture(scope="module")
def sound(lean: tuple[Problem, Rows]) -> Rows:
    """What is settled on when everything may jump at once."""
    problem, row = lean
    found = best_schedule(Evaluator(with_jump(problem, 100.0)), row)
    assert found.feasible
    return found.row


def test_a_jump_blind_choice_is_refused_with_the_limit_named(lean: tuple[Problem, Rows], blind: Rows) -> None:
    evaluator = Evaluator(with_jump(lean[0], 100.0))
    evaluation = evaluator.evaluate(blind[None], exact=True)
    assert evaluation.violation[0] > 0.0
    unmet = unmet_limits(evaluator, blind)
    assert any("jump survival" in words or "bus dip" in words for words in unmet), unmet
    # and the lowest bus is what it is refused for
    volts = Designs(lean[0].layout, blind[None]).volts[0, 0]
    raised = blind.copy()
    raised[lean[0].layout.volts][: len(volts)] = np.maximum(volts, volts[-1])
    assert evaluator.evaluate(raised[None], exact=True).violation[0] < evaluation.violation[0]


def test_the_jump_blind_choice_fails_in_time_too(lean: tuple[Problem, Rows], blind: Rows, sound: Rows) -> None:
    problem = with_jump(lean[0], 100.0)
    worst = []
    for row in (blind, sound):
        waves = waves_of(problem, detail_of(problem, row))
        wave = bus_wave(bus_case(waves, 0, 0, 0), bus_step(waves, 0, 0, 0))
        worst.append(100.0 * wave.dip_v / wave.bus_v[0])
    assert worst[0] > worst[1]


def test_what_meets_its_limits_meets_them_in_time(lean: tuple[Problem, Rows], sound: Rows) -> None:
    problem = with_jump(lean[0], 100.0)
    detail = detail_of(problem, sound)
    findings = recheck(problem, detail)
    assert {"rail droop", "rail release", "bus dip", "jump survival: stage input"} <= {f.limit for f in findings}
    for found in findings:
        assert found.met, found
        if found.limit in ("rail droop", "rail release", "bus dip") and "dipped" not in found.state:
            assert found.value <= 1.02 * found.closed, found
            assert found.value >= 0.3 * found.closed, found
        if found.limit.startswith("jump"):
            assert found.value > 0.0
    assert set(findings[0].as_data()) >= {"limit", "where", "value", "closed", "bound", "met"}


def test_a_design_that_fails_in_time_makes_room_for_the_next(lean: tuple[Problem, Rows], sound: Rows) -> None:
    """A bus with hardly any capacitance fails; the closed forms never let it in, so it is put in by hand."""
    problem = with_jump(lean[0], 100.0)
    tight = replace(problem.study.control, bus_dip_percent=1.0)
    strict = replace(problem, study=replace(problem.study, control=tight))
    rows = np.stack([sound, sound, sound])
    loose = settled(Evaluator(problem), rows, lambda places: places[:2])
    assert loose.kept.tolist() == [0, 1, 2]
    assert {f.row for f in loose.findings} == {0, 1}
    none = settled(Evaluator(strict), rows, lambda places: places[:1])
    assert none.failed.tolist() == [0, 1, 2]
    assert {f.limit for f in none.findings if not f.met} == {"bus dip"}


def test_a_jump_is_made_of_steps_no_larger_than_each_rails(telecom: tuple[Problem, Rows]) -> None:
    problem, _ = telecom
    rails = np.arange(len(problem.rails.names))
    rise = problem.rails.step_a * np.array([0.0, 0.5, 1.0, 1.5, 2.0, 3.2])
    rises = jump_rises(problem, rails, rise, 1e-4)
    total = np.zeros(len(rails))
    for one in rises:
        assert one.rise_a <= problem.rails.step_a[one.rail] * (1 + 1e-12)
        total[one.rail] += one.rise_a
    np.testing.assert_allclose(total, rise, rtol=1e-9)
    assert len({one.begins_s for one in rises}) == len(rises)  # alone in their groups: one after another


def test_the_bus_rises_to_its_top_after_the_jump(lean: tuple[Problem, Rows], sound: Rows) -> None:
    problem = with_jump(lean[0], 100.0)
    waves = waves_of(problem, detail_of(problem, sound))
    jump = jump_of(waves, 0, 0, 0)
    volts = problem.grid_v[Designs(problem.layout, sound[None]).volts[0, 0]]
    assert jump.wave.survives
    assert jump.wave.bus_v[-1] - jump.wave.bus_v[0] == pytest.approx(volts[-1] - volts[0], rel=0.05)
    assert (jump.spare_v() > 0.0).all()


def written(problem: Problem, rows: Rows) -> tuple[dict[str, Any], list[dict[str, Any]]]:
    designs = explain_many(Evaluator(problem), rows)
    record = json.loads(json.dumps(plain(compiled_record(problem, designs))))
    return record, json.loads(json.dumps(plain(designs)))


def test_a_result_computes_again_as_it_was_written(lean: tuple[Problem, Rows], sound: Rows) -> None:
    problem = with_jump(lean[0], 100.0)
    record, designs = written(problem, sound[None])
    again = problem_of(record)
    detail = detail_of(again, row_of(again, designs[0]))
    expected = list(designs[0]["objectives"].values())[:3]
    np.testing.assert_allclose(detail.evaluation.objectives[0], expected, rtol=1e-9)
    for limit in designs[0]["limits"]:
        worst = detail.ledger.worst[limit["limit"]]
        assert float(worst.slack[0]) == pytest.approx(limit["slack"], rel=1e-6, abs=1e-9), limit["limit"]


def test_schedule_rows_add_up_to_the_gain(lean: tuple[Problem, Rows], sound: Rows) -> None:
    problem = with_jump(lean[0], 100.0)
    record, designs = written(problem, sound[None])
    rows = schedule_rows(record, designs[0])
    assert [row["band"] for row in rows] == list(range(1, problem.states.bands + 1))
    assert rows[-1]["raise_above_input_w"] is None
    for low, high in pairwise(rows):
        assert low["fall_below_input_w"] < low["raise_above_input_w"]
        assert low["bus_a_v"] <= high["bus_a_v"]
    grid = float(problem.converters.setting_grid_v[problem.converters.names.index("wide_bus_150w")])
    for row in rows:
        assert row["bus_a_v"] / grid == pytest.approx(round(row["bus_a_v"] / grid), abs=1e-6)
    saving = sum(row["saving_kwh_per_year"] for row in rows)
    assert 0.0 < saving < 0.2 * designs[0]["objectives"]["energy_loss_kwh_per_year"]
