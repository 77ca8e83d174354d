"""The shipped studies compiled once, and random decided designs of them."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from archopt.inputs.load import load
from archopt.model.compiled import incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.model.problem import Problem, compile_problem
from archopt.model.space import Space
from archopt.model.states import reduce_load

STUDIES = ("telecom_six", "industrial_ten", "compute_sixteen")
FOLDER = Path(__file__).resolve().parents[2] / "studies"


@cache
def evaluator_of(name: str) -> Evaluator:
    """Return the evaluator of a shipped study."""
    loaded = load(FOLDER / name / "study.toml")
    states = reduce_load(loaded.study)
    return Evaluator(compile_problem(loaded.study, loaded.catalogue, states))


def random_rows(space: Space, width: int, count: int, rng: np.random.Generator) -> NDArray[np.int64]:
    """Return rows with every choice drawn at random from what it may hold; decisions are left at zero."""
    rows = np.zeros((count, width), dtype=np.int64)
    for column, values in enumerate(space.allowed):
        rows[:, column] = rng.choice(values, count)
    return rows


def sensible_rows(problem: Problem, count: int, rng: np.random.Generator) -> NDArray[np.int64]:
    """Return random rows whose stages can run from their feeds and that have a bus where they need one."""
    layout, space = problem.layout, problem.space
    rows = random_rows(space, layout.width, count, rng)
    feeds, stages = rows[:, layout.rail("feed")], rows[:, layout.rail("stage")]
    phases, banks = rows[:, layout.rail("phases")], rows[:, layout.rail("bank")]
    for r in range(layout.rails):
        allowed = space.allowed[layout.rail("stage").start + r]
        pairs = [
            (stage, feed)
            for stage in allowed
            for feed in np.flatnonzero(problem.feed_ok[r, stage])
        ]
        pick = rng.integers(len(pairs), size=count)
        stages[:, r], feeds[:, r] = np.array(pairs)[pick].T
        low, high = problem.phases_low[r, stages[:, r]], problem.phases_high[r, stages[:, r]]
        phases[:, r] = rng.integers(low, high + 1)
        banks[:, r] = rng.choice(np.flatnonzero(problem.capacitor_ok[r]), count)
    return rows


def near_rows(
    problem: Problem, count: int, rng: np.random.Generator, redrawn: float = 0.15
) -> NDArray[np.int64]:
    """Return today's design with some choices drawn again, its buses free to move in a wide range."""
    layout, space = problem.layout, problem.space
    start = incumbent_row(problem)
    assert start is not None
    drawn = sensible_rows(problem, count, rng)
    rows = np.repeat(start[None], count, axis=0)
    again = rng.random(drawn.shape) < min(0.15, 1.2 / layout.rails)
    rail_fields = [layout.rail(field) for field in ("stage", "feed", "phases", "bank")]
    for r in range(layout.rails):
        together = again[:, layout.rail("stage").start + r]
        for columns in rail_fields:
            again[:, columns.start + r] = together
    rows = np.where(again, drawn, rows)
    free = rng.random(count) < 0.7
    control, lower, upper = (layout.bus(field).start for field in ("control", "lower_v", "upper_v"))
    rows[:, control] = np.where(free, rng.choice(space.allowed[control], count), rows[:, control])
    rows[:, lower] = np.where(free, rng.integers(0, len(space.grid_v) // 2, count), rows[:, lower])
    rows[:, upper] = np.where(free, len(space.grid_v) - 1, rows[:, upper])
    converter = layout.bus("converter").start
    labels = space.values[converter]
    wide = [k for k in space.allowed[converter] if labels[int(k)].split("_")[0] in ("wide", "open")]
    widened = free & (rng.random(count) < 0.7)
    rows[:, converter] = np.where(widened, rng.choice(wide, count), rows[:, converter])
    rows[:, layout.bus("count").start] = np.where(free, 2, rows[:, layout.bus("count").start])
    return rows


@cache
def decided(name: str, count: int, seed: int) -> NDArray[np.int64]:
    """Return decided random designs of a shipped study: a third each wholly random, sensible, and near today's."""
    evaluator = evaluator_of(name)
    problem = evaluator.problem
    rng = np.random.default_rng(seed)
    third = count // 3
    rows = np.vstack(
        [
            random_rows(problem.space, problem.layout.width, third, rng),
            sensible_rows(problem, third, rng),
            near_rows(problem, count - 2 * third, rng),
        ]
    )
    return evaluator.decide(rows)


def kinds_wanted() -> set[str]:
    """Return the kinds of design every comparison has to meet."""
    return {
        "one bus", "two buses", "direct", "fixed ratio", "parent fed", "bias fed", "bias from bus", "fixed",
        "two_levels", "follow_load", "phases shed", "converters shed",
    }  # fmt: skip
