"""Replicates: merged into what none of them beats, their spread measured, and those done kept when stopped."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from moocore import is_nondominated

from archopt.model.evaluator import Evaluator
from archopt.search import checkpoint
from archopt.search.checkpoint import Keeper
from archopt.search.driver import crew_for, search
from archopt.search.outcome import Progress, SearchResult, state_of
from archopt.search.replicates import Replicated, Settings, facts_of, in_all, merged, search_all, spread
from archopt.search.workers import Crew
from tests.search.small_study import FEW_CHOICES, TWO_RAILS, compiled

SETTINGS = Settings(evaluations=60, population=12, seed=5, stagnation_generations=50, replicates=3)


@pytest.fixture(scope="module")
def evaluator(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    return compiled(tmp_path_factory.mktemp("few"), TWO_RAILS + FEW_CHOICES)


@pytest.fixture(scope="module")
def crew(evaluator: Evaluator) -> Crew:
    return crew_for(evaluator, SETTINGS.population)


@pytest.fixture(scope="module")
def whole(evaluator: Evaluator, crew: Crew) -> Replicated:
    return search_all(evaluator, SETTINGS, crew=crew)


def same(one: SearchResult, other: SearchResult) -> None:
    first, second = state_of(one), state_of(other)
    for name, values in first.items():
        if name != "seconds":
            assert values.tobytes() == second[name].tobytes(), name


def test_each_replicate_is_the_search_of_its_seed(evaluator: Evaluator, crew: Crew, whole: Replicated) -> None:
    assert whole.seeds == (5, 6, 7)
    same(whole.each[1], search(evaluator, evaluations=60, population=12, seed=6, stagnation_generations=50, crew=crew))
    assert len({found.rows.tobytes() for found in whole.each}) == 3


def test_together_is_the_front_of_all(whole: Replicated) -> None:
    every = np.unique(np.concatenate([found.objectives for found in whole.each]), axis=0)
    expected = every[is_nondominated(every)]
    assert np.array_equal(np.unique(whole.together.objectives, axis=0), expected)
    assert whole.together.evaluations == sum(found.evaluations for found in whole.each)
    for name, best in whole.together.kinds.items():
        alone = [found.kinds[name] for found in whole.each if name in found.kinds]
        assert any(np.array_equal(best.row, each.row) for each in alone)
        assert best.violation <= min(each.violation for each in alone)


def test_one_replicate_is_a_plain_search(evaluator: Evaluator, whole: Replicated) -> None:
    assert merged(evaluator, [whole.each[1]]) is whole.each[1]
    assert spread(Replicated(whole.each[0], whole.each[:1], (5,)), whole.each[0].rows) is None


def test_the_spread_is_of_the_union(whole: Replicated) -> None:
    found = spread(whole, whole.together.rows)
    assert found is not None
    assert (found.hypervolume > 0.0).all()
    assert (found.hypervolume <= 1.0 + 1e-12).all()
    data = found.as_dict()
    ordered = sorted(data["hypervolume_share"])
    assert [data[f"hypervolume_share_{which}"] for which in ("least", "median", "most")] == pytest.approx(ordered)
    for share, each in zip(data["published_share"], whole.each, strict=True):
        own = {row.tobytes() for row in each.rows}
        assert share == sum(row.tobytes() in own for row in whole.together.rows) / len(whole.together.rows)
    assert "3 replicates" in found.words()
    assert "(seed 7)" in found.words()
    assert found.polished == 0.0
    assert "polishing" not in found.words()
    foreign = whole.together.rows[:1] + 1
    assert spread(whole, np.concatenate([whole.together.rows[:3], foreign])).polished == 0.25  # type: ignore[union-attr]


def test_hypervolume_of_replicates_by_hand(whole: Replicated) -> None:
    """Closed form, reference point 1.1: a corner of the unit square covers 0.1 x 1.1, both corners 0.21.

    The middle covers 0.6 x 0.6, of which 0.06 + 0.06 - 0.01 lies in the corners': all three 0.46. Droop is the same
    everywhere, a factor throughout.
    """

    def with_points(points: list[tuple[float, float]]) -> SearchResult:
        values = np.array([[x, y, 60.0] for x, y in points])
        rows = np.arange(len(points))[:, None] + 10 * np.array([[len(points)]])
        return SearchResult(
            rows, values, rows[:0], values[:0], 1, 1, 1, 0.0, "budget spent", None, 0.0, {}, {}, np.zeros(0)
        )

    corners, corner = with_points([(0.0, 1.0), (1.0, 0.0)]), with_points([(0.0, 1.0)])
    union = with_points([(0.0, 1.0), (0.5, 0.5), (1.0, 0.0)])
    found = spread(Replicated(union, (corners, corner), (1, 2)), union.rows)
    assert found is not None
    assert found.hypervolume == pytest.approx([0.21 / 0.46, 0.11 / 0.46], rel=1e-9)
    assert found.published.tolist() == [0.0, 0.0]
    assert found.polished == 1.0


def test_replicates_done_are_kept(evaluator: Evaluator, crew: Crew, whole: Replicated, tmp_path: Path) -> None:
    """Stopped after every generation and taken up from the file each time, they end like ones never stopped."""
    facts = facts_of(evaluator.problem, SETTINGS, {"archopt": "0"})
    seeds_begun: list[int] = []
    for _ in range(60):
        resume = checkpoint.read(tmp_path) if checkpoint.is_there(tmp_path) else None
        seeds_begun.append(0 if resume is None else int(resume.reached["replicate"]))
        found = search_all(
            evaluator, SETTINGS, crew=crew, stop=lambda: True, keeper=Keeper(tmp_path, facts, every_s=0.0),
            resume=resume,
        )  # fmt: skip
        if found.together.ended not in {"stopped"}:
            break
    assert seeds_begun == sorted(seeds_begun)
    assert set(seeds_begun) == {0, 1, 2}
    same(found.together, whole.together)
    for again, before in zip(found.each, whole.each, strict=True):
        same(again, before)


def test_progress_is_of_all_replicates(whole: Replicated) -> None:
    state = Progress(3, 30, 20, 5, 0.5, seconds=3.0, seconds_left=3.0, budget=60)
    shown = in_all(state, [whole.each[0]], SETTINGS)
    assert (shown.replicate, shown.replicates, shown.budget) == (1, 3, 180)
    assert shown.evaluations == 30 + whole.each[0].evaluations
    assert shown.seconds_left == pytest.approx(3.0 + 60 * 0.1, rel=1e-9)


def test_facts_follow_the_problem(evaluator: Evaluator) -> None:
    problem = evaluator.problem
    facts = facts_of(problem, SETTINGS, {"archopt": "0"})
    other = facts_of(replace(problem, grid_v=problem.grid_v + 0.5), replace(SETTINGS, seed=6), {"archopt": "1"})
    assert {name for name in facts if facts[name] != other[name]} == {
        "compiled problem hash", "seed", "version of archopt",
    }  # fmt: skip
