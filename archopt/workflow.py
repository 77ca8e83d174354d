"""The thin conductor: load, check, compile, search, recompute by direct physics, question, present."""

from __future__ import annotations

import time
from collections.abc import Callable
from dataclasses import dataclass
from typing import Protocol

import numpy as np

from archopt.errors import InfeasibleError
from archopt.inputs.load import LoadedStudy, load
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.model.explain import explain_many, topology
from archopt.model.limits import INDEX, LIMITS
from archopt.model.parameters import FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.states import coincident_maximum
from archopt.present.compiled_record import compiled_record, space_record
from archopt.present.front import Front
from archopt.present.record import CheckResult, Data, FrontRecord
from archopt.present.run_record import run_record
from archopt.search.archive import Archive
from archopt.search.driver import Progress, SearchResult, search
from archopt.trade.baselines import baselines
from archopt.trade.cautions import NOT_MODELLED, cautions
from archopt.trade.fixed_front import fixed_front
from archopt.trade.leverage import leverage
from archopt.trade.losing import losing
from archopt.trade.money import lifetime_costs, payback_years
from archopt.trade.roles import assign_roles, knee

PUBLISHED = 400
BATCH = 64


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
    progress: Told | None = None,
    stop: Callable[[], str] | None = None,
) -> Front:
    """Search a study and return its front, recomputed by direct physics and questioned.

    Raises
    ------
    InputError : what shows only when study and catalogue meet
    InfeasibleError : no design meets every limit; names the limits none could meet
    """
    clock = Clock()
    study = loaded.study
    problem = compile_study(study, loaded.catalogue)
    evaluator = Evaluator(problem)
    clock.note("compile")
    today = incumbent_row(problem)
    used_seed = study.search.seed if seed is None else seed
    found = search(
        evaluator,
        evaluations=study.search.evaluations if evaluations is None else evaluations,
        population=study.search.population,
        seed=used_seed,
        stagnation_generations=study.search.stagnation_generations,
        seeds_rows=None if today is None else today[None],
        progress=None if progress is None else lambda state: tell(progress, state),
        stop=None if stop is None else lambda: bool(stop()),
    )
    reason = stop() if stop is not None and found.ended == "stopped" else ""
    clock.note("search")
    say(progress, "direct physics")
    published = publish(evaluator, found)
    clock.note("direct physics")
    say(progress, "explaining")
    designs = explain_published(evaluator, published.rows)
    incumbent = explain_incumbent(evaluator, today)
    mark(problem, designs, published.objectives, incumbent)
    clock.note("explain")
    say(progress, "baselines and leverage")
    asked = question(evaluator, found, published, designs, today)
    clock.note("questions")
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
                "seconds": found.seconds,
            },
            timings_s=clock.times,
            stop_reason=reason or found.ended,
            interrupted=found.ended == "interrupted" or reason == "interrupted",
        ),
        incumbent=incumbent,
        merged=len(found.rows) - published.recomputed,
        baselines=asked.baselines,
        gains=asked.gains,
        losing=asked.losing,
        leverage=asked.leverage,
        not_modelled=list(NOT_MODELLED),
        cautions=cautions(problem, designs),
        notes=asked.notes,
    )
    return Front(record)


@dataclass(frozen=True)
class Answers:
    """What is printed beside a front."""

    baselines: list[Data]
    gains: list[Data]
    losing: list[Data]
    leverage: list[Data]
    notes: list[str]


def question(
    evaluator: Evaluator, found: SearchResult, published: Published, designs: list[Data], today: IntArray | None
) -> Answers:
    """Return baselines of the knee and of today's hardware, losing topologies, leverage and remarks."""
    problem = evaluator.problem
    best = published.rows[knee(published.objectives)]
    asked = [baselines(problem, best, "knee")]
    if today is not None:
        asked.append(baselines(problem, today, "incumbent"))
    called = {row.tobytes(): str(design["design"]) for row, design in zip(published.rows, designs, strict=True)}
    nearest = {name: (kind.row, kind.violation) for name, kind in found.kinds.items() if kind.violation > 0}
    rows, objectives = everything_kept(found)
    return Answers(
        baselines=[row for answer in asked for row in answer.rows],
        gains=[answer.summary for answer in asked if answer.summary],
        losing=losing(
            evaluator, rows, objectives, infeasible=nearest, names=[called.get(row.tobytes(), "") for row in rows]
        ),
        leverage=leverage(problem, best),
        notes=remarks(problem, rows, objectives),
    )


