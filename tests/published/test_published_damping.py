"""A lossy bank in parallel damps a bus: known optimum, exact stability, and the dip in time."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from archopt.physics.averaged_bus import BusCircuit, PowerTrain, bus_eigenvalues, bus_wave
from archopt.physics.bus_network import damped_dip_ohm, joined_bank, network_rates, stable_conductance_s
from archopt.physics.stability import output_peak_ohm
from archopt.physics.transient import bus_dip_v, source_peak_ohm

OPTIMISTIC, MEDIAN = 0.95, 1.05
MOST = 16


@pytest.mark.parametrize(("ratio", "expected"), [(1.0, 2.449), (2.0, 1.414), (4.0, 0.866), (8.0, 0.559)])
def test_best_parallel_damping(ratio: float, expected: float) -> None:
    """Peak over the characteristic impedance is sqrt(2 (2 + n)) / n (input-filter textbooks, from memory)."""
    henry, farad = 1e-6, 100e-6
    nature_ohm = np.sqrt(henry / farad)
    damper_ohm = nature_ohm * np.geomspace(0.05, 20.0, 4001)
    peak = output_peak_ohm(1e-7, henry, farad - 1e-9, 1e-7, 1e-9, ratio * farad, damper_ohm)
    assert float(peak.min()) / nature_ohm == pytest.approx(expected, rel=2e-3)
    assert np.sqrt(2.0 * (2.0 + ratio)) / ratio == pytest.approx(expected, rel=1e-3)


def random_circuits(count: int, seed: int, *, follows: bool) -> list[BusCircuit]:
    """Return damped buses: a ceramic bulk bank and a lossy one of a tenth to ten times its capacitance."""
    generator = np.random.default_rng(seed)
    out = []
    for _ in range(count):
        bulk_f = 10.0 ** generator.uniform(-4.5, -3.0)
        ohm = 10.0 ** generator.uniform(-3.0, -1.7)
        out.append(
            BusCircuit(
                bus_v=float(generator.uniform(6.0, 13.0)), bulk_f=bulk_f,
                bulk_esr_ohm=10.0 ** generator.uniform(-4.0, -3.0), input_f=0.2 * bulk_f,
                bandwidth_rad_s=2 * np.pi * 10.0 ** generator.uniform(4.0, 5.0),
                delay_s=10.0 ** generator.uniform(-6.3, -5.3), source_ohm=ohm,
                source_h=ohm * ohm * bulk_f * 10.0 ** generator.uniform(-0.5, 2.0), follows=follows, restoring=0.0,
                damper_f=bulk_f * 10.0 ** generator.uniform(-1.0, 1.0),
                damper_ohm=10.0 ** generator.uniform(-3.0, -1.0),
            )
        )  # fmt: skip
    return out


def test_stability_with_a_damping_bank_against_eigenvalues() -> None:
    """Just below the power the closed form gives every mode decays, just above it one grows."""
    damped = 0
    for circuit in random_circuits(150, 3, follows=False):
        alone = replace(circuit, input_f=1e-8, bulk_f=circuit.bulk_f, bulk_esr_ohm=1e-6)
        given = (alone.source_ohm, alone.source_h, alone.bulk_f + alone.input_f)
        most_w = alone.bus_v**2 * float(stable_conductance_s(*given, alone.damper_f, alone.damper_ohm))
        assert bus_eigenvalues(alone, 0.99 * most_w)[0] < 0.0
        assert bus_eigenvalues(alone, 1.01 * most_w)[0] > 0.0
        plain = float(stable_conductance_s(*given, 0.0, 0.0))
        assert plain == pytest.approx(
            min(alone.source_ohm * given[2] / alone.source_h, 1.0 / alone.source_ohm), rel=1e-9
        )
        damped += most_w > 1.05 * plain * alone.bus_v**2
    assert damped > 50


def test_rates_of_the_network_are_where_its_admittance_vanishes() -> None:
    """Closed form: the branches' admittances add up to nothing at every natural frequency."""
    ohm, henry, bulk, esr, beside, damper, lossy = 4e-3, 60e-9, 300e-6, 2e-3, 20e-6, 500e-6, 15e-3
    rates = network_rates(*(np.array([x]) for x in (ohm, henry, bulk, esr, beside, damper, lossy)))[0]
    s = np.linalg.eigvals(rates)
    parts = np.array([
        1.0 / (ohm + s * henry), 1.0 / (esr + 1.0 / (s * bulk)), s * beside, 1.0 / (lossy + 1.0 / (s * damper)),
    ])  # fmt: skip
    assert len(s) == 4
    assert np.all(np.abs(parts.sum(axis=0)) <= 1e-6 * np.abs(parts).sum(axis=0))


