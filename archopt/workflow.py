"""The thin conductor: load, check, compile, search, recompute by direct physics, question, present."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import asdict
from pathlib import Path
from typing import Protocol

import numpy as np

from archopt.errors import InfeasibleError
from archopt.inputs.load import LoadedStudy, load
from archopt.inputs.resolved import ResolvedStudy
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.model.explain import explain_many, topology
from archopt.model.parameters import FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.states import coincident_maximum
from archopt.present.compiled_record import compiled_record, space_record
from archopt.present.front import Front
from archopt.present.overview import telling_of
from archopt.present.record import CheckResult, Data, FrontRecord
from archopt.present.run_record import package_versions, run_record
from archopt.search import checkpoint
from archopt.search.checkpoint import Keeper
from archopt.search.driver import crew_for
from archopt.search.outcome import Progress, SearchResult
from archopt.search.polish import polished
from archopt.search.published import BATCH, PUBLISHED, Published, infeasible, publish
from archopt.search.replicates import EARLY, Settings, facts_of, search_all, spread
from archopt.trade.adaptive_limits import adaptive_limits
from archopt.trade.afresh import Boards, search_afresh
from archopt.trade.answers import question
from archopt.trade.cautions import NOT_MODELLED, cautions
from archopt.trade.money import lifetime_costs, payback_years
from archopt.trade.roles import assign_roles
from archopt.trade.waveforms import Settled, settled

POLISH_SHARE = 8
"""Evaluations polishing may take, as a multiple of those of the search; what it does beside counts too."""

LEAST_POLISHED = 2_000
"""Evaluations below which a search is a first look, not worth polishing."""

SETTLED_GENERATIONS = 60
"""Searches shorter than this are said to be unfinished: the hypervolume still grows by percents."""


class Told(Protocol):
    """Told how far the search is."""

    def __call__(
        self,
        *,
        stage: str = "search",
        generation: int | None = None,
        evaluations: int | None = None,
        feasible: int | None = None,
        hypervolume: float | None = None,
        seconds_left: float | None = None,
    ) -> None:
        """Take note of the progress."""
        ...


def check(loaded: LoadedStudy) -> CheckResult:
    """Return how a study is understood, without searching."""
    problem = compile_study(loaded.study, loaded.catalogue)
    study = loaded.study
    incumbent_row(problem)  # tells what of today's design is not on offer
    volts = np.array([rail.voltage_v for rail in study.rails])
    maxima = float(volts @ np.array([rail.max_current_a for rail in study.rails]))
    _, _, coincident = coincident_maximum(study)
    states = problem.states
    hours = max(float(states.hours.sum()), 1e-9)
    return CheckResult(
        problem=compiled_record(problem, []),
        space=space_record(problem),
        power={
            "sum_of_maxima_w": maxima,
            "coincident_w": coincident,
            "rated_w": coincident * study.growth,
            "mean_w": float(states.useful_w @ states.hours) / hours,
        },
        cautions=cautions(problem, []),
    )


def solve(
    loaded: LoadedStudy,
    *,
    seed: int | None = None,
    evaluations: int | None = None,
    replicates: int = 1,
    workers: int = 1,
    progress: Told | None = None,
    stop: Callable[[], str] | None = None,
    keep_in: Path | None = None,
    resume: bool = False,
    afresh: bool = False,
) -> Front:
    """Search a study and return its front, recomputed by direct physics and questioned.

    Parameters
    ----------
    loaded : the study
    seed, evaluations : in place of the study's own
    replicates : searches with seeds one after another, merged; each may try that many evaluations
    workers : processes to search with; what is found is the same for any number
    progress : told how far it is
    stop : asked between generations; why to stop, or nothing
    keep_in : directory in which the run is put by now and then; a result written there takes its place
    resume : go on from the run put by there, if there is one
    afresh : search every baseline too, each with the same budget

    Raises
    ------
    InputError : what shows only when study and catalogue meet
    InfeasibleError : no design meets every limit; names the limits none could meet
    OutputError : the run to go on from is damaged, or not this one
    """
    clock = Clock()
    study = loaded.study
    problem = compile_study(study, loaded.catalogue)
    evaluator = Evaluator(problem)
    clock.note("compile")
    today = incumbent_row(problem)
    used_seed = study.search.seed if seed is None else seed
    settings = Settings(
        evaluations=study.search.evaluations if evaluations is None else evaluations,
        population=study.search.population,
        seed=used_seed,
        stagnation_generations=study.search.stagnation_generations,
        replicates=replicates,
    )
    facts = facts_of(problem, settings, package_versions())
    keeper = None if keep_in is None else Keeper(keep_in, facts)
    with crew_for(evaluator, settings.population, workers) as crew:
        searched = search_all(
            evaluator,
            settings,
            seeds_rows=None if today is None else today[None],
            progress=None if progress is None else lambda state: tell(progress, state),
            stop=None if stop is None else lambda: bool(stop()),
            keeper=keeper,
            resume=unfinished_run(keep_in, facts) if resume and keep_in is not None else None,
            crew=crew,
        )
        clock.note("search")
        found, polish = searched.together, None
        if len(found.rows) and found.ended not in EARLY and settings.evaluations >= LEAST_POLISHED:
            say(progress, "polish")
            polish = polished(
                crew,
                found,
                budget=POLISH_SHARE * settings.evaluations,
                most=PUBLISHED,
                stop=None if stop is None else lambda: bool(stop()),
            )
            found = polish.found
            clock.note("polish")
    reason = stop() if stop is not None and found.ended == "stopped" else ""
    if not len(found.rows):
        raise nothing_found(found, study)
    say(progress, "direct physics")
    published = publish(evaluator, found, None if polish is None else polish.rows)
    clock.note("direct physics")
    say(progress, "explaining")
    designs = explain_published(evaluator, published.rows)
    incumbent = explain_incumbent(evaluator, today)
    mark(problem, designs, published.objectives, incumbent)
    clock.note("explain")
    say(progress, "the printed designs in time")
    in_time = look_in_time(evaluator, published, designs)
    if len(in_time.failed):
        published = published.take(in_time.kept)
        designs = named([designs[int(k)] for k in in_time.kept])
        mark(problem, designs, published.objectives, incumbent)
    clock.note("time domain")
    say(progress, "baselines and leverage")
    tell_adaptive_limits(problem, published.rows, designs)
    asked = question(evaluator, found, published, designs, today)
    clock.note("questions")
    compared: Data = {}
    if afresh:
        compared = search_afresh(
            problem,
            settings,
            found,
            Boards(published.rows, published.objectives, found.evaluations),
            today=today,
            workers=workers,
            polish_budget=POLISH_SHARE * settings.evaluations if polish is not None else 0,
            progress=None if progress is None else lambda name, state: tell(progress, state, name),
            stop=None if stop is None else lambda: bool(stop()),
        ).as_dict()
        clock.note("baselines searched afresh")
    apart = spread(searched, published.rows)
    record = FrontRecord(
        designs=designs,
        archive=archive_rows(problem, found),
        problem=compiled_record(problem, [*designs, *beside_front(incumbent, asked.losing)]),
        run=run_record(
            problem,
            seed=used_seed,
            counts={
                "evaluations": found.evaluations,
                "feasible": found.feasible,
                "generations": found.generations,
                "archive": len(found.rows),
                "recomputed": published.recomputed,
                "dropped_by_direct_physics": published.dropped,
                "checked_in_time": len({finding.row for finding in in_time.findings}),
                "dropped_in_time": len(in_time.failed),
                "seconds": found.seconds,
                "jobs_here": crew.counts.here,
                "jobs_in_other_processes": crew.counts.there,
                "workers_lost": crew.counts.lost,
            },
            timings_s=clock.times,
            stop_reason=reason or found.ended,
            workers=workers,
            polish=None if polish is None else asdict(polish.statement),
            same_bytes=found.ended not in EARLY,
            replicates=None if apart is None else apart.as_dict(),
            interrupted=found.ended == "interrupted" or reason == "interrupted",
        ),
        incumbent=incumbent,
        merged=len(found.rows) - published.recomputed,
        baselines=asked.baselines,
        gains=asked.gains,
        afresh=compared,
        losing=asked.losing,
        leverage=asked.leverage,
        not_modelled=list(NOT_MODELLED),
        cautions=cautions(problem, designs),
        notes=[
            *unfinished(found),
            *ended_early(found, reason, keeper),
            *([] if apart is None else [apart.words()]),
            *([] if polish is None else [polish.statement.sentence()]),
            *asked.notes,
        ],
    )
    return Front(record)


def unfinished_run(directory: Path, facts: checkpoint.Facts) -> checkpoint.Checkpoint | None:
    """Return the unfinished run in a directory, None where there is none.

    Raises
    ------
    OutputError : it is damaged, or not of the run with these facts
    """
    if not checkpoint.is_there(directory):
        return None
    found = checkpoint.read(directory)
    found.check(facts, directory)
    return found


def nothing_found(found: SearchResult, study: ResolvedStudy) -> InfeasibleError:
    """Return the error of a search without a feasible design; one stopped early may still find one."""
    error = infeasible(found, study)
    if found.ended in EARLY:
        return InfeasibleError("stopped before any design met every limit", error.limits)
    return error


def ended_early(found: SearchResult, reason: str, keeper: checkpoint.Keeper | None) -> list[str]:
    """Return remarks on a search that was stopped: what does not repeat, and how to go on."""
    remarks = []
    if found.ended in EARLY:
        remarks.append(
            f"The search was stopped ({reason or found.ended}) after {found.evaluations:,} designs: another run"
            " with the same seed may be stopped elsewhere and find others."
        )
    if keeper is not None and keeper.trouble:
        remarks.append(f"The run could not be put by, so that it cannot be gone on with: {keeper.trouble}.")
    elif keeper is not None and found.ended in EARLY:
        remarks.append("The same command with --resume (and without --replace) goes on where this run was stopped.")
    return remarks


def unfinished(found: SearchResult) -> list[str]:
    """Return a remark where a search was ended before it had stopped finding."""
    if found.ended == "no more growth" or found.generations >= SETTLED_GENERATIONS:
        return []
    return [
        f"The search ended after {found.generations} generations, before it had settled: the front is unfinished,"
        " and a longer search would find better designs."
    ]


class Clock:
    """Seconds each step took."""

    def __init__(self) -> None:
        self.times: dict[str, float] = {}
        self._last = time.perf_counter()

    def note(self, step: str) -> None:
        """Note the time since the last step."""
        now = time.perf_counter()
        self.times[step] = now - self._last
        self._last = now


def say(progress: Told | None, stage: str) -> None:
    """Say what is being done after the search."""
    if progress is not None:
        progress(stage=stage)


def tell(progress: Told, state: Progress, name: str = "search") -> None:
    """Pass a search's progress on."""
    progress(
        stage=name if state.replicates == 1 else f"{name} {state.replicate + 1} of {state.replicates}",
        generation=state.generation,
        evaluations=state.evaluations,
        feasible=state.feasible,
        hypervolume=state.hypervolume,
        seconds_left=state.seconds_left,
    )


