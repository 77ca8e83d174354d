"""Losses of random buck stages against their own current waveform, integrated over one period.

The duty is found by bisection of the volt-second balance; nothing of the closed forms is used.
"""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import brentq

from archopt.physics import buck
from archopt.physics.buck import BuckParameters

STAGES = 300
PULSED = 100
POINTS = 4001
CLOSE = 0.01
WARM_RISE_K = 60.0


@dataclass(frozen=True)
class Case:
    """One stage in plain numbers and where it runs."""

    stage: dict[str, float]
    input_v: float
    output_v: float
    current_a: float

    def losses(self) -> buck.BuckLosses:
        stage = BuckParameters(**{name: np.asarray(value) for name, value in self.stage.items()})
        return buck.losses(stage, self.input_v, self.output_v, self.current_a, 25.0)


def random_case(rng: np.random.Generator) -> Case:
    """Return a stage as a catalogue might hold it, with 20 to 45 % ripple, at 40 to 100 % of its rating."""
    rated_a = float(np.exp(rng.uniform(np.log(3.0), np.log(50.0))))
    input_v = float(rng.uniform(5.0, 16.0))
    output_v = float(rng.uniform(0.7, min(3.4, 0.6 * input_v)))
    frequency = float(rng.uniform(300e3, 1.2e6))
    ripple = rng.uniform(0.2, 0.45) * rated_a
    stage = dict.fromkeys((field.name for field in fields(BuckParameters)), 0.0)
    stage |= {
        "frequency_hz": frequency,
        "inductance_h": output_v * (1.0 - output_v / input_v) / (ripple * frequency),
        "winding_ohm": rng.uniform(0.005, 0.02) / rated_a,
        "core_ripple_a": 1.0, "core_exponent": 2.0, "core_frequency_exponent": 1.4,
        "high_side_ohm": rng.uniform(0.05, 0.15) / rated_a,
        "low_side_ohm": rng.uniform(0.02, 0.06) / rated_a,
        "switch_per_k": 0.004, "winding_per_k": 0.00393,
        "rise_s": rng.uniform(2e-9, 9e-9), "fall_s": rng.uniform(2e-9, 9e-9),
        "dead_s": rng.uniform(10e-9, 30e-9), "diode_v": rng.uniform(0.6, 0.9),
        "output_charge_v": 12.0, "recovery_a": rated_a, "input_capacitor_ohm": rng.uniform(0.5e-3, 5e-3),
        "max_duty": 1.0,
    }  # fmt: skip
    return Case(stage, input_v, output_v, float(rng.uniform(0.4, 1.0)) * rated_a)


def slopes(case: Case) -> tuple[float, float, float]:
    """Return rise and fall of the current, A/s, and the duty that balances them, with warm resistances."""
    stage, amps = case.stage, case.current_a
    hot_switch, hot_winding = (1.0 + stage[name] * WARM_RISE_K for name in ("switch_per_k", "winding_per_k"))
    winding_v = amps * stage["winding_ohm"] * hot_winding
    across_v = case.input_v - case.output_v - winding_v
    rise = (across_v - amps * stage["high_side_ohm"] * hot_switch) / stage["inductance_h"]
    fall = (case.output_v + winding_v + amps * stage["low_side_ohm"] * hot_switch) / stage["inductance_h"]
    share = float(brentq(lambda d: rise * d - fall * (1.0 - d), 1e-4, 1.0))
    return rise, fall, share


def integral(start_s: float, end_s: float, current: NDArray[np.float64]) -> float:
    """Return the integral of samples evenly spread over an interval (trapezoids)."""
    return float(np.trapezoid(current, np.linspace(start_s, end_s, len(current))))


def line(first: float, last: float) -> NDArray[np.float64]:
    return np.linspace(first, last, POINTS)


def overlap_j(volts: float, amps: float, edge_s: float) -> float:
    """Return the energy of one edge: current ramps under full voltage, then voltage falls under full current."""
    ramp = line(0.0, amps) * volts
    swing = line(volts, 0.0) * amps
    return integral(0.0, 0.4 * edge_s, ramp) + integral(0.4 * edge_s, edge_s, swing)


