"""The best fixed bus voltage and the best schedule of one design's hardware, each by a direct sweep.

Everything here works on a problem whose hardware is pinned (:mod:`archopt.trade.pinned`). Every published
number is direct physics; the tables only propose a schedule, which is then moved by direct physics.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise, product

import numpy as np

from archopt.model.evaluator import Evaluation, Evaluator
from archopt.model.parameters import FIXED_RATIO, IntArray
from archopt.model.problem import Problem
from archopt.model.schedule import deadband_steps
from archopt.model.space import BUS_NAMES, FIXED, FOLLOW, Designs
from archopt.physics.arrays import FloatArray
from archopt.trade.pinned import best_row, evaluate_exactly

MOST_COMBINATIONS = 1_600
"""Two buses are swept together up to so many pairs of voltages, beyond it one after the other."""

FLAT_SHARE = 0.01
ROUNDS = 4


@dataclass(frozen=True)
class Scheduled:
    """One design with its bus voltages settled, by direct physics.

    row (width,): decided; objectives (3,): kWh a year, currency, % of budget; violation: 0 when feasible.
    """

    row: IntArray
    objectives: FloatArray
    violation: float

    @property
    def feasible(self) -> bool:
        """Whether every limit is met."""
        return self.violation <= 0.0


def regulated_buses(problem: Problem, row: IntArray) -> tuple[int, ...]:
    """Return the buses of a design whose voltage is a choice: fed, and not by a fixed-ratio converter."""
    designs = Designs(problem.layout, row[None])
    feed, converter = designs.rail("feed")[0], designs.bus("converter")[0] - 1
    return tuple(
        bus
        for bus in range(2)
        if (feed == bus + 1).any()
        and converter[bus] >= 0
        and problem.converters.kind[converter[bus]] != FIXED_RATIO
    )


def span_of(problem: Problem, row: IntArray, bus: int) -> IntArray:
    """Return the grid positions inside the output range of a bus's converter; the nearest where none is."""
    converter = int(Designs(problem.layout, row[None]).bus("converter")[0, bus]) - 1
    low, high = problem.converters.output_min_v[converter], problem.converters.output_max_v[converter]
    inside = np.flatnonzero((problem.grid_v >= low - 1e-9) & (problem.grid_v <= high + 1e-9))
    if len(inside):
        return inside
    return np.array([int(np.abs(problem.grid_v - np.clip(problem.grid_v, low, high)).argmin())])


def fixed_rows(problem: Problem, row: IntArray, volts: IntArray) -> IntArray:
    """Return rows held at fixed voltages without supervisor; volts (K, 2) grid positions, -1 leaves a bus."""
    rows = np.repeat(row[None], len(volts), axis=0)
    designs = Designs(problem.layout, rows)
    designs.bus("control")[:] = FIXED
    for field in ("nominal_v", "lower_v", "upper_v"):
        held = designs.bus(field)
        held[:] = np.where(volts >= 0, volts, held)
    rows[:, problem.layout.board("supervisor")] = 0
    return rows


def follow_rows(problem: Problem, row: IntArray, volts: IntArray) -> IntArray:
    """Return rows that follow the load over the converters' whole range; volts (K, 2) nominals or -1."""
    rows = np.repeat(row[None], len(volts), axis=0)
    designs = Designs(problem.layout, rows)
    for bus in regulated_buses(problem, row):
        span = span_of(problem, row, bus)
        designs.bus("control")[:, bus] = FOLLOW
        nominal = designs.bus("nominal_v")[:, bus]
        nominal[:] = np.where(volts[:, bus] >= 0, volts[:, bus], nominal)
        designs.bus("lower_v")[:, bus], designs.bus("upper_v")[:, bus] = span[0], span[-1]
    return rows


