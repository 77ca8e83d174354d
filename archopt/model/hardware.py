"""A batch of design rows unpacked into the physical quantities the board solution reads."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.parameters import FIXED_RATIO, BoolArray, FloatArray, IntArray
from archopt.model.problem import Problem, bank_effective_f, bank_esr_ohm, bank_most_f
from archopt.model.space import BUS_A, PARENT, Designs
from archopt.model.states import StateTable
from archopt.physics.bus_network import damped_dip_ohm, joined_bank
from archopt.physics.capacitor import effective_capacitance_f


@dataclass(frozen=True)
class Hardware:
    """P designs over S states, R rails, two buses, B bands and the fall-back behind them: B + 1 places.

    Rails (P, R): stage, phases, feed, parent (-1 none), bank_f (least), bank_most_f, bank_esr_ohm, pairs,
    pour_ohm (loop). pour_ohm and plane_ohm are those of copper as warm as it may be.
    Buses (P, 2): converter (-1 none), units, bus_pairs, plane_ohm (loop, a square), bulk_nominal_f,
    input_f (stage inputs), main_esr_ohm of the bulk bank; by place (P, 2, B + 1): band_v voltage set, units_band, and
    with the banks biased at that voltage bulk_f (with stage inputs and damper), bulk_esr_ohm (bulk bank and damper),
    damper_f; damper_ohm (P, 2).
    on_bus (P, 2, R). running (P, S, R) phases, running_band (P, R, B + 1), units_running (P, S, 2), set_v (P, S, 2)
    bus voltage set, with its setting error where limits are checked (not used for fixed ratio).
    bias, bias_on_bus, supervisor, stack: (P,).
    """

    stage: IntArray
    phases: IntArray
    feed: IntArray
    parent: IntArray
    children: BoolArray
    bank_f: FloatArray
    bank_most_f: FloatArray
    bank_esr_ohm: FloatArray
    pairs: IntArray
    pour_ohm: FloatArray
    converter: IntArray
    units: IntArray
    bus_pairs: IntArray
    plane_ohm: FloatArray
    bulk_f: FloatArray
    input_f: FloatArray
    bulk_nominal_f: FloatArray
    bulk_esr_ohm: FloatArray
    main_esr_ohm: FloatArray
    damper_f: FloatArray
    damper_ohm: FloatArray
    damped_ohm: FloatArray
    on_bus: BoolArray
    running: IntArray
    running_band: IntArray
    units_running: IntArray
    units_band: IntArray
    set_v: FloatArray
    band_v: FloatArray
    fixed_ratio: BoolArray
    bias: IntArray
    bias_on_bus: BoolArray
    bias_w: FloatArray
    supervisor: IntArray
    stack: IntArray

    @property
    def steps_on_bus(self) -> BoolArray:
        """Which rails' load steps reach which bus: those on it and the children of those, (P, 2, R)."""
        return family_on_bus(self.on_bus, self.parent)


def family_on_bus(on_bus: BoolArray, parent: IntArray) -> BoolArray:
    """Return which rails load which bus, themselves or through their parent, (P, 2, R)."""
    has_parent = (parent >= 0)[:, None, :]
    place = np.broadcast_to(np.maximum(parent, 0)[:, None, :], on_bus.shape)
    return np.where(has_parent, np.take_along_axis(on_bus, place, axis=2), on_bus)


def bias_per_phase_w(problem: Problem) -> FloatArray:
    """Return the gate power each stage draws from the separate bias, W a running phase, (N,)."""
    buck = problem.stages.buck
    charge = buck.high_side_gate_c + buck.low_side_gate_c
    power = charge * buck.gate_v * buck.frequency_hz * (1.0 - buck.gate_from_input)
    return np.where(problem.stages.bias_fed, power, 0.0)


