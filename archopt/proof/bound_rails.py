"""What each rail costs and loses at the least, wherever its stage's input may stand: for the outer bound.

Every number here is at most what the evaluation of any feasible design finds for the rail, and every choice left out
breaks a limit in every design. Why is said where it is done.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from archopt.model.evaluator import FREE_DROOP_PERCENT, Evaluator
from archopt.model.options import row_swing
from archopt.model.parameters import BUCK, LINEAR
from archopt.model.problem import bank_effective_f, bank_esr_ohm, bank_most_f
from archopt.model.space import BUS_A, INPUT, PARENT
from archopt.model.stages import conduction_ratio, headroom_v
from archopt.model.states import ENERGY
from archopt.model.tables import NODES, cubic_weights
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.physics.output_ripple import half_swing_v

GRID, RATIO, DIRECT, RAIL = 0, 1, 2, 3
SAMPLES = 5
RIPPLE_SAMPLES = 7
LEAST_DIPPED = 0.75  # of the bus voltage, left at a stage after drop and dip: their limits leave more
EASE = 1e-9
FOLDED_EASE = 0.97
MOST_EASE = 1.5  # of the largest least loss, for drop, bank and what a rail carries for others
GRID_GROUPS = 8
LEVELS = np.arange(FREE_DROOP_PERCENT, 101.0, 2.0)
NEVER = 255


@dataclass(frozen=True)
class Slots:
    """Where a stage's input may stand: K slots, gathered in groups.

    kind (K,): a voltage of the bus grid, a fixed-ratio bus, the board input, a parent rail; of (K,): which one.
    low_v, high_v (S, K): the span a stage input may lie in in each energy state; bus_v (S, K): least voltage of the
    bus before its plane's drop, 0 where there is none; least_v, need_v (K,): lowest the
    input is where limits from above are checked, highest where limits from below are; top_v (K,): highest after a
    jump. group (K,): groups of neighbouring voltages that share one answer of droop and ripple.
    """

    kind: IntArray
    of: IntArray
    low_v: FloatArray
    high_v: FloatArray
    bus_v: FloatArray
    least_v: FloatArray
    need_v: FloatArray
    top_v: FloatArray
    group: IntArray

    @cached_property
    def groups(self) -> int:
        """Number of groups."""
        return int(self.group.max()) + 1

    @property
    def on_bus(self) -> BoolArray:
        """Which slots are buses, (K,)."""
        return np.asarray((self.kind == GRID) | (self.kind == RATIO))


def make_slots(evaluator: Evaluator) -> Slots:
    """Return every place a stage's input may stand at in the space as pinned.

    A stage on a bus sees the bus less the drop of its plane, which the drop budget limits; the setting error moves a
    bus where limits are checked. A fixed-ratio bus stands below the ratio of the input by what its own resistance and
    the input path take at most.
    """
    problem, states = evaluator.problem, evaluator.states
    study, layout, converters = problem.study, problem.layout, problem.converters
    inputs = states.input_v[states.of_kind(ENERGY)]
    drop = 1.2 * study.board.bus_drop_budget_percent * 0.01
    error = float(converters.accuracy.max(initial=0.0)) + 0.02
    rows: list[tuple[int, int, FloatArray, FloatArray, FloatArray, float, float, float]] = []
    one = np.ones_like(inputs)
    lost_v = problem.path.limit_a * problem.path.resistance_ohm
    offered = set()
    volts: set[int] = set()
    for bus in range(2):
        offered |= set(problem.space.allowed[layout.bus("converter").start + bus].tolist())
        ends = [problem.space.allowed[layout.bus(name).start + bus] for name in ("lower_v", "nominal_v", "upper_v")]
        if max(problem.space.allowed[layout.bus("converter").start + bus]) > 0:
            low, high = min(int(e.min()) for e in ends), max(int(e.max()) for e in ends)
            volts |= set(range(low, high + 1))
    spans = np.array([(converters.output_min_v[c - 1], converters.output_max_v[c - 1]) for c in offered if c > 0])
    for g in sorted(volts):
        v = float(problem.grid_v[g])
        if len(spans) and ((spans[:, 0] <= v + EASE) & (spans[:, 1] >= v - EASE)).any():
            rows.append((GRID, g, one * v * (1.0 - drop), one * v, one * v, v * (1.0 - drop - error), v, v))
    for c in sorted(offered):
        if c > 0 and converters.ratio[c - 1] > 0:
            ratio = float(converters.ratio[c - 1])
            sag_v = float(converters.output_ohm[c - 1] * converters.limit_a[c - 1])
            least = np.maximum(ratio * (inputs - lost_v) - sag_v, 0.5 * ratio * inputs)
            low_v, high_v = ratio * study.supply.low_v, ratio * study.supply.high_v
            bottom_v = (1.0 - drop) * max(high_v - ratio * lost_v - sag_v, 0.5 * high_v)
            rows.append((RATIO, c - 1, (1.0 - drop) * least, ratio * inputs, least, bottom_v, low_v, high_v))
    supply = study.supply
    node_v, top_v = np.maximum(inputs - lost_v, 0.5 * inputs), max(supply.high_v - lost_v, 0.5 * supply.high_v)
    rows.append((DIRECT, 0, node_v, inputs, 0.0 * one, top_v, supply.low_v, supply.high_v))
    for j, v in enumerate(problem.rails.voltage_v.tolist()):
        if any(PARENT + j in problem.space.allowed[layout.rail("feed").start + r] for r in range(layout.rails)):
            rows.append((RAIL, j, one * v, one * v, 0.0 * one, v, v, v))
    kind = np.array([row[0] for row in rows])
    grid = int((kind == GRID).sum())
    groups = np.arange(len(rows)) - grid + min(GRID_GROUPS, grid)
    groups[:grid] = np.arange(grid) * min(GRID_GROUPS, grid) // max(grid, 1)
    return Slots(
        kind=kind,
        of=np.array([row[1] for row in rows]),
        low_v=np.stack([row[2] for row in rows], axis=1),
        high_v=np.stack([row[3] for row in rows], axis=1),
        bus_v=np.stack([row[4] for row in rows], axis=1),
        least_v=np.array([row[5] for row in rows]),
        need_v=np.array([row[6] for row in rows]),
        top_v=np.array([row[7] for row in rows]),
        group=groups,
    )


@dataclass(frozen=True)
class RailOptions:
    """One rail's choices: O options (stage, phases, fewest) and M choices of option and bank.

    loss_w, square (O, S, K): least loss and least mean square of ripple in each energy state at each slot, 0 when off.
    most_w (S,): more than any option loses in a state at any slot.
    legal (O, B, K): may stand there at all; B counts the fall-back. option, bank, count, esr_ohm, cost (M,): cost
    without new part numbers, at the best price step. level (M, B, groups): number of the least droop level, NEVER
    where none.
    stage, phases, fewest (O,); run (O, B): fewest phases running.
    """

    stage: IntArray
    phases: IntArray
    fewest: IntArray
    run: IntArray
    loss_w: FloatArray
    square: FloatArray
    most_w: FloatArray
    legal: BoolArray
    option: IntArray
    bank: IntArray
    count: IntArray
    esr_ohm: FloatArray
    cost: FloatArray
    level: IntArray

    def possible(self, slots: Slots, feeding: BoolArray) -> BoolArray:
        """Return which choices meet their own limits in every band and the fall-back at some slot of a feed, (M,).

        feeding (K,): the slots of the feed. What meets them nowhere breaks a limit on any board.
        """
        fits = np.zeros(self.level.shape[:2], dtype=bool)
        for group in np.unique(slots.group[feeding]):
            legal: BoolArray = np.asarray(self.legal[:, :, feeding & (slots.group == group)].any(axis=2))
            fits |= legal[self.option] & (self.level[:, :, group] < len(LEVELS))
        return np.asarray(fits.all(axis=1))


def sampled_least(values: FloatArray) -> FloatArray:
    """Return a lower bound of curves sampled evenly along the last axis, between the samples too.

    Between two samples a curve dips below both by at most half of the larger second difference beside them: an eighth
    of it where the curve is bent evenly, half where it has one corner.
    """
    bend = np.abs(np.diff(values, n=2, axis=-1))
    wide = np.concatenate([bend[..., :1], bend, bend[..., -1:]], axis=-1)  # around every sample
    around = np.maximum(wide[..., :-1], wide[..., 1:])  # around every gap
    lower = np.minimum(values[..., :-1], values[..., 1:])
    return np.asarray((lower - 0.5 * around).min(axis=-1))


def row_losses(evaluator: Evaluator, rows: IntArray, slots: Slots) -> tuple[FloatArray, FloatArray]:
    """Return least loss (W) and least ripple square (A^2) of table rows, (rows, S, K), read as the evaluation reads.

    The current that reaches a stage at v was drawn from the bus at V: what the plane loses is the stage's input power
    times V / v - 1, so that a stage gains little by a drop. It is counted here.
    """
    tables, states = evaluator.tables, evaluator.states
    energy = states.of_kind(ENERGY)
    share = np.linspace(0.0, 1.0, SAMPLES)
    at = slots.low_v[..., None] + (slots.high_v - slots.low_v)[..., None] * share  # (S, K, samples)
    loss_of = tables.loss_w[rows][:, energy].astype(np.float64)
    square_of = tables.ripple_square[rows][:, energy].astype(np.float64)
    loss, square = np.empty((len(rows), *at.shape)), np.empty((len(rows), *at.shape))
    every = np.arange(len(energy))[:, None, None]
    before = np.maximum(slots.bus_v[..., None] / at, 1.0)
    for k, row in enumerate(rows.tolist()):
        stage = tables.row_stage[row]
        place = (at - tables.start_v[stage]) / tables.step_v[stage]
        node = np.clip(place.astype(np.int64), 1, NODES - 3)
        t = np.clip(place - node, -1.5, 2.5)
        weights = cubic_weights(t)
        rail = tables.row_rail[row]
        useful = (states.current_a[energy, rail] * evaluator.problem.rails.voltage_v[rail])[:, None, None]
        own = sum(weights[i] * loss_of[k][every, node + i - 1] for i in range(4))
        loss[k] = (np.maximum(own, 0.0) + useful) * before - useful
        square[k] = square_of[k][every, node] * (1.0 - t) + square_of[k][every, node + 1] * t
    on = ~states.off[energy][:, tables.row_rail[rows]].T[:, :, None]
    least_w, least_a2 = (np.maximum(sampled_least(values), 0.0) for values in (loss, square))
    return np.where(on, least_w, 0.0), np.where(on, least_a2, 0.0)


def row_legal(evaluator: Evaluator, rows: IntArray, slots: Slots) -> BoolArray:
    """Return where table rows may stand, (rows, B, K): input range, duty, headroom, on-time, each at its kindest.

    Duty falls and headroom grows with the input, and drops only add to what is asked: so the highest input without
    any drop decides. On-times shorten with the input: so the lowest decides.
    """
    problem, states, tables = evaluator.problem, evaluator.states, evaluator.tables
    stages = problem.stages
    stage, rail = tables.row_stage[rows][:, None, None], tables.row_rail[rows]
    output = problem.rails.voltage_v[rail][:, None, None]
    load = states.mix_a.T[rail][:, :, None]
    each = load / tables.row_running[rows][:, None, None]
    shape = np.broadcast_shapes(each.shape, slots.need_v.shape)
    legal = np.broadcast_to(slots.need_v >= stages.input_min_v[stage] * (1.0 - EASE), shape).copy()
    legal &= slots.least_v <= stages.input_max_v[stage] * (1.0 + EASE)
    duty = conduction_ratio(stages, stage, slots.need_v, output, each)
    legal &= (duty <= stages.max_duty[stage] * (1.0 + EASE)) | (stages.kind[stage] == LINEAR)
    room = headroom_v(stages, stage, np.broadcast_to(slots.need_v, shape), output, load)
    legal &= room >= -EASE
    idle = conduction_ratio(stages, stage, slots.least_v, output, np.zeros(shape))
    shortest = stages.min_on_s[stage] * stages.frequency_hz[stage] * (1.0 - EASE)
    legal &= (idle >= shortest) | (stages.kind[stage] != BUCK)
    return np.asarray(legal | states.mix_off.T[rail][:, :, None])


def row_droop(evaluator: Evaluator, rows: IntArray, slots: Slots) -> FloatArray:
    """Return the least droop or release of table rows with every bank, percent, (rows, K, counts, B, groups).

    Taken over the nodes of the droop table around all voltages a stage of the group may dip to, the one above the
    highest included: droop falls with the input. Only where the loop folds back at light load does it also rise, and
    may lie a little lower between two nodes.
    """
    tables, table = evaluator.tables, evaluator.options.rows
    percent, nodes = table.droop_percent[rows], table.droop_nodes_v[rows]
    ease = np.where(evaluator.problem.stages.folded_share[tables.row_stage[rows]] < 1.0, FOLDED_EASE, 1.0 - 1e-6)
    out = np.empty((*percent.shape[:-1], slots.groups))
    for group in range(slots.groups):
        mine = slots.group == group
        low, high = LEAST_DIPPED * slots.least_v[mine].min(), slots.top_v[mine].max()
        first = np.maximum((nodes <= low).sum(axis=1) - 1, 0)
        last = np.minimum((nodes < high).sum(axis=1), nodes.shape[1] - 1)
        place = np.arange(nodes.shape[1])
        inside = (place >= first[:, None]) & (place <= last[:, None])
        out[..., group] = np.where(inside[:, None, None, None, :], percent, np.inf).min(axis=-1)
    return np.asarray(out * ease[:, None, None, None, None])


def row_ripple(evaluator: Evaluator, rows: IntArray, slots: Slots) -> tuple[FloatArray, FloatArray]:
    """Return the least ripple (A) and charge (C) table rows leave to their bank in a group, (rows, B, groups)."""
    problem, states, tables = evaluator.problem, evaluator.states, evaluator.tables
    ripple: list[FloatArray] = []
    charge: list[FloatArray] = []
    for group in range(slots.groups):
        mine = slots.group == group
        volts = np.linspace(slots.least_v[mine].min(), slots.top_v[mine].max(), RIPPLE_SAMPLES)
        swing = row_swing(problem, states, tables, rows, volts[:, None])
        for kept, values in zip((ripple, charge), swing, strict=True):
            kept.append(np.maximum(sampled_least(values), 0.0))
    return np.stack(ripple, axis=2), np.stack(charge, axis=2)


class RailMaker:
    """Makes the options of every rail of a problem over common slots."""

    def __init__(self, evaluator: Evaluator, slots: Slots, unit_cost: FloatArray) -> None:
        self.evaluator, self.slots, self.unit_cost = evaluator, slots, unit_cost
        problem = evaluator.problem
        self.feeds = [problem.space.allowed[problem.layout.rail("feed").start + r] for r in range(problem.layout.rails)]
        self.may_feed = np.array([any(PARENT + r in feeds for feeds in self.feeds) for r in range(len(self.feeds))])

    def feed_legal(self, r: int, stage: IntArray) -> BoolArray:
        """Return which slots feed which stages of a rail, (O, K), by the feeds the space leaves it."""
        problem, slots = self.evaluator.problem, self.slots
        feeds = np.zeros(problem.feed_ok.shape[2], dtype=bool)
        feeds[self.feeds[r]] = True
        ok = problem.feed_ok[r, stage] & feeds
        bus = ok[:, BUS_A : BUS_A + 2].any(axis=1)
        out = np.zeros((len(stage), len(slots.kind)), dtype=bool)
        out[:, slots.on_bus] = bus[:, None]
        out[:, slots.kind == DIRECT] = ok[:, INPUT, None]
        for k in np.flatnonzero(slots.kind == RAIL):
            out[:, k] = ok[:, PARENT + slots.of[k]]
        return out

    def options(self, r: int) -> RailOptions:
        """Return the options of one rail.

        Phases that its own maximum overloads and banks outside the loop's range break limits on any board. A rail that
        may feed others carries more, with more phases running: the least over all counts it may then run stands for
        it, and neither its droop, which its loop's speed at the larger load may better, nor its ripple is held
        against it.
        """
        evaluator, slots = self.evaluator, self.slots
        problem, tables, options = evaluator.problem, evaluator.tables, evaluator.options
        layout, stages = problem.layout, problem.stages
        allowed = {name: problem.space.allowed[layout.rail(name).start + r] for name in ("stage", "phases", "fewest")}
        mine = np.flatnonzero((options.rail == r) & np.isin(options.stage, allowed["stage"]))
        mine = mine[options.phases[mine] >= problem.phases_low[r, options.stage[mine]]]
        most = problem.phases_high[r, options.stage[mine]]
        phases = options.phases[mine]
        named = np.isin(phases, allowed["phases"]) | ((phases == most) & (allowed["phases"].max() > most))
        named |= stages.kind[options.stage[mine]] == LINEAR
        named &= np.isin(options.fewest[mine], allowed["fewest"]) | ((phases == 1) & (options.fewest[mine] == 0))
        mine = mine[named]
        stage, run = options.stage[mine], options.run[mine]
        first = int(tables.base[r][tables.base[r] >= 0].min())
        rows = np.flatnonzero(tables.row_rail == r)
        local = options.row[mine] - first
        loss, square = row_losses(evaluator, rows, slots)
        legal, droop = row_legal(evaluator, rows, slots), row_droop(evaluator, rows, slots)
        ripple, charge = row_ripple(evaluator, rows, slots)
        feeding = bool(self.may_feed[r])
        if feeding:
            droop, ripple, charge = np.zeros_like(droop), np.zeros_like(ripple), np.zeros_like(charge)
        band = evaluator.states.band[evaluator.states.of_kind(ENERGY)]
        places = np.arange(run.shape[1])
        low, high = local, local
        if feeding:
            high = local + (options.phases[mine][:, None] - run)
        loss_o, square_o = (least_between(values, low[:, band], high[:, band]) for values in (loss, square))
        legal_o = np.zeros((len(mine), len(places), len(slots.kind)), dtype=bool)
        for extra in range(int((high - low).max(initial=0)) + 1):
            legal_o |= legal[np.minimum(low + extra, high), places]
        legal_o &= self.feed_legal(r, stage)[:, None, :]
        most = np.where(legal_o[:, band], loss_o, 0.0).max(axis=(0, 2), initial=0.0)
        o, k, n = np.nonzero(self.loop_fits(r, stage))
        esr = bank_esr_ohm(problem.study, problem.capacitors)[k] / problem.bank_counts[n]
        held_f = bank_effective_f(problem.study, problem.capacitors, problem.rails.voltage_v[r])[k]
        held_f = held_f * problem.bank_counts[n]
        swing = half_swing_v(
            ripple[local[o], places], charge[local[o], places], held_f[:, None, None], esr[:, None, None]
        )
        level = np.searchsorted(LEVELS, droop[local[o], k[:, None], n[:, None], places] - EASE).astype(np.int64)
        level = np.where(level >= len(LEVELS), NEVER, level)
        quiet = (swing <= problem.rails.ripple_v[r] * (1.0 + EASE)) | evaluator.states.mix_off[:, r][:, None]
        cost = self.unit_cost[stages.part[stage]] * options.phases[mine]
        second = stages.second_part[stage]
        cost = cost + np.where(second >= 0, self.unit_cost[np.maximum(second, 0)], 0.0) * options.phases[mine]
        return RailOptions(
            stage=stage,
            phases=options.phases[mine],
            fewest=options.fewest[mine],
            run=run,
            loss_w=loss_o,
            square=square_o,
            most_w=MOST_EASE * most,
            legal=legal_o,
            option=o,
            bank=k,
            count=n,
            esr_ohm=esr,
            cost=cost[o] + self.unit_cost[problem.capacitors.part[k]] * problem.bank_counts[n],
            level=np.where(quiet, level, NEVER),
        )

    def loop_fits(self, r: int, stage: IntArray) -> BoolArray:
        """Return which banks a rail may have with which stages, (O, K, counts)."""
        problem = self.evaluator.problem
        capacitors, stages, volts = problem.capacitors, problem.stages, problem.rails.voltage_v[r]
        banks = problem.space.allowed[problem.layout.rail("bank").start + r]
        counts = problem.space.allowed[problem.layout.rail("bank_count").start + r]
        least = bank_effective_f(problem.study, capacitors, volts)[:, None] * problem.bank_counts
        most = bank_most_f(capacitors, volts)[:, None] * problem.bank_counts
        fits = least >= stages.loop_min_f[stage][:, None, None] * (1.0 - EASE)
        fits &= most <= stages.loop_max_f[stage][:, None, None] * (1.0 + EASE)
        there = np.zeros(least.shape, dtype=bool)
        there[np.ix_(banks[problem.capacitor_ok[r, banks]], counts)] = True
        return np.asarray(fits & there)


def least_between(values: FloatArray, low: IntArray, high: IntArray) -> FloatArray:
    """Return the least of table rows low to high of each option in each state, (O, S, K); values (rows, S, K)."""
    states = np.arange(low.shape[1])
    out = values[low, states]
    for extra in range(1, int((high - low).max(initial=0)) + 1):
        out = np.minimum(out, values[np.minimum(low + extra, high), states])
    return out
