"""Each baseline searched afresh: the best board for a fixed bus against the best board for a moving one.

The table of the same hardware asks what another voltage would do to one design; here every choice is made
again for each way to run the bus, with the same budget and seed as the front itself. A baseline is a smaller
or another problem: the control held to fixed, the nominal pinned to the habitual voltage, or the jump another.
Each takes from every search what is a board of its own too, so that luck does not tell the baselines apart.
A fixed-ratio bus neither is held nor follows the load; the best one any search found has a row of its own.

``search_afresh(...)`` returns rows and gains. Rows: ``baseline, topology, volts, energy_loss_kwh_per_year,
cost_per_board, worst_droop_percent, lifetime_cost`` of its design of least lifetime cost (None where it has
none), ``least_energy_kwh_per_year, least_cost`` (the ends of its front), ``choices, feasible, evaluations,
note``. Gains, one a moving baseline, always against the best feasible fixed bus, never against the habit:
``of, lifetime_cost_less, energy_less_kwh, cost_more`` (between the designs of least lifetime cost) and
``energy_less_at_equal_cost_percent`` (least, median, greatest along the front; None where there is none).
"""

from __future__ import annotations

from collections.abc import Callable, Mapping, Sequence
from dataclasses import dataclass, field, replace
from typing import Any

import numpy as np
from moocore import is_nondominated

from archopt.errors import InfeasibleError
from archopt.model.board import DirectStages
from archopt.model.canonical import buses_used
from archopt.model.evaluator import Evaluation, Evaluator, evaluate_in
from archopt.model.explain import topology
from archopt.model.parameters import FIXED_RATIO, IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES, CONTROL_NAMES, FIXED, Designs
from archopt.physics.arrays import BoolArray, FloatArray
from archopt.search.driver import crew_for
from archopt.search.outcome import Progress, SearchResult
from archopt.search.polish import polished
from archopt.search.published import PUBLISHED, publish
from archopt.search.replicates import EARLY, Settings, search_all
from archopt.trade.baselines import (
    ALL_UNANNOUNCED,
    ANNOUNCED,
    BEST_FIXED,
    FOLLOWS_ANNOUNCED,
    FOLLOWS_STUDY,
    FOLLOWS_UNANNOUNCED,
    HABIT,
    cannot_follow,
    stated_jump,
)
from archopt.trade.fixed_front import equal_cost_percent
from archopt.trade.money import lifetime_costs
from archopt.trade.pinned import BATCH, together, with_jump
from archopt.trade.schedules import volts_of

Data = dict[str, Any]
Told = Callable[[str, Progress], None]

RATIO = "fixed ratio, follows the input"
MOVING = (FOLLOWS_UNANNOUNCED, FOLLOWS_STUDY, FOLLOWS_ANNOUNCED)
SHOWN = (HABIT, BEST_FIXED, RATIO, *MOVING)


@dataclass(frozen=True)
class Boards:
    """The front of one baseline by direct physics: decided rows (P, width), objectives (P, 3), (0, ...) for none."""

    rows: IntArray
    objectives: FloatArray
    evaluations: int = 0
    note: str = ""

    def __len__(self) -> int:
        return len(self.rows)


@dataclass(frozen=True)
class Afresh:
    """Baselines searched afresh: rows, gains and remarks, as the module says."""

    rows: list[Data] = field(default_factory=list)
    gains: list[Data] = field(default_factory=list)
    notes: list[str] = field(default_factory=list)

    def as_dict(self) -> Data:
        """Plain data."""
        return {"rows": self.rows, "gains": self.gains, "notes": self.notes}