def by_waveform(case: Case) -> dict[str, float]:
    """Return loss by mechanism from one period of the current, W, with parts at 25 degC."""
    stage = case.stage
    _, fall, share = slopes(case)
    f, half_dead = stage["frequency_hz"], 0.5 * stage["dead_s"]
    on_s, period = share / f, 1.0 / f
    half = 0.5 * fall * (period - on_s)
    valley, peak = case.current_a - half, case.current_a + half
    after, before = peak - fall * half_dead, valley + fall * half_dead
    rising, falling = line(valley, peak), line(peak, valley)
    low = line(after, before)
    diode = integral(0.0, half_dead, np.abs(line(peak, after))) + integral(0.0, half_dead, np.abs(line(before, valley)))
    drawn = integral(0.0, on_s, rising) * f
    square = integral(0.0, on_s, (rising - drawn) ** 2) + drawn**2 * (period - on_s)
    return {
        "high_side_conduction_w": stage["high_side_ohm"] * f * integral(0.0, on_s, rising**2),
        "low_side_conduction_w": stage["low_side_ohm"] * f * integral(on_s + half_dead, period - half_dead, low**2),
        "winding_w": stage["winding_ohm"] * f * (integral(0.0, on_s, rising**2) + integral(on_s, period, falling**2)),
        "overlap_w": f * (
            overlap_j(case.input_v, valley, stage["rise_s"]) + overlap_j(case.input_v, peak, stage["fall_s"])
        ),
        "dead_time_w": stage["diode_v"] * f * diode,
        "input_capacitor_w": stage["input_capacitor_ohm"] * f * square,
    }  # fmt: skip


def test_three_hundred_stages_by_mechanism() -> None:
    rng = np.random.default_rng(42)
    worst = dict.fromkeys(by_waveform(random_case(rng)), 0.0)
    for _ in range(STAGES):
        case = random_case(rng)
        found = case.losses()
        for name, expected in by_waveform(case).items():
            worst[name] = max(worst[name], abs(float(getattr(found, name)) / expected - 1.0))
    assert max(worst.values()) < CLOSE, worst


def pulsed(case: Case, rng: np.random.Generator) -> Case:
    """Return the stage in emulation below zero valley current, its pulses folded to a floor or not."""
    floor_hz = float(rng.choice([0.0, 0.2, 1.0])) * case.stage["frequency_hz"]
    stage = case.stage | {"emulation": 1.0, "fold_floor_hz": floor_hz}
    light = Case(stage, case.input_v, case.output_v, 1e-3)
    _, fall, share = slopes(light)
    edge_a = 0.5 * fall * (1.0 - share) / stage["frequency_hz"]
    return Case(stage, case.input_v, case.output_v, float(rng.uniform(0.05, 0.9)) * edge_a)


def by_pulse(case: Case) -> dict[str, float]:
    """Return loss by mechanism of pulses that bring the load, W: their height is found by bisection."""
    stage, (rise, fall, share) = case.stage, slopes(case)
    f = stage["frequency_hz"]
    full_a = rise * share / f
    charge = lambda top: 0.5 * top * (top / rise + top / fall)  # noqa: E731
    floor = stage["fold_floor_hz"]
    pulses_hz, top = case.current_a / charge(full_a), full_a
    if pulses_hz < floor:
        pulses_hz = floor
        top = float(brentq(lambda a: charge(a) * floor - case.current_a, 1e-9 * full_a, full_a))
    on_s, off_s = top / rise, top / fall
    rising, falling = line(0.0, top), line(top, 0.0)
    drawn = integral(0.0, on_s, rising) * pulses_hz
    rest_s = 1.0 / pulses_hz - on_s
    square = integral(0.0, on_s, (rising - drawn) ** 2) + drawn**2 * rest_s
    return {
        "high_side_conduction_w": stage["high_side_ohm"] * pulses_hz * integral(0.0, on_s, rising**2),
        "winding_w": stage["winding_ohm"] * pulses_hz * (
            integral(0.0, on_s, rising**2) + integral(0.0, off_s, falling**2)
        ),
        "overlap_w": pulses_hz * overlap_j(case.input_v, top, stage["fall_s"]),
        "input_capacitor_w": stage["input_capacitor_ohm"] * pulses_hz * square,
    }  # fmt: skip


@pytest.mark.parametrize("seed", [1, 2])
def test_pulses_of_emulation_by_mechanism(seed: int) -> None:
    rng = np.random.default_rng(seed)
    floors = set()
    for _ in range(PULSED // 2):
        case = pulsed(random_case(rng), rng)
        floors.add(case.stage["fold_floor_hz"] > 0.0)
        found = case.losses()
        for name, expected in by_pulse(case).items():
            assert float(getattr(found, name)) == pytest.approx(expected, rel=CLOSE), (name, case)
    assert floors == {True, False}
