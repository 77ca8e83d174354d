"""Polish: after the search, single choices are changed until no change of a published design is better in every way.

A round lists every single change of the designs in the thinned front (:mod:`archopt.search.changes`), rules out what
cannot dominate (:mod:`archopt.search.screen`), evaluates the rest, and adds what is feasible to the archive; the front
is thinned anew, the designs already gone through first in their boxes. When first order finds nothing more, one pass
goes over the front without it. Before that the rails' fronts are folded around every design of the front, which tries
changes of many rails at a time.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable
from dataclasses import dataclass, field, replace

import numpy as np

from archopt.model.cost import bill
from archopt.model.space import Designs
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.conditions import Conditions, conditions_of, first_conditions
from archopt.search.genome import energy_price_scale
from archopt.search.jobs import EVALUATION_ARRAYS, Arrays, Desk, evaluated, evaluation_of, folded
from archopt.search.outcome import SearchResult
from archopt.search.record import Record
from archopt.search.screen import TIE
from archopt.search.workers import Crew

TOGETHER, GROUPS = 4, 4  # designs a job, and jobs handed out at a time
FOLDED_TOGETHER = 2
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
                f"No change of a single choice of these designs gives a feasible design that is better in one objective"
                f" and no worse in another: in getting there {self.neighbours_considered:,} changes were gone through"
                f" and {self.evaluated:,} designs evaluated, and in the end every change of the {self.designs} designs"
                f" that its exact cost or limits do not rule out; {self.to_accuracy}."
            )
        return (
            f"Of {self.remaining} of {self.designs} designs not every change of a single choice was tried: one may"
            f" still better them; {self.to_accuracy}."
        )


TO_ACCURACY = "to the accuracy of the loss tables, before direct physics computed the designs anew"


@dataclass
class Polish:
    """One polishing in progress.

    record: what is known, its archive is what is polished. budget: evaluations allowed. most: designs published.
    status: digest of a decided row -> how far its changes were gone through. known, folded: rows evaluated, and
    rows folded around, here. asked_to_stop: asked now and then.
    """

    crew: Crew
    record: Record
    budget: int
    most: int
    asked_to_stop: Callable[[], bool] | None = None
    status: dict[bytes, int] = field(default_factory=dict)
    known: set[bytes] = field(default_factory=set)
    folded: set[bytes] = field(default_factory=set)
    considered: int = 0
    by_cost: int = 0
    by_limits: int = 0
    screened: int = 0
    evaluated: int = 0
    improved: int = 0

    def run(self) -> None:
        """Polish until nothing is found or the budget is spent: a coarser front first, which clears much away."""
        for most in (max(self.most // COARSER, LEAST_FRONT), self.most):
            self.fold_around(most)
            while self.told(most) == UNTRIED and not self.over():
                self.go_through(most, UNTRIED)
        while (status := self.told(self.most)) < CLOSED and not self.over():
            self.go_through(self.most, status)

    def over(self) -> bool:
        """Tell whether the budget is spent, or somebody stops."""
        return self.spent >= self.budget or (self.asked_to_stop is not None and self.asked_to_stop())

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
        for start in range(0, len(rows), TOGETHER * GROUPS):
            if self.over():
                return
            archive = self.record.archive
            held = {digest(row): k for k, row in enumerate(archive.rows)}
            some = [row for row in rows[start : start + TOGETHER * GROUPS] if digest(row) in held]
            if not some:
                continue
            objectives = archive.objectives[[held[digest(row)] for row in some]]
            self.try_changes(np.array(some), objectives, screened=status == UNTRIED)
            for row in some:
                self.status[digest(row)] = status + 1

    def try_changes(self, rows: IntArray, objectives: FloatArray, *, screened: bool) -> None:
        """Evaluate the changes of a few designs that are not ruled out, then the best of them taken together."""
        how = np.array([int(screened)])
        parts = [slice(start, start + TOGETHER) for start in range(0, len(rows), TOGETHER)]
        answers = self.crew.map(changes_left, [(rows[part], objectives[part], how) for part in parts])
        together = []
        for part, (decided, choices, owner, counts) in zip(parts, answers, strict=True):
            self.count(counts)
            found = self.evaluate(np.asarray(decided, dtype=np.int64))
            for k in range(len(rows[part])):
                own = np.flatnonzero(owner == k)
                changed = np.asarray(choices[own], dtype=np.int64)
                both = together_of(rows[part][k][: changed.shape[1]], objectives[part][k], changed, found[own])
                if both is not None:
                    together.append((both, objectives[part][k, 1]))
        if together:
            given = (np.array([each[0] for each in together]), np.array([each[1] for each in together]))
            decided, _ = self.crew.take(self.crew.submit(no_dearer, *given))
            self.evaluate(np.asarray(decided, dtype=np.int64))

    def count(self, counts: FloatArray | IntArray) -> None:
        """Add what a job considered, ruled out by cost and by limits, and screened."""
        considered, by_cost, by_limits, screened = (int(each) for each in counts)
        self.considered += considered
        self.by_cost += by_cost
        self.by_limits += by_limits
        self.screened += screened

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
        size = self.crew.desk.size
        parts = [np.array(fresh[start : start + size]) for start in range(0, len(fresh), size)]
        for part, answer in zip(parts, self.crew.map(evaluated, [(rows[part],) for part in parts]), strict=True):
            found = evaluation_of(answer)
            self.improved += self.record.add(found, len(part))
            out[part[found.feasible]] = found.objectives[found.feasible]
        self.evaluated += len(fresh)
        return out

    def fold_around(self, most: int) -> None:
        """Fold around every design of the front, a few at a time, and evaluate what promises to enter the archive."""
        archive = self.record.archive
        places = self.front(most)
        rows, objectives = archive.rows[places], archive.objectives[places]
        fresh = np.flatnonzero([digest(row) not in self.folded for row in rows])
        for start in range(0, len(fresh), FOLDED_TOGETHER * GROUPS):
            if self.over():
                return
            some = fresh[start : start + FOLDED_TOGETHER * GROUPS]
            self.folded.update(digest(row) for row in rows[some])
            parts = [some[k : k + FOLDED_TOGETHER] for k in range(0, len(some), FOLDED_TOGETHER)]
            there = archive.objectives
            for answer in self.crew.map(folded, [(rows[part], objectives[part], there) for part in parts]):
                found = evaluation_of(answer[-EVALUATION_ARRAYS:])
                if len(found.rows):
                    self.improved += self.record.add(found, len(found.rows))
                    self.evaluated += len(found.rows)
                    self.known.update(digest(row) for row in found.rows)

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


def polished(
    crew: Crew, found: SearchResult, *, budget: int, most: int, stop: Callable[[], bool] | None = None
) -> Polished:
    """Return a search's result polished.

    The same result, desk and budget give the same designs for any number of workers; ``stop`` is outside that promise.
    An interrupt from the keyboard ends polishing and keeps what it found.

    Parameters
    ----------
    crew : does the jobs
    budget : evaluations allowed, other work counted as evaluations; the last few designs are still finished
    most : designs published
    """
    problem = crew.desk.evaluator.problem
    record = Record.of(problem, energy_price_scale(problem))
    record.archive.add(found.rows, found.objectives)
    record.fixed.add(found.fixed_rows, found.fixed_objectives)
    record.kinds = dict(found.kinds)
    polish = Polish(crew, record, budget, most, stop)
    ended = found.ended
    if len(found.rows):
        try:
            polish.run()
            if stop is not None and polish.spent < budget and stop():
                ended = "stopped"
        except KeyboardInterrupt:
            ended = "interrupted"
    archive = record.archive
    better = replace(
        found,
        rows=archive.rows,
        objectives=archive.objectives,
        fixed_rows=record.fixed.rows,
        fixed_objectives=record.fixed.objectives,
        kinds=dict(sorted(record.kinds.items())),
        ended=ended,
    )
    return Polished(better, archive.rows[polish.front(most)], polish.statement())


def changes_left(desk: Desk, rows: IntArray, objectives: FloatArray, how: IntArray) -> Arrays:
    """Job: list the changes of a few decided designs that may dominate them, decided.

    how (1,): 1 to screen them to first order too. The answer: decided rows, their choices before, the place of the
    design each belongs to, and how many were considered, ruled out by cost and by limits, and screened.
    """
    width = desk.changes.layout.choices
    seen = conditions_at(desk, rows) if how[0] else None
    kept, counts = [], np.zeros(4, dtype=np.int64)
    for k, row in enumerate(rows):
        changed, rail = desk.changes.of(row[:width])
        out = desk.screen.sort(row, objectives[k], None if seen is None else one_of(seen, k), changed, rail)
        counts += [len(changed), out.costs_more.sum(), out.impossible.sum(), out.not_worth.sum()]
        kept.append(changed[~(out.costs_more | out.impossible | out.not_worth)])
    owner = np.repeat(np.arange(len(rows)), [len(each) for each in kept])
    choices = np.concatenate(kept)
    decided, place = no_dearer(desk, choices, objectives[owner, 1])
    counts[1] += len(choices) - len(place)
    here = np.asarray(place, dtype=np.int64)
    return decided, choices[here], owner[here], counts


def no_dearer(desk: Desk, choices: IntArray, cost: FloatArray) -> Arrays:
    """Job: decide choices (n, C) and return those rows that cost no more than ``cost`` (n,), and their places."""
    layout = desk.evaluator.problem.layout
    parts = []
    for start in range(0, len(choices), desk.size):
        index = np.arange(start, min(start + desk.size, len(choices)))
        padded = index[np.minimum(np.arange(desk.size), len(index) - 1)]
        undecided = np.zeros((desk.size, layout.width), dtype=np.int64)
        undecided[:, : choices.shape[1]] = choices[padded]
        parts.append(desk.evaluator.decide(undecided)[: len(index)])
    rows = np.concatenate(parts) if parts else np.zeros((0, layout.width), dtype=np.int64)
    place = np.flatnonzero(bill(desk.evaluator.problem, Designs(layout, rows)).total <= cost * (1.0 + TIE))
    return rows[place], place


def conditions_at(desk: Desk, rows: IntArray) -> Conditions:
    """Return what the rails of decided designs find on their buses."""
    one = np.ones(len(rows))
    plan = desk.genome.decode(desk.genome.encode(rows, one, 0.02 * one, np.zeros(len(rows), dtype=np.int64)))
    designs = Designs(desk.evaluator.problem.layout, rows)
    return conditions_of(desk.evaluator, designs, first_conditions(desk.evaluator, plan))


def together_of(
    choices: IntArray, objectives: FloatArray, changed: IntArray, found: FloatArray
) -> IntArray | None:
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
    return row if made > 1 else None


def digest(row: IntArray) -> bytes:
    """Return a short name of a decided row."""
    return hashlib.blake2b(row.tobytes(), digest_size=16).digest()


def one_of(seen: Conditions, k: int) -> Conditions:
    """Return the conditions of one of several designs."""
    names = ("volts", "top_volts", "dipped", "marginal", "parent_marginal")
    return Conditions(*(getattr(seen, name)[k : k + 1] for name in names))
