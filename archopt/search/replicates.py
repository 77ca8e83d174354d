"""Several searches of one problem, alike but for the seed: what they find together, and how far they differ.

One search says nothing of its luck. Replicates with seeds of their own are merged into one archive, which is
never worse than any of them, and their spread tells what another seed might have found.
"""

from __future__ import annotations

import hashlib
from collections.abc import Callable, Mapping
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
from numpy.typing import NDArray

from archopt.model.evaluator import Evaluator
from archopt.model.problem import Problem
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.search.checkpoint import Checkpoint, Facts, Keeper
from archopt.search.driver import crew_for, search
from archopt.search.genome import energy_price_scale
from archopt.search.indicator import Scale
from archopt.search.outcome import NO_GROWTH, Progress, SearchResult, found_again, state_of
from archopt.search.record import BestOfKind, Record, score_of
from archopt.search.workers import Crew


@dataclass(frozen=True)
class Settings:
    """What a search is to be. ``seed`` is the first replicate's; each further one takes the next number."""

    evaluations: int
    population: int
    seed: int
    stagnation_generations: int
    replicates: int = 1


def facts_of(problem: Problem, settings: Settings, versions: Mapping[str, str]) -> Facts:
    """Return what a run must agree in with another to go on from its state: the problem, the budget, the program."""
    digest = hashlib.sha256()
    for name, values in zip(problem.space.names, problem.space.allowed, strict=True):
        digest.update(f"{name} {values.tolist()}\n".encode())
    states = problem.states
    for numbers in (states.hours, states.current_a, states.input_v, problem.grid_v, problem.parts.price):
        digest.update(np.ascontiguousarray(numbers).tobytes())
    return {
        "study hash": problem.study.study_hash,
        "catalogue hash": problem.catalogue.content_hash,
        "compiled problem hash": digest.hexdigest(),
        "seed": settings.seed,
        "evaluations": settings.evaluations,
        "population": settings.population,
        "stagnation generations": settings.stagnation_generations,
        "replicates": settings.replicates,
        **{f"version of {name}": version for name, version in versions.items()},
    }


@dataclass(frozen=True)
class Replicated:
    """What replicates found: together, and each (in the order of seeds; the last may have been stopped)."""

    together: SearchResult
    each: tuple[SearchResult, ...]
    seeds: tuple[int, ...]


def search_all(
    evaluator: Evaluator,
    settings: Settings,
    *,
    seeds_rows: IntArray | None = None,
    progress: Callable[[Progress], None] | None = None,
    stop: Callable[[], bool] | None = None,
    keeper: Keeper | None = None,
    resume: Checkpoint | None = None,
    crew: Crew | None = None,
) -> Replicated:
    """Search a problem once for each replicate, one after another, and merge what they find.

    Replicates already done when the state to resume was put by are not repeated. A ``crew`` may do the jobs in
    several processes.

    Raises
    ------
    OutputError : a state that does not fit this problem
    """
    hands = crew_for(evaluator, settings.population) if crew is None else crew
    done, current = ([], None) if resume is None else taken_up(resume.state)
    while len(done) < settings.replicates and not (done and done[-1].ended in EARLY):
        number = len(done)
        found = search(
            evaluator,
            evaluations=settings.evaluations,
            population=settings.population,
            seed=settings.seed + number,
            stagnation_generations=settings.stagnation_generations,
            seeds_rows=seeds_rows,
            progress=None if progress is None else lambda state: progress(in_all(state, done, settings)),
            stop=stop,
            keep=None if keeper is None else Put(keeper, done),
            resume=current,
            crew=hands,
        )
        current = None
        done.append(found)
    return Replicated(merged(evaluator, done), tuple(done), tuple(settings.seed + k for k in range(len(done))))


EARLY = ("stopped", "time spent", "interrupted")


@dataclass(frozen=True)
class Put:
    """Offers a search's state to a keeper together with the replicates done before it."""

    keeper: Keeper
    done: list[SearchResult]

    def __call__(
        self, evaluations: int, state: Callable[[], dict[str, NDArray[Any]]], *, at_once: bool = False
    ) -> bool:
        """Put by if it is time, or ``at_once``; return whether it was."""
        reached = {
            "replicate": len(self.done),
            "evaluations": evaluations + sum(found.evaluations for found in self.done),
        }
        return self.keeper.offer(reached, lambda: self.everything(state()), at_once=at_once)

    def everything(self, state: Mapping[str, NDArray[Any]]) -> dict[str, NDArray[Any]]:
        """Return the arrays of the replicates done and of the one in progress."""
        kept = {f"now.{name}": values for name, values in state.items()}
        for number, found in enumerate(self.done):
            kept |= {f"done{number}.{name}": values for name, values in state_of(found).items()}
        return kept


def taken_up(state: Mapping[str, NDArray[Any]]) -> tuple[list[SearchResult], dict[str, NDArray[Any]] | None]:
    """Return the replicates done, and the state of the one in progress, which may have come to its end."""
    parts: dict[str, dict[str, NDArray[Any]]] = {}
    for name, values in state.items():
        part, _, rest = name.partition(".")
        parts.setdefault(part, {})[rest] = values
    done = [found_again(parts[f"done{number}"]) for number in range(sum(part != "now" for part in parts))]
    return done, parts.get("now")


