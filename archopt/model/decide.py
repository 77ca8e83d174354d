"""Decisions stored with a design: running converters and phases of each band, and the bus voltage schedule.

The schedule is a non-decreasing function of the band on the study's grid, within the adaptive limits, chosen
to waste least over the year among the voltages legal for the band. It reads tables only, each bus alone and
at its undropped input; it is never chosen again by the evaluation. Arrays over B hold the fall-back behind the
bands: no voltage is chosen there, it is the nominal.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from numpy.typing import NDArray

from archopt.model.board import LARGEST_STEP_RATIO, STEP_POWER_RATIO
from archopt.model.bus_power import bus_sums, rail_shares, with_bus_losses
from archopt.model.canonical import canonical
from archopt.model.converter_loss import ConverterLoss
from archopt.model.feeds import via_drop_v
from archopt.model.hardware import BusBanks, Hardware, bus_banks, plane_limit_a, setting_error_v, short_time_a, unpack
from archopt.model.options import Options, band_hours, option_index, quiet
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.schedule import choose_schedule, deadband_steps
from archopt.model.space import FIXED, FOLLOW, Designs
from archopt.model.states import StateTable
from archopt.physics.bus_network import stable_conductance_s
from archopt.physics.stability import regulated_source_h
from archopt.physics.transient import bus_dip_v

SAFETY_V = 0.003
SAFETY_SHARE = 0.999  # of the short-time current: stages draw a little more at the dipped bus than tabled
CHILD_MARGIN = 1.02  # what a child draws beyond its table: the copper of its sensed pour
DIPPED_SHARE = 0.9  # of the bus voltage, left after a dip not known yet
SETTLING_PASSES = 3


def rail_windows(
    problem: Problem, options: Options, designs: Designs, option: IntArray
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return (P, R, B) least steady, least after-jump (with droop) and highest stage input, V."""
    rows = options.rows
    row = options.row[option]  # (P, R, B)
    band = np.arange(row.shape[2])
    bank, count = designs.rail("bank")[..., None], designs.rail("bank_count")[..., None]
    percent = rows.droop_percent[row, bank, count, band]  # (P, R, B, nodes)
    nodes = rows.droop_nodes_v[row]  # (P, R, B, nodes)
    return (
        rows.need_v[row, band],
        np.maximum(rows.jump_v[row, band], crossing(nodes, percent, 100.0)),
        rows.high_v[row, band],
    )


def crossing(nodes_v: FloatArray, percent: NDArray[Any], bound: float) -> FloatArray:
    """Return the least voltage from which a falling curve (..., nodes) stays at or below the bound; inf if never.

    Droop falls with the headroom like a + b / (V - V0): between nodes its reciprocal is nearly a line, and lies
    above that line, so that the voltage found is never too low.
    """
    above = percent > bound
    count = above.shape[-1]
    last = count - 1 - np.argmax(above[..., ::-1], axis=-1)  # last node above
    any_above = above.any(axis=-1)
    upper = np.minimum(last + 1, count - 1)
    high = np.take_along_axis(percent, upper[..., None], -1)[..., 0].astype(np.float64)
    low = np.take_along_axis(percent, last[..., None], -1)[..., 0].astype(np.float64)
    shape = (*percent.shape[:-1], count)
    spread = np.broadcast_to(nodes_v, shape)
    v_high = np.take_along_axis(spread, upper[..., None], -1)[..., 0]
    v_low = np.take_along_axis(spread, last[..., None], -1)[..., 0]
    low, high = 1.0 / np.maximum(low, 1e-6), 1.0 / np.maximum(high, 1e-6)
    share = (1.0 / bound - low) / np.maximum(high - low, 1e-12)
    found = np.where(last >= count - 1, np.inf, v_low + share * (v_high - v_low))
    return np.where(any_above, found, 0.0)


