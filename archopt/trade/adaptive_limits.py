"""Which limit sets the lower and the upper adaptive limit of a design: every band one grid step lower and higher.

``adaptive_limits(problem, row)`` moves the voltage of one band by one step of the bus grid, holds everything
else (parts, counts, what runs, the other bands) and evaluates all limits and the year by direct physics. What
stops the step is, in this order: the end of the study's bus range; the limit that gives way first; the year,
which would waste more. A bus of two levels moves a whole level, since its bands share it.

One record a bus that moves: ``bus, control, lower, upper, bands``. ``bands`` has a row a band (``band, volts,
hours, lower, upper``), and a bus of two levels a row a level (``band`` is None). Each ``lower`` and ``upper``
is a step: ``volts, reason, limit, energy_change_kwh``. Reasons: ``limit`` (``limit`` is its record with place
and size, ``more_limits`` how many others give way too), ``waste``, ``same year`` (no hours in that band),
``order`` (a lighter band may not stand higher), ``grid end``, ``left`` (the step would save: schedules are chosen
from tables that keep a little in hand, and levels by the search). The bus's own ``lower`` and ``upper`` are the
steps beyond its lowest and highest voltage.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from archopt.model.evaluator import Detail
from archopt.model.explain import limit_records
from archopt.model.limits import LIMITS
from archopt.model.parameters import IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES, CONTROL_NAMES, FIXED, TWO_LEVELS, Designs
from archopt.trade.rebuilt import detail_of
from archopt.trade.schedules import regulated_buses

Data = dict[str, Any]

LOWER, UPPER = -1, 1
SIDES = {LOWER: "lower", UPPER: "upper"}
SAME_KWH = 1e-6
"""Years closer than this are one year."""


@dataclass(frozen=True)
class Trial:
    """One group of bands of one bus moved by one grid step; row is None where the grid ends."""

    bus: int
    bands: tuple[int, ...]
    side: int
    row: IntArray | None


def adaptive_limits(problem: Problem, row: IntArray) -> list[Data]:
    """Return for every moving bus of a decided design what stops each band one step lower and one higher.

    Parameters
    ----------
    problem : the whole problem, or one put together again from a result
    row : (width,) the design as it was published, decisions included
    """
    row = np.asarray(row, dtype=np.int64)
    buses = moving_buses(problem, row)
    if not buses:
        return []
    trials = [
        moved(problem, row, bus, bands, side)
        for bus in buses
        for bands in groups(problem, row, bus)
        for side in (LOWER, UPPER)
    ]
    rows = [trial.row for trial in trials if trial.row is not None]
    detail = detail_of(problem, np.stack([row, *rows]))
    steps: dict[tuple[int, tuple[int, ...], int], Data] = {}
    place = 0
    for trial in trials:
        place += trial.row is not None
        key = (trial.bus, trial.bands, trial.side)
        steps[key] = end_of_grid() if trial.row is None else step_record(problem, detail, place, row, trial)
    return [bus_record(problem, row, bus, steps) for bus in buses]


def moving_buses(problem: Problem, row: IntArray) -> tuple[int, ...]:
    """Return the buses of a design whose voltage follows the load or has two levels."""
    designs = Designs(problem.layout, row[None])
    control, volts = designs.bus("control")[0], designs.volts[0]
    return tuple(
        bus for bus in regulated_buses(problem, row) if control[bus] != FIXED and np.ptp(volts[bus]) > 0
    )  # fmt: skip


def groups(problem: Problem, row: IntArray, bus: int) -> list[tuple[int, ...]]:
    """Return the bands that move together: each alone, or all of one level where there are two."""
    designs = Designs(problem.layout, row[None])
    volts = designs.volts[0, bus]
    if designs.bus("control")[0, bus] != TWO_LEVELS:
        return [(band,) for band in range(len(volts))]
    levels = (volts.min(), volts.max())
    return [tuple(int(k) for k in np.flatnonzero(volts == level)) for level in levels]


def moved(problem: Problem, row: IntArray, bus: int, bands: tuple[int, ...], side: int) -> Trial:
    """Return a design with some bands of one bus a grid step lower or higher, its limits following."""
    rows = row[None].copy()
    designs = Designs(problem.layout, rows)
    volts = designs.volts[0, bus].copy()
    volts[list(bands)] += side
    if volts.min() < 0 or volts.max() >= len(problem.grid_v):
        return Trial(bus, bands, side, None)
    start = problem.layout.volts.start + bus * problem.layout.bands
    rows[0, start : start + problem.layout.bands] = volts
    nominal = designs.bus("nominal_v")[0, bus]
    two = designs.bus("control")[0, bus] == TWO_LEVELS
    designs.bus("lower_v")[0, bus] = volts.min() if two else min(volts.min(), nominal)
    designs.bus("upper_v")[0, bus] = volts.max() if two else max(volts.max(), nominal)
    return Trial(bus, bands, side, rows[0])


def end_of_grid() -> Data:
    """Return the step that the study's own bus range does not allow."""
    return {"volts": None, "reason": "grid end", "limit": None, "more_limits": 0, "energy_change_kwh": None}