def in_all(state: Progress, done: list[SearchResult], settings: Settings) -> Progress:
    """Return a search's progress as that of all replicates: designs tried, and time left at its pace."""
    later = settings.replicates - len(done) - 1
    tried = max(state.evaluations, 1)
    pace_s = state.seconds_left / max(state.budget - tried, 1) if state.budget > tried else state.seconds / tried
    return replace(
        state,
        evaluations=state.evaluations + sum(found.evaluations for found in done),
        feasible=state.feasible + sum(found.feasible for found in done),
        seconds_left=state.seconds_left + later * settings.evaluations * pace_s,
        budget=settings.replicates * settings.evaluations,
        replicate=len(done),
        replicates=settings.replicates,
    )


def merged(evaluator: Evaluator, each: list[SearchResult]) -> SearchResult:
    """Return what several searches found as if one had: the nondominated of all, the best of every topology."""
    if len(each) == 1:
        return each[0]
    record = Record.of(evaluator.problem, energy_price_scale(evaluator.problem))
    for found in each:
        record.archive.add(found.rows, found.objectives)
        record.fixed.add(found.fixed_rows, found.fixed_objectives)
    least = min(each, key=lambda found: found.least_violation)
    # a limit that some replicate met is none that no design met
    never = set.intersection(*(set(found.excess) for found in each))
    excess = {
        name: min(found.excess[name] for found in each) for name in each[0].excess if name in never
    }
    return SearchResult(
        rows=record.archive.rows,
        objectives=record.archive.objectives,
        fixed_rows=record.fixed.rows,
        fixed_objectives=record.fixed.objectives,
        evaluations=sum(found.evaluations for found in each),
        feasible=sum(found.feasible for found in each),
        generations=min(found.generations for found in each),
        seconds=sum(found.seconds for found in each),
        ended=ended_of([found.ended for found in each]),
        least_row=least.least_row,
        least_violation=least.least_violation,
        excess=excess,
        kinds=best_kinds(each, record.price),
        history=each[-1].history,
    )


def ended_of(each: list[str]) -> str:
    """Return why several searches ended: early where the last one did, else by growth only where all did."""
    if each[-1] in EARLY:
        return each[-1]
    return NO_GROWTH if all(ended == NO_GROWTH for ended in each) else "budget spent"


def best_kinds(each: list[SearchResult], price: float) -> dict[str, BestOfKind]:
    """Return the best design of every topology over several searches; of equals the first search's."""
    kinds: dict[str, BestOfKind] = {}
    for found in each:
        for name, best in found.kinds.items():
            if name not in kinds or score_of(best, price) < score_of(kinds[name], price):
                kinds[name] = best
    return dict(sorted(kinds.items()))


@dataclass(frozen=True)
class Spread:
    """How far replicates differ: for each its share of the hypervolume of all together, and of the published front.

    seeds, hypervolume, published: one a replicate; hypervolume is scaled by the ideal and nadir of all together,
    reference point 1.1 in each, as a share of that of all together; published is the share of the designs of the
    published front that this replicate had found itself; polished the share none had, which came of polishing.
    """

    seeds: tuple[int, ...]
    hypervolume: FloatArray
    published: FloatArray
    polished: float

    def as_dict(self) -> dict[str, Any]:
        """Return plain data for the record of the run."""
        low, middle, high = np.quantile(self.hypervolume, [0.0, 0.5, 1.0])
        return {
            "seeds": list(self.seeds),
            "hypervolume_share": [float(value) for value in self.hypervolume],
            "hypervolume_share_least": float(low),
            "hypervolume_share_median": float(middle),
            "hypervolume_share_most": float(high),
            "published_share": [float(value) for value in self.published],
            "polished_share": self.polished,
        }

    def words(self) -> str:
        """Return the spread as a remark."""
        low, middle, high = 100.0 * np.quantile(self.hypervolume, [0.0, 0.5, 1.0])
        shares = ", ".join(
            f"{100.0 * value:.0f} % (seed {seed})" for seed, value in zip(self.seeds, self.published, strict=True)
        )
        rest = f", and {100.0 * self.polished:.0f} % came of polishing" if self.polished else ""
        return (
            f"{len(self.seeds)} replicates were searched. Alone each reached {low:.2f} % to {high:.2f} % (median"
            f" {middle:.2f} %) of the hypervolume of all together. Of the published front each had found"
            f" {shares}{rest}."
        )


def spread(replicated: Replicated, published: IntArray) -> Spread | None:
    """Return how far replicates differ, given the published rows (P, columns); None for a single search."""
    together = replicated.together.objectives
    if len(replicated.each) < 2 or not len(together):
        return None
    scale = Scale.of(together)
    whole = scale.hypervolume(together)
    volume = np.array([scale.hypervolume(found.objectives) / whole for found in replicated.each])
    own = np.array([held(found, published) for found in replicated.each])  # (replicates, P)
    share = own.sum(axis=1) / max(len(published), 1)
    return Spread(replicated.seeds, volume, share, float((~own.any(axis=0)).sum() / max(len(published), 1)))


def held(found: SearchResult, rows: IntArray) -> BoolArray:
    """Return which design rows are in a search's archive, (P,)."""
    known = {row.tobytes() for row in found.rows.astype(np.int64)}
    return np.array([row.tobytes() in known for row in rows.astype(np.int64)], dtype=np.bool_)
