"""Losses of buck stages against worked examples in published notes; the source stands beside each number.

The notes take the duty without resistive drops. Where that matters the resistances are entered a million
times smaller and the conduction loss, which is in proportion to them, is scaled back.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest
from scipy.integrate import quad

from archopt.physics import buck
from archopt.physics.buck import BuckParameters
from archopt.physics.capacitor import buck_input_ripple_rms_a, esr_loss_w

Build = Callable[..., BuckParameters]
SMALL = 1e-6


class TestApplicationSectionSnvs276g:
    """SNVS276G p. 26: 3.3 -> 1.2 V, 4 A, 300 kHz, edges 31 ns together, 13 mohm x 1.3 hot, no ripple."""

    @pytest.fixture
    def result(self, bare_stage: Build) -> buck.BuckLosses:
        stage = bare_stage(
            frequency_hz=300e3, rise_s=15.5e-9, fall_s=15.5e-9, high_side_ohm=13e-3 * 1.3,
            low_side_ohm=13e-3 * 1.3, winding_ohm=11e-3, high_side_gate_c=3e-9, low_side_gate_c=3e-9,
            quiescent_a=1.7e-3,
        )  # fmt: skip
        return buck.losses(stage, 3.3, 1.2, 4.0, 25.0)

    def test_overlap_61_mw(self, result: buck.BuckLosses) -> None:
        assert result.overlap_w == pytest.approx(61.38e-3, rel=1e-3)

    def test_conduction_of_both_switches_270_mw(self, result: buck.BuckLosses) -> None:
        assert result.high_side_conduction_w + result.low_side_conduction_w == pytest.approx(
            270.42e-3, rel=1e-3
        )

    def test_gate_from_the_input_5_94_mw(self, result: buck.BuckLosses) -> None:
        assert result.gate_w == pytest.approx(5.94e-3, rel=1e-3)
        assert result.bias_w == 0.0

    def test_controller_5_61_mw(self, result: buck.BuckLosses) -> None:
        assert result.controller_w == pytest.approx(5.61e-3, rel=1e-3)

    def test_inductor_176_mw(self, result: buck.BuckLosses) -> None:
        assert result.winding_w == pytest.approx(176e-3, rel=1e-3)

    def test_input_capacitor_1_92_a_and_88_8_mw(self, bare_stage: Build) -> None:
        rms_a = buck_input_ripple_rms_a(1.2 / 3.3, 4.0)
        assert rms_a == pytest.approx(1.92, rel=3e-3)
        assert esr_loss_w(24e-3, rms_a) == pytest.approx(88.8e-3, rel=2e-3)
        lossless = bare_stage(frequency_hz=300e3, input_capacitor_ohm=24e-3)
        assert buck.losses(lossless, 3.3, 1.2, 4.0, 25.0).input_capacitor_w == pytest.approx(
            88.8e-3, rel=2e-3
        )


class TestRohmAek59:
    """ROHM AEK59-D1-0065-2, read second-hand: 12 -> 5 V, 3 A, 2 MHz, 100 and 70 mohm, edges 4 + 6 ns."""

    @staticmethod
    def stage(build: Build, **changes: float) -> BuckParameters:
        given = {
            "frequency_hz": 2e6, "high_side_ohm": 100e-3 * SMALL, "low_side_ohm": 70e-3 * SMALL,
            "rise_s": 4e-9, "fall_s": 6e-9, "diode_v": 0.5, "dead_s": 60e-9,
            "high_side_gate_c": 1e-9, "low_side_gate_c": 1e-9, "gate_v": 5.0, "gate_from_input": 0.0,
            "quiescent_a": 1e-3,
        }  # fmt: skip
        return build(**(given | changes))

    def test_high_side_375_mw(self, bare_stage: Build) -> None:
        result = buck.losses(self.stage(bare_stage), 12.0, 5.0, 3.0, 25.0)
        assert result.high_side_conduction_w / SMALL == pytest.approx(375e-3, rel=1e-4)

    def test_low_side_367_5_mw_where_dead_time_counts_as_conduction(self, bare_stage: Build) -> None:
        result = buck.losses(self.stage(bare_stage, dead_s=0.0), 12.0, 5.0, 3.0, 25.0)
        assert result.low_side_conduction_w / SMALL == pytest.approx(367.5e-3, rel=1e-4)

    def test_low_side_without_the_dead_time(self, bare_stage: Build) -> None:
        # Erratum: 277 mW is noted second-hand; 3^2 x 70 mohm x (7/12 - 60 ns x 2 MHz) gives 291.9 mW.
        result = buck.losses(self.stage(bare_stage), 12.0, 5.0, 3.0, 25.0)
        assert result.low_side_conduction_w / SMALL == pytest.approx(291.9e-3, rel=1e-3)

    def test_overlap_dead_time_gate_and_controller(self, bare_stage: Build) -> None:
        result = buck.losses(self.stage(bare_stage), 12.0, 5.0, 3.0, 25.0)
        assert result.overlap_w == pytest.approx(360e-3, rel=1e-4)
        assert result.dead_time_w == pytest.approx(180e-3, rel=1e-4)
        assert result.bias_w == pytest.approx(20e-3, rel=1e-4)
        assert result.gate_w == 0.0
        assert result.controller_w == pytest.approx(12e-3, rel=1e-4)

    def test_total_1_31_w(self, bare_stage: Build) -> None:
        # printed 1.31 W; exact 1.3145 W with the dead time counted twice, as the note does
        timed = buck.losses(self.stage(bare_stage), 12.0, 5.0, 3.0, 25.0)
        untimed = buck.losses(self.stage(bare_stage, dead_s=0.0), 12.0, 5.0, 3.0, 25.0)
        conduction = (untimed.high_side_conduction_w + untimed.low_side_conduction_w) / SMALL
        total = conduction + timed.overlap_w + timed.dead_time_w + timed.bias_w + timed.controller_w
        assert total == pytest.approx(1.3145, rel=1e-4)


def test_rohm_64an035e_high_side_with_ripple(bare_stage: Build) -> None:
    # ROHM 64AN035E, read second-hand: 1 MHz, 4.7 uH, ripple 0.6206 A, high side 376 mW: the ripple squared
    stage = bare_stage(frequency_hz=1e6, inductance_h=4.7e-6, high_side_ohm=100e-3 * SMALL)
    result = buck.losses(stage, 12.0, 5.0, 3.0, 25.0)
    assert result.ripple_a == pytest.approx(0.6206, rel=1e-3)
    assert result.high_side_conduction_w / SMALL == pytest.approx(376.3e-3, rel=1e-3)
    assert result.high_side_conduction_w / SMALL > 1.003 * 375e-3


def test_rc5051_duty_with_drops(bare_stage: Build) -> None:
    # RC5051 AN50 p. 9, diode buck 5 -> 3.3 V, 10 A: D = 0.73, switch 2.19 W, diode 1.35 W, coil 1.0 W.
    # Its diode of 0.5 V is a low side of 50 mohm at 10 A; the note leaves the coil out of the duty.
    stage = bare_stage(frequency_hz=300e3, high_side_ohm=30e-3, low_side_ohm=50e-3)
    assert buck.duty(stage, 5.0, 3.3, 10.0) == pytest.approx((3.3 + 0.5) / (5.0 + 0.5 - 0.3), rel=1e-9)
    result = buck.losses(stage, 5.0, 3.3, 10.0, 25.0)
    assert result.duty == pytest.approx(0.73, rel=5e-3)
    assert result.high_side_conduction_w == pytest.approx(2.19, rel=5e-3)
    assert result.low_side_conduction_w == pytest.approx(1.35, rel=5e-3)
    coil = buck.losses(bare_stage(frequency_hz=300e3, winding_ohm=10e-3), 5.0, 3.3, 10.0, 25.0)
    assert coil.winding_w == pytest.approx(1.0, rel=1e-4)


@pytest.mark.parametrize(
    ("input_v", "output_v", "frequency_hz", "inductance_h", "printed_a"),
    [
        (14.0, 3.3, 600e3, 9.35e-6, 0.45),  # SLUS973 p. 21
        (14.0, 1.2, 600e3, 2.45e-6, 0.75),  # SLUS973 p. 21
        (12.0, 1.2, 650e3, 1.66e-6, 1.0),  # RT6263A p. 17
        (12.0, 1.2, 650e3, 1.5e-6, 1.1),  # RT6263A p. 17
    ],
)
def test_ripple_of_data_sheet_examples(
    bare_stage: Build,
    input_v: float,
    output_v: float,
    frequency_hz: float,
    inductance_h: float,
    printed_a: float,
) -> None:
    stage = bare_stage(frequency_hz=frequency_hz, inductance_h=inductance_h)
    assert buck.ripple_a(stage, input_v, output_v, 1.0) == pytest.approx(printed_a, rel=8e-3)


def test_rms_current_of_slusah5b(bare_stage: Build) -> None:
    # SLUSAH5B p. 16: 25 A with 5.8 A of ripple is 25.06 A rms. 12 -> 1.0 V at 500 kHz: 5.8 A at 316 nH.
    inductance_h = 1.0 * (1.0 - 1.0 / 12.0) / (500e3 * 5.8)
    stage = bare_stage(frequency_hz=500e3, inductance_h=inductance_h, winding_ohm=1e-9)
    result = buck.losses(stage, 12.0, 1.0, 25.0, 25.0)
    assert result.ripple_a == pytest.approx(5.8, rel=1e-4)
    assert np.sqrt(result.winding_w / 1e-9) == pytest.approx(25.06, rel=3e-4)


# MagNet fits, printed constants of the improved generalised Steinmetz equation, SI: ki, alpha, beta
MATERIALS = {"3C90": (0.23732, 1.3932, 2.5481), "N87": (0.79822, 1.3453, 2.5752)}


def triangle_loss(material: str, frequency_hz: float, swing_t: float, duty: float) -> float:
    """Average of ki |dB/dt|^a swing^(b-a) over a period, integrated numerically (W/m3)."""
    ki, a, b = MATERIALS[material]
    period = 1.0 / frequency_hz
    rising = quad(lambda _: abs(swing_t / (duty * period)) ** a, 0.0, duty * period)[0]
    falling = quad(lambda _: abs(swing_t / ((1.0 - duty) * period)) ** a, duty * period, period)[0]
    return float(ki * swing_t ** (b - a) * (rising + falling) / period)


@pytest.mark.parametrize(("material", "expected_kw_m3"), [("3C90", 95.43), ("N87", 171.24)])
def test_core_loss_of_a_triangle(material: str, expected_kw_m3: float) -> None:
    # closed form ki f^a dB^b [D^(1-a) + (1-D)^(1-a)] with the MagNet constants, against numerical integration
    ki, a, b = MATERIALS[material]
    closed = ki * 100e3**a * 0.2**b * (0.5 ** (1 - a) + 0.5 ** (1 - a))
    assert closed == pytest.approx(expected_kw_m3 * 1e3, rel=1e-4)
    assert triangle_loss(material, 100e3, 0.2, 0.5) == pytest.approx(closed, rel=1e-9)
    assert triangle_loss(material, 250e3, 0.1, 0.2) == pytest.approx(
        ki * 250e3**a * 0.1**b * (0.2 ** (1 - a) + 0.8 ** (1 - a)), rel=1e-9
    )


@pytest.mark.parametrize("material", sorted(MATERIALS))
def test_core_loss_of_the_stage_follows_the_triangle(bare_stage: Build, material: str) -> None:
    # the stage is told the loss at one ripple; at half of it, same duty, it must give the integrated loss
    exponent = MATERIALS[material][2]
    told_w = triangle_loss(material, 100e3, 0.2, 0.5)
    told = {"frequency_hz": 100e3, "core_w": told_w, "core_exponent": exponent}
    ripple_a = 6.0 * 0.5 / (100e3 * 10e-6)
    full = bare_stage(inductance_h=10e-6, core_ripple_a=ripple_a, **told)
    half = bare_stage(inductance_h=20e-6, core_ripple_a=ripple_a, **told)
    assert buck.losses(full, 12.0, 6.0, 5.0, 25.0).core_w == pytest.approx(
        triangle_loss(material, 100e3, 0.2, 0.5), rel=1e-9
    )
    assert buck.losses(half, 12.0, 6.0, 5.0, 25.0).core_w == pytest.approx(
        triangle_loss(material, 100e3, 0.1, 0.5), rel=1e-9
    )


@pytest.mark.parametrize("input_v", [5.0, 12.0, 20.0])
def test_output_charge_against_integrals(bare_stage: Build, input_v: float) -> None:
    # Q and E are the integrals of C dv and v C dv; charge growing as the root of voltage means
    # C = Q0 / (2 sqrt(v v0)). Numerical integration against the closed form.
    low_c, high_c, stated_v = 30e-9, 12e-9, 12.0

    def capacitance(charge_c: float, v: float) -> float:
        return charge_c / (2.0 * np.sqrt(v * stated_v))

    low_q = quad(lambda v: capacitance(low_c, v), 0.0, input_v, epsabs=0.0)[0]
    low_e = quad(lambda v: v * capacitance(low_c, v), 0.0, input_v, epsabs=0.0)[0]
    high_e = quad(lambda v: v * capacitance(high_c, v), 0.0, input_v, epsabs=0.0)[0]
    expected_j = input_v * low_q + high_e - low_e
    energy_j = buck.output_charge_energy_j(high_c, low_c, stated_v, input_v)
    assert energy_j / expected_j == pytest.approx(1.0, rel=1e-6)
    stage = bare_stage(
        frequency_hz=500e3, high_side_output_c=high_c, low_side_output_c=low_c, output_charge_v=stated_v
    )
    assert buck.losses(stage, input_v, 1.0, 10.0, 25.0).output_charge_w == pytest.approx(
        500e3 * expected_j, rel=1e-6
    )


def test_reversed_valley_current_swings_the_node(bare_stage: Build) -> None:
    # closed form: a linear capacitance of charge 10 nC; -1 A over one dead time of 5 ns moves half of it,
    # the rest is switched hard at half the voltage and burns a quarter
    stage = bare_stage(high_side_output_c=4e-9, low_side_output_c=6e-9, output_charge_v=12.0, dead_s=10e-9)
    share = buck.hard_switched_share(stage, 12.0, np.array([2.0, 0.0, -1.0, -2.0, -5.0]))
    assert share == pytest.approx(np.array([1.0, 1.0, 0.25, 0.0, 0.0]), rel=1e-9)