def combinations(problem: Problem, row: IntArray, buses: Sequence[int], *, together: bool) -> list[IntArray]:
    """Return the voltages to sweep, (K, 2) grid positions: all pairs, or one bus after the other, twice."""
    spans = {bus: span_of(problem, row, bus) for bus in buses}
    pairs = np.prod([len(span) for span in spans.values()])
    if len(buses) == 1 or (together and pairs <= MOST_COMBINATIONS):
        every = np.array(list(product(*(spans.get(bus, np.array([-1])) for bus in range(2)))), dtype=np.int64)
        return [every]
    return [alone(bus, spans[bus]) for _ in range(ROUNDS // 2) for bus in buses]


def alone(bus: int, span: IntArray) -> IntArray:
    """Return (K, 2) voltages that move one bus and leave the other."""
    volts = np.full((len(span), 2), -1, dtype=np.int64)
    volts[:, bus] = span
    return volts


def taken(evaluated: Evaluation) -> Scheduled:
    """Return the best of some evaluated rows."""
    best = best_row(evaluated.objectives, evaluated.violation)
    return Scheduled(
        evaluated.rows[best], evaluated.objectives[best], float(evaluated.violation[best])
    )


def held_at(evaluator: Evaluator, row: IntArray, volts: IntArray) -> Scheduled:
    """Return a design held at fixed voltages, (2,) grid positions, -1 where a bus has none to choose."""
    rows = evaluator.decide(fixed_rows(evaluator.problem, row, volts[None]))
    return taken(evaluate_exactly(evaluator, rows))


def best_fixed(evaluator: Evaluator, row: IntArray) -> Scheduled:
    """Return the design at the fixed voltages that lose least, among those that meet every limit.

    The whole grid inside the converters' range is evaluated by direct physics. Where no voltage is feasible
    the least violated is returned.
    """
    problem = evaluator.problem
    buses = regulated_buses(problem, row)
    best = None
    start = row
    for volts in combinations(problem, row, buses, together=True):
        rows = evaluator.decide(fixed_rows(problem, start, volts))
        found = taken(evaluate_exactly(evaluator, rows))
        best = found if best is None else better(best, found)
        start = best.row
    if best is None:
        raise ValueError("there is no voltage to sweep")
    return best


def better(one: Scheduled, other: Scheduled) -> Scheduled:
    """Return the better of two: feasible, then least energy, then cost; the first on a tie."""
    pair = np.stack([one.objectives, other.objectives])
    return (one, other)[best_row(pair, np.array([one.violation, other.violation]))]


def flat_band(evaluator: Evaluator, best: Scheduled) -> dict[str, list[float]]:
    """Return for each regulated bus the lowest and highest fixed voltage within 1 % of the best loss.

    The band is the feasible stretch of the grid around the best voltage, the other bus held at its best.
    """
    problem = evaluator.problem
    grid = problem.grid_v
    bands: dict[str, list[float]] = {}
    for bus in regulated_buses(problem, best.row):
        span = span_of(problem, best.row, bus)
        rows = evaluator.decide(fixed_rows(problem, best.row, alone(bus, span)))
        evaluated = evaluate_exactly(evaluator, rows)
        good = (evaluated.violation <= 0.0) & (
            evaluated.objectives[:, 0] <= (1.0 + FLAT_SHARE) * best.objectives[0]
        )
        at = int(np.flatnonzero(span == Designs(problem.layout, best.row[None]).bus("nominal_v")[0, bus])[0])
        low = high = at
        while low > 0 and good[low - 1]:
            low -= 1
        while high + 1 < len(span) and good[high + 1]:
            high += 1
        bands[BUS_NAMES[bus]] = [float(grid[span[low]]), float(grid[span[high]])]
    return bands


def best_schedule(evaluator: Evaluator, row: IntArray) -> Scheduled:
    """Return the design following the load as well as it can under the problem's own jump.

    The tables propose a schedule for every nominal. The best of them by direct physics (or, where none is
    feasible, the best fixed voltage with a supervisor added) is moved band by band by direct physics until no
    single band's voltage can be changed for the better.
    """
    problem = evaluator.problem
    buses = regulated_buses(problem, row)
    best = None
    start = row
    for volts in combinations(problem, row, buses, together=False):
        rows = evaluator.decide(follow_rows(problem, start, volts))
        moving = (Designs(problem.layout, rows).bus("control")[:, list(buses)] == FOLLOW).any(axis=1)
        if not moving.any():
            continue
        found = taken(evaluate_exactly(evaluator, rows[moving]))
        best = found if best is None else better(best, found)
        start = best.row
    if best is not None and best.feasible:
        return moved(evaluator, best)
    flat = moved(evaluator, supervised(problem, row, best_fixed(evaluator, row)))
    return flat if best is None else better(flat, best)


def supervised(problem: Problem, row: IntArray, fixed: Scheduled) -> Scheduled:
    """Return a fixed design made ready to move: control follows the load, with the supervisor it needs."""
    rows = fixed.row[None].copy()
    designs = Designs(problem.layout, rows)
    buses = regulated_buses(problem, row)
    designs.bus("control")[0, list(buses)] = FOLLOW
    table = problem.supervisors
    column = problem.layout.board("supervisor")
    wanted = int(row[column]) - 1
    fits = (table.level >= FOLLOW) & (table.buses >= len(buses))
    pick = wanted if wanted >= 0 and fits[wanted] else int(np.argmax(fits))
    rows[0, column] = pick + 1
    return Scheduled(rows[0], fixed.objectives, np.inf)


def moved(evaluator: Evaluator, start: Scheduled) -> Scheduled:
    """Return a schedule moved one band at a time, by direct physics, until no move is for the better."""
    problem = evaluator.problem
    best = taken(evaluate_exactly(evaluator, start.row[None]))
    for _ in range(ROUNDS):
        before = best
        for bus in regulated_buses(problem, best.row):
            for band in range(problem.states.bands):
                rows = band_moves(problem, best.row, bus, band)
                if len(rows):
                    best = better(best, taken(evaluate_exactly(evaluator, rows)))
        if best is before:
            break
    return best


def band_moves(problem: Problem, row: IntArray, bus: int, band: int) -> IntArray:
    """Return the design with one band at every other voltage between its neighbours', limits snapped."""
    span = span_of(problem, row, bus)
    own = Designs(problem.layout, row[None]).volts[0, bus]
    low = own[band - 1] if band > 0 else span[0]
    high = own[band + 1] if band + 1 < len(own) else span[-1]
    volts = np.array([v for v in range(int(low), int(high) + 1) if v != own[band]], dtype=np.int64)
    least = deadband_steps(problem.study)
    beside = [own[k] for k in (band - 1, band + 1) if 0 <= k < len(own)]
    volts = np.array([v for v in volts if all(v == o or abs(v - o) >= least for o in beside)], dtype=np.int64)
    rows = np.repeat(row[None], len(volts), axis=0)
    rows[:, problem.layout.volts.start + bus * problem.layout.bands + band] = volts
    designs = Designs(problem.layout, rows)
    nominal = designs.bus("nominal_v")[:, bus]
    designs.bus("lower_v")[:, bus] = np.minimum(designs.volts[:, bus].min(axis=1), nominal)
    designs.bus("upper_v")[:, bus] = np.maximum(designs.volts[:, bus].max(axis=1), nominal)
    return rows


def schedule_v(problem: Problem, row: IntArray) -> dict[str, list[float]]:
    """Return the voltage of each regulated bus, band by band; one value where it never moves."""
    designs = Designs(problem.layout, row[None])
    out: dict[str, list[float]] = {}
    for bus in regulated_buses(problem, row):
        volts = [float(v) for v in problem.grid_v[designs.volts[0, bus]]]
        still = all(one == other for one, other in pairwise(volts))
        out[BUS_NAMES[bus]] = volts[:1] if still else volts
    return out


def volts_of(problem: Problem, row: IntArray) -> object:
    """Return the bus voltage of a decided row as a table holds it: a number, a list by band, either by bus, None."""
    volts = {bus: values[0] if len(values) == 1 else values for bus, values in schedule_v(problem, row).items()}
    return next(iter(volts.values())) if len(volts) == 1 else volts or None
