"""Capacitance left in service, and the ripple current capacitors carry around a buck stage."""

from __future__ import annotations

import numpy as np

from archopt.physics.arrays import FloatArray, FloatLike

TINY = 1e-30
LEAST_DUTY = 1e-3


def effective_capacitance_f(
    nominal_f: FloatLike,
    bias_v: FloatLike,
    half_v: FloatLike,
    tolerance: FloatLike = 0.0,
    end_of_life: FloatLike = 1.0,
) -> FloatArray:
    """Capacitance (F) left at a DC bias, at the bottom of its tolerance and the end of its life.

    The bias form has one number a component engineer can read off any bias curve: the voltage where half is
    left. It is even in voltage and flat at zero bias, as a ferroelectric ceramic is; above half_v it falls
    with the square of voltage, faster than the -2/3 power of a bulk ceramic (Johnson 1962, from memory), so
    it does not flatter. Films and electrolytics have a very large half_v.

    Parameters
    ----------
    nominal_f : printed capacitance (F)
    bias_v : DC voltage (V)
    half_v : bias that leaves half (V), above 0
    tolerance : share that may be missing when new (0.2 for 20 %)
    end_of_life : factor left at the end of life (0.8); all broadcast

    Notes
    -----
    C = C0 (1 - tolerance) end_of_life / (1 + (V / half_v)^2).
    """
    relative = np.asarray(bias_v) / np.maximum(half_v, TINY)
    bounded = np.minimum(np.abs(relative), 1e6)
    left: FloatArray = nominal_f * (1.0 - np.asarray(tolerance)) * end_of_life / (1.0 + bounded * bounded)
    return left


def esr_loss_w(esr_ohm: FloatLike, rms_a: FloatLike) -> FloatArray:
    """Loss (W) of a ripple current (A rms) in a series resistance (ohm); arguments broadcast."""
    current = np.asarray(rms_a)
    loss: FloatArray = esr_ohm * current * current
    return loss


def buck_output_ripple_rms_a(ripple_a: FloatLike) -> FloatArray:
    """Root mean square (A) of a triangular ripple given peak to peak (A): ripple / sqrt(12). Closed form."""
    rms: FloatArray = np.asarray(ripple_a) * (1.0 / np.sqrt(12.0))
    return rms


def buck_input_ripple_rms_a(duty: FloatLike, current_a: FloatLike, ripple_a: FloatLike = 0.0) -> FloatArray:
    """Ripple current (A rms) of the input capacitor of one phase that draws a steady current from its source.

    Parameters
    ----------
    duty : on-time share, clipped to 0..1
    current_a : output current of the phase (A)
    ripple_a : inductor ripple peak to peak (A); all broadcast

    Notes
    -----
    rms^2 = D (1 - D) I^2 + D ripple^2 / 12: a trapezoid of width D less its mean. Closed form; SNVS276G p. 26
    has it without ripple.
    """
    on = np.clip(duty, 0.0, 1.0)
    square = on * ((1.0 - on) * np.square(current_a) + np.square(ripple_a) * (1.0 / 12.0))
    rms: FloatArray = np.sqrt(square)
    return rms


def interleaved_ripple_a(ripple_a: FloatLike, duty: FloatLike, phases: FloatLike) -> FloatArray:
    """Ripple (A peak to peak) of the summed current of phases that switch evenly spread over the period.

    Parameters
    ----------
    ripple_a : ripple of one phase, peak to peak (A)
    duty : on-time share of each phase, clipped to 0.001..1
    phases : number of phases, 1 or more; all broadcast

    Notes
    -----
    With m the whole part of N D: ripple (1 - m / (N D)) (1 + m - N D) / (1 - D). Between two edges m or m + 1
    phases rise and the others fall; the sum repeats N times a period. Closed form. At D = m / N it is zero.
    """
    on = np.clip(duty, LEAST_DUTY, 1.0 - LEAST_DUTY)
    product = np.maximum(phases, 1.0) * on
    whole = np.floor(product)
    summed: FloatArray = ripple_a * (1.0 - whole / product) * (1.0 + whole - product) / (1.0 - on)
    return summed