def explain_published(evaluator: Evaluator, rows: IntArray) -> list[Data]:
    """Return the published designs explained, named by their place in the order of energy."""
    designs: list[Data] = []
    for start in range(0, len(rows), BATCH):
        designs += explain_many(evaluator, rows[start : start + BATCH])
    return named(designs)


def named(designs: list[Data]) -> list[Data]:
    """Return the designs named D001 and on, without marks."""
    return [{**design, "design": f"D{k + 1:03d}", "roles": []} for k, design in enumerate(designs)]


def look_in_time(evaluator: Evaluator, published: Published, designs: list[Data]) -> Settled:
    """Integrate the designs that will be printed in time; one that fails a limit there gives way to the next.

    Raises
    ------
    InfeasibleError : none is left
    """

    def telling(places: IntArray) -> IntArray:
        return places[list(telling_of([designs[int(k)] for k in places]).index)] if len(places) else places

    outcome = settled(evaluator, published.rows, telling)
    if not len(outcome.kept):
        worst = sorted({f"{finding.limit}, {finding.where}" for finding in outcome.findings if not finding.met})
        raise InfeasibleError("no design keeps its limits when integrated in time", tuple(worst))
    return outcome


def explain_incumbent(evaluator: Evaluator, today: IntArray | None) -> Data | None:
    """Return today's design explained, with the limits it does not meet."""
    if today is None:
        return None
    design = explain_many(evaluator, evaluator.decide(today[None]))[0]
    violated = [limit for limit in design["limits"] if limit["normalised"] < 0]
    return {"design": "incumbent", "roles": ["incumbent"], "violated": violated, **design}


