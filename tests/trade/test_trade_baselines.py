"""The same hardware with another bus voltage: against direct evaluations made here, one voltage at a time."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from archopt.inputs.load import load
from archopt.inputs.overlay import overlay
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.model.space import FIXED, Designs
from archopt.model.states import reduce_load
from archopt.trade.baselines import (
    BEST_FIXED,
    FOLLOWS_ANNOUNCED,
    FOLLOWS_STUDY,
    FOLLOWS_UNANNOUNCED,
    HABIT,
    baselines,
)
from archopt.trade.money import money_per_kwh
from archopt.trade.pinned import pinned_problem, with_jump
from archopt.trade.schedules import (
    best_fixed,
    best_schedule,
    fixed_rows,
    flat_band,
    moved,
    regulated_buses,
    supervised,
)

from .conftest import STUDIES

HARDWARE_FREE = ("nominal_v", "lower_v", "upper_v", "control")


def energy_at(evaluator: Evaluator, row, volts: float):
    """Energy and violation of a decided row held at any voltage, on the grid or not, by direct physics."""
    problem = evaluator.problem
    grid = problem.grid_v.copy()
    column = problem.layout.bus("nominal_v").start
    grid[row[column]] = volts
    moved = Evaluator.__new__(Evaluator)
    moved.problem = replace(problem, grid_v=grid)
    moved.states = problem.states
    moved.direct_stages = evaluator.direct_stages
    found = moved.evaluate(row[None], exact=True)
    return float(found.objectives[0, 0]), float(found.violation[0])


def rows_of(result):
    return {row["baseline"]: row for row in result.rows}


@pytest.fixture(scope="module")
def line_card(wide):
    problem, row = wide
    return problem, row, baselines(problem, row, "knee")


def test_best_fixed_voltage_agrees_with_a_continuous_minimiser(wide) -> None:
    """scipy's bounded minimiser on direct evaluations finds the same voltage within one grid step."""
    problem, row = wide
    evaluator = Evaluator(pinned_problem(problem, row))
    best = best_fixed(evaluator, row)
    assert best.feasible
    volts = problem.grid_v[Designs(problem.layout, best.row[None]).bus("nominal_v")[0, 0]]
    legal = [v for v in problem.grid_v if energy_at(evaluator, best.row, v)[1] <= 0.0]

    def cost(v: float) -> float:
        energy, violation = energy_at(evaluator, best.row, v)
        return energy + 100.0 * violation

    found = minimize_scalar(cost, bounds=(min(legal), max(legal)), method="bounded", options={"xatol": 1e-3})
    assert abs(found.x - volts) <= problem.study.control.grid_v
    assert found.fun == pytest.approx(best.objectives[0], rel=1e-3)


def test_rows_are_what_direct_physics_says_of_them(line_card) -> None:
    problem, row, result = line_card
    found = rows_of(result)
    assert list(found) == [HABIT, BEST_FIXED, FOLLOWS_UNANNOUNCED, FOLLOWS_STUDY, FOLLOWS_ANNOUNCED]
    evaluator = Evaluator(pinned_problem(problem, row))
    held = evaluator.decide(problem.space.encode({"bus_a.nominal_v": "12"}, row)[None])
    energy, cost, droop = evaluator.evaluate(held, exact=True).objectives[0]
    habit = found[HABIT]
    assert habit["volts"] == 12.0
    assert habit["feasible"] is True
    np.testing.assert_allclose(
        [habit["energy_loss_kwh_per_year"], habit["cost_per_board"], habit["worst_droop_percent"]],
        [energy, cost, droop],
        rtol=1e-12,
    )
    assert found[BEST_FIXED]["energy_loss_kwh_per_year"] < habit["energy_loss_kwh_per_year"]
    assert found[BEST_FIXED]["cost_per_board"] == pytest.approx(cost, rel=1e-12)