def search_afresh(
    problem: Problem,
    settings: Settings,
    found: SearchResult,
    front: Boards,
    *,
    today: IntArray | None = None,
    workers: int = 1,
    polish_budget: int = 0,
    progress: Told | None = None,
    stop: Callable[[], bool] | None = None,
) -> Afresh:
    """Return every baseline with every choice made again, and what a moving bus gains against the best fixed one.

    Parameters
    ----------
    problem : the whole problem
    settings : the search's own budget and seed; each baseline has the same
    found : what the search found beside the front: designs for a fixed bus that a moving one beats
    front : the published front, the boards of a bus that follows the load with jumps as the study states
    today : (width,) today's design, which seeds every baseline it is a design of
    workers : processes to search with
    polish_budget : evaluations that polishing a baseline may take, as for the front; 0 for none
    progress : told the baseline and how far its search is
    stop : asked between generations; a baseline not begun when it says so is left out
    """
    jumps = {FOLLOWS_STUDY: stated_jump(problem), FOLLOWS_UNANNOUNCED: ALL_UNANNOUNCED, FOLLOWS_ANNOUNCED: ANNOUNCED}
    problems = {HABIT: habitual_problem(problem), BEST_FIXED: fixed_problem(problem)}
    problems |= {name: with_jump(following_problem(problem), jump) for name, jump in jumps.items()}
    reasons = {name: impossible(problem, other, moving=name in jumps) for name, other in problems.items()}
    boards: dict[str, Boards] = {}
    for name, other in problems.items():
        if reasons[name]:
            boards[name] = nothing(problem, reasons[name])
        elif name != FOLLOWS_STUDY and jumps.get(name) == jumps[FOLLOWS_STUDY]:
            boards[name] = boards[FOLLOWS_STUDY]
        elif stop is not None and stop():
            boards[name] = nothing(problem, "not searched: the run was stopped")
        else:
            boards[name] = boards_of(other, settings, today, workers, polish_budget, told(progress, name), stop)
    own = boards[BEST_FIXED]
    kept = [best.row[None] for best in found.kinds.values() if best.violation <= 0]
    pool = pooled([front.rows, found.fixed_rows, *kept, *(searched.rows for searched in boards.values())])
    for name, other in problems.items():
        if not reasons[name]:
            boards[name] = shared(other, boards[name], pool)
    boards[RATIO] = shared(problem, nothing(problem, "none among the boards that any search kept"), pool, ratio=True)
    ratios = bool((problem.converters.kind == FIXED_RATIO).any())
    rows = [baseline_row(problem, name, boards[name]) for name in SHOWN if name != RATIO or ratios]
    against = boards[BEST_FIXED]
    gains = [gain_of(problem, name, boards[name], against) for name in MOVING if len(boards[name]) and len(against)]
    return Afresh(rows, gains, remarks(problem, own, front))


def told(progress: Told | None, name: str) -> Callable[[Progress], None] | None:
    """Return what a search of one baseline tells its progress."""
    return None if progress is None else lambda state: progress(name, state)


def pooled(found: Sequence[IntArray]) -> IntArray:
    """Return the boards of all searches once each, in order."""
    rows = np.concatenate(list(found))
    _, first = np.unique(rows, axis=0, return_index=True)
    return rows[np.sort(first)]


def shared(problem: Problem, boards: Boards, pool: IntArray, *, ratio: bool = False) -> Boards:
    """Return the boards of a baseline among those of all searches, by direct physics.

    A board that meets a harder problem meets an easier one: without this a search that had less luck would make
    a weaker demand look dearer.
    """
    own = pool[has_ratio(problem, pool) if ratio else members(problem, pool)]
    if not len(own):
        return nothing(problem, boards.note or "no board of that kind was found", boards.evaluations)
    evaluated = evaluate_directly(problem, own)
    objectives = evaluated.objectives[evaluated.feasible]
    if not len(objectives):
        return nothing(problem, boards.note or "no board of that kind meets every limit", boards.evaluations)
    kept = np.flatnonzero(is_nondominated(objectives))
    note = boards.note if len(boards) else ""
    return Boards(evaluated.rows[evaluated.feasible][kept], objectives[kept], boards.evaluations, note)


def has_ratio(problem: Problem, rows: IntArray) -> BoolArray:
    """Return which boards have a bus behind a fixed-ratio converter, (P,)."""
    designs = Designs(problem.layout, rows)
    index = np.maximum(designs.bus("converter") - 1, 0)
    if not len(problem.converters.names):
        return np.zeros(len(rows), dtype=bool)
    ratio = (problem.converters.kind[index] == FIXED_RATIO) & (designs.bus("converter") > 0)
    return np.asarray((ratio & buses_used(designs)).any(axis=1))


