"""The search against the truth: a space small enough to evaluate whole, more than 1e5 combinations."""

from __future__ import annotations

from pathlib import Path

import numpy as np
from moocore import is_nondominated
from numpy.typing import NDArray

from archopt.model.canonical import canonical
from archopt.model.evaluator import Evaluator
from archopt.model.space import Designs
from archopt.search.driver import search
from archopt.search.indicator import share
from tests.search.small_study import FEW_CHOICES, TWO_RAILS, compiled, every_combination

BATCH = 512


def distinct(rows: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return rows without repeats, in order of first appearance."""
    keys = np.ascontiguousarray(rows).view(np.dtype((np.void, rows.dtype.itemsize * rows.shape[1]))).ravel()
    _, first = np.unique(keys, return_index=True)
    return rows[np.sort(first)]


def exact_front(evaluator: Evaluator) -> tuple[NDArray[np.float64], int, int]:
    """Return the front of all designs, the combinations there are and the distinct designs among them."""
    every = every_combination(evaluator)
    layout, problem = evaluator.problem.layout, evaluator.problem
    rows = distinct(
        np.concatenate(
            [
                canonical(problem, Designs(layout, every[start : start + BATCH])).rows
                for start in range(0, len(every), BATCH)
            ]
        )
    )
    decided = distinct(
        np.concatenate(
            [evaluator.decide(rows[start : start + BATCH]) for start in range(0, len(rows), BATCH)]
        )
    )
    found = [evaluator.evaluate(decided[start : start + BATCH]) for start in range(0, len(decided), BATCH)]
    objectives = np.concatenate([each.objectives[each.feasible] for each in found])
    return objectives[is_nondominated(objectives)], len(every), len(decided)


def test_search_finds_the_front_of_a_space_that_can_be_enumerated(tmp_path: Path) -> None:
    """At least 0.99 of the exact front's hypervolume, reference point 1.1 on its own ideal and nadir."""
    evaluator = compiled(tmp_path, TWO_RAILS + FEW_CHOICES)
    front, combinations, designs = exact_front(evaluator)
    assert combinations >= 100_000
    assert designs >= 10_000
    assert len(front) >= 10
    budget = designs // 12
    found = search(evaluator, evaluations=budget, population=40, seed=3, stagnation_generations=1000)
    reached = share(found.objectives, front)
    print(f"{combinations} combinations, {designs} designs, exact front {len(front)}: share {reached:.5f}")
    assert found.evaluations <= designs // 10
    assert reached >= 0.99
    assert reached <= 1.0 + 1e-12