def test_less_surprise_never_costs_energy(wide) -> None:
    """Closed form: a smaller jump only widens what is legal, so the best schedule cannot lose more.

    With three fifths of its short-time current the converter may not start a jump from the lowest voltages.
    """
    problem, row = wide
    weak = replace(problem.converters, overload_a=0.6 * problem.converters.overload_a)
    result = baselines(with_jump(replace(problem, converters=weak), 35.0), row, "incumbent")
    found = rows_of(result)
    names = (FOLLOWS_UNANNOUNCED, FOLLOWS_STUDY, FOLLOWS_ANNOUNCED)
    losses = [found[name]["energy_loss_kwh_per_year"] for name in names]
    assert all(found[name]["feasible"] for name in names)
    assert losses[0] >= losses[1] * (1 - 1e-9)
    assert losses[1] >= losses[2] * (1 - 1e-9)
    assert losses[0] > losses[2] * 1.001, "here the jump decides how low the bus may go"
    assert min(found[FOLLOWS_UNANNOUNCED]["volts"]) > min(found[FOLLOWS_ANNOUNCED]["volts"])
    assert "35 %" in found[FOLLOWS_STUDY]["note"]
    assert result.summary["gain_announced_kwh_per_year"] > result.summary["gain_all_unannounced_kwh_per_year"]


def test_supervisor_is_paid_for_and_the_gain_is_against_the_best_fixed_bus(line_card) -> None:
    problem, _, result = line_card
    found, summary = rows_of(result), result.summary
    fixed, moving = found[BEST_FIXED], found[FOLLOWS_STUDY]
    gain = fixed["energy_loss_kwh_per_year"] - moving["energy_loss_kwh_per_year"]
    extra = moving["cost_per_board"] - fixed["cost_per_board"]
    economics, table = problem.study.economics, problem.supervisors
    pick = int(np.argmax(table.level >= 2))
    part = table.part[pick]
    # one piece on 4,000 boards a year: the second price step; a new part number and its placements
    expected = problem.parts.price[part, 1] + economics.new_part_cost / economics.boards_per_year
    expected += problem.parts.placements[part] * economics.placement_cost
    assert extra == pytest.approx(expected, rel=1e-9)
    assert summary["gain_kwh_per_year"] == pytest.approx(gain, rel=1e-12)
    assert summary["supervisor_cost"] == pytest.approx(extra, rel=1e-12)
    yearly = gain * money_per_kwh(problem.study)
    assert summary["gain_money_per_year"] == pytest.approx(yearly, rel=1e-12)
    assert summary["supervisor_payback_years"] == pytest.approx(extra / yearly, rel=1e-12)


def test_nothing_of_the_hardware_is_chosen_again(industrial) -> None:
    problem, row = industrial
    evaluator = Evaluator(pinned_problem(problem, row))
    fixed = best_fixed(evaluator, row)
    moving = best_schedule(evaluator, row)
    start = evaluator.decide(row[None])[0]
    layout = problem.layout
    free = {layout.bus(field).start + bus for field in HARDWARE_FREE for bus in range(2)}
    free.add(layout.board("supervisor"))
    held = [column for column in range(layout.choices) if column not in free]
    for design in (fixed, moving):
        assert (design.row[held] == start[held]).all()
    assert (Designs(layout, fixed.row[None]).bus("control") == FIXED).all()
    assert np.all(np.diff(Designs(layout, moving.row[None]).volts[0, 0]) >= 0)


def test_no_single_band_can_be_moved_for_the_better(wide) -> None:
    problem, row = wide
    evaluator = Evaluator(pinned_problem(problem, row))
    best = best_schedule(evaluator, row)
    layout = problem.layout
    for band in range(layout.bands):
        for step in (-1, 1):
            other = best.row[None].copy()
            other[0, layout.volts.start + band] += step
            designs = Designs(layout, other)
            if (np.diff(designs.volts[0, 0]) < 0).any():
                continue
            designs.bus("lower_v")[0, 0] = min(designs.volts[0, 0].min(), designs.bus("nominal_v")[0, 0])
            designs.bus("upper_v")[0, 0] = max(designs.volts[0, 0].max(), designs.bus("nominal_v")[0, 0])
            found = evaluator.evaluate(other, exact=True)
            assert found.violation[0] > 0 or found.objectives[0, 0] >= best.objectives[0]


