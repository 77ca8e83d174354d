"""Loss tables over stage input voltage, made once a problem from the same physics the direct path calls.

One row a rail, stage and running phase count; one column a state; nodes over the voltages that stage can see.
Between nodes the loss is interpolated by a cubic through four of them.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.hardware import Hardware
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_A, INPUT, PARENT
from archopt.model.stages import operate, ripple_square_a2
from archopt.model.states import StateTable

NODES = 32
REACH_BELOW_BUS = 0.80  # of the lowest bus voltage: how far drop and dip may pull a stage input


@dataclass(frozen=True)
class LossTables:
    """Tables of a problem in its states.

    base (R, N): first row of a rail's stage, -1 where it has none; row = base + running - 1.
    loss_w (rows, S, K): loss without bank; ripple_square (rows, S, K): mean square of the ripple of all running phases.
    start_v, step_v (N,): voltage of the first node and between nodes, a stage.
    """

    base: IntArray
    loss_w: FloatArray
    ripple_square: FloatArray
    start_v: FloatArray
    step_v: FloatArray
    row_stage: IntArray
    row_rail: IntArray
    row_running: IntArray

    @property
    def bytes(self) -> int:
        """Memory the tables take."""
        return int(self.loss_w.nbytes + self.ripple_square.nbytes)


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
    loss = np.empty((len(row), len(states.hours), NODES))
    ripple = np.empty_like(loss)
    chunk = max(1, 400_000 // (loss.shape[1] * NODES))
    node = np.arange(NODES)
    for start in range(0, len(row), chunk):
        part = row[start : start + chunk]
        rail, stage, running = part[:, 0, None, None], part[:, 1, None, None], part[:, 2, None, None]
        volts = low[stage] + step[stage] * node
        current = states.current_a.T[part[:, 0]][:, :, None]
        output_v = problem.rails.voltage_v[rail]
        point = operate(problem.stages, stage, running, volts, output_v, current, states.ambient_degc[:, None])
        loss[start : start + chunk] = point.loss_w
        per_phase = current / running
        ripple[start : start + chunk] = running * ripple_square_a2(problem.stages, stage, volts, output_v, per_phase)
    return LossTables(
        base=base,
        loss_w=loss,
        ripple_square=ripple,
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
    """Stage losses read from the tables; rails with children, whose current is not the state's, by physics."""

    def __init__(self, problem: Problem, states: StateTable, tables: LossTables) -> None:
        self.problem = problem
        self.states = states
        self.tables = tables

    def __call__(self, hardware: Hardware, stage_v: FloatArray, current_a: FloatArray) -> FloatArray:
        """Return losses by interpolation, (P, S, R) W."""
        tables, states = self.tables, self.states
        stage = hardware.stage
        rail = np.arange(stage.shape[1])
        base = tables.base[rail, stage]
        row = np.maximum(base, 0)[:, None, :] + hardware.running - 1
        row = np.minimum(row, len(tables.row_stage) - 1)
        place = (stage_v - tables.start_v[stage][:, None, :]) / tables.step_v[stage][:, None, :]
        node = np.clip(place.astype(np.int64), 1, NODES - 3)
        t = np.clip(place - node, -1.5, 2.5)
        flat = (row * len(states.hours) + np.arange(len(states.hours))[:, None]) * NODES + node
        weights = cubic_weights(t)
        values = tables.loss_w.ravel()
        loss = values[flat - 1] * weights[0]
        loss += values[flat] * weights[1]
        loss += values[flat + 1] * weights[2]
        loss += values[flat + 2] * weights[3]
        ripple = tables.ripple_square.ravel()
        square = ripple[flat] * (1.0 - t) + ripple[flat + 1] * t
        loss += hardware.bank_esr_ohm[:, None, :] * square
        if hardware.children.any():
            self.correct_parents(hardware, stage_v, current_a, loss)
        return np.where(states.off | (base < 0)[:, None, :], 0.0, np.maximum(loss, 0.0))

    def correct_parents(self, hardware: Hardware, stage_v: FloatArray, current_a: FloatArray, loss: FloatArray) -> None:
        """Replace the losses of rails with children by direct physics, in place."""
        problem = self.problem
        p, r = np.nonzero(hardware.children)
        stage = hardware.stage[p, r][:, None]
        running = hardware.running[p, :, r]
        volts, amps = stage_v[p, :, r], current_a[p, :, r]
        output_v = problem.rails.voltage_v[r][:, None]
        point = operate(problem.stages, stage, running, volts, output_v, amps, self.states.ambient_degc)
        square = ripple_square_a2(problem.stages, stage, volts, output_v, amps / running)
        esr = hardware.bank_esr_ohm[p, r][:, None]
        loss[p, :, r] = point.loss_w + esr * running * square
