"""The same hardware with its bus voltage held or released: what following the load is worth.

``baselines(problem, row, of)`` answers for one design. Nothing of the hardware is chosen again but the
supervisor: none where the bus is held, the design's own or the first that suffices where it moves; its price
and power count. The gain of adaptation is quoted against the best feasible fixed bus, never against a habit.

Rows: ``baseline, of, energy_loss_kwh_per_year, cost_per_board, worst_droop_percent, volts, feasible, note``;
energy, cost, droop and volts are None where the baseline does not apply. ``volts`` is a number (held), a list
by band (moving), or either by bus where there are two.

Summary: ``of, best_fixed_v, flat_band_v`` (lowest and highest fixed voltage within 1 % of the best loss, by
bus), and for the jump the study states, ``gain_kwh_per_year, gain_percent, gain_money_per_year,
supervisor_cost, supervisor_payback_years`` (None: never), ``gain_all_unannounced_kwh_per_year``,
``gain_announced_kwh_per_year``; a gain is None where one of its two sides is not feasible.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np

from archopt.model.canonical import canonical
from archopt.model.evaluator import Evaluator
from archopt.model.parameters import IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES, FOLLOW, Designs
from archopt.trade.money import money_per_kwh, payback_years
from archopt.trade.pinned import AS_LISTED, evaluate_exactly, pinned_problem, unmet_limits, with_jump
from archopt.trade.schedules import (
    Scheduled,
    best_fixed,
    best_schedule,
    flat_band,
    held_at,
    regulated_buses,
    schedule_v,
    span_of,
    volts_of,
)

ALL_UNANNOUNCED, ANNOUNCED = 100.0, 0.0
HABIT = "fixed at the habitual voltage"
BEST_FIXED = "best fixed bus"
FOLLOWS_UNANNOUNCED = "follows the load, every jump unannounced"
FOLLOWS_STUDY = "follows the load, jumps as the study states"
FOLLOWS_ANNOUNCED = "follows the load, every jump announced"


@dataclass(frozen=True)
class Baselines:
    """Baselines of one design: rows and a summary, as the module says."""

    rows: list[dict[str, Any]] = field(default_factory=list)
    summary: dict[str, Any] = field(default_factory=dict)


def baselines(problem: Problem, row: IntArray, of: str) -> Baselines:
    """Return the same hardware at its habitual, its best fixed and its best moving bus voltage.

    Parameters
    ----------
    problem : the whole compiled problem
    row : (width,) a design, decided or not; its decisions are made again
    of : what the design is called, e.g. ``knee`` or ``incumbent``
    """
    given = Designs(problem.layout, np.asarray(row, dtype=np.int64)[None])
    row = canonical(problem, given).rows[0]
    pinned = pinned_problem(problem, row)
    evaluator = Evaluator(pinned)
    buses = regulated_buses(problem, row)
    if not buses:
        return unregulated(evaluator, row, of)
    habit = habitual(evaluator, row, buses)
    fixed = best_fixed(evaluator, row)
    rows = [
        baseline_row(evaluator, HABIT, of, habit, habit_note(problem, row, buses)),
        baseline_row(evaluator, BEST_FIXED, of, fixed, ""),
    ]
    reason = cannot_follow(problem, buses)
    moving: dict[float, Scheduled] = {}
    study_jump = stated_jump(problem)
    for name, jump in (
        (FOLLOWS_UNANNOUNCED, ALL_UNANNOUNCED),
        (FOLLOWS_STUDY, study_jump),
        (FOLLOWS_ANNOUNCED, ANNOUNCED),
    ):
        if reason:
            rows.append(empty_row(name, of, reason))
            continue
        other = Evaluator(with_jump(pinned, jump))
        if jump not in moving:
            moving[jump] = best_schedule(other, row)
        stated = "the jumps it lists" if jump == AS_LISTED else f"jump of {jump:g} % of rated load"
        note = stated if name == FOLLOWS_STUDY else ""
        rows.append(baseline_row(other, name, of, moving[jump], note))
    return Baselines(rows, summary_of(evaluator, of, fixed, moving))


def stated_jump(problem: Problem) -> float:
    """Return the study's largest unannounced jump in percent, or that it lists its jumps."""
    control = problem.study.control
    return AS_LISTED if control.jumps else control.jump_percent


def habitual(evaluator: Evaluator, row: IntArray, buses: tuple[int, ...]) -> Scheduled:
    """Return the design held at the study's habitual voltage, as near as its converters reach."""
    problem = evaluator.problem
    volts = np.full(2, -1, dtype=np.int64)
    for bus in buses:
        span = span_of(problem, row, bus)
        volts[bus] = span[np.abs(problem.grid_v[span] - problem.study.control.habitual_v).argmin()]
    return held_at(evaluator, row, volts)


