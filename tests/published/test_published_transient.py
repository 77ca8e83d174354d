"""Droop, release and constant-power stability against published notes and closed forms."""

from __future__ import annotations

import numpy as np
import pytest
from scipy.optimize import minimize_scalar

from archopt.physics import stability, transient

FAST = 1e12  # a bandwidth that hides the exponential tail


def energy_form_f(inductance_h: float, step_a: float, output_v: float, rise_v: float) -> float:
    """Capacitance that takes up the energy of the inductance: L dI^2 / ((Vo + dV)^2 - Vo^2)."""
    return inductance_h * step_a**2 / ((output_v + rise_v) ** 2 - output_v**2)


RELEASES = [
    (33e-6, 2.25, 3.3, 0.1, 249e-6),  # SLUS659F p. 24
    (33e-6, 2.25, 5.0, 0.1, 165e-6),  # SGLS371A p. 22
    # Erratum: SLUSAH5B p. 16 prints 320 uF, from L dI^2/(Vo dV); the energy form gives 152 uF
    (320e-9, 10.0, 1.0, 0.1, 152.4e-6),
]


@pytest.mark.parametrize(("inductance_h", "step_a", "output_v", "rise_v", "printed_f"), RELEASES)
def test_release_against_the_energy_form(
    inductance_h: float, step_a: float, output_v: float, rise_v: float, printed_f: float
) -> None:
    capacitance_f = energy_form_f(inductance_h, step_a, output_v, rise_v)
    assert capacitance_f / printed_f == pytest.approx(1.0, rel=5e-3)
    overshoot_v = transient.release_v(
        step_a, 1.0, output_v, inductance_h, FAST, 0.0, capacitance_f, 0.0, np.inf
    )
    # closed form: falling at Vo/L throughout, without the help of the rising output, is more by 1 + dV/(2 Vo)
    assert overshoot_v == pytest.approx(rise_v * (1.0 + rise_v / (2.0 * output_v)), rel=1e-6)


def test_undershoot_of_slus659f() -> None:
    # SLUS659F p. 24: 2.25 A for 2.64 us within 60 mV wants 100 uF (99 uF unrounded): C = dI t / dV
    capacitance_f = 2.25 * 2.64e-6 / 60e-3
    assert capacitance_f / 100e-6 == pytest.approx(1.0, rel=2e-2)
    droop_v = transient.step_droop_v(2.25, np.inf, FAST, 2.64e-6, capacitance_f, 0.0)
    assert droop_v == pytest.approx(60e-3, rel=1e-4)


def test_four_candidates_of_the_step() -> None:
    # closed form, each made the largest in turn: dead time with ESR, tail, knee, crest of the slewed rise
    ten = 10.0
    dead = transient.step_droop_v(ten, 1e9, 1e6, 1e-6, 1e-3, 5e-3)
    assert dead == pytest.approx(5e-3 * ten + ten * 1e-6 / 1e-3, rel=1e-9)
    tail = transient.step_droop_v(ten, 1e9, 1e5, 0.0, 1e-4, 0.0)
    assert tail == pytest.approx(ten / 1e5 / 1e-4, rel=1e-9)
    slew, w, capacitance, esr = 1e6, 1e6, 1e-3, 2e-3
    crest_a = esr * capacitance * slew
    crest = transient.step_droop_v(ten, slew, w, 0.0, capacitance, esr)
    expected = esr * crest_a + (ten**2 - crest_a**2) / (2 * slew) / capacitance
    assert crest == pytest.approx(expected, rel=1e-9)
    knee = transient.step_droop_v(ten, 1e7, 2e6, 0.0, 2e-5, 2e-3 * 12.5)
    e0 = 1e7 / 2e6
    assert knee == pytest.approx((ten**2 - e0**2) / (2 * 1e7) / 2e-5 + 2.5e-2 * e0, rel=1e-9)


def test_slew_of_running_phases() -> None:
    # closed form: 3 phases, (0.9 x 12 - 1) V over 200 nH: 147 A/us; without headroom that of 1 mV
    assert transient.buck_slew_a_per_s(3, 0.9, 12.0, 1.0, 200e-9) == pytest.approx(147e6, rel=1e-9)
    assert transient.buck_slew_a_per_s(1, 0.9, 1.0, 1.0, 1e-6) == pytest.approx(1e3, rel=1e-9)


