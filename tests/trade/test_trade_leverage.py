"""Leverage of catalogue numbers: against editing the catalogue row and compiling the study again."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from archopt.inputs.parts import FAMILIES
from archopt.model.board import DirectStages
from archopt.model.evaluator import Evaluator, evaluate_in
from archopt.model.problem import compile_problem
from archopt.model.space import Designs
from archopt.trade.leverage import (
    LOSS_COLUMNS,
    PRICE_MARK,
    PRICE_SPREAD_PERCENT,
    Number,
    annual_kwh,
    leverage,
    loss_numbers,
    loss_rows,
    price_rows,
    used_rows,
)
from archopt.trade.pinned import pinned_problem


@pytest.fixture(scope="module")
def line_card(telecom):
    """The line card following the load, so that a supervisor is on board, and a stage with its own bias."""
    problem, row = telecom
    changes = {
        "bus_a.converter": "wide_bus_200w", "bus_a.control": "follow_load", "bus_a.lower_v": "6",
        "bus_a.upper_v": "12", "core.stage": "buck_40a_550k_own_bias", "board.bias": "bias_from_bus_4w",
    }  # fmt: skip
    row = problem.space.encode(changes, row)
    row = Evaluator(pinned_problem(problem, row)).decide(row[None])[0]
    return problem, row, loss_rows(problem, row)


def recompiled_kwh(problem, row, family: str, name: str, column: str, value: float) -> float:
    """Energy of the row in the problem compiled anew from a catalogue with one cell changed."""
    rows = dict(problem.catalogue.families[family])
    rows[name] = FAMILIES[family](**{**rows[name].model_dump(), column: value})
    catalogue = replace(problem.catalogue, families={**problem.catalogue.families, family: rows})
    other = compile_problem(problem.study, catalogue, problem.states)
    designs = Designs(other.layout, row[None])
    stages = DirectStages(other, other.states)
    return float(evaluate_in(other, other.states, designs, stages, exact=True).evaluation.objectives[0, 0])


def test_annual_energy_is_the_evaluators(line_card) -> None:
    problem, row, _ = line_card
    evaluator = Evaluator(pinned_problem(problem, row))
    expected = evaluator.evaluate(row[None], exact=True).objectives[0, 0]
    assert annual_kwh(problem, row[None])[0] == pytest.approx(expected, rel=1e-12)


@pytest.mark.parametrize(
    ("family", "column"),
    [
        ("buck_stages", "edge_fall_ns"), ("buck_stages", "low_side_gate_nc"), ("inductors", "inductance_nh"),
        ("inductors", "core_ripple_exponent"), ("bus_converters", "switching_w"),
        ("bus_converters", "output_exponent"), ("capacitors", "esr_mohm"), ("supervisors", "power_mw"),
        ("bias_supplies", "no_load_mw"), ("copper_foils", "finished_um"), ("input_paths", "resistance_mohm"),
    ],
)  # fmt: skip
def test_leverage_is_a_finite_difference_of_the_recompiled_study(line_card, family: str, column: str) -> None:
    problem, row, found = line_card
    base = annual_kwh(problem, row[None])[0]
    names = [name for kind, name in used_rows(problem, row) if kind == family]
    changes = []
    for name in names[:3]:
        mine = next(one for one in found if one["part"] == name and one["number"] == column)
        part = problem.catalogue.families[family][name]
        raised = getattr(part, column) * (1 + 0.01 * part.spread_percent)
        expected = recompiled_kwh(problem, row, family, name, column, raised) - base
        changes.append(expected)
        assert mine["energy_change_kwh"] == pytest.approx(expected, rel=1e-6, abs=1e-9)
        assert mine["value"] == getattr(part, column)
        assert mine["spread_percent"] == part.spread_percent
    assert any(change != 0.0 for change in changes)


def test_leverage_reaches_through_a_parent_rail(industrial) -> None:
    """A linear regulator below another rail, that rail's stage and coil: each against the recompiled study."""
    problem, row = industrial
    row = Evaluator(pinned_problem(problem, row)).decide(row[None])[0]
    designs = Designs(problem.layout, row[None])
    child = int(np.flatnonzero(designs.rail("feed")[0] >= 3)[0])
    parent = int(designs.rail("feed")[0, child]) - 3
    below, above = (problem.stages.names[int(designs.rail("stage")[0, r])] for r in (child, parent))
    family = "linear_regulators" if below in problem.catalogue.families["linear_regulators"] else "buck_stages"
    found = loss_rows(problem, row)
    base = annual_kwh(problem, row[None])[0]
    for kind, name, column in ((family, below, "quiescent_ma"), ("buck_stages", above, "low_side_mohm")):
        mine = next(one for one in found if one["part"] == name and one["number"] == column)
        raised = mine["value"] * (1 + 0.01 * mine["spread_percent"])
        expected = recompiled_kwh(problem, row, kind, name, column, raised) - base
        assert expected > 0.0
        assert mine["energy_change_kwh"] == pytest.approx(expected, rel=1e-6, abs=1e-9)


