"""Studies that leave a rail nothing: told before a search, or solved without a bus where that is possible."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from archopt.errors import InputError
from archopt.inputs.load import load
from archopt.inputs.starter import write_starter
from archopt.model.compiled import compile_study
from archopt.model.evaluator import Evaluator
from archopt.model.explain import topology
from archopt.search.driver import search

FROM_12_V = """\
[input]
low_v = 10.8
high_v = 13.2
[board]
area_cm2 = 180.0
[[rails]]
name = "core"
voltage_v = 0.9
max_current_a = 22.0
[[rails]]
name = "io"
voltage_v = 3.3
max_current_a = 5.0
"""
QUIET = """\
[[rails]]
name = "pll"
voltage_v = 0.9
max_current_a = 0.2
linear_only = true
"""
PINS = """
[choices]
pin."bus_a.converter" = "none"
pin."bus_b.converter" = "none"
pin."core.feed" = "bus_a"
"""


def written(folder: Path, text: str) -> Path:
    file = folder / "study.toml"
    file.write_text(text, encoding="utf-8")
    return file


def test_an_input_no_bus_converter_takes_is_solved_without_a_bus(tmp_path: Path) -> None:
    loaded = load(written(tmp_path, FROM_12_V))
    problem = compile_study(loaded.study, loaded.catalogue)
    found = search(Evaluator(problem), evaluations=200, population=16, seed=1, stagnation_generations=50)
    assert len(found.rows) > 0
    assert set(topology(problem, found.rows)) == {"direct"}
    assert np.isfinite(found.objectives).all()


def test_a_rail_nothing_can_feed_is_told(tmp_path: Path) -> None:
    loaded = load(written(tmp_path, FROM_12_V + QUIET))
    with pytest.raises(InputError) as told:
        compile_study(loaded.study, loaded.catalogue)
    assert [problem.place for problem in told.value.problems] == ["rails.pll"]


def test_pins_that_contradict_each_other_are_named(tmp_path: Path) -> None:
    file = write_starter(tmp_path)[0]
    file.write_text(file.read_text(encoding="utf-8") + PINS, encoding="utf-8")
    loaded = load(file)
    with pytest.raises(InputError) as told:
        compile_study(loaded.study, loaded.catalogue)
    (problem,) = told.value.problems
    assert problem.place == "rails.core"
    assert "bus_a.converter" in problem.message
    assert "core.feed" in problem.message
