"""Properties of the averaged circuits and of the impedance a bus shows, against closed forms and balances."""

from __future__ import annotations

import numpy as np
import pytest
from legal_circuits import bus_cases, rail_cases
from scipy.linalg import expm

from archopt.physics import stability, transient
from archopt.physics.averaged import LoadStep, RailCircuit, RailWave, integrate, pieces, rail_wave
from archopt.physics.averaged_board import BoardWave, Rise, StageCircuit, board_wave
from archopt.physics.averaged_bus import BusCircuit, BusWave, Command, PowerTrain, bus_eigenvalues, bus_wave

W = 2 * np.pi * 9e3
BUS = BusCircuit(8.0, 800e-6, 3e-3, 200e-6, W, 9e-6, 5.5e-3, 5.5e-3 / W, follows=True)


def test_pieces_between_kinks() -> None:
    assert pieces([2.0, -1.0, 0.5, 0.5 + 1e-14, 9.0], 3.0) == [(0.0, 0.5), (0.5, 2.0), (2.0, 3.0)]


def test_integration_meets_an_exponential() -> None:
    time_s, state, lost_s = integrate(lambda _: lambda t, y: [-y[0]], (1.0,), [(0.0, 1.0), (1.0, 3.0)], (1.0,))
    assert not np.isfinite(lost_s)
    np.testing.assert_allclose(state[:, 0], np.exp(-time_s), rtol=1e-4)
    _, state, lost_s = integrate(
        lambda _: lambda t, y: [-y[0]], (1.0,), [(0.0, 3.0)], (1.0,), lost=lambda _, y: float(y[0] - 0.5)
    )
    assert lost_s == pytest.approx(np.log(2.0), rel=1e-4)
    assert state[-1, 0] == pytest.approx(0.5, rel=1e-4)


def test_a_load_ramps_for_as_long_as_its_slew_takes() -> None:
    step = LoadStep(4.0, 10.0, 3e6)
    assert step.ramp_s == pytest.approx(2e-6)
    np.testing.assert_allclose(step.load_a(np.array([0.0, 1e-6, 2e-6, 1.0])), [4.0, 7.0, 10.0, 10.0], rtol=1e-12)


def test_a_load_line_lowers_the_set_point() -> None:
    circuit = RailCircuit(1.0, 5e7, 2e7, 4e5, 1e-6, 2e-3, 1e-3, load_line_ohm=1e-3)
    wave = rail_wave(circuit, LoadStep(5.0, 15.0, 1e8), 4e-4)
    assert isinstance(wave, RailWave)
    assert wave.settled_v == pytest.approx(0.99)
    assert wave.output_v[-1] == pytest.approx(0.99, rel=2e-4)
    without = rail_wave(RailCircuit(1.0, 5e7, 2e7, 4e5, 1e-6, 2e-3, 1e-3), LoadStep(5.0, 15.0, 1e8), 4e-4)
    assert wave.droop_v < without.droop_v - 5e-3  # what the bank was above the new set point is not missing
    assert without.output_v[-1] == pytest.approx(1.0, rel=2e-4)


def test_what_the_bank_gives_is_what_is_missing() -> None:
    for case in rail_cases(10, 7, restoring=0.1):
        wave = rail_wave(case.circuit, case.step)
        missing_c = float(np.trapezoid(wave.load_a - wave.stage_a, wave.time_s))
        inner_v = wave.output_v[-1] - case.circuit.esr_ohm * (wave.stage_a[-1] - wave.load_a[-1])
        assert missing_c == pytest.approx(case.circuit.capacitance_f * (case.circuit.output_v - inner_v), rel=0.02)


