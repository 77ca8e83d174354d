"""What each rail option does in each band and at the fall-back: the sums and windows schedule and completion read.

An option is a stage, its phase count and the fewest phases left running. Its running phases in a band are
decided here once: the count that loses least over the band among those that carry the band's worst mix.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from archopt.model.hardware import Hardware, bias_per_phase_w
from archopt.model.parameters import BUCK, LINEAR, BoolArray, FloatArray, IntArray
from archopt.model.part_rows import NO_SHEDDING, THRESHOLD_SHEDDING
from archopt.model.problem import Problem, bank_effective_f, bank_esr_ohm, bank_most_f
from archopt.model.space import BANK_COUNTS
from archopt.model.stages import (
    conduction_ratio,
    loop_bandwidth_rad_s,
    slew_down_a_per_s,
    slew_up_a_per_s,
    switching,
)
from archopt.model.states import JUMP, StateTable
from archopt.model.tables import NODES, LossTables, cubic_weights
from archopt.physics.output_ripple import half_swing_v
from archopt.physics.transient import rail_droop_v

DROOP_NODES = 12
LEAST_HEADROOM_V = 0.05  # of the lowest droop node above the voltage at which the stage cannot raise its current
IDLE_HOURS = 1e-6  # weight of a band's worst mix, so that a band without hours still has a preference


NO_BANK_PERCENT = 1e6  # droop with a bank that a rail may not have or a loop does not take


@dataclass(frozen=True)
class BankDroop:
    """The worse of droop and release by row, bank, count, place and node, percent: indexed as if all banks were there.

    values (rows, banks of a rail and one more, counts, B + 1, nodes); place (rows, K): where each bank stands among
    those its rail may have, the last for all others. Few banks fit one rail: the whole would be three times as large.
    """

    values: NDArray[np.float32]
    place: IntArray

    @property
    def nbytes(self) -> int:
        """Memory it takes."""
        return int(self.values.nbytes + self.place.nbytes)

    def __getitem__(self, index: IntArray | tuple[Any, ...]) -> NDArray[np.float32]:
        """Return what rows, banks, counts and so on broadcast to; of rows alone all banks."""
        if isinstance(index, tuple):
            row, bank, *others = index
            return np.asarray(self.values[(row, self.place[row, bank], *others)])
        return np.asarray(self.values[index[..., None], self.place[index]])


@dataclass(frozen=True)
class RowTables:
    """Per table row (rail, stage, running count): kWh and W over the bus grid, and legal windows.

    B here counts the bands and the fall-back behind them, where no hours are spent.

    energy_kwh (rows, B, G) and input_kwh (rows, B): stage input energy a year; mix_w, jump_w (rows, B, G);
    need_v, jump_v, high_v (rows, B): window of stage input voltage; droop_percent (rows, K, counts, B, nodes)
    float32 over droop_nodes_v (rows, nodes). child_kwh, child_mix_w, child_jump_w (rows, B, R): the same sums
    with the stage input at the voltage of each rail, for children of it. swing_a, swing_c (rows, B, G):
    ripple and charge left to the output bank, peak to peak, at the worst mix.
    """

    energy_kwh: FloatArray
    input_kwh: FloatArray
    mix_w: FloatArray
    jump_w: FloatArray
    need_v: FloatArray
    jump_v: FloatArray
    high_v: FloatArray
    droop_percent: BankDroop
    droop_nodes_v: FloatArray
    child_kwh: FloatArray
    child_mix_w: FloatArray
    child_jump_w: FloatArray
    swing_a: FloatArray
    swing_c: FloatArray


@dataclass(frozen=True)
class Options:
    """Options of all rails: O rows.

    first (R, N): first option of a rail's stage, -1 where none; option = first + 2 (phases - 1) + fewest.
    run (O, B) running phases; row (O, B) table row.
    """

    first: IntArray
    rail: IntArray
    stage: IntArray
    phases: IntArray
    fewest: IntArray
    run: IntArray
    row: IntArray
    rows: RowTables


def at_grid(tables: LossTables, values: FloatArray, volts: FloatArray) -> FloatArray:
    """Interpolate (rows, B, K) nodes to grid voltages, (rows, B, G); held beyond the nodes."""
    start = tables.start_v[tables.row_stage][:, None]
    step = tables.step_v[tables.row_stage][:, None]
    place = (volts[None, :] - start) / step
    node = np.clip(np.floor(place).astype(np.int64), 1, NODES - 3)
    t = np.clip(place - node, -1.0, 2.0)
    weights = cubic_weights(t)
    out = np.zeros((*values.shape[:2], len(volts)))
    for shift, weight in zip((-1, 0, 1, 2), weights, strict=True):
        out += np.take_along_axis(values, (node + shift)[:, None, :], axis=2) * weight[:, None, :]
    return out


def band_energy(problem: Problem, states: StateTable, tables: LossTables) -> tuple[FloatArray, FloatArray]:
    """Return (rows, B, K) and, at each state's own input, (rows, B) stage input energy, kWh a year."""
    bands = states.places
    rows = len(tables.row_stage)
    energy = np.zeros((rows, bands, NODES))
    direct = np.zeros((rows, bands))
    voltage = problem.rails.voltage_v[tables.row_rail]
    start, step = tables.start_v[tables.row_stage], tables.step_v[tables.row_stage]
    mix_low = states.mix_low
    weights = states.hours.copy()
    weights[mix_low] = IDLE_HOURS
    for s in np.concatenate([states.with_hours, mix_low]):
        on = ~states.off[s][tables.row_rail]
        useful = voltage * states.current_a[s][tables.row_rail]
        scale = np.where(on, weights[s] * 1e-3, 0.0)
        energy[:, states.band[s]] += scale[:, None] * (tables.loss_w[:, s] + useful[:, None])
        place = np.clip((states.input_v[s] - start) / step, 0.0, NODES - 1.001)
        node = place.astype(np.int64)
        t = place - node
        every = np.arange(rows)
        loss = tables.loss_w[every, s, node] * (1.0 - t) + tables.loss_w[every, s, node + 1] * t
        direct[:, states.band[s]] += scale * (loss + useful)
    return energy, direct