def legal_voltages(
    problem: Problem, designs: Designs, option: IntArray, options: Options, hardware: Hardware,
    mix_w: FloatArray, jump_w: FloatArray, dip_v: FloatArray, shares: FloatArray, banks: BusBanks,
) -> BoolArray:  # fmt: skip
    """Return where a bus voltage is legal for a band, (P, 2, B, G); shares (P, 2, B, R) of its current by rail."""
    converters, study = problem.converters, problem.study
    grid = problem.grid_v
    index = np.maximum(hardware.converter, 0)[..., None, None]
    units = hardware.units_band[..., None]
    spare = np.maximum(units - study.derating.spare_converters, 0.5)
    error_v = setting_error_v(problem, hardware.converter[..., None, None], grid)
    low_v, high_v = grid - error_v, grid + error_v
    legal = (grid >= converters.output_min_v[index] - 1e-9) & (grid <= converters.output_max_v[index] + 1e-9)
    legal = legal & (mix_w <= spare * converters.limit_w[index])
    legal &= mix_w / low_v <= spare * converters.limit_a[index]
    legal &= mix_w / low_v <= plane_limit_a(problem, hardware.stack, designs.bus("pairs"), shares)[..., None]
    dipped = np.maximum(low_v - dip_v, 0.1)
    legal &= dip_v <= study.control.bus_dip_percent * 0.01 * grid
    moving = (designs.bus("control") != FIXED)[..., None, None]
    charge = np.where(moving, hardware.bulk_nominal_f[..., None, None] * converters.slew_v_per_s[index], 0.0)
    rises = np.arange(legal.shape[2])[:, None] < legal.shape[2] - 2  # neither the top band nor the fall-back ever does
    charge = np.where(rises, charge, 0.0)
    short = short_time_a(problem, index, dipped, guaranteed=True)
    legal &= jump_w / dipped + charge <= SAFETY_SHARE * spare * short
    ohm = np.maximum(converters.output_ohm[index] / units, 1e-6)
    henry = regulated_source_h(ohm, converters.bandwidth_rad_s[index] / (2.0 * np.pi))
    main_f, damper_f = (values[:, :, None] for values in (banks.total_f - banks.damper_f, banks.damper_f))
    most_s = stable_conductance_s(ohm, henry, main_f, damper_f, banks.damper_ohm[..., None, None])
    legal &= most_s * dipped**2 >= study.control.stability_margin * jump_w
    need, jump, high = rail_windows(problem, options, designs, option)
    middle = len(grid) // 2
    on = hardware.on_bus
    rail_w = options.rows.jump_w[options.row[option], np.arange(need.shape[2]), middle]  # (P, R, B)
    for bus in range(2):
        here = np.flatnonzero(on[:, bus].any(axis=1))
        if not len(here):
            continue
        on_here = on[here, bus]
        # volts times drop: the drop of a constant power falls with the bus voltage
        into_w = rail_w[here] * on_here[..., None]
        drop_v2 = np.einsum("pqb,rq->prb", into_w, problem.bus_squares[bus])
        drop_v2 *= hardware.plane_ohm[here, bus, None, None]
        if problem.planes.with_vias:
            drop_v2 += via_drop_v(problem, into_w.transpose(0, 2, 1), bus).transpose(0, 2, 1)
        for r in np.flatnonzero(on_here.any(axis=0)):
            drop = drop_v2[:, r, :, None] / low_v[here, bus]
            at_stage = low_v[here, bus] - drop - SAFETY_V
            ok = (at_stage >= need[here, r, :, None]) & (high_v[here, bus] <= high[here, r, :, None])
            ok &= at_stage - dip_v[here, bus] >= jump[here, r, :, None]
            ok &= quiet(problem, options, option[here, r], hardware, here, int(r))
            legal[here, bus] &= ok | ~on_here[:, r, None, None]
    return legal