def test_charge_and_energy_balance_of_a_bus() -> None:
    for case in bus_cases(10, 8, fixed_ratio=False, restoring=0.1):
        wave = bus_wave(case.circuit, case.train)
        assert isinstance(wave, BusWave)
        assert wave.survives
        drawn_c = float(np.trapezoid(wave.power_w / wave.bus_v - wave.source_a, wave.time_s))
        held_c = case.circuit.capacitance_f * (wave.bus_v[0] - wave.bus_v[-1])
        size_c = float(np.trapezoid(np.abs(wave.power_w / wave.bus_v - wave.source_a), wave.time_s))
        assert abs(drawn_c - held_c) < 0.12 * size_c  # of the trapezoids between samples


def test_a_train_of_steps() -> None:
    train = PowerTrain(30.0, 60.0, steps=3, spacing_s=1e-3)
    np.testing.assert_allclose(train.power_w(np.array([0.0, 9e-4, 1e-3, 2.1e-3])), [40.0, 40.0, 50.0, 60.0])
    slow = PowerTrain(30.0, 60.0, steps=3, spacing_s=1e-3, slew_w_per_s=1e5)
    assert slow.power_w(5e-5) == pytest.approx(35.0)
    one = bus_wave(BUS, PowerTrain(30.0, 60.0))
    three = bus_wave(BUS, train)
    assert three.dip_v < 0.6 * one.dip_v  # each step finds the bus recovered from the one before


def test_a_command_charges_the_bank() -> None:
    wave = bus_wave(BUS, PowerTrain(40.0, 40.0), Command(1e-3, 500.0, 10.0))
    assert wave.bus_v[-1] == pytest.approx(10.0, rel=2e-3)
    rising = (wave.time_s > 3e-3) & (wave.time_s < 4.9e-3)
    extra_a = wave.source_a[rising] - 40.0 / wave.bus_v[rising]
    np.testing.assert_allclose(extra_a, 1e-3 * 500.0, rtol=0.05)


def test_a_bus_without_current_is_lost() -> None:
    weak = BusCircuit(8.0, 800e-6, 3e-3, 200e-6, W, 9e-6, 5.5e-3, 5.5e-3 / W, True, limit_a=8.0, lockout_v=6.0)
    wave = bus_wave(weak, PowerTrain(30.0, 100.0), end_s=0.1)
    assert not wave.survives
    assert wave.bus_v[-1] == pytest.approx(6.0, rel=1e-3)
    # what the bank gives until then: 100 W less at most 8 A at 6 to 8 V
    assert wave.lost_s < 0.5 * 1e-3 * (8.0**2 - 6.0**2) / (100.0 - 64.0)


def test_bus_eigenvalues_without_bank_resistance() -> None:
    """Above the least capacitance nothing grows, below it something does; for both kinds of source."""
    for follows in (True, False):
        for share, grows in ((0.9, True), (1.1, False)):
            farad = share * float(stability.least_capacitance_f(5.5e-3, 5.5e-3 / W, 200.0, 8.0))
            bus = BusCircuit(8.0, farad - 1e-8, 1e-6, 1e-8, W, 0.0, 5.5e-3, 5.5e-3 / W, follows)
            assert (bus_eigenvalues(bus, 200.0)[0] > 0.0) == grows, (follows, share)


def test_one_stage_behind_a_stiff_bus_is_the_rail_alone() -> None:
    stiff = BusCircuit(10.0, 1.0, 1e-4, 1e-3, 1e6, 0.0, 1e-4, 1e-9, True)
    stage = StageCircuit(1.0, 5.0, 0.9, 1.0, 300e-9, 2, 2, 30.0, 4e5, 1e-6, 0.0, 1.5e-3, 2e-3, 1.1, 0.0, 4.0, 0.1)
    wave = board_wave(stiff, [stage], [Rise(0, 0.0, 12.0, 1e8)])
    assert isinstance(wave, BoardWave)
    assert wave.survives
    alone = RailCircuit(1.0, 2 * (9.0 - 1.0) / 300e-9, 2 * 1.0 / 300e-9, 4e5, 1e-6, 1.5e-3, 2e-3)
    assert wave.droop_v()[0] == pytest.approx(rail_wave(alone, LoadStep(5.0, 17.0, 1e8)).droop_v, rel=2e-3)