def everything_kept(found: SearchResult) -> tuple[IntArray, FloatArray]:
    """Return every feasible design the search kept: the archive, the fixed front, the best of each topology."""
    best = [kind for kind in found.kinds.values() if kind.violation <= 0]
    rows = np.concatenate([found.rows, found.fixed_rows, *(kind.row[None] for kind in best)])
    objectives = np.concatenate([found.objectives, found.fixed_objectives, *(kind.objectives[None] for kind in best)])
    _, first = np.unique(rows, axis=0, return_index=True)
    return rows[np.sort(first)], objectives[np.sort(first)]


def remarks(problem: Problem, rows: IntArray, objectives: FloatArray) -> list[str]:
    """Return what the front as a whole is worth remarking."""
    fixed = fixed_front(problem, rows, objectives)
    if fixed.hypervolume_share is None or fixed.least_loss_kwh is None:
        return []
    note = f"Boards chosen for a fixed bus reach {100 * fixed.hypervolume_share:.1f} % of the front's hypervolume"
    if fixed.energy_more_percent is not None:
        _, median, most = fixed.energy_more_percent
        note += f"; at equal cost they lose {median:.1f} % more energy in the median, {most:.1f} % at most"
    return [note + "."]


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


def tell(progress: Told, state: Progress) -> None:
    """Pass a search's progress on."""
    progress(
        generation=state.generation,
        evaluations=state.evaluations,
        feasible=state.feasible,
        hypervolume=state.hypervolume,
    )


@dataclass(frozen=True)
class Published:
    """The thinned front recomputed by direct physics: decided rows (P, columns), objectives (P, 3)."""

    rows: IntArray
    objectives: FloatArray
    recomputed: int
    dropped: int


def publish(evaluator: Evaluator, found: SearchResult) -> Published:
    """Return the archive thinned, recomputed by direct physics with its stored decisions, and filtered again.

    Raises
    ------
    InfeasibleError : nothing is left
    """
    if not len(found.rows):
        raise infeasible(found)
    thinned = Archive(found.rows.shape[1])
    thinned.add(found.rows, found.objectives)
    picked = thinned.rows[thinned.thin(limit=PUBLISHED)]
    exact = Archive(found.rows.shape[1])
    dropped = 0
    for start in range(0, len(picked), BATCH):
        real = picked[start : start + BATCH]
        evaluation = evaluator.evaluate(real, exact=True)
        kept = evaluation.feasible
        dropped += len(real) - len(kept)
        if len(kept):
            exact.add(evaluation.rows[kept], evaluation.objectives[kept])
    if not len(exact.rows):
        raise infeasible(found)
    order = np.lexsort((exact.objectives[:, 2], exact.objectives[:, 1], exact.objectives[:, 0]))
    return Published(exact.rows[order], exact.objectives[order], len(picked), dropped)


def infeasible(found: SearchResult) -> InfeasibleError:
    """Return the error that names the limits no design could meet and by how much."""
    never = []
    for name, excess in sorted(found.excess.items(), key=lambda item: -item[1]):
        limit = LIMITS[INDEX[name]]
        size = excess * limit.tolerance
        text = f"{100 * size:.3g} % of the limit" if limit.relative else f"{size:.3g} {limit.unit}"
        never.append(f"{name}: missed by at least {text} in every design tried")
    if not never:
        never = ["every limit was met by some design, but no design met all of them together"]
    return InfeasibleError("no design meets every limit", tuple(never))


def explain_published(evaluator: Evaluator, rows: IntArray) -> list[Data]:
    """Return the published designs explained, named by their place in the order of energy."""
    designs: list[Data] = []
    for start in range(0, len(rows), BATCH):
        designs += explain_many(evaluator, rows[start : start + BATCH])
    return [{"design": f"D{k + 1:03d}", "roles": [], **design} for k, design in enumerate(designs)]


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