def test_bus_dip_is_the_fixed_point_of_its_iteration() -> None:
    bus_v, step_w, standing_w, w, delay_s, capacitance_f, esr_ohm = 9.0, 80.0, 60.0, 1e5, 3e-6, 1e-3, 4e-3
    impedance_ohm = max(esr_ohm + delay_s / capacitance_f, (delay_s + 1 / w) / capacitance_f)
    for standing in (0.0, standing_w):
        dip_v = 0.0
        for _ in range(200):
            dip_v = impedance_ohm * ((standing + step_w) / (bus_v - dip_v) - standing / bus_v)
        closed_v = transient.bus_dip_v(step_w, bus_v, w, delay_s, capacitance_f, esr_ohm, standing)
        assert closed_v == pytest.approx(dip_v, rel=1e-9)


def test_transition_energy() -> None:
    # closed form C (V2^2 - V1^2)/2: 2 mF from 8 to 12 V take 80 mJ, and give them up again
    assert transient.transition_energy_j(2e-3, 8.0, 12.0) == pytest.approx(80e-3, rel=1e-9)
    assert transient.transition_energy_j(2e-3, 12.0, 8.0) == pytest.approx(80e-3, rel=1e-9)


def test_least_capacitance_of_a_constant_power_load() -> None:
    # closed form: 20 mohm, 1 uH, 100 W, 12 V -> 34.7 uF
    assert stability.least_capacitance_f(20e-3, 1e-6, 100.0, 12.0) * 1e6 == pytest.approx(34.7, rel=2e-3)
    assert stability.resistance_limit_ohm(100.0, 12.0) == pytest.approx(1.44, rel=1e-9)


def test_stability_against_eigenvalues() -> None:
    # L di/dt = Vs - R i - v, C dv/dt = i - P/v, linearised, on random circuits either side of both limits
    generator = np.random.default_rng(20)
    seen = {True: 0, False: 0}
    for _ in range(200):
        ohm, henry = 10 ** generator.uniform(-3, 0.5), 10 ** generator.uniform(-8, -5)
        power_w, bus_v = 10 ** generator.uniform(0.5, 2.7), generator.uniform(4.0, 14.0)
        least_f = float(stability.least_capacitance_f(ohm, henry, power_w, bus_v))
        limit_ohm = float(stability.resistance_limit_ohm(power_w, bus_v))
        farad = least_f * generator.choice([0.5, 0.98, 1.02, 2.0])
        matrix = np.array([[-ohm / henry, -1 / henry], [1 / farad, power_w / (farad * bus_v**2)]])
        stable = bool(np.linalg.eigvals(matrix).real.max() < 0.0)
        assert stable == (farad > least_f and ohm < limit_ohm)
        seen[stable] += 1
    assert min(seen.values()) > 20


def test_deliverable_power_is_where_the_operating_point_vanishes() -> None:
    # closed form: v (Vs - v)/R has its largest value Vs^2/(4R) at half the source voltage
    volts = np.linspace(0.0, 12.0, 100_001)
    expected_w = (volts * (12.0 - volts) / 0.05).max()
    assert stability.deliverable_power_w(12.0, 0.05) == pytest.approx(expected_w, rel=1e-8)


def test_source_inductance_meets_its_resistance_at_the_bandwidth() -> None:
    # closed form: |R + j w L| is root two R at the crossover
    henry = stability.regulated_source_h(5e-3, 20e3)
    assert abs(5e-3 + 2j * np.pi * 20e3 * henry) == pytest.approx(5e-3 * np.sqrt(2.0), rel=1e-9)


@pytest.mark.parametrize(("ratio", "expected"), [(1.0, 2.449), (4.0, 0.866)])
def test_damped_peak_against_a_minimax_search(ratio: float, expected: float) -> None:
    # from memory sqrt(2 (2 + n))/n; searched here: L and C of 1, branch R - nC across C, least largest |Z|
    omega = np.logspace(-1.5, 1.5, 20_001)

    def peak(log_ohm: float) -> float:
        branch = 1.0 / (np.exp(log_ohm) + 1.0 / (1j * omega * ratio))
        return float(np.abs(1.0 / (1.0 / (1j * omega) + 1j * omega + branch)).max())

    searched = minimize_scalar(peak, bounds=(-3.0, 3.0), method="bounded").fun
    assert stability.damped_peak(ratio) == pytest.approx(expected, rel=5e-4)
    assert searched == pytest.approx(expected, rel=1e-3)
