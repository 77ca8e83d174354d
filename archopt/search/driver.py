"""The search: our own ask and tell loop over bus genomes, completion, evaluation and the archive."""

from __future__ import annotations

import time
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from moocore import is_nondominated
from numpy.typing import NDArray

from archopt.errors import OutputError
from archopt.model.evaluator import Evaluation, Evaluator
from archopt.model.space import BUS_FIELDS
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.engine import Engine, generator_from_words, generator_words
from archopt.search.genome import LEAST_COPPER, LEAST_PRICE, MOST_COPPER, MOST_PRICE
from archopt.search.indicator import Stagnation
from archopt.search.jobs import (
    EVALUATION_ARRAYS,
    Arrays,
    Desk,
    completed,
    consolidated,
    decided,
    evaluated,
    evaluation_of,
    folded,
)
from archopt.search.local import Neighbours
from archopt.search.outcome import NO_GROWTH, Keep, Progress, SearchResult, progress_of, result_of
from archopt.search.rail_tables import CAPS
from archopt.search.record import Record
from archopt.search.seeds import converters_by_kind, give_other_converter, heuristic_genomes
from archopt.search.workers import Crew, Job, Ticket

LEAST_POPULATION = 8
FORGET_SHARE = 0.5  # of genomes that keep only the approved parts they used
OTHER_SHARE = 0.25  # of those get another bus converter
SUITED_OF_A_KIND = 4
FAN_SHARE = 0.2  # of completed genomes that come from the archive at other prices
CONSOLIDATE_EVERY = 4
CONSOLIDATED = 4
LOCAL_SHARE = 0.2  # batches of neighbours a batch of completed genomes
FOLD_EVERY = 3
FOLDED = 2  # archived designs folded around each time

# What errands do, and how many generations later they are taken: consolidation is several batches long.
ERRANDS: dict[str, tuple[Job, int]] = {
    "local": (decided, 1),
    "fold": (folded, 1),
    "consolidation": (consolidated, 3),
}


@dataclass(frozen=True)
class Errand:
    """A job handed in and not yet taken back; ``due`` is the generation that takes it.

    Which process has done it, and when, makes no difference: it is taken at a fixed place.
    """

    source: str
    due: int
    given: Arrays
    ticket: Ticket


