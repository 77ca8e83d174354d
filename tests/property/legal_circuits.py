"""Random legal circuits drawn from the shipped catalogue: stages with banks their loops take, buses within limits."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache
from pathlib import Path
from typing import cast

import numpy as np

from archopt.inputs.load import load
from archopt.inputs.parts import BuckStage, BusConverter, Capacitor, Inductor
from archopt.inputs.resolved import Catalogue
from archopt.physics import transient
from archopt.physics.averaged import LoadStep, RailCircuit
from archopt.physics.averaged_bus import BusCircuit, PowerTrain
from archopt.physics.stability import least_capacitance_f

STUDY = Path(__file__).resolve().parents[2] / "studies" / "telecom_six" / "study.toml"
OUTPUTS_V = (0.8, 0.9, 1.0, 1.2, 1.8, 2.5, 3.3)
DIP_SHARE = 0.1
BUDGET_SHARE = 0.06
MARGIN = 1.5
PATH_OHM, PATH_H = 16e-3, 1e-6


@cache
def catalogue() -> Catalogue:
    return load(STUDY).catalogue


def aged_f(capacitor: Capacitor, bias_v: float) -> float:
    """Capacitance of a piece under bias, at its tolerance, at the end of life."""
    under_bias = capacitor.capacitance_uf * 1e-6 / (1.0 + (bias_v / capacitor.half_capacitance_v) ** 2)
    return under_bias * (1.0 - capacitor.tolerance_percent / 100.0) * 0.8


@dataclass(frozen=True)
class RailCase:
    """A rail with a step and a release, and the closed forms' answers."""

    circuit: RailCircuit
    step: LoadStep
    release: LoadStep
    droop_v: float
    release_v: float


def rail_cases(count: int, seed: int, *, restoring: float = 0.0, deficit: bool = False) -> list[RailCase]:
    """Stages of the catalogue with a bank their loop takes; droop within 6 % of the rail."""
    generator = np.random.default_rng(seed)
    rows = [cast(BuckStage, row) for row in catalogue().families["buck_stages"].values()]
    coils = catalogue().families["inductors"]
    banks = [cast(Capacitor, row) for row in catalogue().families["capacitors"].values()]
    found: list[RailCase] = []
    while len(found) < count:
        row, bank = rows[generator.integers(len(rows))], banks[generator.integers(len(banks))]
        output_v, input_v = float(generator.choice(OUTPUTS_V)), float(generator.uniform(5.0, 13.2))
        phases = int(generator.integers(1, min(row.max_phases, 6) + 1))
        pieces = int(generator.choice([1, 2, 3, 4, 6, 8, 10, 12, 16]))
        farad = pieces * aged_f(bank, output_v)
        fits = row.input_min_v <= input_v <= row.input_max_v and row.output_min_v <= output_v <= row.output_max_v
        fits &= bank.rated_v * 0.8 >= output_v and row.loop_min_uf <= farad * 1e6 <= row.loop_max_uf
        if not fits or row.max_duty * input_v <= output_v:
            continue
        henry = cast(Inductor, coils[row.inductor]).inductance_nh * 1e-9
        up, down = phases * (row.max_duty * input_v - output_v) / henry, phases * output_v / henry
        rated = phases * row.phase_current_a * 0.8
        step_a = float(generator.uniform(0.1, 0.5)) * rated
        slew = 100e6 if output_v < 1.2 and rated > 20 else 10e6 if output_v < 2 else 1e6
        loop = (2e3 * np.pi * row.crossover_khz, row.delay_ns * 1e-9, farad, bank.esr_mohm * 1.5e-3 / pieces)
        missing = step_a * float(generator.uniform(0.1, 0.6)) if deficit else 0.0
        wakeup = row.wakeup_us * 1e-6
        droop = float(transient.rail_droop_v(step_a, up, *loop, slew, missing, wakeup))
        if droop > BUDGET_SHARE * output_v:
            continue
        before = rated - step_a
        found.append(
            RailCase(
                RailCircuit(
                    output_v, up, down, *loop, limit_a=rated - missing if deficit else np.inf, wakeup_s=wakeup,
                    restoring=restoring,
                ),
                LoadStep(before, rated, slew), LoadStep(rated, before, slew), droop,
                float(transient.rail_droop_v(step_a, down, *loop, slew)),
            )
        )  # fmt: skip
    return found


@dataclass(frozen=True)
class BusCase:
    """A bus with a step of power, and the closed forms' dip and margin of capacitance."""

    circuit: BusCircuit
    train: PowerTrain
    dip_v: float
    margin: float


def bus_cases(count: int, seed: int, *, fixed_ratio: bool, restoring: float = 0.0, legal: bool = True) -> list[BusCase]:
    """Bus converters of the catalogue with a bulk bank they start into; legal: dip and stability within limits."""
    generator = np.random.default_rng(seed)
    kept = [cast(BusConverter, row) for row in catalogue().families["bus_converters"].values()]
    kept = [row for row in kept if (row.kind == "fixed_ratio") == fixed_ratio]
    banks = [cast(Capacitor, row) for row in catalogue().families["capacitors"].values()]
    found: list[BusCase] = []
    while len(found) < count:
        row, bank = kept[generator.integers(len(kept))], banks[generator.integers(len(banks))]
        bus_v = float(generator.uniform(row.output_min_v, row.output_max_v))
        units, pieces = int(generator.integers(1, 3)), int(generator.choice([1, 2, 3, 4, 6, 8, 10, 12]))
        bulk_f, input_f = pieces * aged_f(bank, bus_v), float(generator.uniform(50e-6, 300e-6))
        if bank.rated_v * 0.8 < bus_v or bulk_f * 1e6 > units * row.startup_max_uf:
            continue
        full_w = units * min(row.max_current_a * bus_v, row.max_power_w)
        before_w, step_w = (float(generator.uniform(*span)) * full_w for span in ((0.1, 0.8), (0.05, 0.3)))
        ohm = row.output_mohm * 1e-3 / units
        w, delay_s, esr = 2e3 * np.pi * row.crossover_khz, row.delay_us * 1e-6, bank.esr_mohm * 1.5e-3 / pieces
        farad = bulk_f + input_f
        if fixed_ratio:
            ohm, henry = ohm + PATH_OHM * row.ratio**2, PATH_H * row.ratio**2
            peak = float(transient.source_peak_ohm(ohm, henry, bulk_f, esr, input_f))
            dip = float(transient.bus_dip_v(step_w, bus_v, 1e12, 0.0, farad, 0.0, before_w, peak))
            delay_s = 0.0
        else:
            henry = ohm / w
            dip = float(transient.bus_dip_v(step_w, bus_v, w, delay_s, farad, esr, before_w))
        least = float(least_capacitance_f(ohm, henry, before_w + step_w, max(bus_v - dip, 0.1 * bus_v)))
        if legal and (dip > DIP_SHARE * bus_v or farad < MARGIN * least):
            continue
        circuit = BusCircuit(
            bus_v, bulk_f, esr, input_f, w, delay_s, ohm, henry, follows=not fixed_ratio, restoring=restoring
        )
        found.append(BusCase(circuit, PowerTrain(before_w, before_w + step_w), dip, farad / least))
    return found
