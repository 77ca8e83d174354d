"""A board whose quiet rails may hang on other rails: searched, published, explained, and its powers add up."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from archopt import workflow
from archopt.cli import main
from archopt.model.parameters import LINEAR
from archopt.model.situation import Situation, family_step_a
from archopt.present import files
from archopt.present.record import Data
from archopt.trade.rebuilt import detail_of, problem_of, row_of

STUDY = """\
name = "quiet_rails"
[input]
low_v = 36
high_v = 75
[board]
area_cm2 = 300
stacks = ["8_layers_2_pairs_2_oz"]
[control]
largest_unannounced_jump_percent = 40
[choices]
direct = false
max_buses = 1
[[rails]]
name = "io"
voltage_v = 3.3
max_current_a = 5
squares = 1.0
copper_width_mm = 40
copper_area_cm2 = 15
[[rails]]
name = "logic"
voltage_v = 1.8
max_current_a = 8
squares = 1.0
copper_width_mm = 40
copper_area_cm2 = 15
[[rails]]
name = "clock"
voltage_v = 1.1
max_current_a = 0.6
step_a = 0.1
parents = ["logic", "io"]
linear_only = true
[[rails]]
name = "sensor"
voltage_v = 2.5
max_current_a = 0.5
step_a = 0.1
parents = ["io"]
linear_only = true
"""
QUIET = ("clock", "sensor")


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    folder = tmp_path_factory.mktemp("quiet")
    (folder / "study.toml").write_text(STUDY, encoding="utf-8")
    front = workflow.solve(workflow.load(folder / "study.toml"), seed=3, evaluations=150)
    return files.write(front.record, folder / "result")


@pytest.fixture(scope="module")
def designs(place: Path) -> list[Data]:
    found: list[Data] = json.loads((place / "designs.json").read_text(encoding="utf-8"))
    return found


def children(design: Data) -> dict[str, str]:
    """Return the rails of a design that hang on another rail, with that rail."""
    return {rail: feed for rail, feed in design["feeds"].items() if feed in design["feeds"]}


def test_published_designs_hang_two_rails_on_permitted_parents(designs: list[Data]) -> None:
    permitted = {"clock": {"logic", "io"}, "sensor": {"io"}}
    for design in designs:
        assert all(parent in permitted[rail] for rail, parent in children(design).items())
    assert max(len(children(design)) for design in designs) >= 2


def test_quiet_rails_are_linear_in_every_published_design(place: Path, designs: list[Data]) -> None:
    linear = json.loads((place / "problem.json").read_text(encoding="utf-8"))["parts"]["linear_regulators"]
    for design in designs:
        for rail in QUIET:
            assert design["choices"][f"{rail}.stage"] in linear
            assert list(design["year_kwh"][f"{rail} stage"])[:2] == ["pass element", "quiescent"]


def test_powers_balance_in_every_state_of_every_published_design(designs: list[Data]) -> None:
    for design in designs:
        for state in design["states"]:
            assert abs(state["balance"]) <= 1e-9, (design["design"], state["state"])


def test_a_parent_carries_its_children_and_their_steps(place: Path, designs: list[Data]) -> None:
    record: Any = json.loads((place / "problem.json").read_text(encoding="utf-8"))
    problem = problem_of(record)
    names = problem.rails.names
    design = max(designs, key=lambda found: len(children(found)))
    row = row_of(problem, design)
    found, solution = detail_of(problem, row), detail_of(problem, row).solution
    for parent in set(children(design).values()):
        j = names.index(parent)
        mine = [names.index(rail) for rail, feed in children(design).items() if feed == parent]
        drawn_a = solution.stage_in_w[0][:, mine].sum(axis=1) / problem.rails.voltage_v[j]
        assert solution.current_a[0, :, j] == pytest.approx(problem.states.current_a[:, j] + drawn_a, rel=1e-9)
        assert (solution.stage_v[0][:, mine] == problem.rails.voltage_v[j]).all()
        assert (problem.stages.kind[found.hardware.stage[0, mine]] == LINEAR).all()
        # what the parent's step and its droop are made of: its own step and those of its children
        step_a = family_step_a(Situation(problem, problem.states, found.designs, found.hardware, solution, found.bill))
        groups = problem.rails.step_group[[j, *mine]]
        assert len(set(groups)) == len(groups)  # each steps alone: the largest counts
        seen_a = [
            problem.rails.step_a[k] * problem.rails.voltage_v[k] * solution.step_ratio[0, :, k]
            / problem.rails.voltage_v[j] for k in mine
        ]  # fmt: skip
        assert step_a[0, j] == pytest.approx(np.maximum(problem.rails.step_a[j], np.max(seen_a, axis=0)), rel=1e-9)


def test_show_says_what_hangs_on_what(place: Path, designs: list[Data], capsys: pytest.CaptureFixture[str]) -> None:
    design = max(designs, key=lambda found: len(children(found)))
    with pytest.raises(SystemExit) as left:
        main(["show", str(place), design["design"]])
    assert left.value.code in (0, None)
    tree = capsys.readouterr().out.split("Power tree")[1].split("Bands of load")[0].splitlines()
    for rail, parent in children(design).items():
        at = next(k for k, line in enumerate(tree) if line.strip().startswith(f"{rail} "))
        above = next(line for line in tree[at::-1] if indent(line) < indent(tree[at]))
        assert above.strip().startswith(f"{parent} "), rail


def indent(line: str) -> int:
    """Return how far a line is indented."""
    return len(line) - len(line.lstrip())
