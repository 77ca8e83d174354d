"""Polish: after the search, single choices are changed until no change of a published design is better in every way.

A round lists every single change of the designs in the thinned front (:mod:`archopt.search.changes`), rules out what
cannot dominate (:mod:`archopt.search.screen`), evaluates the rest, and adds what is feasible to the archive; the front
is thinned anew, the designs already gone through first in their boxes. When first order finds nothing more, one pass
goes over the front without it. Before that the rails' fronts are folded around every design of the front, which tries
changes of many rails at a time.
"""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, replace

import numpy as np

from archopt.model.evaluator import Evaluator
from archopt.model.space import Designs
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.changes import SingleChanges
from archopt.search.completion import Completion
from archopt.search.conditions import Conditions, conditions_of, first_conditions
from archopt.search.fold import Fold, promising
from archopt.search.genome import Genome, energy_price_scale
from archopt.search.outcome import SearchResult
from archopt.search.record import Record
from archopt.search.screen import TIE, Screen, decided_cost

TOGETHER = 8  # designs gone through at a time
FOLD_MOST = 160  # folded boards evaluated around a few designs
UNTRIED, SCREENED, CLOSED = 0, 1, 2
COARSER, LEAST_FRONT = 4, 3
CONSIDERED_AN_EVALUATION = 40  # changes listed and ruled out in the time of an evaluation
FOLD_IN_EVALUATIONS = 60


@dataclass(frozen=True)
class PolishStatement:
    """What polishing did, in counts of designs and of changes; see :meth:`sentence`.

    designs: published before direct physics. remaining: of those, how many some change of may still improve.
    """

    designs: int
    neighbours_considered: int
    excluded_by_exact_cost: int
    excluded_by_exact_limits: int
    screened: int
    evaluated: int
    improved: int
    remaining: int
    closed: bool
    to_accuracy: str

    def sentence(self) -> str:
        """Return what may be claimed, in a sentence."""
        if self.closed:
            return (
                f"No single change of one choice of these designs gives a feasible design that is better in every"
                f" objective: {self.neighbours_considered:,} changes of {self.designs} designs were gone through,"
                f" {self.evaluated:,} of them evaluated, the others ruled out by their exact cost or limits;"
                f" {self.to_accuracy}."
            )
        return (
            f"Single changes of {self.remaining} of {self.designs} designs were not all tried: a change of one choice"
            f" may still improve those; {self.to_accuracy}."
        )


TO_ACCURACY = "to the accuracy of the loss tables, before direct physics computed the designs anew"


