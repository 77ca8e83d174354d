"""Small invented studies on shipped parts, compiled: a space small enough to enumerate, and one with parents."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from archopt.inputs.load import load
from archopt.model.evaluator import Evaluator
from archopt.model.problem import compile_problem
from archopt.model.states import reduce_load

TWO_RAILS = """
name = "two_rails"
title = "Two rails behind one bus"

[input]
low_v = 40.0
high_v = 60.0
nominal_v = 54.0

[board]
area_cm2 = 120.0
stacks = ["8_layers_2_pairs_2_oz"]

[control]
largest_unannounced_jump_percent = 30.0

[economics]
boards_per_year = 2000.0

[load]
growth_percent = 0.0

[[rails]]
name = "core"
voltage_v = 1.0
max_current_a = 16.0
step_a = 6.0
squares = 0.4
copper_width_mm = 60.0
copper_area_cm2 = 15.0

[[rails]]
name = "io"
voltage_v = 1.8
max_current_a = 9.0
step_a = 3.0
squares = 1.0
copper_width_mm = 40.0
copper_area_cm2 = 10.0
"""

# One bus, both rails on it: 124,416 combinations of what the pins leave.
FEW_CHOICES = """
[choices]
max_buses = 1
direct = false

[choices.pin]
"core.feed" = "bus_a"
"core.stage" = ["buck_25a_600k_bus_gate", "buck_20a_400k_bus_gate", "buck_20a_700k_bus_gate"]
"core.phases" = [1, 2]
"core.fewest" = "one"
"core.bank" = ["polymer_560u_2v5_can", "polymer_820u_2v5_can"]
"core.bank_count" = [4, 6, 8]
"core.pairs" = 2
"io.feed" = "bus_a"
"io.stage" = ["buck_15a_500k_bus_gate", "buck_20a_400k_bus_gate", "buck_25a_600k_bus_gate"]
"io.phases" = [1, 2]
"io.fewest" = "one"
"io.bank" = ["polymer_560u_2v5_can", "polymer_820u_2v5_can"]
"io.bank_count" = [3, 4, 6]
"io.pairs" = 2
"bus_a.converter" = ["trim_bus_100w", "wide_bus_100w"]
"bus_a.count" = 1
"bus_a.fewest" = "one"
"bus_a.control" = ["fixed", "follow_load"]
"bus_a.nominal_v" = [9.0, 10.0, 11.0, 12.0]
"bus_a.lower_v" = [8.0, 9.0, 10.0]
"bus_a.upper_v" = 12.0
"bus_a.bulk" = "polymer_270u_16v_can"
"bus_a.bulk_count" = 4
"bus_a.damper" = "none"
"bus_a.damper_count" = 1
"bus_a.pairs" = 1
"board.bias" = "none"
"board.bias_feed" = "input"
"board.supervisor" = ["none", "follow_controller"]
"""

SMALL_CHILD = """
[[rails]]
name = "clock"
voltage_v = 1.2
max_current_a = 0.3
step_a = 0.05
parents = ["io"]
"""


def compiled(folder: Path, text: str) -> Evaluator:
    """Write a study, load and compile it."""
    path = folder / "study.toml"
    path.write_text(text, encoding="utf-8")
    loaded = load(path)
    return Evaluator(compile_problem(loaded.study, loaded.catalogue, reduce_load(loaded.study)))


def every_combination(evaluator: Evaluator) -> NDArray[np.int64]:
    """Return all combinations of what the columns may hold, undecided rows."""
    space = evaluator.problem.space
    sizes = [max(len(values), 1) for values in space.allowed]
    total = int(np.prod(np.array(sizes, dtype=object)))
    rows = np.zeros((total, evaluator.problem.layout.width), dtype=np.int64)
    number = np.arange(total)
    for column, values in enumerate(space.allowed):
        number, place = np.divmod(number, sizes[column])
        if len(values):
            rows[:, column] = values[place]
    return rows
