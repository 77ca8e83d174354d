"""The checks of every bus and its converters, stability with constant-power loads among them."""

from __future__ import annotations

import numpy as np

from archopt.model.converter_loss import (
    BEYOND,
    ConverterLoss,
    any_measured,
    beyond_percent,
    edge_percent,
    is_measured,
)
from archopt.model.hardware import setting_error_v
from archopt.model.limits import Ledger
from archopt.model.parameters import BoolArray, IntArray
from archopt.model.situation import Situation
from archopt.model.space import BUS_NAMES
from archopt.model.states import ENERGY, FALLBACK, JUMP, MIX
from archopt.physics.bus_network import stable_conductance_s
from archopt.physics.stability import regulated_source_h, resistance_limit_ohm

LEAST_BUS_V = 1e-3  # keeps the losses of a collapsed bus finite


def check_buses(situation: Situation, ledger: Ledger) -> None:
    """Check range, current, power, temperature, dip, drop, start-up and stability of every bus.

    Where the study asks for spare converters, those left after as many have failed carry every load alone, through a
    jump too, keep cool and start into all of the bus capacitance. Dip and stability are those with all that run: a
    source without its spares is a little softer, and is not asked to meet them. The losses of a year
    are those of all that run.
    """
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution, converters, study = situation.solution, problem.converters, problem.study
    used = hardware.converter >= 0
    if not used.any():
        return
    index = np.maximum(hardware.converter, 0)
    regulated = used & ~hardware.fixed_ratio
    steady = np.concatenate([states.of_kind(MIX), states.of_kind(FALLBACK)])
    names = tuple(f"{name} converter" for name in BUS_NAMES)
    axes = (situation.state_names(steady), names)
    units = hardware.units_running[:, steady]
    carrying = np.maximum(units - study.derating.spare_converters, 0.5)
    bus_a, bus_w = solution.bus_a[:, steady], solution.bus_w[:, steady]
    here = used[:, None, :]
    ledger.add(
        "converter current", bus_a / carrying, converters.limit_a[index][:, None, :], at_most=True, axes=axes,
        applies=here,
    )  # fmt: skip
    ledger.add(
        "converter power", bus_w / carrying, converters.limit_w[index][:, None, :], at_most=True, axes=axes,
        applies=here,
    )  # fmt: skip
    unit = ConverterLoss.of(converters, index[:, None, :])(
        solution.node_v[:, steady, None], np.maximum(solution.bus_v[:, steady], LEAST_BUS_V), bus_a / carrying,
        states.ambient_degc[steady][:, None],
    )  # fmt: skip
    ledger.add(
        "converter temperature", unit.temperature_degc, study.derating.junction_degc, at_most=True,
        axes=axes, applies=here,
    )  # fmt: skip
    ledger.add("thermal gain", unit.thermal_gain, 1.0, at_most=True, axes=axes, applies=here)
    bus_axes = (BUS_NAMES, states.place_names)
    band_v = hardware.band_v
    low_v, high_v = band_v.min(axis=2), band_v.max(axis=2)
    ledger.add(
        "bus output range",
        low_v,
        converters.output_min_v[index],
        at_most=False,
        axes=(BUS_NAMES,),
        applies=regulated,
    )
    ledger.add(
        "bus output range",
        high_v,
        converters.output_max_v[index],
        at_most=True,
        axes=(BUS_NAMES,),
        applies=regulated,
    )
    set_v = np.where(hardware.fixed_ratio[..., None], (converters.ratio[index] * study.supply.low_v)[..., None], band_v)
    dip = 100.0 * solution.dip_v / set_v
    ledger.add("bus dip", dip, study.control.bus_dip_percent, at_most=True, axes=bus_axes, applies=used[..., None])
    rail_axes = (situation.state_names(steady), situation.rail_names)
    on_bus: BoolArray = np.asarray(hardware.on_bus.any(axis=1))[:, None, :]
    bus_of = np.where(hardware.on_bus[:, 1], 1, 0)[:, None, :]
    feed_v = np.take_along_axis(
        solution.bus_v[:, steady], np.broadcast_to(bus_of, on_bus.shape).repeat(len(steady), 1), 2
    )
    drop = 100.0 * (1.0 - solution.stage_v[:, steady] / np.maximum(feed_v, 1e-3))
    ledger.add(
        "bus drop", drop, study.board.bus_drop_budget_percent, at_most=True, axes=rail_axes,
        applies=on_bus & ~states.off[steady],
    )  # fmt: skip
    ledger.add(
        "start-up capacitance", 1e6 * hardware.bulk_nominal_f,
        1e6 * converters.startup_max_f[index] * np.maximum(hardware.units - study.derating.spare_converters, 0.5),
        at_most=True, axes=(BUS_NAMES,), applies=used,
    )  # fmt: skip
    top_v = high_v + setting_error_v(problem, hardware.converter, high_v)
    ratio_v = converters.ratio[index] * study.supply.high_v * (1.0 + converters.accuracy[index])
    top_v = np.where(hardware.fixed_ratio, ratio_v, top_v)
    bulk_rated = problem.capacitors.rated_v[situation.designs.bus("bulk")] * study.derating.voltage
    ledger.add("capacitor voltage", top_v, bulk_rated, at_most=True, axes=(BUS_NAMES,), applies=used)
    damper = situation.designs.bus("damper")
    rated = problem.capacitors.rated_v[np.maximum(damper - 1, 0)] * study.derating.voltage
    ledger.add("capacitor voltage", top_v, rated, at_most=True, axes=(BUS_NAMES,), applies=used & (damper > 0))
    check_measured(situation, ledger, index, used)
    check_stability(situation, ledger, index, used)


