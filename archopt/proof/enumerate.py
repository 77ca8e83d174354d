"""Every design of a small space evaluated: the exact front, in bounded memory, over any number of processes.

The space is cut into blocks of one fixed size that are taken in one fixed scattered order, whatever the number of
processes, so that the result is the same to the last bit and an interrupted run has seen a fair part of everything.
"""

from __future__ import annotations

import math
import multiprocessing
import os
import signal
import time
from collections import deque
from collections.abc import Callable, Iterator
from concurrent.futures import Future, ProcessPoolExecutor
from dataclasses import dataclass, field

import numpy as np
from moocore import is_nondominated

from archopt.model.evaluator import Evaluator
from archopt.model.problem import Problem
from archopt.model.space import FIXED, INPUT, PARENT, Designs
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.proof.bound_parts import least_unit_cost
from archopt.proof.bound_rails import DIRECT, RAIL, RailMaker, make_slots
from archopt.proof.representatives import Possible, Representatives, hopeless
from archopt.search.archive import Archive, significant
from archopt.search.indicator import share

BLOCK = 4096
BATCH = 512
SAMPLE_BLOCKS = 3
GOLDEN = 0.6180339887498949
ENERGY_MATCH, COST_MATCH, DROOP_MATCH_PERCENT = 0.003, 0.003, 2.0
MATCH_OF_EACH = np.array([ENERGY_MATCH, COST_MATCH, DROOP_MATCH_PERCENT])


@dataclass(frozen=True)
class Block:
    """One block evaluated: its own front, and how many representatives became what.

    folded: decided to a design that another representative stands for; hopeless: broke a limit on sight.
    """

    rows: IntArray
    objectives: FloatArray
    covered: int
    hopeless: int
    folded: int
    evaluated: int
    feasible: int


@dataclass
class Enumeration:
    """What is known of a space: its exact front as far as covered, and counts of representatives."""

    total: int
    rows: IntArray
    objectives: FloatArray
    covered: int = 0
    hopeless: int = 0
    folded: int = 0
    evaluated: int = 0
    feasible: int = 0
    seconds: float = 0.0

    @property
    def complete(self) -> bool:
        """Whether every design was covered."""
        return self.covered == self.total


@dataclass(frozen=True)
class Comparison:
    """How well a found front stands for the exact one.

    share: hypervolume, scaled by the exact front; missed: exact designs not found to the digit; far: those that no
    found design matches; worst: the largest of the three distances of any exact design to the found design nearest
    to it, in units of a match (0.3 % of energy, 0.3 % of cost, one droop step), and energy, cost (shares) and droop
    (% of budget) of that distance. behind: the most any exact design is better, in all objectives, than the found
    design that comes nearest to being as good, in matches: up to 1, some found design is as good within a match.
    """

    share: float
    exact: int
    missed: int
    far: int
    worst: float
    worst_energy: float
    worst_cost: float
    worst_droop: float
    behind: float


