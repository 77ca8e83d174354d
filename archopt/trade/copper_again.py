"""Everything but the swept copper chosen again: a search around a design with some of its columns held.

Copper weight, or the pairs of one net, stay as the sweep sets them; stages, converters, voltages, banks and all
other pairs may move. Of what is found the design of least lifetime cost is taken whose droop is no worse than the
design's own. The same design, budget and seed give the same answer.
"""

from __future__ import annotations

import copy
from collections.abc import Sequence
from dataclasses import dataclass, replace

import numpy as np

from archopt.model.evaluator import Evaluation, Evaluator
from archopt.model.parameters import IntArray
from archopt.model.problem import Problem
from archopt.physics.arrays import BoolArray, FloatArray
from archopt.search.driver import search
from archopt.search.local import Neighbours
from archopt.trade.money import lifetime_costs

EVALUATIONS = 2000
POPULATION = 64
SEED = 1
DESCENT_SHARE = 0.4  # of the budget goes to changing the best found, one choice at a time
PATIENCE = 3  # rounds of the descent without a better design
RECOMPUTED = 24  # of the best by the tables are computed by direct physics

Held = dict[int, tuple[int, ...]]  # column -> what it may hold


@dataclass(frozen=True)
class Chooser:
    """Chooses everything else again around one design.

    droop_percent : what the droop objective may be at most, the design's own
    evaluations : budget of one choice
    """

    evaluator: Evaluator
    droop_percent: float
    evaluations: int

    def __call__(self, seeds: Sequence[IntArray], held: Held) -> IntArray:
        """Return the row of least lifetime cost with columns held, the first seed where none meets the limits."""
        pinned = with_held(self.evaluator, held)
        rows = pinned.decide(np.stack(list(seeds)))
        most = max(int(self.evaluations * (1.0 - DESCENT_SHARE)), POPULATION)
        found = search(
            pinned, evaluations=most, population=POPULATION, seed=SEED, stagnation_generations=10**6, seeds_rows=rows
        )
        rows = np.concatenate([rows, found.rows])
        rows = self.descended(pinned, rows[keeping(rows, held)], held)
        order = np.argsort(self.worth(pinned.evaluate(rows)), kind="stable")[:RECOMPUTED]
        rows = np.concatenate([pinned.decide(seeds[0][None]), rows[order]])
        return np.asarray(rows[int(self.worth(pinned.evaluate(rows, exact=True)).argmin())])

    def worth(self, found: Evaluation) -> FloatArray:
        """Return the lifetime cost of evaluated designs, infinite where a limit or the droop is not kept, (P,)."""
        kept = (found.violation <= 0.0) & (found.objectives[:, 2] <= self.droop_percent + 1e-9)
        return np.where(kept, lifetime_costs(self.evaluator.problem.study, found.objectives), np.inf)

    def descended(self, pinned: Evaluator, rows: IntArray, held: Held) -> IntArray:
        """Return rows with those added that changing the best one choice at a time has led through."""
        rng = np.random.default_rng([SEED, 2])
        neighbours = Neighbours(pinned.problem)
        worth = self.worth(pinned.evaluate(rows))
        best, least, path, idle = rows[int(worth.argmin())], float(worth.min()), [rows], 0
        for _ in range(int(self.evaluations * DESCENT_SHARE) // POPULATION):
            tried = pinned.decide(neighbours.draw(np.repeat(best[None], POPULATION, axis=0), rng))
            tried = tried[keeping(tried, held)]
            worth = self.worth(pinned.evaluate(tried)) if len(tried) else np.full(1, np.inf)
            if float(worth.min()) < least:
                best, least, idle = tried[int(worth.argmin())], float(worth.min()), 0
                path.append(best[None])
                continue
            idle += 1
            if idle >= PATIENCE:
                break
        return np.concatenate(path)


def chooser_of(problem: Problem, row: IntArray, evaluations: int) -> Chooser:
    """Return the chooser around a decided design."""
    evaluator = Evaluator(problem)
    droop = float(evaluator.evaluate(row[None], exact=True).objectives[0, 2])
    return Chooser(evaluator, droop, evaluations)


def with_held(evaluator: Evaluator, held: Held) -> Evaluator:
    """Return an evaluator whose problem offers no more for some columns; its tables are the same ones."""
    problem = evaluator.problem
    allowed = list(problem.space.allowed)
    for column, values in held.items():
        allowed[column] = np.array(values, dtype=np.int64)
    out = copy.copy(evaluator)
    out.problem = replace(problem, space=replace(problem.space, allowed=tuple(allowed)))
    return out


def keeping(rows: IntArray, held: Held) -> BoolArray:
    """Return which rows hold only what their columns may."""
    kept = np.ones(len(rows), dtype=bool)
    for column, values in held.items():
        kept &= np.isin(rows[:, column], values)
    return kept
