"""The studies made for measuring are what they say, and the measure adds up."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from archopt.model.evaluator import Evaluator
from archopt.model.states import ENERGY, JUMP, MIX
from benchmarks import twelve_rails
from benchmarks.evaluator_speed import Speed, part_lines, parts, speed_lines


@pytest.fixture(scope="module")
def small() -> Evaluator:
    """Six rails in few states."""
    return twelve_rails.evaluator(6, 24)


def test_a_study_has_the_rails_and_states_asked_for(small: Evaluator) -> None:
    kind = small.states.kind
    assert small.problem.layout.rails == 6
    assert abs(len(kind) - 24) <= 1  # the zero-hour states are the model's to count
    assert (kind == MIX).sum() == 2 * (kind == JUMP).sum() or (kind == MIX).sum() == 2 * small.states.bands
    assert small.states.hours[kind == ENERGY].sum() == pytest.approx(8760.0, rel=1e-6)
    assert len(small.problem.grid_v) == 24


def test_a_batch_split_or_turned_gives_the_same_bits(small: Evaluator) -> None:
    rows = twelve_rails.drawn(small, 24, seed=3)
    whole = small.evaluate(rows)
    turned = small.evaluate(rows[::-1])
    np.testing.assert_array_equal(turned.objectives[::-1], whole.objectives)
    np.testing.assert_array_equal(turned.slack[::-1], whole.slack)


def test_slack_alone_is_the_slack_of_the_full_ledger(small: Evaluator) -> None:
    rows = twelve_rails.drawn(small, 24, seed=4)
    np.testing.assert_array_equal(small.evaluate(rows).slack, small.detail(rows, exact=False).evaluation.slack)


def test_every_part_is_measured_and_told(small: Evaluator) -> None:
    found = parts(small, twelve_rails.drawn(small, 4))
    assert min(found.values()) > 0.0
    lines = part_lines(found, 2.0 * sum(found.values()), 1.0)
    assert len(lines) == len(found) + 2
    row = Speed("six", 6, 24, 24, 50.0, 20.0, 0.5)
    assert row.passes == pytest.approx(100.0)
    assert "20000" in speed_lines([row])[1]
    assert replace(row, evaluate_us=25.0).passes == pytest.approx(50.0)
