"""A small invented study with every kind of feed: two buses, the input, a parent rail, stages on a gate bias."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from archopt.model.canonical import canonical
from archopt.model.evaluator import Evaluator
from archopt.model.space import Designs
from archopt.proof.enumerate import BATCH, distinct
from tests.search.small_study import every_combination

EVERY_FEED = """
name = "every_feed"
title = "Three rails and every kind of feed"

[input]
low_v = 40.0
high_v = 60.0
nominal_v = 54.0
levels = [{ voltage_v = 54.0, share = 1.0 }]

[board]
area_cm2 = 140.0
stacks = ["8_layers_2_pairs_2_oz", "6_layers_1_pair_2_oz"]
max_pairs_per_net = 2

[control]
kinds = ["fixed"]
grid_v = 2.0
bus_min_v = 10.0
bus_max_v = 12.0

[economics]
boards_per_year = 3000.0

[load]
growth_percent = 0.0

[[rails]]
name = "core"
voltage_v = 0.9
max_current_a = 36.0
step_a = 20.0
squares = 0.4
copper_width_mm = 90.0
copper_area_cm2 = 20.0

[[rails]]
name = "io"
voltage_v = 3.3
max_current_a = 9.0
step_a = 7.5
squares = 1.0
copper_width_mm = 40.0
copper_area_cm2 = 10.0

[[rails]]
name = "clock"
voltage_v = 1.8
max_current_a = 0.4
step_a = 0.2
squares = 2.0
copper_width_mm = 10.0
copper_area_cm2 = 3.0
parents = ["io"]

[choices]
parts = ["trim_bus_100w", "ratio5_bus_150w", "bias_from_bus_4w", "bias_from_40_60v_12w"]

[choices.pin]
"core.stage" = ["buck_50a_600k_own_bias", "buck_40a_400k_bus_gate"]
"core.phases" = [1, 2]
"core.fewest" = "one"
"core.bank" = "polymer_1000u_2v5_low_esr"
"core.bank_count" = 8
"core.pairs" = 1
"io.stage" = ["buck_15a_500k_mid_bus_gate", "direct_48v_to_3v3_20a_isolated"]
"io.phases" = 1
"io.fewest" = "one"
"io.bank" = "polymer_560u_6v3_can"
"io.bank_count" = 4
"io.pairs" = 1
"clock.stage" = ["linear_0a8", "buck_3a_500k_mid_bus_gate"]
"clock.phases" = 1
"clock.fewest" = "one"
"clock.bank" = "ceramic_47u_6v3"
"clock.bank_count" = 2
"clock.pairs" = 1
"""

# The same with the buses told apart: few enough combinations to decide every one of them.
TOLD_APART = """
"core.feed" = "bus_a"
"io.feed" = ["input", "bus_b"]
"clock.feed" = ["bus_a", "io"]
"bus_a.count" = [1, 2]
"bus_a.fewest" = "one"
"bus_a.nominal_v" = 10.0
"bus_a.lower_v" = 10.0
"bus_a.upper_v" = 10.0
"bus_a.bulk" = "polymer_270u_16v_can"
"bus_a.bulk_count" = 4
"bus_a.pairs" = 1
"bus_b.converter" = ["none", "trim_bus_100w"]
"bus_b.count" = 1
"bus_b.fewest" = "one"
"bus_b.nominal_v" = [10.0, 12.0]
"bus_b.lower_v" = 10.0
"bus_b.upper_v" = 12.0
"bus_b.bulk" = "polymer_270u_16v_can"
"bus_b.bulk_count" = 2
"bus_b.pairs" = 1
"bus_a.damper" = ["none", "electrolytic_470u_25v"]
"bus_a.damper_count" = [1, 2]
"bus_b.damper" = "none"
"bus_b.damper_count" = 1
"board.stack" = "8_layers_2_pairs_2_oz"
"board.supervisor" = "none"
"""


def every_design(evaluator: Evaluator) -> NDArray[np.int64]:
    """Return every design of a small space, decided, from every combination of values: slow and plain."""
    every = every_combination(evaluator)
    layout, problem = evaluator.problem.layout, evaluator.problem
    parts = [canonical(problem, Designs(layout, every[k : k + BATCH])).rows for k in range(0, len(every), BATCH)]
    rows = distinct(np.concatenate(parts))
    return distinct(np.concatenate([evaluator.decide(rows[k : k + BATCH]) for k in range(0, len(rows), BATCH)]))