def gaps_in_units(exact: FloatArray, found: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return how far every exact design is from every found one: energy and cost as shares and droop, and in matches.

    Shapes (exact, found, 3) and (exact, found): the largest of the three in units of a match.
    """
    gaps = np.abs(found[None] - exact[:, None])
    gaps[:, :, :2] /= exact[:, None, :2]
    return gaps, (gaps / MATCH_OF_EACH).max(axis=2)


def nearest_units(exact: FloatArray, found: FloatArray) -> FloatArray:
    """Return how many matches each exact design is from the nearest found one, (exact,): 0 found, up to 1 matched."""
    return np.asarray(gaps_in_units(exact, found)[1].min(axis=1))


def compare(exact: FloatArray, found: FloatArray) -> Comparison:
    """Return how well a found front stands for the exact front, both (designs, 3) and not empty of exact designs."""
    if not len(found):
        return Comparison(0.0, len(exact), len(exact), len(exact), math.inf, math.inf, math.inf, math.inf, math.inf)
    gaps, units = gaps_in_units(exact, found)
    lacking = np.where(found[None] > exact[:, None], gaps / MATCH_OF_EACH, 0.0)
    nearest = units.argmin(axis=1)
    distance = units[np.arange(len(exact)), nearest]
    worst = int(distance.argmax())
    energy, cost, droop = (float(value) for value in gaps[worst, nearest[worst]])
    return Comparison(
        share=share(found, exact),
        exact=len(exact),
        missed=int((distance > 1e-6).sum()),
        far=int((distance > 1.0 + 1e-9).sum()),
        worst=float(distance[worst]),
        worst_energy=energy,
        worst_cost=cost,
        worst_droop=droop,
        behind=float(lacking.max(axis=2).min(axis=1).max()),
    )


def block_order(total: int) -> IntArray:
    """Return the order blocks are taken in: scattered by the golden section, the same for everybody."""
    count = -(-total // BLOCK)
    place = np.arange(count) * GOLDEN
    return np.asarray(np.argsort(place - np.floor(place), kind="stable")).argsort(kind="stable")


def run_block(evaluator: Evaluator, designs: Representatives, number: int) -> Block:
    """Evaluate one block of the space."""
    problem = evaluator.problem
    rows = designs.rows(number * BLOCK, (number + 1) * BLOCK)
    covered = len(rows)
    rows = rows[~hopeless(problem, rows)]
    decided, kept = to_evaluate(evaluator, rows)
    fronts: list[tuple[IntArray, FloatArray]] = []
    feasible = 0
    for start in range(0, len(decided), BATCH):
        found = evaluator.evaluate(decided[start : start + BATCH])
        good = found.feasible
        feasible += len(good)
        fronts.append((found.rows[good], significant(found.objectives[good])))
    width = problem.layout.width
    front_rows = np.concatenate([each[0] for each in fronts]) if fronts else np.zeros((0, width), dtype=np.int64)
    values = np.concatenate([each[1] for each in fronts]) if fronts else np.zeros((0, 3))
    keep = is_nondominated(values, keep_weakly=True) if len(values) else np.zeros(0, dtype=bool)
    return Block(
        rows=front_rows[keep],
        objectives=values[keep],
        covered=covered,
        hopeless=covered - len(rows),
        folded=len(rows) - kept,
        evaluated=len(decided),
        feasible=feasible,
    )


def to_evaluate(evaluator: Evaluator, rows: IntArray) -> tuple[IntArray, int]:
    """Return the decided designs of representatives that this block must evaluate, and how many they are.

    Deciding may turn a representative into another design: limits are drawn in to those the schedule uses, a bus
    that never moves becomes a fixed one. Where that design is a representative itself and deciding it changes
    nothing, its own block evaluates it. What is left without a home of its own is evaluated here, once.
    """
    problem = evaluator.problem
    if not len(rows):
        return rows, 0
    decided = decide_all(evaluator, rows)
    choices = problem.layout.choices
    own = (decided[:, :choices] == rows[:, :choices]).all(axis=1)
    strangers = distinct(decided[~own])
    homes = np.flatnonzero(on_offer(problem, strangers))
    if len(homes):
        again = decide_all(evaluator, strangers[homes])
        settled = (again == strangers[homes]).all(axis=1)
        strangers = np.delete(strangers, homes[settled], axis=0)
    kept = np.concatenate([decided[own], strangers])
    return kept, len(kept)


def decide_all(evaluator: Evaluator, rows: IntArray) -> IntArray:
    """Return rows decided, a batch at a time."""
    parts = [evaluator.decide(rows[start : start + BATCH]) for start in range(0, len(rows), BATCH)]
    return np.concatenate(parts) if parts else rows


def distinct(rows: IntArray) -> IntArray:
    """Return rows without repeats, in order of first appearance."""
    if not len(rows):
        return rows
    keys = np.ascontiguousarray(rows).view(np.dtype((np.void, rows.dtype.itemsize * rows.shape[1]))).ravel()
    _, first = np.unique(keys, return_index=True)
    return rows[np.sort(first)]


def on_offer(problem: Problem, rows: IntArray) -> BoolArray:
    """Return which decided designs are ones the space offers as they stand, (P,).

    Deciding changes only what is looked at here: nominal voltage, control, limits and fewest running of a bus, the
    fewest phases running, bias supply and supervisor. A neutral value (limits of a fixed bus, nothing where nothing
    is needed) is one the canonical form gives and needs no offer.
    """
    designs, layout = Designs(problem.layout, rows), problem.layout
    out = np.ones(len(rows), dtype=bool)
    for bus in range(2):
        used = designs.bus("count")[:, bus] > 0
        sets = used & (designs.bus("nominal_v")[:, bus] + designs.bus("upper_v")[:, bus] > 0)
        moves = sets & (designs.bus("control")[:, bus] != FIXED)
        many = used & (designs.bus("count")[:, bus] > 1)
        needs = (("nominal_v", sets), ("control", sets), ("lower_v", moves), ("upper_v", moves), ("fewest", many))
        for name, applies in needs:
            allowed = problem.space.allowed[layout.bus(name).start + bus]
            out &= ~applies | np.isin(designs.bus(name)[:, bus], allowed)
    for r in range(layout.rails):
        allowed = problem.space.allowed[layout.rail("fewest").start + r]
        out &= (designs.rail("phases")[:, r] == 1) | np.isin(designs.rail("fewest")[:, r], allowed)
    needed = designs.board("bias") > 0
    for name, applies in (("bias", needed), ("bias_feed", needed), ("supervisor", designs.board("supervisor") > 0)):
        out &= ~applies | np.isin(designs.board(name), problem.space.allowed[layout.board(name)])
    return out


def possible_choices(evaluator: Evaluator) -> Possible:
    """Return which choices of a rail may meet their own limits: duty, droop, output ripple at some voltage of a feed.

    Told by the lower bounds of the outer bound, which hold on any board; the rest breaks a limit on every one.
    """
    problem = evaluator.problem
    slots = make_slots(evaluator)
    maker = RailMaker(evaluator, slots, least_unit_cost(problem))
    sizes = (64, 2, len(problem.capacitors.names), len(problem.bank_counts))

    def numbered(columns: tuple[IntArray, ...]) -> IntArray:
        out = columns[0].astype(np.int64)
        for column, size in zip(columns[1:], sizes, strict=True):
            out = out * size + column
        return out

    rails = [maker.options(r) for r in range(problem.layout.rails)]
    numbers = [
        numbered((r.stage[r.option], r.phases[r.option], r.fewest[r.option], r.bank, r.count)) for r in rails
    ]

    def possible(r: int, feed: int, choices: IntArray) -> BoolArray:
        if feed >= PARENT:
            feeding = (slots.kind == RAIL) & (slots.of == feed - PARENT)
        else:
            feeding = slots.kind == DIRECT if feed == INPUT else slots.on_bus
        kept = numbers[r][rails[r].possible(slots, feeding)]
        return np.isin(numbered(tuple(choices.T)), kept)

    return possible


@dataclass
class Seat:
    """What a worker process holds between blocks."""

    evaluator: Evaluator | None = None
    designs: Representatives | None = None


_SEAT = Seat()


def take_seat(evaluator: Evaluator, designs: Representatives) -> None:
    """Prepare a worker process: it holds the tables and leaves interrupts to the process that asked."""
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    _SEAT.evaluator, _SEAT.designs = evaluator, designs


def seated_block(number: int) -> Block:
    """Evaluate one block in a worker process."""
    if _SEAT.evaluator is None or _SEAT.designs is None:
        raise RuntimeError("a worker needs its tables first")
    return run_block(_SEAT.evaluator, _SEAT.designs, number)


def blocks(evaluator: Evaluator, designs: Representatives, numbers: IntArray, workers: int) -> Iterator[Block]:
    """Yield blocks in the given order, evaluated here or by worker processes; few are ever in flight."""
    if workers <= 1:
        for number in numbers:
            yield run_block(evaluator, designs, int(number))
        return
    context = multiprocessing.get_context("spawn")
    pool = ProcessPoolExecutor(workers, context, initializer=take_seat, initargs=(evaluator, designs))
    waiting: deque[Future[Block]] = deque()
    ahead = iter(numbers)
    try:
        while True:
            for number in ahead:
                waiting.append(pool.submit(seated_block, int(number)))
                if len(waiting) >= 2 * workers:
                    break
            if not waiting:
                return
            yield waiting.popleft().result()
    finally:
        pool.shutdown(wait=True, cancel_futures=True)


@dataclass
class Pace:
    """A timed sample of a space: seconds one block takes one process."""

    seconds_per_block: float
    blocks: int
    sampled: list[Block] = field(default_factory=list)

    def seconds(self, workers: int) -> float:
        """Return the estimate for the whole space."""
        return self.seconds_per_block * self.blocks / max(workers, 1)


def timed_sample(evaluator: Evaluator, designs: Representatives) -> Pace:
    """Time the first few blocks of the scattered order."""
    order = block_order(len(designs))
    began = time.perf_counter()
    sampled = [run_block(evaluator, designs, int(number)) for number in order[:SAMPLE_BLOCKS]]
    spent = (time.perf_counter() - began) / max(len(sampled), 1)
    return Pace(spent, len(order), sampled)


def enumerate_designs(
    evaluator: Evaluator,
    designs: Representatives,
    *,
    workers: int | None = None,
    told: Callable[[Enumeration], None] | None = None,
    stop: Callable[[], bool] | None = None,
) -> Enumeration:
    """Evaluate every representative and return the exact front, the same for any number of processes.

    Stopped or interrupted it returns what it has covered so far.
    """
    began = time.monotonic()
    archive = Archive(evaluator.problem.layout.width)
    known = Enumeration(len(designs), archive.rows, archive.objectives)
    order = block_order(len(designs))
    count = min(os.cpu_count() or 1, len(order)) if workers is None else workers
    try:
        for block in blocks(evaluator, designs, order, count):
            archive.add(block.rows, block.objectives)
            for name in ("covered", "hopeless", "folded", "evaluated", "feasible"):
                setattr(known, name, getattr(known, name) + getattr(block, name))
            known.seconds = time.monotonic() - began
            if told is not None:
                told(known)
            if stop is not None and stop():
                break
    except KeyboardInterrupt:
        pass
    known.rows, known.objectives = archive.rows, archive.objectives
    known.seconds = time.monotonic() - began
    return known
