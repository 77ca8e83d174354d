"""The outer bound: no feasible design lies below it, and what it is put together from keeps that promise."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from archopt.model.evaluator import Evaluator
from archopt.proof.bound import OuterBound, Relaxation, outer_bound
from archopt.proof.bound_fold import added, coarser, crossed, front, height, joined
from archopt.proof.bound_parts import charges, least_copper, new_part_cost
from archopt.proof.bound_rails import LEVELS, sampled_least
from archopt.proof.enumerate import BATCH
from archopt.proof.representatives import representatives
from tests.proof.enumerable_small import EVERY_FEED
from tests.search.small_study import FEW_CHOICES, TWO_RAILS, compiled

Points = NDArray[np.float64]


def drawn(evaluator: Evaluator, count: int, seed: int) -> Points:
    """Objectives of feasible designs drawn from all over a space."""
    laid = representatives(evaluator.problem)
    assert laid is not None
    rng = np.random.default_rng(seed)
    rows = np.concatenate([laid.rows(int(k), int(k) + 1) for k in rng.integers(len(laid), size=count)])
    found = [evaluator.evaluate(evaluator.decide(rows[k : k + BATCH])) for k in range(0, count, BATCH)]
    return np.concatenate([each.objectives[each.feasible] for each in found])


def staircase(rng: np.random.Generator, count: int) -> Points:
    """A random staircase."""
    points = rng.uniform(1.0, 10.0, (count, 2))
    return front(points[:, 0], points[:, 1])


@pytest.fixture(scope="module")
def two_rails(tmp_path_factory: pytest.TempPathFactory) -> tuple[Evaluator, OuterBound]:
    """Two rails behind one bus that may move, and their bound."""
    evaluator = compiled(tmp_path_factory.mktemp("two_rails"), TWO_RAILS + FEW_CHOICES)
    return evaluator, outer_bound(evaluator)


def test_no_design_of_one_bus_lies_below_the_bound(two_rails: tuple[Evaluator, OuterBound]) -> None:
    evaluator, bound = two_rails
    designs = drawn(evaluator, 2500, seed=1)
    assert len(designs) > 300
    assert not bound.violated(designs).any()


def test_the_bound_is_near(two_rails: tuple[Evaluator, OuterBound]) -> None:
    """Within 12 % of energy of designs drawn at random, and a design a little below the bound is told."""
    evaluator, bound = two_rails
    designs = drawn(evaluator, 2500, seed=2)
    best = min(bound.gap(designs[k : k + 1])[0] for k in range(len(designs)))
    assert 0.0 <= best < 0.12
    assert bound.violated(bound.objectives * np.array([0.999, 1.0, 1.0])).mean() > 0.5
    assert not bound.violated(bound.objectives).any()


def test_no_design_with_any_feed_lies_below_the_bound(tmp_path: Path) -> None:
    """Two buses, fixed ratio, straight from the input, a parent rail and a bias supply."""
    evaluator = compiled(tmp_path, EVERY_FEED)
    bound = outer_bound(evaluator)
    designs = drawn(evaluator, 4000, seed=4)
    assert len(designs) > 40
    assert not bound.violated(designs).any()
    assert bound.gap(designs)[1] < 1.0


def test_a_droop_step_more_never_asks_for_more(two_rails: tuple[Evaluator, OuterBound]) -> None:
    _, bound = two_rails
    assert len(bound.steps) == len(LEVELS)
    for tight, loose in zip(bound.steps[:-1], bound.steps[1:], strict=True):
        if len(tight):
            assert (height(loose, tight[:, 0]) <= tight[:, 1] * (1.0 + 1e-3)).all()


def test_staircases_keep_their_promise() -> None:
    """Sums, unions and crossings against all points; what is made coarser lies nowhere above."""
    rng = np.random.default_rng(8)
    first, second = staircase(rng, 40), staircase(rng, 60)
    at = np.linspace(0.5, 25.0, 200)
    sums = (first[:, None] + second[None]).reshape(-1, 2)
    every = np.array([sums[sums[:, 0] <= cost, 1].min(initial=np.inf) for cost in at])
    np.testing.assert_array_equal(height(added(first, second), at), every)
    both = np.stack([height(first, at), height(second, at)])
    np.testing.assert_array_equal(height(joined([first, second]), at), both.min(axis=0))
    np.testing.assert_array_equal(height(crossed(first, second), at), both.max(axis=0))
    fine = front(np.arange(900.0), 1e6 - np.arange(900.0) ** 2)
    rough = coarser(fine, 50)
    assert len(rough) <= 50 < len(fine)
    assert (height(rough, fine[:, 0]) <= fine[:, 1]).all()


def test_a_sampled_curve_is_never_lower_than_its_bound() -> None:
    """Parabolas and corners with their least between two samples."""
    place = np.linspace(0.0, 1.0, 5)
    fine = np.linspace(0.0, 1.0, 4001)
    for centre in np.linspace(0.05, 0.95, 37):
        for power in (1.0, 2.0):
            at_samples, everywhere = (3.0 + np.abs(x - centre) ** power for x in (place, fine))
            bound = float(sampled_least(at_samples[None])[0])
            assert everywhere.min() - 0.25 <= bound <= everywhere.min() + 1e-12


def test_shared_part_numbers_are_never_charged_more_than_they_cost(two_rails: tuple[Evaluator, OuterBound]) -> None:
    """Whatever the rails choose, their charges together stay within the new part numbers of the board."""
    evaluator, _ = two_rails
    relaxed = Relaxation(evaluator)
    problem, rails = evaluator.problem, relaxed.rails
    fresh, rng = new_part_cost(problem), np.random.default_rng(2)
    energy = [rng.uniform(1.0, 2.0, len(rail.cost)) for rail in rails]
    paid, _ = charges(problem, rails, energy, 3.0)
    for _ in range(300):
        parts: set[int] = set()
        charged = 0.0
        for r, rail in enumerate(rails):
            place = int(rng.integers(len(rail.cost)))
            stage = int(rail.stage[rail.option[place]])
            parts |= {int(problem.stages.part[stage]), int(problem.stages.second_part[stage])}
            parts.add(int(problem.capacitors.part[rail.bank[place]]))
            charged += float(paid[r][place])
        assert charged <= sum(float(fresh[part]) for part in parts if part >= 0) * (1.0 + 1e-9)
    assert max(float(values.max()) for values in paid) > 0.0


def test_copper_is_shared_out_no_better_than_can_be() -> None:
    """The dual bound against every allocation of three pours to a budget."""
    rng = np.random.default_rng(6)
    pairs = np.arange(1, 5)
    for _ in range(20):
        losses = [float(weight) / pairs for weight in rng.uniform(1.0, 20.0, 3)]
        areas = [float(area) * pairs for area in rng.uniform(1.0, 4.0, 3)]
        offered = float(rng.uniform(9.0, 30.0))
        grid = np.stack(np.meshgrid(*([np.arange(4)] * 3), indexing="ij"), axis=-1).reshape(-1, 3)
        loss = sum(losses[k][grid[:, k]] for k in range(3))
        area = sum(areas[k][grid[:, k]] for k in range(3))
        fits = np.asarray(area) <= offered
        best = float(np.asarray(loss)[fits].min()) if fits.any() else np.inf
        bound = least_copper(losses, areas, offered)
        assert bound <= best * (1.0 + 1e-12)
        assert bound >= 0.7 * best or not fits.any()