def windows(problem: Problem, states: StateTable, tables: LossTables) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return the least steady, least after-jump and highest legal stage input of each row, (rows, B) V."""
    stages, rails = problem.stages, problem.rails
    stage = np.broadcast_to(tables.row_stage[:, None], (len(tables.row_stage), states.places))
    rail, running = tables.row_rail, tables.row_running[:, None]
    output = rails.voltage_v[rail][:, None] * (
        1.0 + np.where(rails.remote_sense, 0.5 * rails.drop_budget, 0.0)[rail][:, None]
    )
    limit = stages.phase_limit_a[stage]

    def least(current_a: FloatArray) -> FloatArray:
        per_phase = np.minimum(current_a.T[rail] / running, limit)
        volts = np.broadcast_to(output * 1.5, stage.shape)
        for _ in range(8):
            duty = conduction_ratio(stages, stage, volts, output, per_phase)
            volts = np.clip(volts * duty / stages.max_duty[stage], 0.2 * output, 1e3)
        dropout = output + stages.linear.dropout_v[stage] * per_phase / stages.linear.rated_a[stage]
        return np.where(stages.kind[stage] == LINEAR, dropout, volts)

    need = np.maximum(least(states.mix_a), stages.input_min_v[stage])
    jump = np.maximum(least(states.after_a), stages.input_min_v[stage])
    high = stages.input_max_v[stage].copy()
    least_duty = np.maximum(stages.min_on_s[stage] * stages.frequency_hz[stage], 1e-4)
    shortest = rails.voltage_v[rail][:, None] / least_duty  # without load, where nothing drops
    high = np.where(stages.kind[stage] == BUCK, np.minimum(high, shortest), high)
    return need, jump, np.minimum(high, hottest(problem, states, tables))


def hottest(problem: Problem, states: StateTable, tables: LossTables) -> FloatArray:
    """Return the highest node voltage at which each row stays within its junction limit, (rows, B) V."""
    stages = problem.stages
    mix_high = states.mix_high
    loss = tables.loss_w[:, mix_high] / tables.row_running[:, None, None]  # (rows, B, K)
    stage = tables.row_stage
    buck = stages.buck
    bias = ((buck.high_side_gate_c + buck.low_side_gate_c) * buck.gate_v * buck.frequency_hz)[stage]
    bias = np.where(stages.bias_fed[stage], bias, 0.0)[:, None, None]
    ambient = states.ambient_degc[mix_high][:, None]
    degc = ambient + stages.thermal_k_per_w[stage][:, None, None] * (loss + bias)
    ok = degc <= problem.study.derating.junction_degc
    volts = tables.start_v[stage][:, None] + tables.step_v[stage][:, None] * np.arange(NODES)
    return np.asarray(np.where(ok, volts[:, None, :], 0.0).max(axis=2) + np.where(ok[:, :, -1], 1e3, 0.0))


def banded_bandwidth(
    problem: Problem, stage: IntArray, running: IntArray, nodes_v: FloatArray, output_v: float, load_a: FloatArray
) -> FloatArray:
    """Return the loop bandwidth of table rows at the loads of the bands (B,), rad/s, (rows, 1, 1, B or 1, nodes or 1).

    nodes_v (rows, nodes): stage input voltages.
    """
    each = (load_a / running[:, None])[..., None]
    at = loop_bandwidth_rad_s(
        problem.stages, stage[:, None, None], nodes_v[:, None, :], np.array(output_v), each
    )
    return at[:, None, None]


def droop_tables(problem: Problem, states: StateTable, tables: LossTables) -> tuple[BankDroop, FloatArray]:
    """Return the worse of droop and release in percent of budget for every row and bank, and its nodes.

    (rows, K, counts, B, nodes) float32 and (rows, nodes) V, even steps of the logarithm of the headroom: that is
    what droop bends with.
    """
    stages, rails = problem.stages, problem.rails
    capacitors = problem.capacitors
    counts = np.array(BANK_COUNTS)
    top = tables.start_v + tables.step_v * (NODES - 1)
    node = np.linspace(0.0, 1.0, DROOP_NODES)
    no_headroom_v = rails.voltage_v[tables.row_rail] * (stages.turns / stages.max_duty)[tables.row_stage]
    first = np.maximum(tables.start_v[tables.row_stage] - no_headroom_v, LEAST_HEADROOM_V)
    last = np.maximum(top[tables.row_stage] - no_headroom_v, 2.0 * LEAST_HEADROOM_V)
    nodes_v = no_headroom_v[:, None] + first[:, None] * (last / first)[:, None] ** node
    fitting = int(problem.capacitor_ok.sum(axis=1).max(initial=0))
    rank = np.where(problem.capacitor_ok, np.cumsum(problem.capacitor_ok, axis=1) - 1, fitting)
    shape_of = (len(tables.row_stage), fitting + 1, len(counts), states.places, DROOP_NODES)
    out = np.full(shape_of, NO_BANK_PERCENT, np.float32)
    esr_piece = bank_esr_ohm(problem.study, capacitors)
    for r in range(problem.layout.rails):
        rows = np.flatnonzero(tables.row_rail == r)
        banks = np.flatnonzero(problem.capacitor_ok[r])
        if not len(rows):
            continue
        volts_r = float(rails.voltage_v[r])
        piece_f = bank_effective_f(problem.study, capacitors, volts_r)[banks]
        stage = tables.row_stage[rows]
        running = tables.row_running[rows]
        shape = (len(rows), len(banks), len(counts), states.places, DROOP_NODES)
        bank_f = (piece_f[:, None] * counts)[None, :, :, None, None]
        esr = (esr_piece[banks][:, None] / counts)[None, :, :, None, None]

        def spread(values: FloatArray) -> FloatArray:
            return values[:, None, None, None, None]

        mix = states.mix_a[:, r]
        after = np.minimum(mix + rails.step_a[r], max(float(rails.max_a[r]), float(mix.max())))
        carried = running * stages.phase_limit_a[stage]
        deficit = np.maximum(after[None, :] - carried[:, None], 0.0)[:, None, None, :, None]
        up = slew_up_a_per_s(stages, stage[:, None], running[:, None], nodes_v[rows], np.array(volts_r))
        down = slew_down_a_per_s(stages, stage, running, np.array(volts_r))
        step = rails.step_a[r]
        rise, fall = (
            banded_bandwidth(problem, stage, running, nodes_v[rows], volts_r, load)
            for load in (np.maximum(after - step, 0.0), np.maximum(mix - step, 0.0))
        )
        loop = (spread(stages.delay_s[stage]), bank_f, esr)
        slew = rails.load_slew_a_per_s[r]
        wakeup = spread(stages.wakeup_s[stage])
        droop = rail_droop_v(step, up[:, None, None, None, :], rise, *loop, slew, deficit, wakeup)
        release = rail_droop_v(step, spread(down), fall, *loop, slew)
        worst = np.broadcast_to(np.maximum(droop, release), shape) * (100.0 / rails.budget_v[r])
        effective = bank_f[0, :, :, 0, 0][None]
        most = (bank_most_f(capacitors, volts_r)[banks][:, None] * counts)[None]
        inside = (effective >= stages.loop_min_f[stage][:, None, None]) & (
            most <= stages.loop_max_f[stage][:, None, None]
        )
        worst = np.where(inside[..., None, None], worst, NO_BANK_PERCENT)
        worst = np.where(states.mix_off[:, r][:, None], 0.0, worst)
        out[rows, : len(banks)] = worst
    return BankDroop(out, rank[tables.row_rail]), nodes_v


def row_swing(
    problem: Problem, states: StateTable, tables: LossTables, rows: IntArray, volts: FloatArray
) -> tuple[FloatArray, FloatArray]:
    """Return ripple (A) and charge (C), peak to peak, that table rows leave to their bank, (rows, B, V) at the mix.

    volts (V, 1) or (V, rows): stage input voltages.
    """
    rail, stage = tables.row_rail[rows], tables.row_stage[rows]
    load = states.mix_a.T[rail][:, :, None]
    at = np.broadcast_to(volts, (len(volts), len(rows))).T[:, None, :]
    stage, running = stage[:, None, None], tables.row_running[rows][:, None, None]
    found = switching(problem.stages, stage, running, at, problem.rails.voltage_v[rail][:, None, None], load)
    return found.ripple_a, found.charge_c


def make_options(problem: Problem, states: StateTable, tables: LossTables) -> Options:
    """Return every rail's options with their band sums and windows."""
    energy, direct = band_energy(problem, states, tables)
    mix_low, jump = states.mix_low, states.of_kind(JUMP)
    voltage = problem.rails.voltage_v[tables.row_rail]
    useful_mix = (voltage[:, None] * states.mix_a.T[tables.row_rail])[..., None]
    useful_jump = (voltage[:, None] * states.after_a.T[tables.row_rail])[..., None]
    off_mix = states.mix_off.T[tables.row_rail][..., None]
    need, jump_v, high = windows(problem, states, tables)
    droop, nodes = droop_tables(problem, states, tables)
    swing = row_swing(problem, states, tables, np.arange(len(tables.row_stage)), problem.grid_v[:, None])
    at_rails = [
        at_grid(tables, values, problem.rails.voltage_v)
        for values in (energy, tables.loss_w[:, mix_low] + useful_mix, tables.loss_w[:, jump] + useful_jump)
    ]
    rows = RowTables(
        energy_kwh=at_grid(tables, energy, problem.grid_v),
        input_kwh=direct,
        mix_w=np.where(off_mix, 0.0, at_grid(tables, tables.loss_w[:, mix_low] + useful_mix, problem.grid_v)),
        jump_w=at_grid(tables, tables.loss_w[:, jump] + useful_jump, problem.grid_v),
        need_v=need,
        jump_v=jump_v,
        high_v=high,
        droop_percent=droop,
        droop_nodes_v=nodes,
        child_kwh=at_rails[0],
        child_mix_w=np.where(off_mix, 0.0, at_rails[1]),
        child_jump_w=at_rails[2],
        swing_a=swing[0],
        swing_c=swing[1],
    )
    first = np.full(tables.base.shape, -1, dtype=np.int64)
    columns: list[tuple[int, int, int, int]] = []
    for r, s in np.argwhere(tables.base >= 0).tolist():
        first[r, s] = len(columns)
        for count in range(1, int(problem.phases_high[r, s]) + 1):
            columns += [(r, s, count, 0), (r, s, count, 1)]
    table = np.array(columns, dtype=np.int64).reshape(-1, 4)
    rail, stage, phases, fewest = table.T
    run = running_phases(problem, states, tables, energy, table)
    return Options(
        first=first,
        rail=rail,
        stage=stage,
        phases=phases,
        fewest=fewest,
        run=run,
        row=tables.base[rail, stage][:, None] + run - 1,
        rows=rows,
    )


