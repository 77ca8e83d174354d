"""A written result stands on its own: its files alone give back every objective, and what they say adds up."""

from __future__ import annotations

import copy
import json
import math
from dataclasses import dataclass
from functools import cached_property
from itertools import pairwise
from pathlib import Path
from typing import Any

import pytest

from archopt import workflow
from archopt.present import files
from equivalence.from_files import Data, FromFiles
from equivalence.shipped import FOLDER

EVALUATIONS = {"telecom_six": 600, "industrial_ten": 1_200}
SEED = 5
AT_LEAST = 8
AT_MOST = 14
EXACT = 1e-9
ENERGY, COST, DROOP = "energy_loss_kwh_per_year", "cost_per_board", "worst_droop_percent"
BUSES = ("bus_a", "bus_b")


@dataclass(frozen=True)
class Written:
    """What a result directory holds."""

    problem: Data
    designs: list[Data]
    beside: list[Data]  # today's design and the best of each topology behind the winner

    @cached_property
    def chosen(self) -> list[Data]:
        """Designs spread over the front, one of each topology among them."""
        count = min(AT_MOST, len(self.designs))
        spread = {round(k * (len(self.designs) - 1) / (count - 1)) for k in range(count)}
        first: dict[str, int] = {}
        for k, design in enumerate(self.designs):
            first.setdefault(design["topology"], k)
        return [self.designs[k] for k in sorted(spread | set(first.values()))]

    @cached_property
    def again(self) -> list[FromFiles]:
        """The chosen designs computed again."""
        return [FromFiles(self.problem, design) for design in self.chosen]

    def converter(self, design: Data, bus: str) -> Data:
        """Return the catalogue row of a bus converter."""
        row: Data = self.problem["parts"]["bus_converters"][design["choices"][f"{bus}.converter"]]
        return row

    def regulated(self, design: Data) -> list[str]:
        """Return the buses in use whose voltage is set."""
        return [
            bus for bus in BUSES
            if bus in design["feeds"].values() and self.converter(design, bus)["kind"] != "fixed_ratio"
        ]  # fmt: skip


@pytest.fixture(scope="module", params=list(EVALUATIONS))
def written(request: pytest.FixtureRequest, tmp_path_factory: pytest.TempPathFactory) -> Written:
    study = workflow.load(FOLDER / request.param / "study.toml")
    front = workflow.solve(study, seed=SEED, evaluations=EVALUATIONS[request.param])
    place: Path = files.write(front.record, tmp_path_factory.mktemp("results") / request.param)

    def content(name: str) -> Any:
        return json.loads((place / name).read_text(encoding="utf-8"))

    extras = content("extras.json")
    best = [row["best_design"] for row in extras["losing"] if row["best_design"] is not None]
    return Written(content("problem.json"), content("designs.json"), [extras["incumbent"], *best])


def same(value: float) -> Any:
    return pytest.approx(value, rel=EXACT)


def stated_droop(percent: float) -> float:
    """Return droop as it is compared: no less than 60, up to the next even number."""
    return max(60.0, 2.0 * math.ceil(round(percent, 9) / 2.0))


def compare(design: Data, again: FromFiles) -> None:
    """Compare all three objectives of a design with those computed again."""
    name, objectives = design["design"], design["objectives"]
    assert again.energy_kwh() == same(objectives[ENERGY]), name
    assert again.cost() == same(objectives[COST]), name
    assert again.droop_percent() == same(objectives["worst_droop_exact_percent"]), name
    assert objectives[DROOP] == stated_droop(objectives["worst_droop_exact_percent"]), name


def test_every_objective_comes_out_of_the_files_again(written: Written) -> None:
    assert len(written.chosen) >= AT_LEAST
    for design, again in zip(written.chosen, written.again, strict=True):
        compare(design, again)


def test_todays_design_and_losing_topologies_come_out_of_the_files_again(written: Written) -> None:
    assert len({design["topology"] for design in written.beside}) >= 3
    for design in written.beside:
        compare(design, FromFiles(written.problem, design))