def test_a_dipped_bus_slows_the_stages() -> None:
    stage = StageCircuit(3.3, 5.0, 0.9, 1.0, 2e-6, 2, 2, 30.0, 4e5, 1e-6, 0.0, 5e-4, 2e-3, 1.1, 0.0, 3.5, 0.1)
    low = BusCircuit(5.0, 100e-6, 1e-3, 50e-6, W, 9e-6, 5e-3, 5e-3 / W, True)
    high = BusCircuit(5.0, 20e-3, 1e-3, 50e-6, W, 9e-6, 5e-3, 5e-3 / W, True)
    droop = [float(board_wave(bus, [stage], [Rise(0, 0.0, 10.0, 1e8)]).droop_v()[0]) for bus in (low, high)]
    assert droop[0] > 1.02 * droop[1]


def test_bank_impedance_at_both_ends() -> None:
    low, high = stability.bank_impedance_ohm(np.array([1.0, 1e9]), 1e-3, 4e-3, 1e-4)
    assert abs(low) == pytest.approx(1 / (2 * np.pi * 1.1e-3), rel=1e-4)
    assert abs(high) == pytest.approx(1 / (2 * np.pi * 1e9 * 1e-4), rel=1e-3)


def random_sources(count: int, seed: int) -> np.ndarray:
    generator = np.random.default_rng(seed)
    low, high = np.log10([2e-4, 1e-9, 1e-4, 1e-4, 2e-5]), np.log10([2e-2, 5e-7, 1e-2, 5e-2, 5e-4])
    return 10.0 ** generator.uniform(low, high, (count, 5))


def test_output_peak_against_a_fine_sweep() -> None:
    sources = random_sources(100, 9)
    peak = stability.output_peak_ohm(*sources.T)
    for (ohm, henry, bulk, esr, beside), found in zip(sources, peak, strict=True):
        at = 1.0 / (2 * np.pi * np.sqrt(henry * (bulk + beside))) * np.logspace(-3, 3, 20001)
        bank = stability.bank_impedance_ohm(at, bulk, esr, beside)
        series = ohm + 2j * np.pi * at * henry
        assert found == pytest.approx(max(float(np.abs(bank * series / (bank + series)).max()), ohm), rel=0.05)


def test_positive_impedance_margin_is_stable() -> None:
    generator = np.random.default_rng(10)
    sources = random_sources(200, 10)
    power_w, bus_v = 10.0 ** generator.uniform(1.0, 4.0, 200), generator.uniform(5.0, 13.0, 200)
    margin = stability.impedance_margin_db(stability.output_peak_ohm(*sources.T), power_w, bus_v)
    seen = 0
    for (ohm, henry, bulk, esr, beside), watts, volts, decibel in zip(sources, power_w, bus_v, margin, strict=True):
        if decibel < 0.5:
            continue
        seen += 1
        bus = BusCircuit(volts, bulk, esr, beside, 1e5, 0.0, ohm, henry, follows=False)
        assert bus_eigenvalues(bus, watts)[0] < 0.0
    assert seen > 100


def test_source_peak_against_the_matrix_exponential() -> None:
    for ohm, henry, bulk, esr, beside in random_sources(25, 11):
        rates = np.array(
            [
                [-ohm / henry, 0.0, 1.0 / henry],
                [0.0, -1.0 / (esr * bulk), 1.0 / (esr * bulk)],
                [-1.0 / beside, 1.0 / (esr * beside), -1.0 / (esr * beside)],
            ]
        )
        settled = np.array([1.0, ohm, ohm])
        end_s = 2 * np.pi * np.sqrt(henry * (bulk + beside))
        seen = [ohm + (expm(rates * t) @ -settled)[2] for t in np.geomspace(1e-4 * end_s, end_s, 600)]
        peak = transient.source_peak_ohm(ohm, henry, bulk, esr, beside)
        assert peak == pytest.approx(max([ohm, *seen]), rel=5e-3)
