"""Everything else chosen again at a step of a copper sweep: never dearer, held where it is held, the same twice."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest
from numpy.typing import NDArray

from archopt.model.evaluator import Evaluator
from archopt.model.problem import Problem
from archopt.trade.copper import WEIGHT, held_by, pair_rows, weight_rows
from archopt.trade.copper_again import Chooser, chooser_of, keeping
from archopt.trade.money import lifetime_costs
from trade.conftest import compiled

EVALUATIONS = 120
SWEPT = (WEIGHT, "bus_a")


@cache
def decided() -> tuple[Problem, NDArray[np.int64]]:
    problem, row = compiled("telecom_six")
    return problem, Evaluator(problem).decide(row[None])[0]


@cache
def chooser() -> Chooser:
    return chooser_of(*decided(), EVALUATIONS)


@cache
def step(sweep: str) -> tuple[float, NDArray[np.int64]]:
    """One step of a sweep, everything else as it was: the heaviest copper, or two pairs."""
    problem, row = decided()
    if sweep == WEIGHT:
        return weight_rows(problem, row)[-1]
    pairs, found = pair_rows(problem, row, sweep)[1]
    return float(pairs), found


def choose(sweep: str) -> NDArray[np.int64]:
    amount, found = step(sweep)
    return chooser()((found, decided()[1]), held_by(decided()[0], sweep, amount))


@cache
def chosen(sweep: str) -> NDArray[np.int64]:
    return choose(sweep)


@pytest.mark.parametrize("sweep", SWEPT)
def test_choosing_again_is_never_dearer_over_the_life(sweep: str) -> None:
    problem, _ = decided()
    evaluator = chooser().evaluator
    rows = np.stack([evaluator.decide(step(sweep)[1][None])[0], chosen(sweep)])
    found = evaluator.evaluate(rows, exact=True)
    before, after = lifetime_costs(problem.study, found.objectives)
    assert found.violation[1] <= 0.0
    assert after < before or found.violation[0] > 0.0


@pytest.mark.parametrize("sweep", SWEPT)
def test_what_is_swept_is_held_and_the_droop_is_no_worse(sweep: str) -> None:
    problem, row = decided()
    assert keeping(chosen(sweep)[None], held_by(problem, sweep, step(sweep)[0])).all()
    droop = chooser().evaluator.evaluate(np.stack([row, chosen(sweep)]), exact=True).objectives[:, 2]
    assert chooser().droop_percent == droop[0]
    assert droop[1] <= droop[0]


def test_the_same_question_has_the_same_answer() -> None:
    np.testing.assert_array_equal(choose("bus_a"), chosen("bus_a"))


def test_nothing_that_meets_the_limits_leaves_the_design_as_it_was() -> None:
    """Held to no pairs that exist, with a droop nothing keeps: the moved design itself, its misses with it."""
    problem, row = decided()
    strict = Chooser(chooser().evaluator, 0.0, 1)
    kept = strict((row,), held_by(problem, "bus_a", 1.0))
    np.testing.assert_array_equal(kept, strict.evaluator.decide(kept[None])[0])
    assert keeping(kept[None], held_by(problem, "bus_a", 1.0)).all()