def test_every_state_and_threshold_comes_out_of_the_files_again(written: Written) -> None:
    for design, again in zip(written.chosen, written.again, strict=True):
        assert len(design["states"]) == len(again.results)
        for state, result in zip(design["states"], again.results, strict=True):
            assert state["input_w"] == same(result.input_w), (design["design"], state["state"])
            assert state["loss_w"] == same(result.loss_w), (design["design"], state["state"])
            assert set(state["volts"]) == set(result.bus_v)
            for bus, volts in state["volts"].items():
                assert volts == same(result.bus_v[bus]), (design["design"], state["state"], bus)
        stated = [band["raise_above_input_w"] for band in design["bands"]]
        assert stated[-1] is None
        assert stated[:-1] == [same(watts) for watts in again.raise_above_w(design)]


@pytest.mark.parametrize("place", ["air", "part", "price", "capacitor"])
def test_what_the_files_say_is_what_is_computed(written: Written, place: str) -> None:
    """Guards the comparison itself: one number changed in the problem's file changes what comes out."""
    design, problem = written.designs[0], copy.deepcopy(written.problem)
    before, objective = design["objectives"], ENERGY
    parts, choices = problem["parts"], design["choices"]
    rail = problem["copper"]["rails"][0]
    if place == "air":
        problem["study"]["supply"]["air_speed_m_s"] *= 1.1
    elif place == "part":
        parts["input_paths"][problem["study"]["supply"]["path"]]["resistance_mohm"] *= 1.1
    elif place == "price":
        objective = COST
        parts["stacks"][choices["board.stack"]]["price_per_cm2"] *= 1.1
    else:
        parts["capacitors"][choices[f"{rail}.bank"]]["esr_mohm"] *= 1.1
    again = FromFiles(problem, design)
    value = again.cost() if objective == COST else again.energy_kwh()
    assert abs(value / before[objective] - 1.0) > 1e2 * EXACT


def test_what_is_explained_adds_up_to_the_objectives(written: Written) -> None:
    for design in written.designs:
        name, objectives, cost = design["design"], design["objectives"], design["cost"]
        year = math.fsum(kwh for mechanisms in design["year_kwh"].values() for kwh in mechanisms.values())
        assert year == same(objectives[ENERGY]), name
        by_state = math.fsum(state["loss_w"] * state["hours"] * 1e-3 for state in design["states"])
        assert by_state + design["transition_kwh_per_year"] == same(objectives[ENERGY]), name
        assert math.fsum(cost.values()) == same(objectives[COST]), name
        assert set(cost) == {"parts", "placement", "new part numbers", "board"}
        assert math.fsum(row["quantity"] * row["unit_price"] for row in design["parts"]) == same(cost["parts"]), name
        assert math.fsum(row["total"] for row in design["parts"]) == same(cost["parts"]), name
        new = sum(row["new"] for row in design["parts"])
        money = written.problem["study"]["economics"]
        assert cost["new part numbers"] == same(new * money["new_part_cost"] / money["boards_per_year"]), name


def test_every_state_balances(written: Written) -> None:
    listed = 0
    for design in written.designs:
        for state in design["states"]:
            where = (design["design"], state["state"])
            assert abs(state["balance"]) <= EXACT, where
            assert state["input_w"] == same(state["load_w"] + state["loss_w"]), where
            if "losses" in state:
                watts = math.fsum(w for mechanisms in state["losses"].values() for w in mechanisms.values())
                assert abs(state["loss_w"] - watts) <= EXACT * state["input_w"], where
                listed += 1
    assert listed >= 4 * len(written.designs)  # three shown loads and the hottest state of each