def running_units(
    problem: Problem, states: StateTable, designs: Designs, hardware: Hardware, energy_kwh: FloatArray,
    mix_w: FloatArray, jump_w: FloatArray,
) -> IntArray:  # fmt: skip
    """Return the converters running in each band, (P, 2, B): least loss that carries mix and jump."""
    converters = problem.converters
    index = np.maximum(hardware.converter, 0)
    units = designs.bus("count")
    nominal = designs.bus("nominal_v")
    energy_kwh, mix_w, jump_w = (values[:, :, : states.bands] for values in (energy_kwh, mix_w, jump_w))
    volts = problem.grid_v[nominal][..., None]
    low_v = volts - setting_error_v(problem, hardware.converter[..., None], volts)
    at = nominal[..., None, None]
    mean_w = np.take_along_axis(energy_kwh, np.broadcast_to(at, (*energy_kwh.shape[:3], 1)), 3)[..., 0]
    hours = np.maximum(band_hours(states)[: states.bands], 1e-6)
    mean_w = mean_w * 1e3 / hours
    mix = np.take_along_axis(mix_w, np.broadcast_to(at, (*mix_w.shape[:3], 1)), 3)[..., 0]
    jump = np.take_along_axis(jump_w, np.broadcast_to(at, (*jump_w.shape[:3], 1)), 3)[..., 0]
    dipped_v = DIPPED_SHARE * low_v
    short = short_time_a(problem, index[..., None], dipped_v, guaranteed=True)
    input_v = np.full(1, problem.study.supply.nominal_v)
    best = np.broadcast_to(units[..., None], mean_w.shape).copy()
    best_w = np.full(mean_w.shape, np.inf)
    spare = problem.study.derating.spare_converters
    converter_losses = ConverterLoss.of(converters, index[..., None])
    ambient = problem.study.supply.inlet_degc + problem.study.supply.local_rise_k
    for running in range(int(units.max(initial=1)), 0, -1):
        carry = max(running - spare, 0.5)
        fits = (mix <= carry * converters.limit_w[index][..., None]) & (
            mix / low_v <= carry * converters.limit_a[index][..., None]
        )
        fits &= jump / dipped_v <= carry * short
        can = (running == units[..., None]) | (
            fits & (running < units[..., None]) & (designs.bus("fewest") == 0)[..., None]
        )
        loss = converter_losses(input_v, volts, mean_w / volts / running, np.asarray(ambient))
        total = np.where(can, loss.total_w * running, np.inf)
        better = total < best_w
        best = np.where(better, running, best)
        best_w = np.where(better, total, best_w)
    return best


def converter_energy(problem: Problem, states: StateTable, hardware: Hardware, energy_kwh: FloatArray) -> FloatArray:
    """Return the converters' own loss over each band on the grid, (P, 2, B, G) kWh, at the band's mean power."""
    hours = np.maximum(band_hours(states), 1e-6)[:, None]
    units = hardware.units_band[..., None]
    current = energy_kwh * 1e3 / hours / problem.grid_v / units
    index = np.maximum(hardware.converter, 0)[..., None, None]
    supply = problem.study.supply
    ambient = np.asarray(supply.inlet_degc + supply.local_rise_k)
    mean_v = np.asarray(sum(level.voltage_v * level.share for level in supply.levels) or supply.nominal_v)
    loss = ConverterLoss.of(problem.converters, index)(mean_v, problem.grid_v, current, ambient)
    return loss.total_w * units * hours * 1e-3


def raise_for_children(
    problem: Problem, options: Options, designs: Designs, option: IntArray, running: IntArray
) -> IntArray:
    """Return running phases raised so that parents carry their children too, (P, R, B)."""
    feed = designs.rail("feed")
    p, r = np.nonzero(feed >= 3)
    if not len(p):
        return running
    parent = feed[p, r] - 3
    power = options.rows.child_mix_w[options.row[option[p, r]], np.arange(running.shape[2]), parent[:, None]]
    extra = np.zeros(running.shape)
    np.add.at(extra, (p, parent), CHILD_MARGIN * power / problem.rails.voltage_v[parent][:, None])
    stage = designs.rail("stage")
    total = problem.states.mix_a.T + extra
    each = np.minimum(problem.stages.phase_limit_a, problem.stages.shed_at_a)[stage]
    needed = np.ceil(total / each[..., None] - 1e-9).astype(np.int64)
    raised = np.maximum(running, np.minimum(needed, designs.rail("phases")[..., None]))
    return np.where(extra > 0, raised, running)


