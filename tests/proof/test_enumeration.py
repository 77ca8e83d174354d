"""Every design of a small space gone through, against plain enumeration; and the search against the truth."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from moocore import is_nondominated
from numpy.typing import NDArray

from archopt.model.canonical import canonical
from archopt.model.evaluator import Evaluator
from archopt.model.space import Designs
from archopt.proof.enumerate import (
    BATCH,
    BLOCK,
    Enumeration,
    block_order,
    compare,
    distinct,
    enumerate_designs,
    on_offer,
    possible_choices,
)
from archopt.proof.representatives import Representatives, combinations, hopeless, representatives
from archopt.search.archive import significant
from archopt.search.driver import search
from tests.proof.enumerable_small import EVERY_FEED, TOLD_APART, every_design
from tests.search.small_study import FEW_CHOICES, TWO_RAILS, compiled

Rows = NDArray[np.int64]


@pytest.fixture(scope="module")
def apart(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    """The study with every kind of feed, small enough to decide every combination."""
    return compiled(tmp_path_factory.mktemp("apart"), EVERY_FEED + TOLD_APART)


@pytest.fixture(scope="module")
def two_rails(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    """Two rails behind one bus that may move."""
    return compiled(tmp_path_factory.mktemp("two_rails"), TWO_RAILS + FEW_CHOICES)


def laid_out(evaluator: Evaluator) -> Representatives:
    """The representatives of a space known to be small."""
    laid = representatives(evaluator.problem)
    assert laid is not None
    return laid


def stands_among(laid: Representatives, row: Rows) -> bool:
    """Whether some product holds a row's choices."""
    choices = laid.problem.layout.choices
    for product in laid.products:
        taken = np.concatenate([factor.columns for factor in product.factors])
        rest = np.setdiff1d(np.arange(choices), taken)
        held = all((factor.values == row[factor.columns]).all(axis=1).any() for factor in product.factors)
        if held and not row[rest].any():
            return True
    return False


def test_every_feasible_design_of_every_combination_is_gone_through(apart: Evaluator) -> None:
    """Plain enumeration of every combination finds the same feasible designs in number and the same front."""
    laid = laid_out(apart)
    kept = representatives(apart.problem, possible_choices(apart))
    assert kept is not None
    found, ruled = enumerate_designs(apart, laid, workers=1), enumerate_designs(apart, kept, workers=1)
    designs = every_design(apart)
    parts = [apart.evaluate(designs[k : k + BATCH]) for k in range(0, len(designs), BATCH)]
    plain = np.concatenate([part.objectives[part.feasible] for part in parts])
    front = np.unique(significant(plain[is_nondominated(plain)]), axis=0)
    assert combinations(apart.problem) > len(designs) > len(laid) > 100
    assert found.complete
    assert found.feasible == ruled.feasible == len(plain) > 50
    assert len(kept) <= len(laid)
    np.testing.assert_array_equal(ruled.objectives, found.objectives)
    np.testing.assert_allclose(np.unique(found.objectives, axis=0), front, rtol=1e-9)


def test_representatives_differ_and_are_their_own_canonical_form(apart: Evaluator, two_rails: Evaluator) -> None:
    for evaluator in (apart, two_rails):
        laid = laid_out(evaluator)
        rows = laid.rows(0, min(len(laid), 5000))
        assert len(distinct(rows)) == len(rows)
        np.testing.assert_array_equal(canonical(evaluator.problem, Designs(laid.problem.layout, rows)).rows, rows)
        np.testing.assert_array_equal(laid.rows(17, 29), rows[17:29])


def test_a_feasible_design_drawn_anywhere_is_a_representative(tmp_path: Path) -> None:
    """With buses that may be exchanged: what deciding makes of any combination stands among the representatives."""
    evaluator = compiled(tmp_path, EVERY_FEED)
    problem, laid, rng = evaluator.problem, laid_out(evaluator), np.random.default_rng(5)
    rows = np.zeros((5000, problem.layout.width), dtype=np.int64)
    for column, values in enumerate(problem.space.allowed):
        rows[:, column] = values[rng.integers(len(values), size=len(rows))]
    decided = evaluator.decide(rows)
    good = decided[evaluator.evaluate(decided).feasible]
    good = good[on_offer(problem, good)]
    assert len(good) > 50
    feed = good[:, problem.layout.rail("feed")]
    assert {0, 1, 2} <= set(np.unique(feed).tolist())
    assert all(stands_among(laid, row[: problem.layout.choices]) for row in good)


