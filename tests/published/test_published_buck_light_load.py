"""Light load, ripple and switch losses against worked examples in published data sheets, named beside each value.

The sheets take the duty without resistive drops: stages here have none, or resistances a million times smaller.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pytest

from archopt.physics import buck
from archopt.physics.buck import BuckParameters
from archopt.physics.buck_light_load import pulses

Build = Callable[..., BuckParameters]
SMALL = 1e-6


class TestSlus786g:
    """SLUS786G p. 21: skip mode keeps the on-time of heavy load; the boundary, and 60 kHz a fifth below it."""

    def test_sixty_kilohertz_at_a_fifth_of_the_boundary(self) -> None:
        ripple_a, frequency_hz = 3.0, 300e3
        found = pulses(1.0, 0.0, frequency_hz, 0.2 * 0.5 * ripple_a, ripple_a)
        assert frequency_hz * found.frequency_share == pytest.approx(60e3, rel=1e-9)
        assert found.swing_share == pytest.approx(1.0)

    def test_frequency_is_proportional_to_load_and_meets_the_setting(self) -> None:
        load_a = np.linspace(0.0, 3.0, 13)
        found = pulses(1.0, 0.0, 300e3, load_a, 3.0)
        np.testing.assert_allclose(300e3 * found.frequency_share, np.minimum(load_a / 1.5, 1.0) * 300e3, rtol=1e-12)

    @pytest.mark.parametrize(("input_v", "output_v", "henry"), [(12.0, 5.0, 3.3e-6), (20.0, 3.3, 2.2e-6)])
    def test_boundary(self, bare_stage: Build, input_v: float, output_v: float, henry: float) -> None:
        # its equation 2: (Vin - Vout) Vout / (2 L f Vin)
        stage = bare_stage(frequency_hz=300e3, inductance_h=henry, emulation=1.0)
        boundary_a = (input_v - output_v) * output_v / (2.0 * henry * 300e3 * input_v)
        assert 0.5 * buck.ripple_a(stage, input_v, output_v, 1.0) == pytest.approx(boundary_a, rel=1e-9)
        # the on-time below it is the one above it
        on_s = buck.losses(stage, input_v, output_v, np.array([0.3, 3.0]) * boundary_a, 25.0).on_s
        assert on_s[0] == pytest.approx(on_s[1], rel=1e-9)

    def test_switching_loss_follows_the_pulses(self, bare_stage: Build) -> None:
        stage = bare_stage(frequency_hz=300e3, inductance_h=3.3e-6, emulation=1.0, high_side_gate_c=10e-9)
        boundary_a = 0.5 * float(buck.ripple_a(stage, 12.0, 5.0, 1.0))
        result = buck.losses(stage, 12.0, 5.0, np.array([0.2, 1.0, 4.0]) * boundary_a, 25.0)
        np.testing.assert_allclose(result.gate_w, 12.0 * 10e-9 * np.array([60e3, 300e3, 300e3]), rtol=1e-9)


def test_power_save_of_sc418() -> None:
    # SC418 data sheet p. 22: with 4 A of ripple the frequency falls for loads below 2 A
    found = pulses(1.0, 0.0, 250e3, np.array([2.01, 2.0, 1.99, 1.0]), 4.0)
    assert found.stopped.tolist() == [False, False, True, True]
    assert 250e3 * found.frequency_share[3] == pytest.approx(125e3)


def test_on_time_of_sc418(bare_stage: Build) -> None:
    # SC418 data sheet p. 22: 318 ns at 13.2 V, 1.05 V, 250 kHz
    result = buck.losses(bare_stage(frequency_hz=250e3, inductance_h=1e-6), 13.2, 1.05, 6.0, 25.0)
    assert result.on_s == pytest.approx(318e-9, rel=2e-3)


def test_boundary_of_snvs639f(bare_stage: Build) -> None:
    # SNVS639F p. 11, equation 1: Vout (1 - D) / (2 L f)
    stage = bare_stage(frequency_hz=500e3, inductance_h=2.2e-6, emulation=1.0)
    boundary_a = 1.2 * (1.0 - 0.1) / (2.0 * 2.2e-6 * 500e3)
    assert buck.losses(stage, 12.0, 1.2, boundary_a * 1.001, 25.0).ripple_a == pytest.approx(2.0 * boundary_a, rel=1e-9)
    below = buck.losses(stage, 12.0, 1.2, boundary_a * 0.999, 25.0)
    assert float(below.low_side_conduction_w) == 0.0
    assert pulses(1.0, 500e3, 500e3, boundary_a * 0.999, 2.0 * boundary_a).stopped


class TestLtc1628Sync:
    """LTC1628-SYNC sheet (1628syncfa) p. 25: 22 V at most -> 1.8 V, 5 A, 300 kHz, 42 mohm, Crss 100 pF, 50 degC."""

    @pytest.mark.parametrize(("henry", "percent"), [(4.7e-6, 23.0), (3.3e-6, 33.0)])
    def test_ripple_in_percent_of_five_amperes(self, bare_stage: Build, henry: float, percent: float) -> None:
        stage = bare_stage(frequency_hz=300e3, inductance_h=henry)
        assert 20.0 * buck.ripple_a(stage, 22.0, 1.8, 5.0) == pytest.approx(percent, abs=0.5)

    def test_peak_5_84_a(self, bare_stage: Build) -> None:
        ripple_a = buck.ripple_a(bare_stage(frequency_hz=300e3, inductance_h=3.3e-6), 22.0, 1.8, 5.0)
        assert 5.0 + 0.5 * ripple_a == pytest.approx(5.84, rel=2e-3)

    def test_on_time_273_ns(self, bare_stage: Build) -> None:
        result = buck.losses(bare_stage(frequency_hz=300e3, inductance_h=3.3e-6), 22.0, 1.8, 5.0, 25.0)
        assert result.on_s == pytest.approx(273e-9, rel=2e-3)

    def test_top_switch_220_mw(self, bare_stage: Build) -> None:
        # transitions of 1.7 Vin^2 I Crss f are those of edges of 1.7 x 2 x 22 V x 100 pF/A = 7.48 ns together
        edges_s = 2.0 * 1.7 * 22.0 * 100e-12
        stage = bare_stage(
            frequency_hz=300e3, high_side_ohm=42e-3 * SMALL, switch_per_k=0.005, rise_s=edges_s / 2,
            fall_s=edges_s / 2,
        )  # fmt: skip
        result = buck.losses(stage, 22.0, 1.8, 5.0, 50.0)
        conduction_w = float(result.high_side_conduction_w) / SMALL
        assert conduction_w == pytest.approx(1.8 / 22.0 * 25.0 * 1.125 * 42e-3, rel=1e-4)
        assert conduction_w + float(result.overlap_w) == pytest.approx(220e-3, rel=5e-3)