def habit_note(problem: Problem, row: IntArray, buses: tuple[int, ...]) -> str:
    """Return a remark where a converter does not reach the habitual voltage."""
    wanted = problem.study.control.habitual_v
    short = [
        BUS_NAMES[bus]
        for bus in buses
        if np.abs(problem.grid_v[span_of(problem, row, bus)] - wanted).min()
        > 0.5 * problem.study.control.grid_v + 1e-9
    ]
    return f"{' and '.join(short)} cannot make {wanted:g} V; the nearest is taken" if short else ""


def cannot_follow(problem: Problem, buses: tuple[int, ...]) -> str:
    """Return why nothing on offer lets the bus follow the load; empty where something does."""
    if "follow_load" not in problem.study.control.kinds:
        return "the study does not allow a bus that follows the load"
    table = problem.supervisors
    if not ((table.level >= FOLLOW) & (table.buses >= len(buses))).any():
        return "no supervisor on offer can set the bus by the load"
    return ""


def unregulated(evaluator: Evaluator, row: IntArray, of: str) -> Baselines:
    """Return the one row of hardware whose bus voltage is no choice."""
    evaluated = evaluate_exactly(evaluator, evaluator.decide(row[None]))
    design = Scheduled(evaluated.rows[0], evaluated.objectives[0], float(evaluated.violation[0]))
    reason = "no regulated bus: there is no bus voltage to choose"
    return Baselines([baseline_row(evaluator, "as it is", of, design, reason)], {"of": of, "note": reason})


def baseline_row(
    evaluator: Evaluator, name: str, of: str, design: Scheduled, note: str
) -> dict[str, Any]:
    """Return one baseline as a row; the limits it does not meet are named in its note."""
    problem = evaluator.problem
    remarks = [note] if note else []
    if not design.feasible:
        unmet = unmet_limits(evaluator, design.row)
        remarks.append("does not meet " + "; ".join(unmet[:2]) if unmet else "does not meet every limit")
        if len(unmet) > 2:
            remarks[-1] += f" and {len(unmet) - 2} more"
    still = all(len(values) == 1 for values in schedule_v(problem, design.row).values())
    if design.row[problem.layout.board("supervisor")] > 0 and still:
        remarks.append("nothing is gained by moving the bus")
    energy, cost, droop = (float(x) for x in design.objectives)
    return {
        "baseline": name,
        "of": of,
        "energy_loss_kwh_per_year": energy,
        "cost_per_board": cost,
        "worst_droop_percent": droop,
        "volts": volts_of(problem, design.row),
        "feasible": design.feasible,
        "note": "; ".join(remarks),
    }


def empty_row(name: str, of: str, note: str) -> dict[str, Any]:
    """Return the row of a baseline that does not apply."""
    return {
        "baseline": name, "of": of, "energy_loss_kwh_per_year": None, "cost_per_board": None,
        "worst_droop_percent": None, "volts": None, "feasible": False, "note": note,
    }  # fmt: skip


def summary_of(
    evaluator: Evaluator, of: str, fixed: Scheduled, moving: dict[float, Scheduled]
) -> dict[str, Any]:
    """Return what adaptation gains against the best feasible fixed bus."""
    problem = evaluator.problem
    out: dict[str, Any] = {"of": of, "best_fixed_v": None, "flat_band_v": {}}
    if fixed.feasible:
        volts = schedule_v(problem, fixed.row)
        out["best_fixed_v"] = {bus: values[0] for bus, values in volts.items()}
        out["flat_band_v"] = flat_band(evaluator, fixed)

    def gain(jump: float) -> float | None:
        found = moving.get(jump)
        if found is None or not found.feasible or not fixed.feasible:
            return None
        return float(fixed.objectives[0] - found.objectives[0])

    jump = stated_jump(problem)
    own = gain(jump)
    out["gain_kwh_per_year"] = own
    out["gain_percent"] = None if own is None else 100.0 * own / float(fixed.objectives[0])
    out["gain_money_per_year"] = None if own is None else own * money_per_kwh(problem.study)
    out["supervisor_cost"] = out["supervisor_payback_years"] = None
    if own is not None:
        out["supervisor_cost"] = float(moving[jump].objectives[1] - fixed.objectives[1])
        out["supervisor_payback_years"] = payback_years(
            problem.study, moving[jump].objectives[None], fixed.objectives
        )[0]
    out["gain_all_unannounced_kwh_per_year"] = gain(ALL_UNANNOUNCED)
    out["gain_announced_kwh_per_year"] = gain(ANNOUNCED)
    return out