def test_what_no_voltage_makes_legal_breaks_a_limit(two_rails: Evaluator) -> None:
    """Of two rails' designs most are ruled out so, and none of them is feasible."""
    laid = laid_out(two_rails)
    kept = representatives(two_rails.problem, possible_choices(two_rails))
    assert kept is not None
    rng = np.random.default_rng(11)
    rows = np.concatenate([laid.rows(int(k), int(k) + 1) for k in rng.integers(len(laid), size=1500)])
    choices = two_rails.problem.layout.choices
    gone = np.array([not stands_among(kept, row[:choices]) for row in rows])
    assert 0.2 < gone.mean() < 0.95
    assert (two_rails.evaluate(two_rails.decide(rows[gone])).violation > 0.0).all()


def test_what_is_ruled_out_on_sight_breaks_a_limit(tmp_path: Path) -> None:
    evaluator = compiled(tmp_path, EVERY_FEED)
    laid, rng = laid_out(evaluator), np.random.default_rng(3)
    rows = np.concatenate([laid.rows(int(k), int(k) + 1) for k in rng.integers(len(laid), size=1500)])
    out = hopeless(evaluator.problem, rows)
    assert out.sum() > 20
    assert (evaluator.evaluate(evaluator.decide(rows[out])).violation > 0.0).all()


def test_any_number_of_processes_gives_the_same_front(apart: Evaluator) -> None:
    one, two = (enumerate_designs(apart, laid_out(apart), workers=workers) for workers in (1, 2))
    np.testing.assert_array_equal(one.rows, two.rows)
    np.testing.assert_array_equal(one.objectives, two.objectives)
    assert (one.evaluated, one.folded, one.feasible) == (two.evaluated, two.folded, two.feasible)


def test_a_stop_keeps_what_was_gone_through(two_rails: Evaluator) -> None:
    told: list[int] = []

    def note(known: Enumeration) -> None:
        told.append(known.covered)

    found = enumerate_designs(two_rails, laid_out(two_rails), workers=1, told=note, stop=lambda: len(told) >= 1)
    assert told == [BLOCK]
    assert not found.complete
    assert found.covered == BLOCK < found.total
    assert len(found.rows)


@pytest.mark.parametrize("total", [1, BLOCK, 10 * BLOCK + 1, 1000 * BLOCK])
def test_blocks_are_all_taken_once_and_scattered(total: int) -> None:
    order = block_order(total)
    assert sorted(order.tolist()) == list(range(-(-total // BLOCK)))
    if len(order) > 100:
        first = np.sort(order[:20]) / len(order)
        assert np.diff(np.concatenate([[0.0], first, [1.0]])).max() < 0.15


def test_a_comparison_measures_in_matches() -> None:
    exact = np.array([[100.0, 50.0, 60.0], [90.0, 60.0, 62.0]])
    same = compare(exact, exact)
    assert (same.missed, same.far, same.worst, same.behind) == (0, 0, 0.0, 0.0)
    assert same.share == pytest.approx(1.0, rel=1e-12)
    near = compare(exact, np.array([[100.2, 50.0, 60.0], [90.0, 60.0, 62.0]]))
    assert (near.missed, near.far) == (1, 0)
    assert near.worst == pytest.approx(0.002 / 0.003, rel=1e-9)
    far = compare(exact, exact[:1])
    assert (far.missed, far.far) == (1, 1)
    assert far.worst_cost == pytest.approx(1.0 / 6.0, rel=1e-9)
    assert far.worst_droop == pytest.approx(2.0, rel=1e-9)
    assert far.behind == pytest.approx((10.0 / 90.0) / 0.003, rel=1e-9)  # dearer in energy; cheaper, less droop
    assert compare(exact, exact - np.array([0.0, 1.0, 0.0])).behind == 0.0


def test_search_finds_the_front_of_a_space_that_can_be_enumerated(two_rails: Evaluator) -> None:
    """At least 0.995 of the exact front's hypervolume, reference point 1.1 on its own ideal and nadir."""
    laid = laid_out(two_rails)
    exact = enumerate_designs(two_rails, laid, workers=1)
    assert combinations(two_rails.problem) >= 100_000
    assert exact.evaluated >= 10_000
    assert len(exact.rows) >= 10
    found = search(
        two_rails, evaluations=exact.evaluated // 12, population=40, seed=3, stagnation_generations=1000
    )
    told = compare(exact.objectives, found.objectives)
    print(f"{exact.evaluated} designs, exact front {told.exact}: share {told.share:.5f}, missed {told.missed}")
    assert found.evaluations <= exact.evaluated // 10
    assert 0.995 <= told.share <= 1.0 + 1e-12