def step_record(problem: Problem, detail: Detail, place: int, row: IntArray, trial: Trial) -> Data:
    """Return one step: the limit that gives way first, or what the year would be."""
    first, more = first_to_give_way(detail, place)
    energy = detail.evaluation.objectives[:, 0]
    change = float(energy[place] - energy[0])
    reason = "limit" if first is not None else reason_of_year(problem, row, trial, change)
    volts = Designs(problem.layout, detail.designs.rows[place : place + 1]).volts[0, trial.bus, trial.bands[0]]
    return {
        "volts": float(problem.grid_v[volts]),
        "reason": reason,
        "limit": first,
        "more_limits": more,
        "energy_change_kwh": change,
    }


def first_to_give_way(detail: Detail, place: int) -> tuple[Data | None, int]:
    """Return the record of the limit a step reaches first, and how many others it breaks; None for none.

    Slack is taken as a straight line between the design and the step: the limit whose line crosses naught
    earliest gave way first. A limit the design itself does not meet counts where the step makes it worse.
    """
    before, after = detail.evaluation.slack[0], detail.evaluation.slack[place]
    broken = np.flatnonzero((after < 0) & (after < before - 1e-9))
    if not len(broken):
        return None, 0
    share = np.maximum(before[broken], 0.0) / np.maximum(before[broken] - after[broken], 1e-12)
    name = LIMITS[int(broken[np.lexsort((after[broken], share))[0]])].name
    record = next(record for record in limit_records(detail, place) if record["limit"] == name)
    return record, len(broken) - 1


def reason_of_year(problem: Problem, row: IntArray, trial: Trial, change_kwh: float) -> str:
    """Return why a step that breaks no limit was not taken."""
    if abs(change_kwh) <= SAME_KWH:
        return "same year"
    if change_kwh > 0:
        return "waste"
    volts = Designs(problem.layout, row[None]).volts[0, trial.bus]
    beside = trial.bands[0] - 1 if trial.side == LOWER else trial.bands[-1] + 1
    if 0 <= beside < len(volts) and volts[beside] == volts[trial.bands[0]]:
        return "order"
    return "left"


def bus_record(
    problem: Problem, row: IntArray, bus: int, steps: dict[tuple[int, tuple[int, ...], int], Data]
) -> Data:  # fmt: skip
    """Return one bus: every band with its two steps, and the steps beyond its lowest and highest voltage."""
    states = problem.states
    designs = Designs(problem.layout, row[None])
    volts = designs.volts[0, bus]
    two = designs.bus("control")[0, bus] == TWO_LEVELS
    rows = []
    for bands in groups(problem, row, bus):
        here = states.with_hours[np.isin(states.band[states.with_hours], bands)]
        rows.append(
            {
                "band": None if two else bands[0] + 1,
                "volts": float(problem.grid_v[volts[bands[0]]]),
                "hours": float(states.hours[here].sum()),
                **{SIDES[side]: steps[bus, bands, side] for side in (LOWER, UPPER)},
            }
        )
    return {
        "bus": BUS_NAMES[bus],
        "control": CONTROL_NAMES[int(designs.bus("control")[0, bus])],
        "lower": outermost(rows, "lower"),
        "upper": outermost(rows[::-1], "upper"),
        "bands": rows,
    }


def outermost(rows: Sequence[Data], side: str) -> Data:
    """Return the step beyond the outermost voltage, with the voltage and band it starts from.

    Rows come outermost first. The band that speaks is the outermost with hours at that voltage: one without
    hours is free to go anywhere.
    """
    level = [row for row in rows if row["volts"] == rows[0]["volts"]]
    said = next((row for row in level if row["hours"] > 0 and row[side]["reason"] != "order"), level[0])
    return {"from_volts": said["volts"], "band": said["band"], **said[side]}
