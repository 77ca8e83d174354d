"""What a search computes apart from its own loop, as functions of a desk and plain arrays.

A job gives the same arrays wherever it is done: it reads the desk, draws no random numbers, and works through
its rows in batches of one fixed shape. So :mod:`archopt.search.workers` may do it in another process.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.evaluator import Evaluation, Evaluator
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.changes import SingleChanges
from archopt.search.completion import Completion
from archopt.search.consolidate import dropped_plans, worth
from archopt.search.fold import Fold, promising
from archopt.search.genome import Genome, Plan
from archopt.search.rail_tables import CAPS
from archopt.search.screen import Screen

CONSOLIDATE_ROUNDS = 3
EVALUATION_ARRAYS = 5  # an evaluation is the last so many arrays of an answer

Arrays = tuple[FloatArray | IntArray, ...]


@dataclass(frozen=True)
class Desk:
    """What jobs work with: an evaluator and what is built upon it; ``size`` is the shape of every batch."""

    evaluator: Evaluator
    genome: Genome
    completion: Completion
    folding: Fold
    changes: SingleChanges
    screen: Screen
    size: int

    @classmethod
    def of(cls, evaluator: Evaluator, size: int) -> Desk:
        """Return the desk of a problem."""
        genome = Genome(evaluator.problem)
        completion = Completion(evaluator, genome)
        folding = Fold(completion)
        changes = SingleChanges(evaluator.problem)
        return cls(evaluator, genome, completion, folding, changes, Screen(folding), size)

    def prepare(self) -> None:
        """Fill the tables jobs would fill when they first need them, so that who is handed the desk need not."""
        self.completion.banks.ensure(np.arange(len(CAPS)))

    def evaluate(self, rows: IntArray) -> Evaluation:
        """Evaluate decided rows in batches of one fixed shape."""
        parts = []
        for start in range(0, len(rows), self.size):
            real = rows[start : start + self.size]
            padded = real[np.minimum(np.arange(self.size), len(real) - 1)]
            parts.append(first_of(self.evaluator.evaluate(padded), len(real)))
        return joined(parts)

    def complete(self, plan: Plan) -> IntArray:
        """Return decided rows of plans, completed in batches of one fixed shape."""
        parts = []
        for start in range(0, len(plan), self.size):
            index = np.arange(start, min(start + self.size, len(plan)))
            padded = index[np.minimum(np.arange(self.size), len(index) - 1)]
            parts.append(self.completion.complete(plan.take(padded))[: len(index)])
        return np.concatenate(parts)


def evaluated(desk: Desk, rows: IntArray) -> Arrays:
    """Job: evaluate decided rows; :func:`evaluation_of` reads the answer."""
    return arrays_of(desk.evaluate(rows))


def decided(desk: Desk, rows: IntArray) -> Arrays:
    """Job: decide rows, such as neighbours, and evaluate them."""
    return arrays_of(desk.evaluate(desk.evaluator.decide(rows)))


def completed(desk: Desk, genomes: FloatArray) -> Arrays:
    """Job: complete genomes to decided rows and evaluate them."""
    return arrays_of(desk.evaluate(desk.complete(desk.genome.decode(genomes))))


def folded(desk: Desk, rows: IntArray, objectives: FloatArray, archive: FloatArray) -> Arrays:
    """Job: fold around decided rows and evaluate, of one batch at most, what no archived objectives dominate."""
    found, predicted = desk.folding.propose(rows, objectives)
    chosen = promising(predicted, archive, desk.size)
    return decided(desk, found[chosen]) if len(chosen) else arrays_of(nothing(rows.shape[1]))


def consolidated(
    desk: Desk, genomes: FloatArray, learned: FloatArray, rows: IntArray, objectives: FloatArray, violation: FloatArray
) -> Arrays:
    """Job: drop part numbers of designs, one after another, while the completed board is better.

    Arrays are of P designs: the genomes as they were completed, what they have learned, rows and worth. The answer
    is the places (k,) of the designs that got better, their genomes, objectives and violation, then everything
    tried, as an evaluation.
    """
    plan = desk.genome.decode(genomes)
    price, cap = plan.price, np.array(CAPS, dtype=np.float64)[plan.cap]
    score = worth(objectives, violation, price, cap)
    learned, row, objectives, violation = learned.copy(), rows.copy(), objectives.copy(), violation.copy()
    tried: list[Evaluation] = []
    better: set[int] = set()
    places = np.arange(len(rows))
    for _ in range(CONSOLIDATE_ROUNDS):
        if not len(places):
            break
        plans, owner = dropped_plans(desk.genome, learned[places], row[places])
        owner = places[owner]
        found = desk.evaluate(desk.complete(plans))
        tried.append(found)
        fresh = worth(found.objectives, found.violation, price[owner], cap[owner])
        kept = []
        for k in places:
            own = np.flatnonzero(owner == k)
            best = own[fresh[own].argmin()] if len(own) else -1
            if best < 0 or fresh[best] >= score[k] - 1e-9:
                continue
            score[k], row[k] = fresh[best], found.rows[best]
            objectives[k], violation[k] = found.objectives[best], found.violation[best]
            learned[k] = desk.genome.learn(learned[k : k + 1], row[k : k + 1], np.ones(1, dtype=bool))[0]
            kept.append(int(k))
        better.update(kept)
        places = np.array(kept, dtype=np.int64)
    won = np.array(sorted(better), dtype=np.int64)
    every = arrays_of(joined(tried)) if tried else arrays_of(nothing(rows.shape[1]))
    return (won, learned[won], objectives[won], violation[won], *every)


def arrays_of(found: Evaluation) -> Arrays:
    """Return an evaluation as the arrays a job answers with."""
    return (found.rows, found.objectives, found.droop_exact, found.slack, found.violation)


def evaluation_of(answer: Arrays) -> Evaluation:
    """Return the evaluation a job answered with."""
    rows, *rest = answer
    return Evaluation(np.asarray(rows, dtype=np.int64), *(np.asarray(each, dtype=np.float64) for each in rest))


def nothing(width: int) -> Evaluation:
    """Return an evaluation of no design."""
    none = np.zeros(0)
    return Evaluation(np.zeros((0, width), dtype=np.int64), np.zeros((0, 3)), none, np.zeros((0, 0)), none)


def first_of(found: Evaluation, count: int) -> Evaluation:
    """Return the first designs of an evaluation."""
    return Evaluation(*(each[:count] for each in arrays_of(found)))  # type: ignore[arg-type]


def joined(parts: list[Evaluation]) -> Evaluation:
    """Return several evaluations as one."""
    return evaluation_of(tuple(np.concatenate(each) for each in zip(*map(arrays_of, parts), strict=True)))