def decide(problem: Problem, states: StateTable, options: Options, designs: Designs) -> Designs:
    """Return the designs in canonical form with running counts and schedule decided.

    A bus that never moves becomes a fixed one at its voltage: what was decided from the nominal voltage it
    had before (running converters, bias supply) is then decided again, so that deciding twice changes nothing.
    """
    designs, unsettled = decide_once(problem, states, options, designs)
    for _ in range(SETTLING_PASSES):
        again = np.flatnonzero(unsettled)
        if not len(again):
            break
        settled, still = decide_once(problem, states, options, designs.take(again))
        designs.rows[again] = settled.rows
        unsettled[again] = still
    return designs


def decide_once(problem: Problem, states: StateTable, options: Options, designs: Designs) -> tuple[Designs, BoolArray]:
    """Return the designs decided, and which of them snapping has changed so that they need another pass."""
    designs = canonical(problem, designs)
    layout = designs.layout
    option = option_index(
        options, designs.rail("stage"), designs.rail("phases"), designs.rail("fewest"), problem.phases_high
    )
    running = raise_for_children(problem, options, designs, option, options.run[option])
    designs.rows[:, layout.running_phases] = running[..., : states.bands].reshape(len(designs), -1)
    hardware = unpack(problem, designs, states)
    shares = rail_shares(options, option, hardware)
    energy, mix_w, jump_w = with_bus_losses(
        problem, states, hardware, shares, bus_sums(problem, options, option, hardware)
    )
    units = running_units(problem, states, designs, hardware, energy, mix_w, jump_w)
    units = np.where(hardware.converter[..., None] >= 0, units, 0)
    designs.rows[:, layout.running_converters] = units.reshape(len(designs), -1)
    hardware = unpack(problem, designs, states)
    step_w = step_power(problem, options, option, hardware, mix_w)
    index = np.maximum(hardware.converter, 0)[..., None, None]
    banks = bus_banks(problem, designs, hardware.converter, problem.grid_v, hardware.input_f)
    dip = bus_dip_v(
        step_w,
        problem.grid_v,
        problem.converters.bandwidth_rad_s[index],
        problem.converters.delay_s[index],
        banks.total_f[:, :, None],
        banks.ohm[:, :, None],
        np.maximum(mix_w, jump_w - step_w),
        banks.damped_ohm[:, :, None],
    )
    legal = legal_voltages(problem, designs, option, options, hardware, mix_w, jump_w, dip, shares, banks)
    total = energy + converter_energy(problem, states, hardware, energy)
    count, bands, width = len(designs), states.bands, len(problem.grid_v)
    total, legal = total[:, :, :bands], legal[:, :, :bands]
    lower, upper, nominal, control = (
        designs.bus(name).reshape(-1) for name in ("lower_v", "upper_v", "nominal_v", "control")
    )
    volts = choose_schedule(
        total.reshape(2 * count, bands, width), legal.reshape(2 * count, bands, width), lower, upper, nominal, control,
        deadband_steps(problem.study),
    ).reshape(count, 2, bands)  # fmt: skip
    idle = (hardware.converter < 0) | hardware.fixed_ratio
    volts = np.where(idle[..., None], 0, volts)
    designs.rows[:, layout.volts] = volts.reshape(count, -1)
    before = designs.bus("nominal_v").copy()
    snap_limits(problem, designs, volts, idle)
    snap_fewest(problem, designs)
    unsettled = (designs.bus("nominal_v") != before).any(axis=1)
    return designs, unsettled | (canonical(problem, designs).rows != designs.rows).any(axis=1)


