"""Folding: the front of sums is exact without boxes, its prediction is the evaluation where nothing couples."""

from __future__ import annotations

import itertools
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from moocore import is_nondominated

from archopt.model.evaluator import Evaluator
from archopt.model.space import INPUT, Designs
from archopt.search.driver import search
from archopt.search.fold import boxed, fold, lower_front, promising
from archopt.search.jobs import Desk
from tests.search.small_study import TWO_RAILS, compiled

DIRECT = """
[choices]
max_buses = 0
direct = true
"""


@pytest.fixture(scope="module")
def direct(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    """Two rails straight from the input, which has no resistance: nothing couples them but shared part numbers."""
    problem = compiled(tmp_path_factory.mktemp("direct"), TWO_RAILS + DIRECT).problem
    return Evaluator(replace(problem, path=replace(problem.path, resistance_ohm=0.0)))


def some_fronts(seed: int, rails: int, points: int) -> list[tuple[np.ndarray, np.ndarray]]:
    rng = np.random.default_rng(seed)
    return [(rng.uniform(1.0, 9.0, points), rng.uniform(1.0, 9.0, points)) for _ in range(rails)]


def test_fold_without_boxes_is_the_front_of_all_sums() -> None:
    """Against every combination of four rails of five points, summed and filtered by moocore."""
    fronts = some_fronts(3, 4, 5)
    total, choice = fold(fronts, None)
    sums = np.array([
        [sum(fronts[r][0][k] for r, k in enumerate(picked)), sum(fronts[r][1][k] for r, k in enumerate(picked))]
        for picked in itertools.product(range(5), repeat=4)
    ])  # fmt: skip
    expected = sums[is_nondominated(sums)]
    order = np.argsort(expected[:, 0])
    assert np.allclose(total, expected[order], rtol=1e-12)
    again = np.array([[sum(fronts[r][j][k] for r, k in enumerate(row)) for j in range(2)] for row in choice])
    assert np.allclose(again, total, rtol=1e-12)


def test_boxes_keep_the_ends_and_lie_on_the_front() -> None:
    rng = np.random.default_rng(5)
    first = rng.uniform(0.0, 1.0, 4000)
    second = 1.0 / (first + 0.1) + rng.uniform(0.0, 0.05, 4000)
    front, kept = lower_front(first, second), boxed(first, second, 20)
    assert set(kept) <= set(front)
    assert {front[0], front[-1]} <= set(kept)
    assert 10 <= len(kept) <= 24


def test_promising_points_are_those_no_archived_one_dominates() -> None:
    archive = np.array([[1.0, 3.0, 60.0], [3.0, 1.0, 60.0]])
    predicted = np.array([[2.0, 2.0, 60.0], [3.5, 3.5, 60.0], [0.5, 3.0, 60.0], [2.0, 2.9, 60.0]])
    assert promising(predicted, archive, 10).tolist() == [0, 2]
    assert promising(predicted, archive, 1).tolist() == [0]


def test_prediction_is_the_evaluation_where_nothing_couples(direct: Evaluator) -> None:
    """Rails straight from an input without resistance: energies add up; costs are exact always."""
    found = search(direct, evaluations=300, population=24, seed=1, stagnation_generations=50)
    desk = Desk.of(direct, 24)
    rows, predicted = desk.folding.propose(found.rows[:1], found.objectives[:1])
    assert len(rows) > 30
    assert (Designs(direct.problem.layout, rows).rail("feed") == INPUT).all()
    decided = direct.decide(rows)
    seen = direct.evaluate(decided)
    # banks are charged their ripple loss at the middle of the voltage table, the one thing not exact here
    assert np.allclose(seen.objectives[:, 0], predicted[:, 0], rtol=2e-4)
    assert np.allclose(seen.objectives[:, 1], predicted[:, 1], rtol=1e-12)
    assert (seen.objectives[:, 2] <= predicted[:, 2] + 1e-9).all()
    assert len(np.unique(seen.objectives[:, 0].round(6))) > 10


def test_folded_boards_enter_the_archive_of_a_short_search(tmp_path: Path) -> None:
    """On a bus: energies are first order, within a thousandth; most folded boards are feasible."""
    evaluator = compiled(tmp_path, TWO_RAILS)
    found = search(evaluator, evaluations=300, population=24, seed=2, stagnation_generations=50)
    desk = Desk.of(evaluator, 24)
    rows, predicted = desk.folding.propose(found.rows[:1], found.objectives[:1])
    rows, predicted = rows[::4], predicted[::4]
    seen = evaluator.evaluate(evaluator.decide(rows))
    feasible = seen.feasible
    assert len(feasible) > 0.5 * len(rows)
    off = seen.objectives[feasible, 0] / predicted[feasible, 0] - 1.0
    assert np.median(np.abs(off)) < 1e-3
    assert np.allclose(seen.objectives[feasible, 1], predicted[feasible, 1], rtol=0.02)
    every = np.concatenate([found.objectives, seen.objectives[feasible]])
    assert is_nondominated(every)[len(found.objectives) :].sum() > 3
