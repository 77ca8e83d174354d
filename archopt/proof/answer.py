"""How far a front may be trusted: every design of a small space gone through, or a large one bracketed from outside."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass

from archopt.model.evaluator import Evaluator
from archopt.model.problem import Problem
from archopt.model.space import BOARD_FIELDS, BUS_FIELDS, RAIL_FIELDS
from archopt.physics.arrays import IntArray
from archopt.proof.bound import OuterBound, outer_bound
from archopt.proof.enumerate import (
    Comparison,
    Enumeration,
    compare,
    enumerate_designs,
    possible_choices,
    timed_sample,
)
from archopt.proof.representatives import LIMIT, Representatives, combinations, representatives
from archopt.search.driver import Progress, crew_for, search
from archopt.search.outcome import SearchResult
from archopt.search.polish import polished
from archopt.search.published import PUBLISHED
from archopt.search.replicates import EARLY

HOPED = 100  # ruling out leaves at best this share of a space, where it is worth trying


@dataclass(frozen=True)
class Room:
    """The size of a space: combinations of allowed values, distinct designs (None: not counted), and pins to shrink it.

    possible: designs left when what meets its limits at no voltage is ruled out, None where not worked out.
    pins: choices by their field, widest first, that pinned to one value each leave no more combinations than can be
    gone through; left: what they leave.
    """

    combinations: int
    designs: int | None
    possible: int | None
    pins: tuple[str, ...]
    left: int

    @property
    def small(self) -> bool:
        """Whether every design can be gone through."""
        return self.possible is not None and self.possible <= LIMIT


@dataclass(frozen=True)
class Budget:
    """How the search that is put to the proof is run; polish is its budget in evaluations, 0 for none."""

    evaluations: int
    population: int
    seed: int
    stagnation_generations: int
    polish: int


@dataclass(frozen=True)
class Proof:
    """What was found out: the exact front and how the search compares, or the outer bound and the share reached.

    reached: hypervolume of the search's front as a share of the bound's; gap: median and largest distance of a found
    design to the bound in energy, at its own cost and droop, as a share of its energy.
    """

    room: Room
    enumeration: Enumeration | None
    found: SearchResult | None
    comparison: Comparison | None
    bound: OuterBound | None
    reached: float
    gap: tuple[float, float]


def room_of(evaluator: Evaluator) -> tuple[Room, Representatives | None]:
    """Return the size of a space, and the representatives to go through where that can be done."""
    problem = evaluator.problem
    laid = representatives(problem)
    whole = combinations(problem)
    pins, left = pins_that_help(problem)
    if laid is None or len(laid) > HOPED * LIMIT:
        return Room(whole, None if laid is None else len(laid), None, pins, left), None
    kept = representatives(problem, possible_choices(evaluator))
    return Room(whole, len(laid), None if kept is None else len(kept), pins, left), kept


def pins_that_help(problem: Problem) -> tuple[tuple[str, ...], int]:
    """Return fields, widest first, that pinned to one value each bring a space within reach, and what they leave."""
    layout, allowed = problem.layout, problem.space.allowed
    groups: dict[str, list[int]] = {}
    for field in RAIL_FIELDS:
        columns = layout.rail(field)
        groups[f"{field} of every rail"] = list(range(columns.start, columns.stop))
    for field in BUS_FIELDS:
        columns = layout.bus(field)
        groups[f"{field} of every bus"] = list(range(columns.start, columns.stop))
    for field in BOARD_FIELDS:
        groups[f"board.{field}"] = [layout.board(field)]
    sizes = {name: math.prod(max(len(allowed[c]), 1) for c in columns) for name, columns in groups.items()}
    left = combinations(problem)
    pins = []
    for name in sorted(sizes, key=lambda name: -sizes[name]):
        if left <= LIMIT or sizes[name] == 1:
            break
        pins.append(name)
        left //= sizes[name]
    return tuple(pins), left


def put_to_proof(
    evaluator: Evaluator,
    budget: Budget,
    *,
    seeds_rows: IntArray | None = None,
    workers: int | None = None,
    estimated: Callable[[Room, float], None] | None = None,
    covered: Callable[[Enumeration], None] | None = None,
    searched: Callable[[Progress], None] | None = None,
    stop: Callable[[], bool] | None = None,
) -> Proof:
    """Go through a space where it is small enough, bound it where it is not, and set the search's front beside it.

    Parameters
    ----------
    budget : of the search; an interrupted enumeration is not followed by one
    seeds_rows : designs the search starts from, undecided
    workers : processes the enumeration takes
    estimated, covered, searched : told the size and the seconds expected, the enumeration's and the search's progress
    stop : asked between blocks and generations
    """
    room, laid = room_of(evaluator)
    if laid is None or not room.small:
        if estimated is not None:
            estimated(room, math.nan)
        bound = outer_bound(evaluator)
        found = run_search(evaluator, budget, seeds_rows, searched, stop)
        if not len(found.rows):
            return Proof(room, None, found, None, bound, 0.0, (math.nan, math.nan))
        return Proof(room, None, found, None, bound, bound.share(found.objectives), bound.gap(found.objectives))
    if estimated is not None:
        estimated(room, timed_sample(evaluator, laid).seconds(workers or 1))
    enumeration = enumerate_designs(evaluator, laid, workers=workers, told=covered, stop=stop)
    nothing = (math.nan, math.nan)
    if not enumeration.complete or not len(enumeration.rows):
        return Proof(room, enumeration, None, None, None, math.nan, nothing)
    found = run_search(evaluator, budget, seeds_rows, searched, stop)
    comparison = compare(enumeration.objectives, found.objectives)
    return Proof(room, enumeration, found, comparison, None, comparison.share, nothing)


def run_search(
    evaluator: Evaluator,
    budget: Budget,
    seeds_rows: IntArray | None = None,
    searched: Callable[[Progress], None] | None = None,
    stop: Callable[[], bool] | None = None,
) -> SearchResult:
    """Search and polish as a study is solved."""
    with crew_for(evaluator, budget.population) as crew:
        found = search(
            evaluator,
            evaluations=budget.evaluations,
            population=budget.population,
            seed=budget.seed,
            stagnation_generations=budget.stagnation_generations,
            seeds_rows=seeds_rows,
            progress=searched,
            stop=stop,
            crew=crew,
        )
        if budget.polish and len(found.rows) and found.ended not in EARLY:
            found = polished(crew, found, budget=budget.polish, most=PUBLISHED, stop=stop).found
    return found