def test_flat_schedule_is_moved_as_low_as_the_tables_propose(wide) -> None:
    """Two ways to one schedule: from the best fixed voltage by direct physics, and from the tables."""
    problem, row = wide
    evaluator = Evaluator(pinned_problem(problem, row))
    fixed = best_fixed(evaluator, row)
    flat = supervised(evaluator.problem, row, fixed)
    found = moved(evaluator, flat)
    assert found.feasible
    assert found.objectives[0] < 0.99 * fixed.objectives[0]
    assert found.objectives[0] == pytest.approx(best_schedule(evaluator, row).objectives[0], rel=2e-3)
    assert np.all(np.diff(Designs(problem.layout, found.row[None]).volts[0, 0]) >= 0)


def test_flat_band_holds_the_voltages_within_one_percent(wide) -> None:
    problem, row = wide
    evaluator = Evaluator(pinned_problem(problem, row))
    best = best_fixed(evaluator, row)
    low, high = flat_band(evaluator, best)["bus_a"]
    step = problem.study.control.grid_v
    for volts in np.arange(low, high + 0.5 * step, step):
        energy, violation = energy_at(evaluator, best.row, float(volts))
        assert violation <= 0
        assert energy <= 1.01 * best.objectives[0] * (1 + 1e-9)
    for beyond in (low - step, high + step):
        energy, violation = energy_at(evaluator, best.row, float(beyond))
        assert violation > 0 or energy > 1.01 * best.objectives[0]


def test_two_buses_are_swept_together(telecom) -> None:
    """No pair of fixed voltages a step away in either bus, or in both, is better and feasible."""
    problem, row = telecom
    second = {
        "aux_2v5.feed": "bus_b", "optics_3v3.feed": "bus_b", "bus_b.converter": "wide_bus_100w",
        "bus_b.count": "1", "bus_b.nominal_v": "12", "bus_b.lower_v": "12", "bus_b.upper_v": "12",
        "bus_b.bulk": "polymer_270u_16v_can", "bus_b.bulk_count": "4", "bus_b.pairs": "1",
    }  # fmt: skip
    row = problem.space.encode(second, row)
    evaluator = Evaluator(pinned_problem(problem, row))
    assert regulated_buses(problem, row) == (0, 1)
    best = best_fixed(evaluator, row)
    assert best.feasible
    at = Designs(problem.layout, best.row[None]).bus("nominal_v")[0]
    around = at + np.array([(i, j) for i in (-1, 0, 1) for j in (-1, 0, 1)])
    around = around[(around >= 0).all(axis=1)]
    found = evaluator.evaluate(evaluator.decide(fixed_rows(evaluator.problem, row, around)), exact=True)
    legal = found.violation <= 0
    assert found.objectives[legal, 0].min() == pytest.approx(best.objectives[0], rel=1e-12)
    assert set(flat_band(evaluator, best)) == {"bus_a", "bus_b"}
    moving = best_schedule(evaluator, row)
    assert moving.feasible
    volts = Designs(problem.layout, moving.row[None]).volts[0]
    assert np.all(np.diff(volts, axis=1) >= 0)