def test_supervisor_leverage_in_closed_form(line_card) -> None:
    """A constant power at the input node: its spread over the hours of the year, and a little in the path."""
    problem, _, found = line_card
    names = problem.supervisors.names
    one = next(one for one in found if one["number"] == "power_mw" and one["part"] in names)
    hours = problem.states.hours.sum()
    expected = one["value"] * 1e-6 * 0.01 * one["spread_percent"] * hours
    assert one["energy_change_kwh"] == pytest.approx(expected, rel=0.02)


def test_efficiency_is_off_by_the_spread_of_its_loss() -> None:
    """By hand: 90 % off by 20 % of its 10 % loss is 88 %, and never above one."""
    assert Number("bias_supplies", "x", "efficiency", 0.9, 20.0, "").raised == pytest.approx(0.88, rel=1e-12)


def test_price_leverage_is_pieces_times_price(line_card) -> None:
    problem, row, _ = line_card
    found = {one["part"]: one for one in price_rows(problem, row)}
    converter = found["wide_bus_200w"]
    part = problem.catalogue.families["bus_converters"]["wide_bus_200w"]
    assert converter["number"] == "price_1k", "4,000 pieces a year"
    assert converter["cost_change"] == pytest.approx(0.1 * part.price_1k, rel=1e-9)
    assert converter["energy_change_kwh"] == 0.0
    assert converter["spread_percent"] == PRICE_SPREAD_PERCENT
    assert converter["source"].startswith(PRICE_MARK)
    board = found["8_layers_2_pairs_2_oz"]
    per_cm2 = problem.catalogue.families["stacks"]["8_layers_2_pairs_2_oz"].price_per_cm2
    assert board["cost_change"] == pytest.approx(0.1 * per_cm2 * problem.study.board.area_cm2, rel=1e-9)


def test_most_leverage_comes_first_and_loss_numbers_before_prices(line_card) -> None:
    problem, row, every = line_card
    found = leverage(problem, row, count=5, prices=2)
    assert len(found) == 7
    sizes = sorted((abs(one["energy_change_kwh"]) for one in every), reverse=True)
    assert [abs(one["energy_change_kwh"]) for one in found[:5]] == pytest.approx(sizes[:5], rel=1e-12)
    assert all(one["cost_change"] > 0 for one in found[5:])
    assert all(one["source"] for one in found)


def test_every_loss_column_is_a_column_of_its_family_and_is_used() -> None:
    for family, columns in LOSS_COLUMNS.items():
        assert set(columns) <= set(FAMILIES[family].model_fields), family


def test_parts_not_on_the_board_have_no_leverage(telecom) -> None:
    problem, row = telecom
    row = Evaluator(pinned_problem(problem, row)).decide(row[None])[0]
    families = {number.family for number in loss_numbers(problem, row)}
    assert not families & {"supervisors", "bias_supplies", "single_stages", "linear_regulators"}
    stages = {number.name for number in loss_numbers(problem, row) if number.family == "buck_stages"}
    assert stages == {value for name, value in problem.study.incumbent.items() if name.endswith(".stage")}
    assert np.isfinite(annual_kwh(problem, row[None])[0])
