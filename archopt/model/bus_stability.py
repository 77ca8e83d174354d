"""Source impedance against the negative input resistance of constant-power loads, at the bus and at the input."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass

import numpy as np

from archopt.model.limits import Ledger
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.situation import Situation
from archopt.model.space import BUS_NAMES
from archopt.model.states import FALLBACK, JUMP, MIX
from archopt.physics.stability import (
    deliverable_power_w,
    impedance_margin_db,
    output_peak_ohm,
    regulated_source_h,
)
from archopt.physics.transient import bus_dip_v, source_peak_ohm

LARGEST_DB = 120.0
LEAST_W, LEAST_V, LEAST_OHM, LEAST_F = 1e-3, 1e-3, 1e-6, 1e-9
FOLLOWS_AT_ONCE = 1e12
WITHOUT_ESR = 1e-3  # share of an input filter's capacitance that shows no resistance

Impedance = Callable[[FloatArray, FloatArray, FloatArray, FloatArray, FloatArray, FloatArray, FloatArray], FloatArray]


@dataclass(frozen=True)
class Sources:
    """Resistance and inductance of each bus's source with the units running in each band, and what is beside it.

    Regulated: the output impedance, held up to the bandwidth. Fixed ratio: droop resistance and the input path
    behind it, referred to the bus. ohm, henry, bulk_f, damper_f, bus_v, units (P, 2, B + 1);
    esr_ohm, damper_ohm, input_f (P, 2).
    """

    ohm: FloatArray
    henry: FloatArray
    bulk_f: FloatArray
    esr_ohm: FloatArray
    input_f: FloatArray
    damper_f: FloatArray
    damper_ohm: FloatArray
    bus_v: FloatArray
    units: IntArray

    def each(self, of: Impedance, here: BoolArray) -> FloatArray:
        """Return a property of the source and its banks, (P, 2, B + 1); asked once a bus, voltage and units running."""
        out = np.zeros(self.ohm.shape)
        p, bus = np.nonzero(here)
        _, volts = np.unique(self.bus_v[p, bus], return_inverse=True)
        lane = np.arange(len(p))[:, None]
        units = self.units[p, bus]
        key = (lane * (int(units.max()) + 1) + units) * (int(volts.max()) + 1) + volts.reshape(units.shape)
        _, first, which = np.unique(key, return_index=True, return_inverse=True)
        row, place = np.unravel_index(first, key.shape)
        q, b = p[row], bus[row]
        value = of(
            self.ohm[q, b, place], self.henry[q, b, place], self.bulk_f[q, b, place], self.esr_ohm[q, b],
            self.input_f[q, b], self.damper_f[q, b, place], self.damper_ohm[q, b],
        )  # fmt: skip
        out[p, bus] = value[which.reshape(key.shape)]
        return out


def sources(situation: Situation) -> Sources:
    """Return the sources of both buses with what holds them up."""
    problem, hardware = situation.problem, situation.hardware
    converters, path = problem.converters, problem.path
    index = np.maximum(hardware.converter, 0)[..., None]
    ratio = converters.ratio[index]
    output_ohm = converters.output_ohm[index] / hardware.units_band
    fixed = hardware.fixed_ratio[..., None]
    bandwidth_hz = converters.bandwidth_rad_s[index] / (2.0 * np.pi)
    ohm = np.where(fixed, output_ohm + path.resistance_ohm * ratio**2, output_ohm)
    henry = np.where(fixed, path.inductance_h * ratio**2, regulated_source_h(output_ohm, bandwidth_hz))
    return Sources(
        ohm=np.maximum(ohm, LEAST_OHM),
        henry=np.asarray(henry),
        bulk_f=np.maximum(hardware.bulk_f - hardware.damper_f - hardware.input_f[..., None], LEAST_F),
        esr_ohm=hardware.main_esr_ohm,
        damper_f=np.broadcast_to(hardware.damper_f, hardware.bulk_f.shape),
        damper_ohm=hardware.damper_ohm,
        input_f=hardware.input_f,
        bus_v=hardware.band_v,
        units=hardware.units_band,
    )


def open_bus_v(situation: Situation) -> FloatArray:
    """Return the bus voltage without load in each band at the lowest input, (P, 2, B + 1) V."""
    problem, hardware = situation.problem, situation.hardware
    ratio_v = problem.converters.ratio[np.maximum(hardware.converter, 0)] * problem.study.supply.low_v
    return np.where(hardware.fixed_ratio[..., None], ratio_v[..., None], hardware.band_v)


def check_impedance(situation: Situation, ledger: Ledger) -> None:
    """Check each bus's impedance margin, what its source can deliver at all, and the input path's margin.

    The margin asked for is the study's stability margin in dB: where nothing but the source damps the bus both
    checks are the same; the bulk bank's ESR counts as damping here, and a damping bank in both.
    """
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution, control = situation.solution, problem.study.control
    bound_db = 20.0 * np.log10(control.stability_margin)
    check_input(situation, ledger, bound_db)
    used: BoolArray = hardware.converter >= 0
    if not used.any():
        return
    jump = states.of_kind(JUMP)
    axes = (BUS_NAMES, situation.state_names(jump))
    power_w = np.maximum(solution.bus_w[:, jump].transpose(0, 2, 1), LEAST_W)
    volts = np.maximum(solution.bus_v[:, jump].transpose(0, 2, 1), LEAST_V)
    source, applies = sources(situation), used[..., None]
    margin_db = impedance_margin_db(source.each(output_peak_ohm, used), power_w, volts)
    ledger.add(
        "impedance margin", np.minimum(margin_db, LARGEST_DB), bound_db, at_most=False, axes=axes, applies=applies
    )
    open_v = open_bus_v(situation)
    most_w = deliverable_power_w(open_v, source.ohm)
    ledger.add("deliverable power", power_w, most_w, at_most=True, axes=axes, applies=applies)
    fixed: BoolArray = used & hardware.fixed_ratio
    if not fixed.any():
        return
    peak = source.each(source_peak_ohm, fixed)
    standing_w = np.maximum(power_w - solution.step_w, 0.0)
    dip = bus_dip_v(solution.step_w, open_v, FOLLOWS_AT_ONCE, 0.0, hardware.bulk_f, 0.0, standing_w, peak)
    ledger.add(
        "bus dip", 100.0 * dip / np.maximum(open_v, LEAST_V), control.bus_dip_percent, at_most=True,
        axes=(BUS_NAMES, states.place_names), applies=fixed[..., None],
    )  # fmt: skip


def input_peak_ohm(problem: Problem) -> float:
    """Return the largest impedance over frequency that the input path and its filter show the converters, ohm."""
    supply, ohm = problem.study.supply, max(problem.path.resistance_ohm, LEAST_OHM)
    farad = supply.filter_capacitance_uf * 1e-6
    if farad <= 0.0 or problem.path.inductance_h <= 0.0:
        return ohm
    peak = output_peak_ohm(
        ohm, problem.path.inductance_h, farad, supply.filter_esr_mohm * 1e-3, WITHOUT_ESR * farad,
        supply.filter_damper_uf * 1e-6, supply.filter_damper_mohm * 1e-3,
    )  # fmt: skip
    return float(peak)


def check_input(situation: Situation, ledger: Ledger, bound_db: float) -> None:
    """Check the input path's impedance against the negative resistance of all that the board draws through it.

    Where the study says what capacitance stands behind the path, at its peak over frequency; else its resistance,
    as above direct current the converters' own input capacitance decides, which is not in the catalogue.
    """
    states, solution = situation.states, situation.solution
    heavy = np.concatenate([states.of_kind(MIX), states.of_kind(JUMP), states.of_kind(FALLBACK)])
    node_w = np.maximum(solution.input_w[:, heavy] - solution.path_w[:, heavy], LEAST_W)
    margin = impedance_margin_db(input_peak_ohm(situation.problem), node_w, solution.node_v[:, heavy])
    ledger.add(
        "input impedance margin", np.minimum(margin, LARGEST_DB), bound_db, at_most=False,
        axes=(situation.state_names(heavy),),
    )  # fmt: skip
