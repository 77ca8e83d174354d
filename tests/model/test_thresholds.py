"""What a supervisor is told by the board's input power: every state with hours its own band, and no band too late."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
import pytest
from equivalence.shipped import STUDIES, decided, evaluator_of
from numpy.typing import NDArray

from archopt.model.compiled import incumbent_row
from archopt.model.explain import band_records
from archopt.model.states import ENERGY, StateTable
from archopt.model.thresholds import raise_thresholds_w

COUNT, SEED = 60, 5


def told(thresholds_w: list[float], input_w: NDArray[np.float64]) -> list[int]:
    """Return the band a supervisor takes at each input power, coming from below."""
    return [sum(watts > threshold for threshold in thresholds_w) for watts in input_w.tolist()]


@pytest.mark.parametrize("name", STUDIES)
def test_every_state_with_hours_is_told_its_own_band(name: str) -> None:
    evaluator = evaluator_of(name)
    problem, states = evaluator.problem, evaluator.problem.states
    today = incumbent_row(problem)
    assert today is not None
    detail = evaluator.detail(np.vstack([evaluator.decide(today[None]), decided(name, COUNT, SEED)]))
    energy = states.of_kind(ENERGY)
    band = states.band[energy]
    sound = np.append(0, np.flatnonzero(detail.evaluation.violation <= 0.0))
    separate = 0
    for p in range(COUNT + 1):
        records = band_records(problem, detail, p)
        up = [band["raise_above_input_w"] for band in records[:-1]]
        assert all(low < high for low, high in pairwise(up))
        input_w = detail.solution.input_w[p, energy]
        found = told(up, input_w)
        assert all(place >= own for place, own in zip(found, band, strict=True)), "raised too late"
        if all(input_w[band <= k].max() < input_w[band > k].min() for k in range(band.max())):
            separate += 1
            assert found == band.tolist()
        else:
            assert p not in sound, "a design that meets every limit loses too little for its bands to overlap"
        for record in records[:-1]:
            assert record["fall_below_input_w"] < record["raise_above_input_w"]
    assert separate > COUNT // 2


def three_bands(energy_w: tuple[float, ...], energy_band: tuple[int, ...]) -> StateTable:
    """Return states of three bands with edges at 10, 20, 30 and 40 W, loads with hours as given."""
    states = evaluator_of("telecom_six").problem.states
    count = len(energy_w)
    return replace(
        states,
        kind=np.full(count, ENERGY),
        useful_w=np.array(energy_w),
        band=np.array(energy_band),
        edges_w=np.array([10.0, 20.0, 30.0, 40.0]),
    )


def test_a_threshold_is_the_input_power_at_the_end_of_the_band() -> None:
    """Closed form: with input power a line over the load the threshold is the line at the edge."""
    states = three_bands((12.0, 18.0, 24.0, 36.0), (0, 0, 1, 2))
    line = 3.0 + 1.1 * states.useful_w
    np.testing.assert_allclose(raise_thresholds_w(states, line), 3.0 + 1.1 * np.array([20.0, 30.0]), rtol=1e-12)


def test_a_band_without_hours_lies_on_the_line_through_the_others() -> None:
    states = three_bands((12.0, 18.0, 36.0), (0, 0, 2))
    line = 3.0 + 1.1 * states.useful_w
    np.testing.assert_allclose(
        raise_thresholds_w(states, line), 3.0 + 1.1 * np.array([20.0, 30.0]), rtol=2e-6
    )


def test_where_bands_overlap_the_bus_is_raised_early() -> None:
    """A light load at a costly input draws more than a heavier one at another: the heavier one decides."""
    states = three_bands((18.0, 19.0, 21.0, 36.0), (0, 0, 1, 2))
    up = raise_thresholds_w(states, np.array([20.0, 26.0, 24.0, 40.0]))
    assert 20.0 < up[0] < 24.0