def quiet(
    problem: Problem, options: Options, option: IntArray, hardware: Hardware, designs: IntArray, rail: int
) -> BoolArray:
    """Return at which bus voltages a rail of some designs keeps its output ripple, (designs, B, G); undropped."""
    rows = options.rows
    row, band = options.row[option], np.arange(rows.swing_a.shape[1])
    esr_ohm, bank_f = (values[designs, rail, None, None] for values in (hardware.bank_esr_ohm, hardware.bank_f))
    swing_v = half_swing_v(rows.swing_a[row, band], rows.swing_c[row, band], bank_f, esr_ohm)
    return np.asarray(swing_v <= problem.rails.ripple_v[rail])


def band_hours(states: StateTable) -> FloatArray:
    """Return the hours a year at each place, (B + 1,); none at the fall-back."""
    hours = np.zeros(states.places)
    energy = states.with_hours
    np.add.at(hours, states.band[energy], states.hours[energy])
    return hours


def running_phases(
    problem: Problem, states: StateTable, tables: LossTables, energy: FloatArray, table: IntArray
) -> IntArray:
    """Return the running phases of each option in each band, (O, B).

    Least energy that carries the mix where the part can shed at will; as its thresholds say at the mix where it
    goes by them; all where it never sheds.
    """
    rail, stage, phases, fewest = table.T
    mean = energy.mean(axis=2)  # (rows, B) over the stage's voltages
    gates_w = tables.row_running * bias_per_phase_w(problem)[tables.row_stage]
    mean = mean + gates_w[:, None] * np.maximum(band_hours(states), IDLE_HOURS) * 1e-3
    needed = np.ceil(states.mix_a.T[rail] / problem.stages.phase_limit_a[stage][:, None] - 1e-9)
    needed = np.clip(needed, 1, phases[:, None]).astype(np.int64)
    best = np.broadcast_to(phases[:, None], needed.shape).copy()
    best_kwh = mean[tables.base[rail, stage] + phases - 1].copy()
    for running in range(1, int(phases.max(initial=1))):
        row = tables.base[rail, stage] + running - 1
        can = (running >= needed) & (running < phases[:, None]) & (fewest == 0)[:, None]
        value = mean[np.minimum(row, len(mean) - 1)]
        better = can & (value < best_kwh)
        best = np.where(better, running, best)
        best_kwh = np.where(better, value, best_kwh)
    stages = problem.stages
    counted = np.ceil(states.mix_a.T[rail] / stages.shed_at_a[stage][:, None] - 1e-9).astype(np.int64)
    by_threshold = np.where((fewest == 0)[:, None], np.clip(counted, needed, phases[:, None]), phases[:, None])
    kind = stages.shedding[stage][:, None]
    best = np.where(kind == THRESHOLD_SHEDDING, by_threshold, np.where(kind == NO_SHEDDING, phases[:, None], best))
    off = states.mix_off.T[rail]
    best = np.where(off, phases[:, None], best)
    best[:, states.bands] = phases  # all are running when the board falls back
    return best


def option_index(options: Options, stage: IntArray, phases: IntArray, fewest: IntArray, most: IntArray) -> IntArray:
    """Return option rows of (P, R) choices; phases beyond the offer count as the most offered."""
    rail = np.arange(stage.shape[1])
    held = np.minimum(phases, most[rail, stage])
    return np.asarray(np.maximum(options.first[rail, stage], 0) + 2 * (held - 1) + fewest)