def unpack(problem: Problem, designs: Designs, states: StateTable) -> Hardware:
    """Return the physical quantities of a batch of canonical designs with their decisions."""
    stage, phases, feed = designs.rail("stage"), designs.rail("phases"), designs.rail("feed")
    parent = np.where(feed >= PARENT, feed - PARENT, -1)
    rails = problem.rails
    count = len(designs)
    capacitors = problem.capacitors
    stack = designs.board("stack")
    sheet = problem.sheet_ohm[stack]
    bank = designs.rail("bank")
    pieces = problem.bank_counts[designs.rail("bank_count")]
    effective = bank_effective_f(problem.study, capacitors, rails.voltage_v[:, None])  # (R, K)
    most = bank_most_f(capacitors, rails.voltage_v[:, None])
    esr = bank_esr_ohm(problem.study, capacitors)
    rail_index = np.arange(len(rails.names))
    on_bus = np.stack([feed == BUS_A, feed == BUS_A + 1], axis=1)
    converter = designs.bus("converter") - 1
    used = on_bus.any(axis=2)
    bias = designs.board("bias") - 1
    bias_on_bus = (designs.board("bias_feed") == 1) & (bias >= 0)
    converter = np.where(used, converter, -1)
    fixed_ratio = (converter >= 0) & (problem.converters.kind[np.maximum(converter, 0)] == FIXED_RATIO)
    nominal, units = designs.bus("nominal_v"), designs.bus("count")
    band_v = problem.grid_v[np.concatenate([designs.volts, nominal[..., None]], axis=2)]
    set_v = band_v.take(states.band, axis=2).transpose(0, 2, 1)
    set_v = set_v + states.setting_side[None, :, None] * setting_error_v(problem, converter[:, None, :], set_v)
    running_band = np.concatenate([designs.running_phases, phases[..., None]], axis=2)
    running = running_band.take(states.band, axis=2).transpose(0, 2, 1)
    units_band = np.concatenate([designs.running_converters, units[..., None]], axis=2)
    units_running = units_band.take(states.band, axis=2).transpose(0, 2, 1)
    bulk = designs.bus("bulk")
    bulk_pieces = problem.bank_counts[designs.bus("bulk_count")]
    bias_v = np.where(fixed_ratio[..., None], bus_ratio_v(problem, converter)[..., None], band_v)
    stage_input_f = problem.stages.input_capacitance_f[stage] * phases
    input_f = (on_bus * stage_input_f[:, None, :]).sum(axis=2)
    children = np.zeros((count, len(rails.names)), dtype=bool)
    where, which = np.nonzero(parent >= 0)
    children[where, parent[where, which]] = True
    nominal_f = capacitors.capacitance_f * (1.0 + capacitors.tolerance)
    damper = designs.bus("damper")
    damper_nominal_f = np.where(damper > 0, nominal_f[np.maximum(damper - 1, 0)], 0.0)
    damper_nominal_f = damper_nominal_f * problem.bank_counts[designs.bus("damper_count")]
    banks = bus_banks(problem, designs, converter, bias_v, input_f)
    pairs, bus_pairs = np.maximum(designs.rail("pairs"), 1), np.maximum(designs.bus("pairs"), 1)
    return Hardware(
        stage=stage,
        phases=phases,
        feed=feed,
        parent=parent,
        children=children,
        bank_f=effective[rail_index[None, :], bank] * pieces,
        bank_most_f=most[rail_index[None, :], bank] * pieces,
        bank_esr_ohm=esr[bank] / pieces,
        pairs=pairs,
        pour_ohm=2.0 * (rails.squares * sheet[:, None] / pairs + rails.pour_via_ohm),
        converter=converter,
        units=units,
        bus_pairs=bus_pairs,
        plane_ohm=2.0 * sheet[:, None] / bus_pairs,
        bulk_f=banks.total_f,
        input_f=input_f,
        bulk_nominal_f=nominal_f[bulk] * bulk_pieces + damper_nominal_f + input_f,
        bulk_esr_ohm=banks.ohm,
        main_esr_ohm=banks.main_ohm,
        damper_f=banks.damper_f,
        damper_ohm=banks.damper_ohm,
        damped_ohm=banks.damped_ohm,
        on_bus=on_bus,
        running=np.maximum(running, 1),
        running_band=np.maximum(running_band, 1),
        units_running=np.maximum(units_running, 1),
        units_band=np.maximum(units_band, 1),
        set_v=set_v,
        band_v=band_v,
        fixed_ratio=fixed_ratio,
        bias=bias,
        bias_on_bus=bias_on_bus,
        bias_w=bias_per_phase_w(problem)[stage],
        supervisor=designs.board("supervisor") - 1,
        stack=stack,
    )


@dataclass(frozen=True)
class BusBanks:
    """What holds the buses up at given voltages, (P, 2, V); main_ohm, damper_ohm (P, 2).

    total_f, ohm : bulk bank, stage inputs and damper together; damped_ohm : dip for each ampere that sharing between
    the banks may add, 0 without a damper
    """

    total_f: FloatArray
    ohm: FloatArray
    damper_f: FloatArray
    damped_ohm: FloatArray
    main_ohm: FloatArray
    damper_ohm: FloatArray


