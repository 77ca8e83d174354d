"""Loss tables over stage input voltage, made once a problem from the same physics the direct path calls.

One row a rail, stage and running phase count; one column a state; nodes over the voltages that stage can see.
Between nodes the loss is interpolated by a cubic through four of them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from archopt.model.hardware import Hardware
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_A, INPUT, PARENT
from archopt.model.stages import operate, ripple_square_a2
from archopt.model.states import StateTable

NODES = 32
CHUNK = 400_000  # operating points worked out at once while tables are made
HALF, SIXTH, OUTER = np.float32(0.5), np.float32(1.0 / 6.0), np.float32(1.5)
NEAR = 0.02  # of its input: so far a parent's loss beyond its table stays what it was
REACH_BELOW_BUS = 0.80  # of the lowest bus voltage: how far drop and dip may pull a stage input

SingleArray = NDArray[np.float32]


@dataclass(frozen=True)
class LossTables:
    """Tables of a problem in its states, in single precision: a cubic between nodes is worth less than that.

    base (R, N): first row of a rail's stage, -1 where it has none; row = base + running - 1.
    loss (rows, K, S): loss without bank, W; ripple (rows, K, S): mean square of the ripple of all running phases, A^2;
    states last, as those of a band are read together. start_v, step_v (N,): voltage of the first node and between
    nodes, a stage.
    """

    base: IntArray
    loss: SingleArray
    ripple: SingleArray
    start_v: FloatArray
    step_v: FloatArray
    row_stage: IntArray
    row_rail: IntArray
    row_running: IntArray

    @property
    def loss_w(self) -> SingleArray:
        """Loss without bank, (rows, S, K) W: a view."""
        return self.loss.transpose(0, 2, 1)

    @property
    def ripple_square(self) -> SingleArray:
        """Mean square of the ripple of all running phases, (rows, S, K) A^2: a view."""
        return self.ripple.transpose(0, 2, 1)

    @property
    def bytes(self) -> int:
        """Memory the tables take."""
        return int(self.loss.nbytes + self.ripple.nbytes)


def stage_reach(problem: Problem) -> tuple[FloatArray, FloatArray]:
    """Return the lowest and highest input voltage each stage can be asked to run at, (N,) V."""
    supply = problem.study.supply
    feeds: BoolArray = np.asarray(problem.feed_ok.any(axis=0))  # (N, F)
    low = np.full(len(problem.stages.names), np.inf)
    high = np.zeros(len(problem.stages.names))
    bus = feeds[:, BUS_A:PARENT].any(axis=1)
    low = np.where(bus, np.minimum(low, problem.grid_v[0] * REACH_BELOW_BUS), low)
    top = max(float(problem.grid_v[-1]), fixed_ratio_top_v(problem))
    high = np.where(bus, np.maximum(high, top), high)
    direct = feeds[:, INPUT]
    low = np.where(direct, np.minimum(low, supply.low_v * 0.9), low)
    high = np.where(direct, np.maximum(high, supply.high_v), high)
    for j, volts in enumerate(problem.rails.voltage_v):
        here = feeds[:, PARENT + j]
        low = np.where(here, np.minimum(low, volts), low)
        high = np.where(here, np.maximum(high, volts), high)
    low = np.maximum(np.minimum(low, high), 0.9 * problem.stages.input_min_v)
    high = np.minimum(high, 1.02 * problem.stages.input_max_v)
    return low, np.maximum(high, low + 1.0)


def fixed_ratio_top_v(problem: Problem) -> float:
    """Return the highest bus a fixed-ratio converter on offer can make, V."""
    ratio = problem.converters.ratio
    return float(ratio.max(initial=0.0)) * problem.study.supply.high_v


def make_tables(problem: Problem, states: StateTable) -> LossTables:
    """Return the loss tables of every stage a rail may choose."""
    low, high = stage_reach(problem)
    step = (high - low) / (NODES - 1)
    rails, stages = problem.layout.rails, len(problem.stages.names)
    base = np.full((rails, stages), -1, dtype=np.int64)
    rows: list[tuple[int, int, int]] = []
    usable: BoolArray = np.asarray(problem.feed_ok.any(axis=2))
    for r in range(rails):
        for s in np.flatnonzero(usable[r]):
            base[r, s] = len(rows)
            rows += [(r, int(s), running) for running in range(1, int(problem.phases_high[r, s]) + 1)]
    row = np.array(rows, dtype=np.int64).reshape(-1, 3)
    loss = np.empty((len(row), NODES, len(states.hours)), dtype=np.float32)
    ripple = np.empty_like(loss)
    chunk = max(1, CHUNK // (len(states.hours) * NODES))
    node = np.arange(NODES)[:, None]
    for start in range(0, len(row), chunk):
        part = row[start : start + chunk]
        rail, stage, running = part[:, 0, None, None], part[:, 1, None, None], part[:, 2, None, None]
        volts = low[stage] + step[stage] * node
        current = states.current_a.T[part[:, 0]][:, None, :]
        output_v = problem.rails.voltage_v[rail]
        point = operate(problem.stages, stage, running, volts, output_v, current, states.ambient_degc)
        loss[start : start + chunk] = point.loss_w
        per_phase = current / running
        ripple[start : start + chunk] = running * ripple_square_a2(problem.stages, stage, volts, output_v, per_phase)
    return LossTables(
        base=base,
        loss=loss,
        ripple=ripple,
        start_v=low,
        step_v=step,
        row_stage=row[:, 1],
        row_rail=row[:, 0],
        row_running=row[:, 2],
    )


def cubic_weights(t: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray, FloatArray]:
    """Return the weights of the four nodes at -1, 0, 1, 2 for a place ``t`` between 0 and 1 (Lagrange)."""
    below, above, two = t + 1.0, t - 1.0, t - 2.0
    return (
        -t * above * two / 6.0,
        below * above * two / 2.0,
        -below * t * two / 2.0,
        below * t * above / 6.0,
    )


class TableStages:
    """Stage losses read from the tables."""

    def __init__(self, problem: Problem, states: StateTable, tables: LossTables) -> None:
        self.problem = problem
        self.states = states
        self.tables = tables

    def of(self, hardware: Hardware) -> TableReader:
        """Return what reads the losses of one batch of designs."""
        return TableReader(self.problem, self.states, self.tables, hardware)


class TableReader:
    """Reads the stage losses of one batch; rails with children, whose current is not the state's, by physics.

    The four nodes around an operating point are gathered once and kept as a cubic: while the board is solved the
    point hardly moves, and where it stays between the outer nodes the cubic still interpolates.
    Arrays are (P, R, S) here.
    """

    def __init__(self, problem: Problem, states: StateTable, tables: LossTables, hardware: Hardware) -> None:
        self.problem, self.states, self.tables, self.hardware = problem, states, tables, hardware
        stage = hardware.stage
        base = tables.base[np.arange(stage.shape[1]), stage]
        row = np.maximum(base, 0)[..., None] + hardware.running.transpose(0, 2, 1) - 1
        self.stride = len(states.hours)
        self.first = np.minimum(row, len(tables.row_stage) - 1) * (NODES * self.stride) + np.arange(self.stride)
        self.start_v = tables.start_v[stage][..., None].astype(np.float32)
        self.per_volt = (1.0 / tables.step_v[stage])[..., None].astype(np.float32)
        self.esr_ohm = hardware.bank_esr_ohm[..., None].astype(np.float32)
        self.silent = states.off.T | (base < 0)[..., None] if states.off.any() or (base < 0).any() else None
        self.parents = ParentLoss(problem, states, hardware) if hardware.children.any() else None
        self.node: SingleArray | None = None
        self.cubic: list[SingleArray] = []

    def __call__(self, stage_v: FloatArray, current_a: FloatArray) -> FloatArray:
        """Return losses by interpolation, (P, S, R) W, at stage inputs (V) and stage output currents (A)."""
        place = (stage_v.transpose(0, 2, 1).astype(np.float32) - self.start_v) * self.per_volt
        if self.node is None:
            self.node = nearest(place)
            self.cubic = self.gather(self.first, self.node, self.esr_ohm)
        offset = place - self.node
        outside = np.flatnonzero(np.abs(offset - HALF) > OUTER)
        if len(outside):
            self.move(outside, place)
            offset = np.clip(place - self.node, -OUTER, OUTER + 1)
        constant, linear, square, cube = self.cubic
        loss = cube * offset
        for coefficient in (square, linear, constant):
            loss += coefficient
            if coefficient is not constant:
                loss *= offset
        out = np.maximum(loss, 0.0, dtype=np.float64)
        if self.parents is not None:
            self.parents.correct(stage_v, current_a, out)
        if self.silent is not None:
            out[self.silent] = 0.0
        return out.transpose(0, 2, 1)

    def gather(self, first: IntArray, node: SingleArray, esr_ohm: SingleArray) -> list[SingleArray]:
        """Return the cubic through four nodes, from the constant up, of the distance from ``node`` in steps."""
        flat = first + node.astype(np.int64) * self.stride
        loss, ripple = self.tables.loss.reshape(-1), self.tables.ripple.reshape(-1)
        here, after = loss.take(flat), loss.take(flat + self.stride)
        before, beyond = loss.take(flat - self.stride), loss.take(flat + 2 * self.stride)
        square_a2 = ripple.take(flat)
        bank, slope = esr_ohm * square_a2, esr_ohm * (ripple.take(flat + self.stride) - square_a2)
        rise = after - here
        square = HALF * (before - here + rise)
        cube = SIXTH * (beyond - before) - HALF * rise
        linear = rise - square - cube
        return [here + bank, linear + slope, square, cube]

    def move(self, outside: IntArray, place: SingleArray) -> None:
        """Gather anew where the operating point has left its nodes."""
        assert self.node is not None
        node = nearest(place.reshape(-1)[outside])
        esr = self.esr_ohm.reshape(-1)[outside // self.stride]
        self.node.reshape(-1)[outside] = node
        for kept, fresh in zip(self.cubic, self.gather(self.first.reshape(-1)[outside], node, esr), strict=True):
            kept.reshape(-1)[outside] = fresh


class ParentLoss:
    """What rails with children lose beyond their tables, whose current is the state's: by physics, of M rails.

    Found where children draw current and kept while the stage input hardly moves.
    """

    def __init__(self, problem: Problem, states: StateTable, hardware: Hardware) -> None:
        self.problem, self.states, self.hardware = problem, states, hardware
        self.place = p, r = np.nonzero(hardware.children)
        self.running = hardware.running[p, :, r]  # (M, S)
        self.amps = states.current_a.T[r]
        self.volts = np.full(self.amps.shape, np.inf)
        self.beyond_w = np.zeros(self.amps.shape)

    def correct(self, stage_v: FloatArray, current_a: FloatArray, loss_w: FloatArray) -> None:
        """Add it to losses read from the tables, (P, R, S), in place."""
        p, r = self.place
        volts, amps = stage_v[p, :, r], current_a[p, :, r]
        m, s = np.nonzero((amps != self.amps) | (np.abs(volts - self.volts) > NEAR * self.volts))
        if len(m):
            self.volts[m, s], self.amps[m, s] = volts[m, s], amps[m, s]
            self.beyond_w[m, s] = self.by_physics(m, s) - loss_w[p[m], r[m], s]
        loss_w[p, r] += self.beyond_w

    def by_physics(self, m: IntArray, s: IntArray) -> FloatArray:
        """Return the losses of some of the rails in some states, W."""
        stages, hardware = self.problem.stages, self.hardware
        p, r = self.place[0][m], self.place[1][m]
        stage, running = hardware.stage[p, r], self.running[m, s]
        volts, amps, output_v = self.volts[m, s], self.amps[m, s], self.problem.rails.voltage_v[r]
        point = operate(stages, stage, running, volts, output_v, amps, self.states.ambient_degc[s])
        square = ripple_square_a2(stages, stage, volts, output_v, amps / running)
        return np.asarray(point.loss_w + hardware.bank_esr_ohm[p, r] * running * square)


def nearest(place: SingleArray) -> SingleArray:
    """Return the node below each place, as far from the ends as a cubic through four nodes needs."""
    return np.asarray(np.clip(np.floor(place), 1, NODES - 3))
