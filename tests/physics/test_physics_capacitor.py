"""Capacitance in service, and ripple currents against waveforms built sample by sample."""

from __future__ import annotations

import numpy as np
import pytest

from archopt.physics import capacitor

SAMPLES = (np.arange(400_000) + 0.5) / 400_000


def triangle(ripple_a: float, duty: float, shift: float = 0.0) -> np.ndarray:
    """Inductor ripple about its mean over one period."""
    phase = (SAMPLES - shift) % 1.0
    rising = -0.5 + phase / duty
    falling = 0.5 - (phase - duty) / (1.0 - duty)
    return ripple_a * np.where(phase < duty, rising, falling)


def test_bias_halves_at_its_voltage() -> None:
    # closed form: half at half_v, a fifth at twice that, 0.8 x 0.8 for tolerance and end of life
    bias = np.array([0.0, 4.0, 8.0])
    left = capacitor.effective_capacitance_f(100e-6, bias, 4.0)
    assert left * 1e6 == pytest.approx(np.array([100.0, 50.0, 20.0]), rel=1e-9)
    aged = capacitor.effective_capacitance_f(100e-6, 4.0, 4.0, 0.2, 0.8)
    assert aged * 1e6 == pytest.approx(32.0, rel=1e-9)


def test_bias_does_nothing_to_a_film_and_never_breaks() -> None:
    assert capacitor.effective_capacitance_f(100e-6, 12.0, 1e9) * 1e6 == pytest.approx(100.0, rel=1e-9)
    assert np.isfinite(capacitor.effective_capacitance_f(1e-6, np.array([0.0, 1e12]), 0.0)).all()


@pytest.mark.parametrize("duty", [0.08, 0.4, 0.9])
def test_output_ripple_rms(duty: float) -> None:
    expected = np.sqrt(np.mean(triangle(6.0, duty) ** 2))
    assert capacitor.buck_output_ripple_rms_a(6.0) == pytest.approx(float(expected), rel=1e-4)


@pytest.mark.parametrize(("duty", "ripple_a"), [(0.1, 0.0), (0.1, 8.0), (0.45, 5.0), (0.9, 3.0)])
def test_input_ripple_rms(duty: float, ripple_a: float) -> None:
    drawn = np.where(duty > SAMPLES, 20.0 + triangle(ripple_a, duty), 0.0)
    assert capacitor.buck_input_ripple_rms_a(duty, 20.0, ripple_a) == pytest.approx(
        float(drawn.std()), rel=1e-4
    )


@pytest.mark.parametrize("phases", [1, 2, 3, 4, 6])
@pytest.mark.parametrize("duty", [0.08, 0.21, 0.4, 0.63])
def test_interleaved_ripple(phases: int, duty: float) -> None:
    summed = sum(triangle(5.0, duty, number / phases) for number in range(phases))
    expected = float(np.ptp(summed))
    assert capacitor.interleaved_ripple_a(5.0, duty, phases) == pytest.approx(expected, rel=1e-3, abs=1e-3)


def test_interleaved_ripple_vanishes_where_phases_fill_the_period() -> None:
    left = capacitor.interleaved_ripple_a(5.0, np.array([0.25, 0.5, 0.75]), 4)
    assert np.abs(left).max() < 1e-9


def test_esr_loss() -> None:
    # closed form: 2 mohm x (3 A)^2
    assert capacitor.esr_loss_w(2e-3, 3.0) == pytest.approx(18e-3, rel=1e-12)
