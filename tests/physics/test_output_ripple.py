"""Output ripple against the waveform itself: triangles and pulses of the phases through a capacitor and its ESR."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
import pytest
from numpy.typing import NDArray

from archopt.physics import buck
from archopt.physics.buck import operating_point
from archopt.physics.output_ripple import half_swing_v, summed_ripple, summed_ripple_at

FREQUENCY_HZ, HENRY = 500e3, 0.68e-6
POINTS = 20_000


def phase(emulation: float = 0.0, floor_hz: float = 0.0) -> buck.BuckParameters:
    """Return a phase without resistance, whose ripple follows from voltages, inductance and frequency alone."""
    zero = {field.name: np.zeros(1) for field in fields(buck.BuckParameters)}
    given = {
        "frequency_hz": FREQUENCY_HZ, "inductance_h": HENRY, "emulation": emulation, "fold_floor_hz": floor_hz,
        "max_duty": 1.0,
    }  # fmt: skip
    return buck.BuckParameters(**{**zero, **{name: np.array([value]) for name, value in given.items()}})


def triangles(input_v: float, output_v: float, phases: int) -> tuple[NDArray[np.float64], NDArray[np.float64]]:
    """Return time over one period and the summed current of interleaved phases less its mean."""
    duty = output_v / input_v
    ripple = output_v * (1.0 - duty) / (HENRY * FREQUENCY_HZ)
    time = np.arange(POINTS) / POINTS
    total = np.zeros(POINTS)
    for k in range(phases):
        x = (time - k / phases) % 1.0
        total += ripple * np.where(x < duty, x / duty, (1.0 - x) / (1.0 - duty))
    return time / FREQUENCY_HZ, total - total.mean()


@pytest.mark.parametrize("phases", [1, 2, 3, 7])
@pytest.mark.parametrize("input_v", [5.0, 8.0, 12.0])
def test_ripple_and_charge_are_those_of_the_waveform(phases: int, input_v: float) -> None:
    time, current = triangles(input_v, 1.0, phases)
    point = (np.array([input_v]), np.ones(1), np.full(1, 20.0))
    found = summed_ripple(phase(), *point, phases)
    swing, charge = (float(x[0]) for x in found)
    at = summed_ripple_at(phase(), operating_point(phase(), *point), phases)
    assert [float(x[0]) for x in at] == pytest.approx([swing, charge], rel=1e-12)
    scale = float(np.ptp(triangles(input_v, 1.0, 1)[1]))
    assert swing == pytest.approx(np.ptp(current), abs=2e-3 * scale)
    moved = np.cumsum(current) * (time[1] - time[0])
    assert charge == pytest.approx(np.ptp(moved), abs=2e-3 * scale / (8.0 * phases * FREQUENCY_HZ))


@pytest.mark.parametrize(("esr_ohm", "capacitance_f"), [(5e-3, 100e-6), (1e-3, 47e-6), (0.0, 100e-6), (5e-3, 1.0)])
def test_half_the_swing_is_never_optimistic(esr_ohm: float, capacitance_f: float) -> None:
    for phases in (1, 2, 3):
        time, current = triangles(12.0, 1.0, phases)
        volts = np.cumsum(current) * (time[1] - time[0]) / capacitance_f + esr_ohm * current
        true_v = 0.5 * np.ptp(volts)
        at = summed_ripple(phase(), np.full(1, 12.0), np.ones(1), np.full(1, 20.0), phases)
        found = float(half_swing_v(*at, capacitance_f, esr_ohm)[0])
        assert true_v * (1.0 - 2e-3) <= found <= 1.6 * true_v
        if esr_ohm == 0.0 or capacitance_f == 1.0:
            assert found == pytest.approx(true_v, rel=5e-3)


@pytest.mark.parametrize("share", [0.05, 0.3, 0.7, 0.999])
@pytest.mark.parametrize("floor_hz", [1e3, 100e3])
def test_pulses_move_what_lies_above_the_load(share: float, floor_hz: float) -> None:
    """Time domain: one pulse a pulse period less the load, integrated."""
    ripple = 1.0 * (1.0 - 1.0 / 12.0) / (HENRY * FREQUENCY_HZ)
    load = share * 0.5 * ripple
    often = max(share, floor_hz / FREQUENCY_HZ)
    height = ripple * np.sqrt(share / often)
    period = 1.0 / (FREQUENCY_HZ * often)
    length = height / ripple / FREQUENCY_HZ
    time = np.arange(POINTS) / POINTS * period
    rise = length / 12.0
    current = np.where(time < rise, time / rise, np.clip((length - time) / (length - rise), 0.0, 1.0)) * height
    assert current.mean() == pytest.approx(load, rel=2e-3)
    moved = np.cumsum(current - current.mean()) * (time[1] - time[0])
    at = summed_ripple(phase(1.0, floor_hz), np.full(1, 12.0), np.ones(1), np.full(1, load), 1)
    assert float(at[0][0]) == pytest.approx(height, rel=1e-9)
    assert float(at[1][0]) == pytest.approx(np.ptp(moved), rel=5e-3)


def test_charge_is_continuous_where_the_valley_touches_zero() -> None:
    ripple = 1.0 * (1.0 - 1.0 / 12.0) / (HENRY * FREQUENCY_HZ)
    loads = 0.5 * ripple * np.array([1.0 - 1e-9, 1.0 + 1e-9])
    swing, charge = summed_ripple(phase(1.0, 1e3), np.full(2, 12.0), np.ones(2), loads, 1)
    assert swing[0] == pytest.approx(swing[1], rel=1e-6)
    assert charge[0] == pytest.approx(charge[1], rel=1e-6)