def members(problem: Problem, rows: IntArray) -> BoolArray:
    """Return which boards have a bus and are of a baseline's kind, (P,): no fixed ratio, its control and voltages.

    One bus that moves makes a moving board; every bus of a fixed one is held, at a voltage the baseline allows.
    """
    designs = Designs(problem.layout, rows)
    used = buses_used(designs)
    fits = {}
    for name in ("control", "nominal_v"):
        columns = problem.layout.bus(name)
        allowed = problem.space.allowed[columns.start : columns.stop]
        fits[name] = np.stack([np.isin(designs.bus(name)[:, bus], allowed[bus]) for bus in range(2)], axis=1)
    moves = FIXED not in problem.space.allowed[problem.layout.bus("control").start]
    control = (fits["control"] & used).any(axis=1) if moves else (fits["control"] | ~used).all(axis=1)
    volts = (fits["nominal_v"] | ~used).all(axis=1)
    return np.asarray(used.any(axis=1) & control & volts & ~has_ratio(problem, rows))


def evaluate_directly(problem: Problem, rows: IntArray) -> Evaluation:
    """Return decided rows evaluated by direct physics, without tables, a batch at a time."""
    stages = DirectStages(problem, problem.states)
    parts = [
        evaluate_in(problem, problem.states, Designs(problem.layout, rows[k : k + BATCH]), stages, exact=True)
        for k in range(0, len(rows), BATCH)
    ]
    return together([part.evaluation for part in parts])


def fixed_problem(problem: Problem) -> Problem:
    """Return the problem with every bus held at one voltage."""
    return narrowed(problem, {"control": [FIXED]}, ("fixed",))


def habitual_problem(problem: Problem) -> Problem:
    """Return the problem with every bus held at the study's habitual voltage, the nearest on the grid."""
    at = int(np.abs(problem.grid_v - problem.study.control.habitual_v).argmin())
    name = problem.space.values[problem.layout.bus("nominal_v").start].get(at, f"{problem.grid_v[at]:g}")
    held = {"control": [FIXED], "nominal_v": [at], "lower_v": [at], "upper_v": [at]}
    return narrowed(problem, held, ("fixed",), {f"{bus}.nominal_v": (name,) for bus in BUS_NAMES})


def following_problem(problem: Problem) -> Problem:
    """Return the problem with every bus following the load or of two levels, as the study allows."""
    kinds = tuple(kind for kind in problem.study.control.kinds if kind != "fixed")
    return narrowed(problem, {"control": [CONTROL_NAMES.index(kind) for kind in kinds]}, kinds)


def narrowed(
    problem: Problem,
    held: Mapping[str, Sequence[int]],
    kinds: tuple[Any, ...],
    pins: Mapping[str, tuple[str, ...]] | None = None,
) -> Problem:
    """Return the problem with less allowed of both buses: some choices held, and no fixed-ratio converter."""
    layout, allowed = problem.layout, list(problem.space.allowed)
    for bus in range(2):
        for column, values in held.items():
            allowed[layout.bus(column).start + bus] = np.array(values, dtype=np.int64)
        place = layout.bus("converter").start + bus
        allowed[place] = np.array(
            [value for value in allowed[place] if value == 0 or problem.converters.kind[value - 1] != FIXED_RATIO],
            dtype=np.int64,
        )
    study = replace(
        problem.study,
        control=replace(problem.study.control, kinds=kinds),
        choices=replace(problem.study.choices, pins={**problem.study.choices.pins, **(pins or {})}),
    )
    return replace(problem, study=study, space=replace(problem.space, allowed=tuple(allowed)))


def impossible(problem: Problem, other: Problem, *, moving: bool) -> str:
    """Return why a baseline has no board at all; empty where it may have."""
    reason = cannot_follow(problem, (0,)) if moving else ""
    column = problem.layout.bus("converter").start
    return reason or ("" if (other.space.allowed[column] > 0).any() else "no converter on offer sets a bus voltage")


