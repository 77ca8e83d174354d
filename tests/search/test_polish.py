"""Polish: the claim checked against every bare change of a choice, a worse design bettered, budgets and repeats."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from archopt import workflow
from archopt.inputs.load import load
from archopt.model.evaluator import Evaluator
from archopt.search.changes import SingleChanges
from archopt.search.driver import crew_for, search
from archopt.search.outcome import SearchResult
from archopt.search.polish import Polished, polished, together_of
from tests.search.small_study import FEW_CHOICES, SMALL_CHILD, TWO_RAILS, compiled


@pytest.fixture(scope="module")
def pinned(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    return compiled(tmp_path_factory.mktemp("pinned"), TWO_RAILS + FEW_CHOICES)


@pytest.fixture(scope="module")
def found(pinned: Evaluator) -> SearchResult:
    return search(pinned, evaluations=24, population=24, seed=1, stagnation_generations=50)


def polish(evaluator: Evaluator, result: SearchResult, *, budget: int = 20_000, most: int = 40) -> Polished:
    with crew_for(evaluator, 24) as crew:
        return polished(crew, result, budget=budget, most=most)


@pytest.fixture(scope="module")
def done(pinned: Evaluator, found: SearchResult) -> Polished:
    return polish(pinned, found)


def bare_changes(evaluator: Evaluator, row: NDArray[np.int64]) -> NDArray[np.int64]:
    """Return every row that differs from a design in one choice, decided; none that a feed and a stage rule out."""
    space, layout = evaluator.problem.space, evaluator.problem.layout
    made = []
    for column, values in enumerate(space.allowed):
        for value in values[values != row[column]]:
            other = row.copy()
            other[column] = value
            made.append(other)
    rows = np.array(made)
    feed, stage = rows[:, layout.rail("feed")], rows[:, layout.rail("stage")]
    fits = evaluator.problem.feed_ok[np.arange(layout.rails), stage, feed].all(axis=1)
    return evaluator.decide(rows[fits])


def dominates(fresh: NDArray[np.float64], point: NDArray[np.float64]) -> NDArray[np.bool_]:
    return np.asarray((fresh <= point * (1 + 1e-9)).all(axis=1) & (fresh < point * (1 - 1e-9)).any(axis=1))


def better_ones(evaluator: Evaluator, row: NDArray[np.int64]) -> int:
    """Return how many bare changes of a design are feasible and dominate it."""
    point = evaluator.evaluate(row[None]).objectives[0]
    seen = evaluator.evaluate(bare_changes(evaluator, row))
    return int(dominates(seen.objectives[seen.feasible], point).sum())


def test_no_bare_change_of_a_polished_design_dominates_it(pinned: Evaluator, done: Polished) -> None:
    assert done.statement.closed
    assert done.statement.remaining == 0
    assert len(done.rows) > 8
    assert [better_ones(pinned, row) for row in done.rows] == [0] * len(done.rows)


def test_what_was_not_polished_could_be_bettered(pinned: Evaluator, found: SearchResult, done: Polished) -> None:
    """So that the check above can fail: it does on the archive of the short search."""
    assert sum(better_ones(pinned, row) for row in found.rows) > 0
    assert done.statement.improved > 0
    for point in found.objectives:
        assert (done.found.objectives <= point * (1 + 1e-12)).all(axis=1).any()


def test_a_worse_design_is_bettered(pinned: Evaluator, found: SearchResult, done: Polished) -> None:
    """A polished design with a choice spoilt leads back to one at least as good."""
    row = done.rows[len(done.rows) // 2]
    seen = pinned.evaluate(bare_changes(pinned, row))
    point = pinned.evaluate(row[None]).objectives[0]
    worse = next(k for k in seen.feasible if dominates(point[None], seen.objectives[k])[0])
    spoilt, objectives = seen.rows[worse][None], seen.objectives[worse][None]
    alone = replace(found, rows=spoilt, objectives=objectives, fixed_rows=spoilt[:0],
                    fixed_objectives=objectives[:0])  # fmt: skip
    again = polish(pinned, alone)
    assert again.statement.closed
    assert dominates(again.found.objectives, objectives[0]).any()


def test_polishing_twice_gives_the_same(pinned: Evaluator, found: SearchResult, done: Polished) -> None:
    again = polish(pinned, found)
    assert np.array_equal(again.rows, done.rows)
    assert again.statement == done.statement


def test_a_spent_budget_is_said(pinned: Evaluator, found: SearchResult) -> None:
    short = polish(pinned, found, budget=30)
    assert not short.statement.closed
    assert 0 < short.statement.remaining <= short.statement.designs
    assert str(short.statement.remaining) in short.statement.sentence()
    stopped = polished(crew_for(pinned, 24), found, budget=20_000, most=40, stop=lambda: True)
    assert stopped.found.ended == "stopped"
    assert not stopped.statement.closed


def test_a_solve_says_what_polishing_did(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    """The run record holds the counts, the front the sentence."""
    path = tmp_path / "study.toml"
    path.write_text(TWO_RAILS + FEW_CHOICES, encoding="utf-8")
    loaded = load(path)
    monkeypatch.setattr(workflow, "LEAST_POLISHED", 24)
    record = workflow.solve(loaded, evaluations=24).record
    told = record.run["polish"]
    assert told["designs"] >= len(record.designs)
    assert sum("change of a single choice" in note for note in record.notes) == 1
    assert told["closed"] == any(note.startswith("No change of a single choice") for note in record.notes)


def test_counts_add_up(done: Polished) -> None:
    """What was considered was ruled out or came to be evaluated, or had been, or was another change's double."""
    told = done.statement
    ruled_out = told.excluded_by_exact_cost + told.excluded_by_exact_limits + told.screened
    assert ruled_out < told.neighbours_considered
    assert told.designs == len(done.rows)
    assert "to the accuracy of the loss tables" in told.sentence()


def test_changes_hold_every_bare_one(tmp_path_factory: pytest.TempPathFactory) -> None:
    """Parents among the feeds: every bare change that a feed and a stage allow is among those listed."""
    evaluator = compiled(tmp_path_factory.mktemp("child"), TWO_RAILS + SMALL_CHILD)
    result = search(evaluator, evaluations=100, population=24, seed=2, stagnation_generations=50)
    changes = SingleChanges(evaluator.problem)
    width = changes.layout.choices
    for row in result.rows[:2]:
        rows, rail = changes.of(row[:width])
        assert rail.max() < evaluator.problem.layout.rails
        undecided = np.zeros((len(rows), len(row)), dtype=np.int64)
        undecided[:, :width] = rows
        listed = {each.tobytes() for each in evaluator.decide(undecided)} | {row.tobytes()}
        seen = evaluator.evaluate(bare := bare_changes(evaluator, row))
        missing = [each for each in bare[seen.feasible] if each.tobytes() not in listed]
        assert not missing


def test_changes_taken_together_touch_each_choice_once() -> None:
    base, point = np.array([1, 1, 1]), np.array([10.0, 10.0, 60.0])
    changed = np.array([[2, 1, 1], [3, 1, 1], [1, 5, 1], [1, 1, 7]])
    found = np.array([[9.0, 10.0, 60.0], [8.0, 10.0, 60.0], [10.0, 9.5, 60.0], [10.0, 11.0, 60.0]])
    assert together_of(base, point, changed, found) is not None
    assert np.array_equal(together_of(base, point, changed, found), [3, 5, 1])  # type: ignore[arg-type]
    assert together_of(base, point, changed[:1], found[:1]) is None
