"""Six rails without any coupling: the search against the exact front that folding without boxes gives."""

from __future__ import annotations

import numpy as np
import pytest

from archopt.model.evaluator import Evaluator
from archopt.search.driver import search
from archopt.search.indicator import share
from tests.benchmarks import twelve_rails
from tests.benchmarks.separable_front import calm_board, exact_front, few_pins


@pytest.fixture(scope="module")
def few() -> Evaluator:
    """Six rails with a few banks and counts to choose from, so that every choice of a rail can be evaluated."""
    return Evaluator(twelve_rails.separable(6, 24, few_pins(6)))


def test_a_search_finds_the_exact_front_of_boards_without_coupling(few: Evaluator) -> None:
    exact = exact_front(few, calm_board(few))
    assert len(exact) > 50
    found = search(few, evaluations=800, population=40, seed=1, stagnation_generations=10**6)
    # nothing found lies beyond the exact front: the sums are the evaluation
    for point in found.objectives[:: max(len(found.objectives) // 40, 1)]:
        assert ((exact <= point * (1.0 + 1e-7)).all(axis=1)).any()
    assert share(found.objectives, exact) > 0.99
    assert np.unique(exact[:, 2]).size > 1