def boards_of(
    problem: Problem,
    settings: Settings,
    today: IntArray | None,
    workers: int,
    polish_budget: int,
    progress: Callable[[Progress], None] | None,
    stop: Callable[[], bool] | None,
) -> Boards:
    """Return the front of one problem, searched and polished with a budget and recomputed by direct physics."""
    evaluator = Evaluator(problem)
    seeds = today[None] if today is not None and is_of(problem, today) else None
    picked = None
    with crew_for(evaluator, settings.population, workers) as crew:
        found = search_all(
            evaluator, settings, seeds_rows=seeds, progress=progress, stop=stop, crew=crew
        ).together  # fmt: skip
        if polish_budget and len(found.rows) and found.ended not in EARLY:
            polish = polished(crew, found, budget=polish_budget, most=PUBLISHED, stop=stop)
            found, picked = polish.found, polish.rows
    early = "the run was stopped before the budget was spent" if found.ended in EARLY else ""
    try:
        published = publish(evaluator, found, picked)
    except InfeasibleError as error:
        return nothing(problem, "; ".join(note for note in (early, *error.limits[:2]) if note), found.evaluations)
    return Boards(published.rows, published.objectives, found.evaluations, early)


def is_of(problem: Problem, row: IntArray) -> bool:
    """Tell whether a design without decisions is one of a problem's."""
    return all(int(row[column]) in values for column, values in enumerate(problem.space.allowed))


def nothing(problem: Problem, note: str, evaluations: int = 0) -> Boards:
    """Return no board, and why."""
    return Boards(np.zeros((0, problem.layout.width), dtype=np.int64), np.zeros((0, 3)), evaluations, note)


def best_of(problem: Problem, boards: Boards) -> int:
    """Return the board of least lifetime cost, then least energy, then first."""
    return int(np.lexsort((boards.objectives[:, 0], lifetime_costs(problem.study, boards.objectives)))[0])


def baseline_row(problem: Problem, name: str, boards: Boards) -> Data:
    """Return one baseline as a row."""
    row: Data = dict.fromkeys(
        (
            "topology", "volts", "energy_loss_kwh_per_year", "cost_per_board", "worst_droop_percent", "lifetime_cost",
            "least_energy_kwh_per_year", "least_cost", "choices",
        )
    )  # fmt: skip
    if len(boards):
        best = best_of(problem, boards)
        energy, cost, droop = (float(value) for value in boards.objectives[best])
        row |= {
            "topology": topology(problem, boards.rows[best])[0],
            "volts": volts_of(problem, boards.rows[best]),
            "energy_loss_kwh_per_year": energy,
            "cost_per_board": cost,
            "worst_droop_percent": droop,
            "lifetime_cost": float(lifetime_costs(problem.study, boards.objectives[best : best + 1])[0]),
            "least_energy_kwh_per_year": float(boards.objectives[:, 0].min()),
            "least_cost": float(boards.objectives[:, 1].min()),
            "choices": problem.space.describe(boards.rows[best]),
        }
    return {
        "baseline": name,
        **row,
        "feasible": len(boards) > 0,
        "evaluations": boards.evaluations,
        "note": boards.note,
    }


def gain_of(problem: Problem, name: str, moving: Boards, fixed: Boards) -> Data:
    """Return what boards for a moving bus gain against the best boards for a fixed one."""
    own = moving.objectives[best_of(problem, moving)]
    other = fixed.objectives[best_of(problem, fixed)]
    life = lifetime_costs(problem.study, np.stack([own, other]))
    reach = equal_cost_percent(fixed.objectives, moving.objectives)
    # more energy of the fixed board, as a share of the moving one's -> less of the moving, of the fixed one's
    less = None if reach is None else [100.0 * more / (100.0 + more) for more in reach]
    return {
        "of": name,
        "lifetime_cost_less": float(life[1] - life[0]),
        "energy_less_kwh": float(other[0] - own[0]),
        "cost_more": float(own[1] - other[1]),
        "energy_less_at_equal_cost_percent": less,
    }


def remarks(problem: Problem, fixed: Boards, front: Boards) -> list[str]:
    """Return a remark where the search of fixed buses alone found what the whole search should have."""
    if not len(fixed) or not len(front):
        return []
    life = [float(lifetime_costs(problem.study, boards.objectives).min()) for boards in (fixed, front)]
    if life[0] >= life[1]:
        return []
    return [
        f"A search of fixed buses alone found a board whose lifetime cost is {life[1] - life[0]:.2f}"
        f" {problem.study.economics.currency} less than the whole front's least: the budget is too small to"
        " tell the two apart."
    ]