def test_peak_of_a_damped_bus_against_a_fine_sweep() -> None:
    for circuit in random_circuits(40, 4, follows=False):
        w = np.geomspace(1e2, 1e9, 40001)
        bulk = circuit.bulk_esr_ohm + 1 / (1j * w * circuit.bulk_f)
        damper = circuit.damper_ohm + 1 / (1j * w * circuit.damper_f)
        source = circuit.source_ohm + 1j * w * circuit.source_h
        fine = np.abs(1 / (1 / bulk + 1 / damper + 1 / source + 1j * w * circuit.input_f)).max()
        found = output_peak_ohm(
            circuit.source_ohm, circuit.source_h, circuit.bulk_f, circuit.bulk_esr_ohm, circuit.input_f,
            circuit.damper_f, circuit.damper_ohm,
        )  # fmt: skip
        assert float(found) == pytest.approx(max(fine, circuit.source_ohm), rel=5e-3)


def sound(circuit: BusCircuit) -> bool:
    """Return whether a bus keeps the limits a design must at 90 W: impedance margin of 1.5, dip of a tenth."""
    source = (circuit.source_ohm, circuit.source_h, circuit.bulk_f, circuit.bulk_esr_ohm, circuit.input_f)
    damper = (circuit.damper_f, circuit.damper_ohm)
    quiet = circuit.follows or 1.5 * 90.0 * float(output_peak_ohm(*source, *damper)) < (0.9 * circuit.bus_v) ** 2
    peak = damped_dip_ohm(circuit.bulk_f, circuit.bulk_esr_ohm, *damper, *_loop(circuit))
    if not circuit.follows:
        peak = source_peak_ohm(*source, *damper)
    return quiet and 30.0 * float(peak) < 0.08 * circuit.bus_v**2


def dip_ratio(circuit: BusCircuit) -> float:
    """Return the dip of the closed form over the integrated one, for a step on top of standing power."""
    train = PowerTrain(60.0, 90.0)
    bank = (circuit.bulk_f + circuit.input_f, circuit.bulk_esr_ohm, circuit.damper_f, circuit.damper_ohm)
    total_f, ohm = joined_bank(*bank)
    assert float(total_f) == pytest.approx(circuit.capacitance_f)
    w, delay_s, peak = circuit.bandwidth_rad_s, circuit.delay_s, damped_dip_ohm(*bank, *_loop(circuit))
    if not circuit.follows:
        source = (circuit.source_ohm, circuit.source_h, circuit.bulk_f, circuit.bulk_esr_ohm, circuit.input_f)
        peak = source_peak_ohm(*source, circuit.damper_f, circuit.damper_ohm)
        w, delay_s, ohm = 1e12, 0.0, np.zeros(())
    closed = float(bus_dip_v(30.0, circuit.bus_v, w, delay_s, total_f, ohm, 60.0, peak))
    return closed / bus_wave(circuit, train).dip_v


def _loop(circuit: BusCircuit) -> tuple[float, float]:
    return circuit.bandwidth_rad_s, circuit.delay_s


@pytest.mark.parametrize("follows", [True, False])
def test_dip_of_a_damped_bus_in_time(follows: bool) -> None:
    """Median within 5 %, never more than 5 % optimistic, where the step dips the bus by a tenth at most."""
    circuits = [replace(c, delay_s=c.delay_s if follows else 0.0) for c in random_circuits(200, 5, follows=follows)]
    ratios = np.array([dip_ratio(circuit) for circuit in circuits if sound(circuit)][:MOST])
    print(len(ratios), ratios.min(), np.median(ratios), ratios.max())
    assert len(ratios) >= MOST
    assert ratios.min() > OPTIMISTIC
    assert np.median(ratios) < MEDIAN


def test_no_damping_bank_changes_nothing() -> None:
    bank = (2e-4, 3e-3, 0.0, 0.0)
    total_f, ohm = joined_bank(*bank)
    assert (float(total_f), float(ohm)) == (2e-4, 3e-3)
    assert float(damped_dip_ohm(*bank, 1e5, 1e-6)) == 0.0
    source = (5e-3, 2e-8, 2e-4, 3e-3, 3e-5)
    assert float(output_peak_ohm(*source)) == float(output_peak_ohm(*source, 0.0, 0.0))
    assert float(source_peak_ohm(*source)) == float(source_peak_ohm(*source, 0.0, 0.0))