def test_bus_that_cannot_move_pays_for_a_supervisor_that_does_nothing(telecom) -> None:
    """A converter that makes 12 V only: the gain is the supervisor's own power over the year, negative."""
    problem, row = telecom
    only_12 = np.full_like(problem.converters.output_min_v, 12.0)
    stiff = replace(problem.converters, output_min_v=only_12, output_max_v=only_12)
    result = baselines(replace(problem, converters=stiff), row, "incumbent")
    found = rows_of(result)
    assert [row["volts"] for row in result.rows] == [12.0] * 5
    assert "nothing is gained by moving the bus" in found[FOLLOWS_STUDY]["note"]
    watts = problem.supervisors.power_w[int(np.argmax(problem.supervisors.level >= 2))]
    expected = -watts * problem.states.hours.sum() * 1e-3
    assert result.summary["gain_kwh_per_year"] == pytest.approx(expected, rel=0.02)
    assert result.summary["supervisor_payback_years"] is None
    assert result.summary["flat_band_v"] == {"bus_a": [12.0, 12.0]}


@pytest.mark.parametrize("jump", [0.0, 60.0])
def test_changed_jump_gives_the_states_of_a_study_that_states_it(industrial, jump: float) -> None:
    problem, _ = industrial
    loaded = load(STUDIES / "industrial_ten" / "study.toml")
    other = overlay(loaded, {"control.largest_unannounced_jump_percent": jump})
    expected = reduce_load(other.study)
    got = with_jump(problem, jump).states
    for name in ("current_a", "after_a", "useful_w", "tap_w", "hours"):
        np.testing.assert_allclose(getattr(got, name), getattr(expected, name), rtol=1e-12, err_msg=name)
    assert (got.off == expected.off).all()


def test_hardware_no_voltage_suits_names_the_limit(telecom) -> None:
    """One phase for a 40 A core: no bus voltage mends that, and the row says which limit and by how much."""
    problem, row = telecom
    result = baselines(problem, problem.space.encode({"core.phases": "1"}, row), "incumbent")
    found = rows_of(result)[BEST_FIXED]
    assert found["feasible"] is False
    assert "stage current at core" in found["note"]
    assert "beyond by 17.5 A" in found["note"], "40 A on one phase of 25 A derated to 22.5 A"
    assert result.summary["gain_kwh_per_year"] is None
    assert result.summary["best_fixed_v"] is None


def test_fixed_ratio_bus_has_no_voltage_to_choose(telecom) -> None:
    problem, row = telecom
    ratio = problem.space.encode({"bus_a.converter": "ratio5_bus_150w"}, row)
    assert regulated_buses(problem, ratio) == ()
    result = baselines(problem, ratio, "knee")
    assert [found["baseline"] for found in result.rows] == ["as it is"]
    assert "no regulated bus" in result.rows[0]["note"]


def test_pins_of_the_bus_do_not_hold_for_the_question(wide) -> None:
    """A study that pins its bus at 12 V and fixed still learns what another voltage would do."""
    problem, row = wide
    pins = {"bus_a.nominal_v": ("12",), "bus_a.control": ("fixed",), "core.phases": ("2",)}
    choices = replace(problem.study.choices, pins=pins)
    pinned = replace(problem, study=replace(problem.study, choices=choices))
    free, held = (rows_of(baselines(one, row, "knee")) for one in (problem, pinned))
    for name in (BEST_FIXED, FOLLOWS_STUDY):
        assert held[name]["volts"] == free[name]["volts"]
        assert held[name]["energy_loss_kwh_per_year"] == pytest.approx(
            free[name]["energy_loss_kwh_per_year"], rel=1e-12
        )


def test_study_without_a_moving_bus_gets_no_moving_baseline() -> None:
    loaded = overlay(load(STUDIES / "telecom_six" / "study.toml"), {"control.kinds": ["fixed"]})
    problem = compile_study(loaded.study, loaded.catalogue)
    row = incumbent_row(problem)
    assert row is not None
    found = rows_of(baselines(problem, row, "incumbent"))
    assert found[BEST_FIXED]["feasible"]
    assert found[FOLLOWS_STUDY]["energy_loss_kwh_per_year"] is None
    assert "does not allow" in found[FOLLOWS_STUDY]["note"]
