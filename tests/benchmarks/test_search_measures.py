"""A short search reaches most of what a longer one with another seed reaches, on a shipped study."""

from __future__ import annotations

import itertools

import numpy as np

from archopt.search.indicator import share
from tests.benchmarks.measure_search import evaluator_of, reference_of, track


def test_a_short_search_nears_a_longer_one_of_another_seed() -> None:
    """On six rails 3,000 evaluations reach 0.9 of the union with 7,500; both discriminate in droop."""
    evaluator = evaluator_of("telecom_six")
    short = track(evaluator, 1, 3_000, 3)
    longer = track(evaluator, 2, 7_500, 1)
    reference = reference_of([short.last, longer.last])
    reached = [share(front, reference) for _, _, front in short.marks]
    print("shares", np.round(reached, 4), "longer", round(share(longer.last, reference), 4))
    assert all(first <= second + 1e-12 for first, second in itertools.pairwise(reached))
    assert reached[-1] >= 0.9
    assert share(longer.last, reference) >= 0.95
    for run in (short, longer):
        assert len(run.last) >= 20
        assert len(np.unique(run.last[:, 2])) >= 5