class Search:
    """One search in progress; :func:`search` runs it to its end.

    crew: does the jobs; without one they are all done here, at batches of the population.
    """

    def __init__(
        self,
        evaluator: Evaluator,
        *,
        population: int,
        seed: int,
        seeds_rows: IntArray | None = None,
        crew: Crew | None = None,
    ) -> None:
        self.evaluator = evaluator
        self.population = max(population, LEAST_POPULATION)
        self.crew = crew_for(evaluator, population) if crew is None else crew
        if self.crew.desk.size != self.population:
            raise ValueError(f"a crew for batches of {self.crew.desk.size} does not fit {self.population} genomes")
        self.genome = self.crew.desk.genome
        self.record = Record.of(evaluator.problem, self.genome.scale)
        self.rng = np.random.default_rng([seed, 1])
        self.given = np.zeros((0, evaluator.problem.layout.width), dtype=np.int64)
        seeds = heuristic_genomes(self.genome, self.population // 2)
        if seeds_rows is not None and len(seeds_rows):
            self.given = evaluator.decide(seeds_rows)
            one = np.ones(len(self.given))
            own = self.genome.encode(self.given, one, 0.02 * one, np.full(len(one), len(CAPS) - 1))
            seeds = np.concatenate([own, seeds])[: self.population]
        self.neighbours = Neighbours(evaluator.problem)
        self.engine = Engine(self.genome.genes, self.population, seed, seeds=seeds)
        self.kinds = converters_by_kind(self.genome, SUITED_OF_A_KIND)
        self.generation = 0
        self.owed = 0.0
        self.credit: dict[str, tuple[int, int]] = {}
        self.errands: list[Errand] = []

    def note(self, found: Evaluation, source: str) -> None:
        """Keep what evaluated designs show."""
        entered = self.record.add(found, len(found.rows)) if len(found.rows) else 0
        tried, won = self.credit.get(source, (0, 0))
        self.credit[source] = (tried + len(found.rows), won + entered)

    def step(self) -> None:
        """Advance by one generation: completed genomes, and what errands of earlier ones have found."""
        if self.generation == 0 and len(self.given):
            self.note(evaluation_of(self.crew.take(self.crew.submit(evaluated, self.given))), "given")
        genomes = self.fan(self.engine.ask())
        found = evaluation_of(self.crew.take(self.crew.submit(completed, genomes)))
        self.note(found, "completion")
        learned = self.genome.learn(genomes, found.rows, self.rng.random(len(genomes)) < FORGET_SHARE)
        objectives, violation = found.objectives.copy(), found.violation.copy()
        if self.generation % CONSOLIDATE_EVERY == CONSOLIDATE_EVERY - 1:
            self.consolidate(genomes, learned, found)
        for errand in self.due(self.generation):
            self.bring_home(errand, objectives, violation, learned)
        self.engine.tell(objectives, violation, learned)
        if self.generation % FOLD_EVERY == FOLD_EVERY - 1:
            self.fold()
        self.owed += LOCAL_SHARE
        while self.owed >= 1.0:
            self.owed -= 1.0
            self.climb()
        self.generation += 1

    def send(self, source: str, *given: FloatArray | IntArray) -> None:
        """Hand in a job that a later generation takes."""
        job, later = ERRANDS[source]
        self.errands.append(Errand(source, self.generation + later, given, self.crew.submit(job, *given)))

    def due(self, generation: int) -> list[Errand]:
        """Return the errands a generation takes, in the order they were sent; the others stay."""
        here = [errand for errand in self.errands if errand.due <= generation]
        self.errands = [errand for errand in self.errands if errand.due > generation]
        return here

    def bring_home(
        self, errand: Errand, objectives: FloatArray, violation: FloatArray, learned: FloatArray
    ) -> None:
        """Keep what an errand found; genomes it bettered take the places of the worst of this generation."""
        answer = self.crew.take(errand.ticket)
        if errand.source != "consolidation":
            self.note(evaluation_of(answer), errand.source)
            return
        (_, genomes, values, excess), rest = answer[:4], answer[-EVALUATION_ARRAYS:]
        self.note(evaluation_of(rest), errand.source)
        places = worst_of(objectives, violation)[: len(genomes)]
        objectives[places], violation[places], learned[places] = values, excess, genomes

    def finish(self) -> None:
        """Take what errands still have out when no generation will."""
        for errand in self.due(self.generation + max(later for _, later in ERRANDS.values())):
            answer = self.crew.take(errand.ticket)
            self.note(evaluation_of(answer[-EVALUATION_ARRAYS:]), errand.source)

    def fan(self, genomes: FloatArray) -> FloatArray:
        """Return genomes of which a share is archived designs at other prices, caps and approved parts."""
        archive = self.record.archive
        count = int(FAN_SHARE * len(genomes))
        if not len(archive) or not count:
            return genomes
        rng, genome = self.rng, self.genome
        picked = rng.choice(len(archive), size=count, p=loneliness(archive.objectives))
        price = np.exp(rng.uniform(np.log(LEAST_PRICE), np.log(MOST_PRICE), count))
        copper = np.exp(rng.uniform(np.log(LEAST_COPPER), np.log(MOST_COPPER), count))
        fanned = genome.encode(archive.rows[picked], price, copper, rng.integers(0, len(CAPS), count))
        # half of them may use any part, half what they use and a tenth of the others
        chance = np.where(rng.random((count, 1)) < 0.5, 1.0, 0.1)
        for places in (genome.stage_place, genome.capacitor_place):
            fanned[:, places] = np.maximum(fanned[:, places], rng.random((count, len(places))) < chance)
        fanned = self.engine.operators.mutate(fanned, rng)
        if self.kinds:
            for seed in fanned[: int(OTHER_SHARE * count)]:
                give_other_converter(genome, seed, self.kinds, rng)
        out = genomes.copy()
        out[-count:] = fanned
        return out

    def climb(self) -> None:
        """Try neighbours of archived designs, the lonely and the new ones first."""
        archive = self.record.archive
        if not len(archive):
            return
        chance = loneliness(archive.objectives)
        picked = self.rng.choice(len(archive), size=self.population, p=chance)
        self.send("local", self.neighbours.draw(archive.rows[picked], self.rng))

    def fold(self) -> None:
        """Fold around a few archived designs of different buses and evaluate what promises to enter the archive."""
        archive = self.record.archive
        if not len(archive):
            return
        held, objectives = archive.rows, archive.objectives
        layout = self.evaluator.problem.layout
        buses = held[:, layout.bus(BUS_FIELDS[0]).start : layout.choices]
        order = self.rng.choice(len(held), size=len(held), replace=False, p=loneliness(objectives))
        _, first = np.unique(buses[order], axis=0, return_index=True)
        picked = order[np.sort(first)[:FOLDED]]
        self.send("fold", held[picked], objectives[picked], objectives)

    def consolidate(self, genomes: FloatArray, learned: FloatArray, found: Evaluation) -> None:
        """Drop part numbers of a few promising designs."""
        front = np.flatnonzero(found.violation <= 0.0)
        if not len(front):
            return
        front = front[is_nondominated(found.objectives[front], keep_weakly=True)]
        here = self.rng.permutation(front)[:CONSOLIDATED]
        self.send(
            "consolidation", genomes[here], learned[here], found.rows[here], found.objectives[here],
            found.violation[here],
        )  # fmt: skip

    def state(self) -> dict[str, NDArray[Any]]:
        """Everything needed to go on bit for bit between two generations, as plain arrays for :meth:`restore`."""
        return {
            **{f"engine.{name}": values for name, values in self.engine.state().items()},
            **{f"record.{name}": values for name, values in self.record.state().items()},
            "generator": generator_words(self.rng),
            "generation": np.array([self.generation], dtype=np.int64),
            "owed": np.array([self.owed]),
            "credit_names": np.array(list(self.credit), dtype=np.str_),
            "credit": np.array(list(self.credit.values()), dtype=np.int64).reshape(-1, 2),
            "errand_sources": np.array([errand.source for errand in self.errands], dtype=np.str_),
            "errand_due": np.array([errand.due for errand in self.errands], dtype=np.int64),
            **{
                f"errand{number}.{place}": values
                for number, errand in enumerate(self.errands)
                for place, values in enumerate(errand.given)
            },
        }

    def restore(self, state: Mapping[str, NDArray[Any]]) -> None:
        """Go on from a :meth:`state` of a search of the same problem, population and seed.

        Raises
        ------
        ValueError : arrays that do not fit this search
        """
        self.engine.restore(part_of(state, "engine"))
        self.record.restore(part_of(state, "record"))
        self.rng = generator_from_words(state["generator"])
        self.generation = int(state["generation"][0])
        self.owed = float(state["owed"][0])
        credit = zip(state["credit_names"], state["credit"], strict=True)
        self.credit = {str(name): (int(tried), int(won)) for name, (tried, won) in credit}
        self.errands = []
        for number, (source, due) in enumerate(zip(state["errand_sources"], state["errand_due"], strict=True)):
            given = tuple(part_of(state, f"errand{number}").values())
            ticket = self.crew.submit(ERRANDS[str(source)][0], *given)
            self.errands.append(Errand(str(source), int(due), given, ticket))


def crew_for(evaluator: Evaluator, population: int, workers: int = 1) -> Crew:
    """Return the crew of searches with a population, in so many processes; a context that ends them."""
    return Crew(Desk.of(evaluator, max(population, LEAST_POPULATION)), workers)


def part_of(state: Mapping[str, NDArray[Any]], part: str) -> dict[str, NDArray[Any]]:
    """Return the arrays of one part of a state, ``part.name`` under ``name``."""
    start = f"{part}."
    return {name.removeprefix(start): values for name, values in state.items() if name.startswith(start)}


def loneliness(objectives: FloatArray) -> FloatArray:
    """Return chances to be picked, (P,): large where a front is sparse, never nought."""
    if len(objectives) < 3:
        return np.full(len(objectives), 1.0 / len(objectives))
    low, high = objectives.min(axis=0), objectives.max(axis=0)
    scaled = (objectives - low) / np.where(high > low, high - low, 1.0)
    gap = np.full(len(scaled), np.inf)
    for start in range(0, len(scaled), 256):
        part = scaled[start : start + 256]
        apart = np.abs(part[:, None, :] - scaled[None, :, :]).max(axis=2)
        apart[np.arange(len(part)), np.arange(start, start + len(part))] = np.inf
        gap[start : start + 256] = apart.min(axis=1)
    weight = np.sqrt(np.minimum(gap, 1.0)) + 0.02
    return np.asarray(weight / weight.sum())


def worst_of(objectives: FloatArray, violation: FloatArray) -> IntArray:
    """Return places from the worst: the most violated, then dominated ones, then the rest, later ones first."""
    feasible = np.flatnonzero(violation <= 0.0)
    score = 2.0 + np.maximum(violation, 0.0)
    score[feasible] = ~is_nondominated(objectives[feasible], keep_weakly=True) if len(feasible) else 0.0
    return np.asarray(np.argsort(-score[::-1], kind="stable") * -1 + len(score) - 1)


def search(
    evaluator: Evaluator,
    *,
    evaluations: int,
    population: int,
    seed: int,
    stagnation_generations: int,
    seeds_rows: IntArray | None = None,
    seconds: float | None = None,
    progress: Callable[[Progress], None] | None = None,
    stop: Callable[[], bool] | None = None,
    keep: Keep | None = None,
    resume: Mapping[str, NDArray[Any]] | None = None,
    crew: Crew | None = None,
) -> SearchResult:
    """Search a problem until the budget is spent, the archive stops growing, or somebody stops it.

    The same problem, budget and seed give the same archive; ``seconds`` and ``stop`` are outside that promise.
    An interrupt from the keyboard ends the search and keeps what it found. After each generation ``keep`` is
    offered the state, and told to take it at the end; a search that goes on from one (``resume``) ends like one
    never stopped. A ``crew`` may do the jobs in several processes, with the same result.

    Raises
    ------
    OutputError : a state to resume that does not fit this search
    """
    began = time.monotonic()
    run = Search(evaluator, population=population, seed=seed, seeds_rows=seeds_rows, crew=crew)
    stagnation = Stagnation(stagnation_generations)
    ended, early, spent_before, tried_before = "", False, 0.0, 0
    if resume is not None:
        ended, spent_before = restore_search(run, stagnation, resume)
        tried_before = run.record.evaluations

    def spent() -> float:
        return spent_before + time.monotonic() - began

    def state() -> dict[str, NDArray[Any]]:
        return search_state(run, stagnation, "" if early else ended, spent())

    try:
        while not ended:
            run.step()
            if stagnation.update(run.record.archive.objectives):
                ended = NO_GROWTH
            elif run.record.evaluations >= evaluations:
                ended = "budget spent"
            if ended:
                run.finish()
            now = time.monotonic() - began
            if progress is not None:
                pace = (run.record.evaluations - tried_before) / max(now, 1e-9)
                standing = (run.record, run.generation, stagnation.history)
                progress(progress_of(*standing, spent(), pace, evaluations, seconds))
            if not ended and seconds is not None and now >= seconds:
                ended, early = "time spent", True
            if not ended and stop is not None and stop():
                ended, early = "stopped", True
            if keep is not None:
                keep(run.record.evaluations, state, at_once=bool(ended))
    except KeyboardInterrupt:
        ended = "interrupted"
    return result_of(run.record, run.generation, stagnation.history, spent(), ended)


def search_state(run: Search, stagnation: Stagnation, ended: str, spent: float) -> dict[str, NDArray[Any]]:
    """Return the state of a search between two generations; ``ended`` where it will not go on."""
    return {
        **{f"search.{name}": values for name, values in run.state().items()},
        **{f"stagnation.{name}": values for name, values in stagnation.state().items()},
        "ended": np.array([ended], dtype=np.str_),
        "spent_s": np.array([spent]),
    }


def restore_search(run: Search, stagnation: Stagnation, state: Mapping[str, NDArray[Any]]) -> tuple[str, float]:
    """Bring a search to a :func:`search_state`; return why it had ended, or nothing, and the seconds spent.

    Raises
    ------
    OutputError : the state does not fit this search
    """
    try:
        run.restore(part_of(state, "search"))
        stagnation.restore(part_of(state, "stagnation"))
        return str(state["ended"][0]), float(state["spent_s"][0])
    except (KeyError, ValueError, IndexError) as error:
        raise OutputError(f"the unfinished run does not fit this study ({error}); start afresh") from error


__all__ = ["Keep", "Progress", "Search", "SearchResult", "crew_for", "search"]