@dataclass
class Polish:
    """One polishing in progress. status: digest of a decided row -> how far its changes were gone through."""

    evaluator: Evaluator
    record: Record
    batch: int
    budget: int
    most: int

    def __post_init__(self) -> None:
        self.genome = Genome(self.evaluator.problem)
        self.completion = Completion(self.evaluator, self.genome)
        self.folding = Fold(self.completion)
        self.changes = SingleChanges(self.evaluator.problem)
        self.screen = Screen(self.folding)
        self.status: dict[bytes, int] = {}
        self.known: set[bytes] = set()
        self.folded: set[bytes] = set()
        self.considered = self.by_cost = self.by_limits = self.screened = self.evaluated = self.improved = 0

    def run(self) -> None:
        """Polish until nothing is found or the budget is spent: a coarser front first, which clears much away."""
        for most in (max(self.most // COARSER, LEAST_FRONT), self.most):
            self.fold_around(self.front(most))
            while self.told(most) == UNTRIED and self.spent < self.budget:
                self.go_through(most, UNTRIED)
        while (status := self.told(self.most)) < CLOSED and self.spent < self.budget:
            self.go_through(self.most, status)

    @property
    def spent(self) -> int:
        """Evaluations, and what listing changes and folding took, in evaluations."""
        return self.evaluated + self.considered // CONSIDERED_AN_EVALUATION + len(self.folded) * FOLD_IN_EVALUATIONS

    def status_of(self, rows: IntArray) -> IntArray:
        """Return how far the changes of decided rows were gone through, (n,)."""
        return np.array([self.status.get(digest(row), UNTRIED) for row in rows], dtype=np.int64)

    def told(self, most: int) -> int:
        """Return how far the whole thinned front was gone through."""
        return int(self.status_of(self.record.archive.rows[self.front(most)]).min(initial=CLOSED))

    def front(self, most: int) -> IntArray:
        """Return the places in the archive of the thinned front; of a box's designs those gone through stay first."""
        archive = self.record.archive
        return archive.thinning(most, preferred=self.status_of(archive.rows)).indices

    def go_through(self, most: int, status: int) -> None:
        """Try the changes of the designs of the front at a status; those dominated meanwhile are left alone."""
        rows = self.record.archive.rows[self.front(most)]
        rows = rows[self.status_of(rows) == status]
        for start in range(0, len(rows), TOGETHER):
            if self.spent >= self.budget:
                return
            archive = self.record.archive
            held = {digest(row): k for k, row in enumerate(archive.rows)}
            some = [row for row in rows[start : start + TOGETHER] if digest(row) in held]
            if not some:
                continue
            objectives = archive.objectives[[held[digest(row)] for row in some]]
            self.try_changes(np.array(some), objectives, screened=status == UNTRIED)
            for row in some:
                self.status[digest(row)] = status + 1

    def try_changes(self, rows: IntArray, objectives: FloatArray, *, screened: bool) -> None:
        """Evaluate the changes of a few designs that are not ruled out, then the best of them taken together."""
        seen = self.conditions(rows) if screened else None
        kept = []
        for k, row in enumerate(rows):
            changed, rail = self.changes.of(row[: self.changes.layout.choices])
            sorted_ = self.screen.sort(
                row, objectives[k], None if seen is None else one_of(seen, k), changed, rail
            )
            out = sorted_.costs_more | sorted_.impossible | sorted_.not_worth
            self.considered += len(changed)
            self.by_cost += int(sorted_.costs_more.sum())
            self.by_limits += int(sorted_.impossible.sum())
            self.screened += int(sorted_.not_worth.sum())
            kept.append(changed[~out])
        owner = np.repeat(np.arange(len(rows)), [len(each) for each in kept])
        found = self.try_rows(np.concatenate(kept), objectives[owner])
        width = self.changes.layout.choices
        together = [
            both
            for k in range(len(rows))
            if (both := together_of(rows[k, :width], objectives[k], kept[k], found[owner == k])) is not None
        ]
        if together:
            self.try_rows(np.array([each[0] for each in together]), np.array([each[1] for each in together]))

    def try_rows(self, choices: IntArray, objectives: FloatArray) -> FloatArray:
        """Decide and evaluate choices (n, C) that cost no more than their designs; return objectives (n, 3).

        inf where a row costs more, is infeasible, or was evaluated before.
        """
        undecided = np.zeros((len(choices), self.evaluator.problem.layout.width), dtype=np.int64)
        undecided[:, : choices.shape[1]] = choices
        decided = self.decide(undecided)
        dear = decided_cost(self.screen, decided) > objectives[:, 1] * (1.0 + TIE)
        self.by_cost += int(dear.sum())
        out = np.full((len(choices), 3), np.inf)
        out[~dear] = self.evaluate(decided[~dear])
        return out

    def decide(self, rows: IntArray) -> IntArray:
        """Return rows decided in batches of one fixed shape."""
        parts = []
        for start in range(0, len(rows), self.batch):
            real = rows[start : start + self.batch]
            padded = real[np.minimum(np.arange(self.batch), len(real) - 1)]
            parts.append(self.evaluator.decide(padded)[: len(real)])
        return np.concatenate(parts) if parts else rows

    def evaluate(self, rows: IntArray) -> FloatArray:
        """Evaluate decided rows, once each, and offer what is feasible to the archive; return objectives (n, 3).

        inf where a row is infeasible or was evaluated before.
        """
        out = np.full((len(rows), 3), np.inf)
        fresh = []
        for k, row in enumerate(rows):
            name = digest(row)
            if name not in self.known:
                self.known.add(name)
                fresh.append(k)
        for start in range(0, len(fresh), self.batch):
            index = np.array(fresh[start : start + self.batch])
            padded = rows[index[np.minimum(np.arange(self.batch), len(index) - 1)]]
            found = self.evaluator.evaluate(padded)
            self.improved += self.record.add(found, len(index))
            feasible = found.violation[: len(index)] <= 0.0
            out[index[feasible]] = found.objectives[: len(index)][feasible]
        self.evaluated += len(fresh)
        return out

    def conditions(self, rows: IntArray) -> Conditions:
        """Return what the rails of decided designs find on their buses."""
        one = np.ones(len(rows))
        plan = self.genome.decode(self.genome.encode(rows, one, 0.02 * one, np.zeros(len(rows), dtype=np.int64)))
        designs = Designs(self.evaluator.problem.layout, rows)
        return conditions_of(self.evaluator, designs, first_conditions(self.evaluator, plan))

    def fold_around(self, front: IntArray) -> None:
        """Fold around every design of the front, a few at a time, and evaluate what promises to enter the archive."""
        rows, objectives = self.record.archive.rows[front], self.record.archive.objectives[front]
        fresh = np.flatnonzero([digest(row) not in self.folded for row in rows])
        for start in range(0, len(fresh), TOGETHER):
            if self.spent >= self.budget:
                return
            some = fresh[start : start + TOGETHER]
            self.folded.update(digest(row) for row in rows[some])
            folded, predicted = self.folding.propose(rows[some], objectives[some])
            chosen = promising(predicted, self.record.archive.objectives, FOLD_MOST)
            if len(chosen):
                self.evaluate(self.decide(folded[chosen]))

    def statement(self) -> PolishStatement:
        """Return what was done."""
        rows = self.record.archive.rows[self.front(self.most)]
        remaining = int((self.status_of(rows) < CLOSED).sum())
        return PolishStatement(
            designs=len(rows),
            neighbours_considered=self.considered,
            excluded_by_exact_cost=self.by_cost,
            excluded_by_exact_limits=self.by_limits,
            screened=self.screened,
            evaluated=self.evaluated,
            improved=self.improved,
            remaining=remaining,
            closed=remaining == 0,
            to_accuracy=TO_ACCURACY,
        )


@dataclass(frozen=True)
class Polished:
    """What polishing left: the search's result with a better archive, the front to publish (rows), the statement."""

    found: SearchResult
    rows: IntArray
    statement: PolishStatement


def polished(evaluator: Evaluator, found: SearchResult, *, batch: int, budget: int, most: int) -> Polished:
    """Return a search's result polished.

    The same result, batch and budget give the same designs. An interrupt from the keyboard ends polishing and keeps
    what it found.

    Parameters
    ----------
    batch : designs evaluated at a time
    budget : evaluations allowed, other work counted as evaluations; the last few designs are still finished
    most : designs published
    """
    problem = evaluator.problem
    record = Record.of(problem, energy_price_scale(problem))
    record.archive.add(found.rows, found.objectives)
    record.fixed.add(found.fixed_rows, found.fixed_objectives)
    record.kinds = dict(found.kinds)
    polish = Polish(evaluator, record, batch, budget, most)
    if len(found.rows):
        try:
            polish.run()
        except KeyboardInterrupt:
            found = replace(found, ended="interrupted")
    archive = record.archive
    front = archive.rows[polish.front(most)] if len(archive) else archive.rows
    better = replace(
        found,
        rows=archive.rows,
        objectives=archive.objectives,
        fixed_rows=record.fixed.rows,
        fixed_objectives=record.fixed.objectives,
        kinds=dict(sorted(record.kinds.items())),
    )
    return Polished(better, front, polish.statement())


def together_of(
    choices: IntArray, objectives: FloatArray, changed: IntArray, found: FloatArray
) -> tuple[IntArray, FloatArray] | None:
    """Return a design (C,) with all its changes (n, C) that dominate it made together, the largest gains first.

    Of changes of one choice the first counts. None where fewer than two can be made.
    """
    better = np.flatnonzero((found <= objectives).all(axis=1) & (found < objectives).any(axis=1))
    gain = ((objectives - found[better]) / objectives).sum(axis=1)
    row, made = choices.copy(), 0
    for k in better[np.argsort(-gain, kind="stable")]:
        differs = changed[k] != choices
        if (row[differs] == choices[differs]).all():
            row[differs] = changed[k][differs]
            made += 1
    return (row, objectives) if made > 1 else None


def digest(row: IntArray) -> bytes:
    """Return a short name of a decided row."""
    return hashlib.blake2b(row.tobytes(), digest_size=16).digest()


def one_of(seen: Conditions, k: int) -> Conditions:
    """Return the conditions of one of several designs."""
    names = ("volts", "top_volts", "dipped", "marginal", "parent_marginal")
    return Conditions(*(getattr(seen, name)[k : k + 1] for name in names))