def bus_banks(
    problem: Problem, designs: Designs, converter: IntArray, bias_v: FloatArray, input_f: FloatArray
) -> BusBanks:
    """Return what holds each bus up, at its tolerance, end of life and the voltages on it.

    A ceramic holds less at a higher bus: the voltage set is taken, not the dipped one.

    Parameters
    ----------
    converter : (P, 2), -1 where there is none
    bias_v : (P, 2, V) or (V,)
    input_f : (P, 2) of the stages
    """
    bulk, damper = designs.bus("bulk"), designs.bus("damper") - 1
    pieces = [problem.bank_counts[designs.bus(name)] for name in ("bulk_count", "damper_count")]
    esr_ohm = bank_esr_ohm(problem.study, problem.capacitors)
    main_ohm = esr_ohm[bulk] / pieces[0]
    main_f = effective_f(problem, bulk, bias_v) * pieces[0][..., None] + input_f[..., None]
    there = damper >= 0
    if not there.any():
        none = np.zeros((*there.shape, 1))
        return BusBanks(main_f, np.broadcast_to(main_ohm[..., None], main_f.shape), none, none, main_ohm, none[..., 0])
    index = np.maximum(damper, 0)
    damper_f = np.where(there[..., None], effective_f(problem, index, bias_v) * pieces[1][..., None], 0.0)
    damper_ohm = np.where(there, esr_ohm[index] / pieces[1], 0.0)
    place = np.maximum(converter, 0)[..., None]
    ohms = (main_ohm[..., None], damper_f, damper_ohm[..., None])
    total_f, ohm = joined_bank(main_f, *ohms)
    damped_ohm = damped_dip_ohm(
        main_f, *ohms, problem.converters.bandwidth_rad_s[place], problem.converters.delay_s[place]
    )
    return BusBanks(total_f, np.broadcast_to(ohm, total_f.shape), damper_f, damped_ohm, main_ohm, damper_ohm)


def effective_f(problem: Problem, capacitor: IntArray, bias_v: FloatArray) -> FloatArray:
    """Return one piece of capacitors (P, 2) at its tolerance, end of life and the voltage on it, F, (P, 2, V)."""
    table, row = problem.capacitors, capacitor[..., None]
    return effective_capacitance_f(
        table.capacitance_f[row], bias_v, table.half_v[row], table.tolerance[row],
        problem.study.derating.capacitance_end_of_life,
    )  # fmt: skip


def setting_error_v(problem: Problem, converter: IntArray, set_v: FloatArray) -> FloatArray:
    """Return how far a regulated bus may stand from where the study's grid sets it, V; shapes broadcast.

    The accuracy of the setting, and what the converter's own setting grid leaves. Of a fixed ratio, which is not set,
    the board's solution counts the accuracy.
    """
    table = problem.converters
    if not len(table.names):
        return np.zeros(np.broadcast_shapes(converter.shape, set_v.shape))
    index = np.maximum(converter, 0)
    grid_v = table.setting_grid_v[index]
    step_v = np.where(grid_v > 0, grid_v, 1.0)
    rounded = np.where(grid_v > 0, np.abs(set_v - step_v * np.round(set_v / step_v)), 0.0)
    sets = (converter >= 0) & (table.kind[index] != FIXED_RATIO)
    return np.where(sets, table.accuracy[index] * set_v + rounded, 0.0)


def short_time_a(
    problem: Problem, converter: IntArray, bus_v: FloatArray, *, guaranteed: BoolArray | bool
) -> FloatArray:
    """Return what one converter carries at a bus voltage for a short time, A; shapes broadcast.

    The smaller of the overload current and the overload power over the voltage; the overload power is as far above
    the rated power as the overload current is above the rated current (common practice). Where a jump lasts longer
    than the overload is guaranteed for, what it carries for ever.
    """
    table, index = problem.converters, np.maximum(converter, 0)
    amps = np.where(guaranteed, np.maximum(table.overload_a, table.limit_a)[index], table.limit_a[index])
    power_takes_over_v = (table.limit_w / table.limit_a)[index]
    return np.asarray(amps * np.minimum(power_takes_over_v / np.maximum(bus_v, 1e-3), 1.0))


def bus_ratio_v(problem: Problem, converter: IntArray) -> FloatArray:
    """Return the unloaded bus voltage of fixed-ratio converters at the highest input, V."""
    return problem.converters.ratio[np.maximum(converter, 0)] * problem.study.supply.high_v


def place_limits_a(problem: Problem, stack: IntArray, pairs: IntArray) -> FloatArray:
    """Return what each place of the bus planes may carry, (P, 2, K) A; pairs (P, 2)."""
    return np.asarray(pairs[..., None] * problem.place_limit_a[stack])


def plane_limit_a(problem: Problem, stack: IntArray, pairs: IntArray, shares: FloatArray) -> FloatArray:
    """Return what the bus planes and their vias may carry in all, (P, 2, B) A, where the rails share it as given.

    Parameters
    ----------
    shares : (P, 2, B, R), each rail's share of the bus current
    """
    through = np.einsum("pkbr,kcr->pkbc", shares, problem.planes.place_share)
    limit = place_limits_a(problem, stack, pairs)[:, :, None, :]
    copper_a = (limit / np.maximum(through, 1e-9)).min(axis=3)
    planes = problem.planes
    vias_a = (planes.own_limit_a[:, None, :] / np.maximum(shares, 1e-9)).min(axis=3)
    return np.asarray(np.minimum(copper_a, np.minimum(vias_a, planes.source_limit_a[:, None])))
