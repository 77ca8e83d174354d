"""A bus that dwells before it steps down: what it moves, how long it is held, and what that costs."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise

import numpy as np
from equivalence.shipped import evaluator_of
from hypothesis import given, settings
from hypothesis import strategies as st

from archopt.model.dwell import walk
from archopt.model.states import ENERGY, HELD, reduce_load

BANDS = 4


def by_the_second(band: list[int], seconds: list[int], dwell_s: int) -> tuple[np.ndarray, np.ndarray]:
    """Return moves and held seconds the plain way: the bus is where the load was highest in the last seconds."""
    load = np.repeat(band, seconds)
    bus = np.array([load[max(0, t - dwell_s) : t + 1].max() for t in range(len(load))])
    moves, held = np.zeros((BANDS, BANDS)), np.zeros((BANDS, BANDS))
    np.add.at(held, (load, bus), 1.0)
    np.add.at(moves, (bus[:-1], bus[1:]), 1.0)
    np.fill_diagonal(moves, 0.0)
    np.fill_diagonal(held, 0.0)
    return moves, held


@settings(max_examples=150, deadline=None)
@given(st.lists(st.tuples(st.integers(0, BANDS - 1), st.integers(1, 9)), min_size=1, max_size=30), st.integers(0, 12))
def test_a_walk_equals_looking_back_every_second(moments: list[tuple[int, int]], dwell_s: int) -> None:
    band, seconds = [b for b, _ in moments], [s for _, s in moments]
    moves, held = walk(np.array(band), np.array(seconds, dtype=float), float(dwell_s), BANDS)
    expected_moves, expected_held = by_the_second(band, seconds, dwell_s)
    np.testing.assert_array_equal(moves, expected_moves)
    np.testing.assert_allclose(held, expected_held, rtol=1e-12)


@settings(max_examples=100, deadline=None)
@given(st.lists(st.tuples(st.integers(0, BANDS - 1), st.floats(0.1, 9.0)), min_size=1, max_size=30))
def test_longer_dwells_never_move_more(moments: list[tuple[int, float]]) -> None:
    band, seconds = np.array([b for b, _ in moments]), np.array([s for _, s in moments])
    climbs = [np.triu(walk(band, seconds, dwell_s, BANDS)[0], 1) for dwell_s in (0.0, 2.0, 8.0, 1e3)]
    # a rise past bands costs what rising band by band does: charge is counted by the square of the voltage
    volts = np.square([5.0, 7.0, 8.0, 12.0])
    energy = [(climb * (volts[None, :] - volts[:, None])).sum() for climb in climbs]
    assert all(after <= before + 1e-9 for before, after in pairwise(energy))
    assert np.triu(climbs[-1], 1).sum() <= BANDS


def test_hours_held_are_counted_once_they_matter() -> None:
    study = evaluator_of("industrial_ten").problem.study
    control = replace(study.control, transitions_per_day=96.0)
    none, short, long = (
        reduce_load(replace(study, control=replace(control, dwell_s=dwell_s))) for dwell_s in (0.0, 0.5, 60.0)
    )
    assert not len(none.of_kind(HELD))
    assert short.name == none.name  # 48 steps down a day of half a second each: a quarter of a thousandth
    held = long.of_kind(HELD)
    assert (long.band[held] == long.bands - 1).all()
    np.testing.assert_allclose(long.hours[held].sum(), 365 * 48 * 60 / 3600, rtol=1e-12)
    np.testing.assert_allclose(long.hours.sum(), none.hours.sum(), rtol=1e-12)
    useful = [float(states.hours @ states.useful_w) for states in (none, long)]
    np.testing.assert_allclose(*useful, rtol=1e-12)
    assert len(long.of_kind(ENERGY)) == len(none.of_kind(ENERGY))