def beside_front(incumbent: Data | None, losing: list[Data]) -> list[Data]:
    """Return the designs explained beside the front: today's and the best of each topology behind the winner."""
    best = [row["best_design"] for row in losing]
    return [design for design in (incumbent, *best) if design is not None]


def mark(problem: Problem, designs: list[Data], objectives: FloatArray, incumbent: Data | None) -> None:
    """Write roles and payback into the designs."""
    names = [str(design["topology"]) for design in designs]
    roles = assign_roles(objectives, names, lifetime_costs(problem.study, objectives))
    today = None if incumbent is None else np.array(list(incumbent["objectives"].values()))[:3]
    for design, role, years in zip(designs, roles, payback_years(problem.study, objectives, today), strict=True):
        design["roles"] = role
        design["beside"]["payback_years"] = years


def tell_adaptive_limits(problem: Problem, rows: IntArray, designs: list[Data]) -> None:
    """Write into the designs that are printed or marked what sets their adaptive limits."""
    marked = {k for k, design in enumerate(designs) if design["roles"]}
    for k in sorted(marked | set(telling_of(designs).index)):
        designs[k]["adaptive_limits"] = adaptive_limits(problem, rows[k])


def archive_rows(problem: Problem, found: SearchResult) -> list[Data]:
    """Return the whole archive, objectives and choices by name."""
    names = topology(problem, found.rows)
    return [
        {
            "topology": name,
            "energy_loss_kwh_per_year": float(values[0]),
            "cost_per_board": float(values[1]),
            "worst_droop_percent": float(values[2]),
            **problem.space.describe(row),
        }
        for name, row, values in zip(names, found.rows, found.objectives, strict=True)
    ]


__all__ = ["check", "load", "solve"]