def check_measured(situation: Situation, ledger: Ledger, index: IntArray, used: BoolArray) -> None:
    """Check that no measured converter is used beyond its points, in any state and with spares failed."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution, converters = situation.solution, problem.converters
    if not any_measured(converters.measured):
        return
    running = hardware.units_running
    carrying = np.maximum(running - problem.study.derating.spare_converters, 0.5)
    axes = (states.name, tuple(f"{name} converter {what}" for name in BUS_NAMES for what in BEYOND))
    on = used[:, None, :] & is_measured(converters.measured, index)[:, None, :] & (solution.bus_a > 0)
    limit = np.broadcast_to(edge_percent(converters.accuracy[index])[:, None], (*on.shape, len(BEYOND)))
    for units, states_checked in ((running, np.ones(len(states.name), dtype=bool)), (carrying, states.kind != ENERGY)):
        beyond = beyond_percent(
            converters.measured, index[:, None, :], solution.node_v[..., None], solution.bus_v, solution.bus_a / units
        )
        applies = np.broadcast_to((on & states_checked[:, None])[..., None], beyond.shape)
        shape = (*on.shape[:2], -1)
        ledger.add(
            "measured range", beyond.reshape(shape), limit.reshape(shape), at_most=True, axes=axes,
            applies=applies.reshape(shape),
        )  # fmt: skip


def check_stability(situation: Situation, ledger: Ledger, index: IntArray, used: BoolArray) -> None:
    """Check how many times the power after a jump a bus would stand, at the dipped voltage, before it oscillates.

    The bulk bank's own resistance does not count here; a damping bank's does.
    """
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    converters, path = problem.converters, problem.path
    jump = states.of_kind(JUMP)
    power = np.maximum(situation.solution.bus_w[:, jump].transpose(0, 2, 1), 1e-3)
    volts = np.maximum(situation.solution.bus_v[:, jump].transpose(0, 2, 1), 1e-3)
    units = hardware.units_band
    ratio = converters.ratio[index][..., None]
    output_ohm = converters.output_ohm[index][..., None] / units
    bandwidth_hz = converters.bandwidth_rad_s[index][..., None] / (2.0 * np.pi)
    fixed_ratio = hardware.fixed_ratio[..., None]
    source_ohm = np.where(fixed_ratio, output_ohm + path.resistance_ohm * ratio**2, output_ohm)
    source_h = np.where(fixed_ratio, path.inductance_h * ratio**2, regulated_source_h(output_ohm, bandwidth_hz))
    source_ohm = np.maximum(source_ohm, 1e-6)
    main_f = hardware.bulk_f - hardware.damper_f
    most_s = stable_conductance_s(source_ohm, source_h, main_f, hardware.damper_f, hardware.damper_ohm[..., None])
    margin = np.minimum(most_s * resistance_limit_ohm(power, volts), 1e6)
    bound = problem.study.control.stability_margin
    axes = (BUS_NAMES, situation.state_names(jump))
    ledger.add("stability", margin, bound, at_most=False, axes=axes, applies=used[..., None])
