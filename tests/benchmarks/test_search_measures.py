"""A short search reaches most of what a longer one with another seed reaches, on a shipped study."""

from __future__ import annotations

import itertools

import numpy as np

from archopt.search.indicator import share
from tests.benchmarks.measure_search import evaluator_of, reference_of, track


def test_a_short_search_nears_a_longer_one_of_another_seed() -> None:
    """On six rails 2,000 evaluations reach 0.85 of the union with 5,000; both discriminate in droop."""
    evaluator = evaluator_of("telecom_six")
    short = track(evaluator, 1, 2_000, 2)
    longer = track(evaluator, 2, 5_000, 1)
    reference = reference_of([short.last, longer.last])
    reached = [share(front, reference) for _, _, front in short.marks]
    print("shares", np.round(reached, 4), "longer", round(share(longer.last, reference), 4))
    assert all(first <= second + 1e-12 for first, second in itertools.pairwise(reached))
    assert reached[-1] >= 0.85
    assert share(longer.last, reference) >= 0.95
    for run in (short, longer):
        assert len(run.last) >= 20
        assert len(np.unique(run.last[:, 2])) >= 5