def test_schedules_keep_to_grid_limits_and_order(written: Written) -> None:
    grid = written.problem["study"]["control"]["grid_v"]
    for design in written.designs:
        for bus in written.regulated(design):
            where, choices = (design["design"], bus), design["choices"]
            volts = [band["volts"][bus] for band in design["bands"]]
            assert volts == sorted(volts), where
            low, nominal, high = (float(choices[f"{bus}.{key}"]) for key in ("lower_v", "nominal_v", "upper_v"))
            assert low <= nominal <= high, where
            assert low <= volts[0], where
            assert volts[-1] <= high, where
            row = written.converter(design, bus)
            assert row["output_min_v"] <= volts[0], where
            assert volts[-1] <= row["output_max_v"], where
            for value in (*volts, low, nominal, high):
                for step in (grid, row["setting_grid_v"]):
                    assert step <= 0 or math.isclose(value / step, round(value / step), abs_tol=1e-6), (where, value)
            control = choices[f"{bus}.control"]
            if control == "fixed":
                assert set(volts) == {nominal}, where
            elif control == "two_levels":
                assert set(volts) <= {low, high}, where
            else:
                # limits the schedule never reaches are snapped to what it uses and to the nominal they contain
                assert (low, high) == (min(volts[0], nominal), max(volts[-1], nominal)), where
            running = [band["converters"][bus] for band in design["bands"]]
            assert all(1 <= units <= int(choices[f"{bus}.count"]) for units in running), where


def test_thresholds_are_ordered_with_hysteresis(written: Written) -> None:
    share = 1.0 - written.problem["study"]["control"]["hysteresis_percent"] / 100.0
    assert 0.0 < share < 1.0
    for design in written.designs:
        bands = design["bands"]
        assert [band["load_to_w"] for band in bands[:-1]] == [band["load_from_w"] for band in bands[1:]]
        up = [band["raise_above_input_w"] for band in bands[:-1]]
        down = [band["fall_below_input_w"] for band in bands[:-1]]
        assert all(below < above for below, above in pairwise(up)), design["design"]
        assert all(below < above for below, above in pairwise(down)), design["design"]
        assert down == [same(watts * share) for watts in up], design["design"]
        assert bands[-1]["raise_above_input_w"] is bands[-1]["fall_below_input_w"] is None
        for band, watts in zip(bands[:-1], up, strict=True):
            assert watts > band["load_to_w"], "the board takes more than its load"


def test_every_published_design_meets_every_limit(written: Written) -> None:
    for design in written.designs:
        assert design["feasible"] is True
        assert design["violation"] == 0.0
        assert len(design["limits"]) >= 20
        for limit in design["limits"]:
            assert limit["slack"] >= 0.0, (design["design"], limit)
        assert design["binding"]["slack"] == min(
            (limit for limit in design["limits"] if limit["limit"] == design["binding"]["limit"]),
            key=lambda limit: limit["normalised"],
        )["slack"]  # fmt: skip


def test_no_published_design_is_beaten_by_another(written: Written) -> None:
    points = [tuple(design["objectives"][key] for key in (ENERGY, COST, DROOP)) for design in written.designs]
    assert len(points) >= AT_LEAST
    for k, one in enumerate(points):
        for other in (*points[:k], *points[k + 1 :]):
            assert not all(b <= a for a, b in zip(one, other, strict=True)), (one, other)


def test_the_results_hold_what_the_comparison_is_for(written: Written) -> None:
    """Guards the tests above: moving buses, transitions that cost energy, droop that differs, rails behind rails."""
    designs = written.designs
    assert len({design["objectives"][DROOP] for design in designs}) >= 2
    if written.problem["study"]["name"] == "telecom_six":
        moving = [
            design for design in written.chosen
            if any(design["bands"][0]["volts"][bus] < volts for bus, volts in design["bands"][-1]["volts"].items())
        ]  # fmt: skip
        assert moving
        assert all(design["transition_kwh_per_year"] > 0 for design in moving)
    else:
        assert any(rail in design["feeds"] for design in written.chosen for rail in design["feeds"].values())
        assert any(state["tap_w"] > 0 for state in written.problem["states"])
    feeds = {feed for design in (*written.chosen, *written.beside) for feed in design["feeds"].values()}
    assert {"input", "bus_a"} <= feeds