def coincident_step_w(problem: Problem, options: Options, option: IntArray, hardware: Hardware) -> FloatArray:
    """Return the largest coincident step of bus power at the middle of the grid, (P, 2, B) W.

    Each rail's step times its own power in over out at its worst mix; a child's also times its parent's.
    """
    rails = problem.rails
    mix_w = options.rows.mix_w
    middle = mix_w[options.row[option], np.arange(mix_w.shape[1]), mix_w.shape[2] // 2]  # (P, R, B)
    output = (rails.voltage_v * problem.states.mix_a).T  # (R, B)
    ratio = np.where(output > 0, middle / np.maximum(output, 1e-12), STEP_POWER_RATIO)
    ratio = np.minimum(ratio, LARGEST_STEP_RATIO)
    parent = np.broadcast_to(np.maximum(hardware.parent, 0)[..., None], ratio.shape)
    onward = np.where((hardware.parent >= 0)[..., None], np.take_along_axis(ratio, parent, axis=1), 1.0)
    step = (rails.step_a * rails.voltage_v)[:, None] * ratio * onward
    largest = np.zeros(hardware.band_v.shape)
    for group in range(int(rails.step_group.max()) + 1):
        here = hardware.steps_on_bus & (rails.step_group == group)
        largest = np.maximum(largest, np.einsum("pkr,prb->pkb", here.astype(np.float64), step))
    return largest


def step_power(
    problem: Problem, options: Options, option: IntArray, hardware: Hardware, bus_w: FloatArray
) -> FloatArray:
    """Return the largest coincident step over the grid, (P, 2, B, G) W, scaled as the whole bus (same shape) is."""
    largest = coincident_step_w(problem, options, option, hardware)
    return largest[..., None] * bus_w / np.maximum(bus_w[..., bus_w.shape[3] // 2, None], 1e-9)


def snap_limits(problem: Problem, designs: Designs, volts: IntArray, idle: BoolArray) -> None:
    """Snap limits the schedule never reaches to the used ones; a bus that never moves is a fixed one."""
    layout = designs.layout
    allowed_control = [problem.space.allowed[layout.bus("control").start + bus] for bus in range(2)]
    control, nominal = designs.bus("control"), designs.bus("nominal_v")
    low, high = volts.min(axis=2), volts.max(axis=2)
    for bus in range(2):
        still = (low[:, bus] == high[:, bus]) & (control[:, bus] != FIXED) & ~idle[:, bus]
        if FIXED in allowed_control[bus]:
            nominal_ok = np.isin(low[:, bus], problem.space.allowed[layout.bus("nominal_v").start + bus])
            still &= nominal_ok
            control[still, bus] = FIXED
            nominal[still, bus] = low[still, bus]
    fixed = (control == FIXED) & ~idle
    follow = (control == FOLLOW) & ~idle
    lower, upper = designs.bus("lower_v"), designs.bus("upper_v")
    lower[:] = np.where(follow, np.minimum(low, nominal), np.where(fixed, nominal, lower))
    upper[:] = np.where(follow, np.maximum(high, nominal), np.where(fixed, nominal, upper))
    resupervise(problem, designs)


def snap_fewest(problem: Problem, designs: Designs) -> None:
    """Name the fewest left running "all" where all run in every band: permission never used is no choice."""
    allowed, layout = problem.space.allowed, designs.layout
    rails = (designs.running_phases >= designs.rail("phases")[..., None]).all(axis=2)
    rails &= designs.rail("phases") > 1
    buses = (designs.running_converters >= designs.bus("count")[..., None]).all(axis=2)
    buses &= designs.bus("count") > 1
    for fewest, idle, columns in (
        (designs.rail("fewest"), rails, layout.rail("fewest")),
        (designs.bus("fewest"), buses, layout.bus("fewest")),
    ):
        offered = np.array([1 in allowed[column] for column in range(columns.start, columns.stop)])
        fewest[idle & offered] = 1


def resupervise(problem: Problem, designs: Designs) -> None:
    """Drop a supervisor nobody needs and take the first that suffices where the chosen one does not."""
    feed = designs.rail("feed")
    used = np.stack([(feed == 1).any(axis=1), (feed == 2).any(axis=1)], axis=1)
    level = np.where(used, designs.bus("control"), 0)
    needed, buses = level.max(axis=1), (level > 0).sum(axis=1)
    column = designs.layout.board("supervisor")
    chosen = designs.rows[:, column]
    table = problem.supervisors
    if not len(table.names):
        designs.rows[:, column] = 0
        return
    index = np.maximum(chosen - 1, 0)
    fits = (chosen > 0) & (table.level[index] >= needed) & (table.buses[index] >= buses)
    options = problem.space.allowed[column]
    first = np.zeros(len(designs), dtype=np.int64)
    for value in options[::-1]:
        if value > 0:
            good = (table.level[value - 1] >= needed) & (table.buses[value - 1] >= buses)
            first = np.where(good, value, first)
    designs.rows[:, column] = np.where(needed == 0, 0, np.where(fits, chosen, first))
