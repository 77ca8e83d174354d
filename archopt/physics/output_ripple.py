"""What the phases of a buck stage leave for the output capacitors to smooth: current and charge, peak to peak."""

from __future__ import annotations

import numpy as np

from archopt.physics import buck
from archopt.physics.arrays import FloatArray, FloatLike
from archopt.physics.capacitor import LEAST_DUTY, interleaved_ripple_a

TINY = 1e-30


def summed_ripple(
    p: buck.BuckParameters, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike, phases: FloatLike
) -> tuple[FloatArray, FloatArray]:
    """Ripple (A peak to peak) of the summed phase current, and the charge (C peak to peak) it moves.

    Parameters
    ----------
    input_v, output_v : stage input and output (V)
    current_a : current of one phase (A)
    phases : running phases, spread evenly over the period; all broadcast

    Notes
    -----
    Continuous: the interleaved triangle of N phases repeats N f times a second and moves ripple / (8 N f). In
    emulation the pulses of the phases no longer overlap and do not cancel: one pulse of height p brings I / f_pulse,
    of which the part above the load, (1 - I / p)^2, is stored. Both are equal where the valley of one phase touches
    zero. Closed form.
    """
    return summed_ripple_at(p, buck.operating_point(p, input_v, output_v, current_a), phases)


def summed_ripple_at(p: buck.BuckParameters, at: buck.Point, phases: FloatLike) -> tuple[FloatArray, FloatArray]:
    """Ripple and charge of :func:`summed_ripple` at an operating point of one phase."""
    summed = interleaved_ripple_a(at.ripple_a, np.clip(at.asked, LEAST_DUTY, 1.0 - LEAST_DUTY), phases)
    charge = summed / (8.0 * np.maximum(phases, 1.0) * p.frequency_hz)
    if np.any(at.stopped):
        height = np.maximum(at.ripple_a * at.swing_share, TINY)
        brought = at.current_a / np.maximum(at.frequency_hz, TINY)
        stored = brought * np.square(np.maximum(1.0 - at.current_a / height, 0.0))
        summed = np.where(at.stopped, height, summed)
        charge = np.where(at.stopped, stored, charge)
    return np.asarray(summed), np.asarray(charge)


def half_swing_v(
    ripple_a: FloatLike, charge_c: FloatLike, capacitance_f: FloatLike, esr_ohm: FloatLike
) -> FloatArray:
    """Half the output ripple (V): how far the output leaves its mean at most, either side.

    Parameters
    ----------
    ripple_a, charge_c : ripple and charge, peak to peak
    capacitance_f, esr_ohm : of the whole bank; all broadcast

    Notes
    -----
    Half of ripple ESR + charge / C. The peaks of the two parts lie a quarter period apart, so their sum is never
    optimistic; it is exact where either one is small. Common practice.
    """
    swing: FloatArray = 0.5 * (np.asarray(ripple_a) * esr_ohm + np.asarray(charge_c) / capacitance_f)
    return swing
