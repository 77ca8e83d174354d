"""The fall-back: the rated load with every bus at its nominal, checked like a band and named where it fails."""

from __future__ import annotations

import numpy as np
import pytest
from equivalence.shipped import evaluator_of, near_rows
from numpy.typing import NDArray

from archopt.model.board import DirectStages
from archopt.model.evaluator import Detail, evaluate_in
from archopt.model.space import FOLLOW, Designs

STUDY = "industrial_ten"


def moving_rows() -> NDArray[np.int64]:
    """Return designs whose bus A follows the load and that meet every limit."""
    evaluator = evaluator_of(STUDY)
    problem, layout = evaluator.problem, evaluator.problem.layout
    rows = near_rows(problem, 100, np.random.default_rng(2), redrawn=0.05)
    for field, value in (("control", FOLLOW), ("lower_v", 0), ("upper_v", len(problem.grid_v) - 1)):
        rows[:, layout.bus(field).start] = value
    rows = evaluator.decide(rows)
    follows = Designs(layout, rows).bus("control")[:, 0] == FOLLOW
    return rows[follows & (evaluator.evaluate(rows).violation <= 0.0)]


def at_nominal(row: NDArray[np.int64], index: int) -> Detail:
    """Return a decided design with another nominal voltage and nothing else changed, by direct physics."""
    problem = evaluator_of(STUDY).problem
    designs = Designs(problem.layout, row[None].copy())
    volts = designs.volts[0, 0]
    for field, value in (("nominal_v", index), ("lower_v", min(index, *volts)), ("upper_v", max(index, *volts))):
        designs.bus(field)[0, 0] = value
    stages = DirectStages(problem, problem.states)
    return evaluate_in(problem, problem.states, designs, stages, exact=True, explain=True)


def broken(detail: Detail) -> dict[str, str]:
    """Return where each broken limit is worst."""
    worst = detail.ledger.worst.items()
    return {name: found.where[0] for name, found in worst if found.normalised[0] < 0 and found.where}


def test_a_design_that_fails_only_when_it_falls_back_is_refused_there() -> None:
    problem = evaluator_of(STUDY).problem
    named: set[str] = set()
    refused = 0
    for row in moving_rows()[:4]:
        lowest = int(Designs(problem.layout, row[None]).volts[0, 0].min())
        for index in range(lowest - 1, lowest + 2):
            found = broken(at_nominal(row, index))
            places = {name: where for name, where in found.items() if "fall-back" in where}
            if found and len(places) == len(found):
                refused += 1
                named |= set(places)
    assert refused >= 4
    assert {"rail droop", "duty", "jump survival: stage input"} <= named


def test_the_fall_back_runs_everything_at_the_nominal() -> None:
    evaluator = evaluator_of(STUDY)
    problem, states = evaluator.problem, evaluator.states
    rows = moving_rows()[:8]
    hardware = evaluator.detail(rows, exact=False).hardware
    designs = Designs(problem.layout, rows)
    np.testing.assert_array_equal(hardware.band_v[..., -1], problem.grid_v[designs.bus("nominal_v")])
    np.testing.assert_array_equal(hardware.running_band[..., -1], designs.rail("phases"))
    np.testing.assert_array_equal(hardware.units_band[..., -1], np.maximum(designs.bus("count"), 1))
    for s in np.flatnonzero(states.band == states.bands):
        np.testing.assert_array_equal(hardware.running[:, s], designs.rail("phases"))


def test_a_ceramic_bulk_bank_holds_less_at_a_higher_bus() -> None:
    """Closed form: C / (1 + (V / half)^2), taken at the voltage each band sets."""
    evaluator = evaluator_of(STUDY)
    rows = moving_rows()[:20].copy()
    ceramic = np.flatnonzero(~evaluator.problem.capacitors.lossy & evaluator.problem.bulk_ok)[0]
    rows[:, evaluator.problem.layout.bus("bulk").start] = ceramic
    hardware = evaluator.detail(rows, exact=False).hardware
    table = evaluator.problem.capacitors
    bulk = Designs(evaluator.problem.layout, rows).bus("bulk")[:, 0]
    held_f = (hardware.bulk_f - hardware.damper_f - hardware.input_f[..., None])[:, 0]
    droop = 1.0 + (hardware.band_v[:, 0] / table.half_v[bulk][:, None]) ** 2
    np.testing.assert_allclose(held_f * droop, (held_f * droop)[:, :1].repeat(held_f.shape[1], axis=1), rtol=1e-12)
    low, high = hardware.band_v[:, 0].argmin(axis=1), hardware.band_v[:, 0].argmax(axis=1)
    every = np.arange(len(rows))
    assert (held_f[every, high] <= held_f[every, low]).all()
    assert held_f[every, high] == pytest.approx(held_f.min(axis=1))
    assert (held_f[every, high] < 0.9 * held_f[every, low]).any()
