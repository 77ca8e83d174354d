"""What holds a bus up: a bulk bank, a lossy bank that damps it, and the stages' inputs, behind a source's R and L.

The damping bank is a capacitor with its own series resistance beside a bulk bank of little resistance.
"""

from __future__ import annotations

import numpy as np

from archopt.physics.arrays import FloatArray, FloatLike

LEAST_OHM = 1e-9
LEAST_HENRY = 1e-15
LEAST_FARAD = 1e-12
DIP_TIMES = (0.5, 1.0, 2.0)


def joined_bank(
    bulk_f: FloatLike, bulk_ohm: FloatLike, damper_f: FloatLike, damper_ohm: FloatLike
) -> tuple[FloatArray, FloatArray]:
    """Capacitance (F) and series resistance (ohm) that stand for two banks in parallel.

    Parameters
    ----------
    bulk_f, bulk_ohm : bulk bank and its series resistance
    damper_f, damper_ohm : damping bank, 0 where there is none; all broadcast

    Notes
    -----
    A step of current I raises the voltage by I (t/C + R1 + (R0 - R1) exp(-t/T)), C the sum of both and
    R1 = (Rb Cb^2 + Rd Cd^2) / C^2, never less than the parallel resistance R0 it begins at. C and R1 are taken:
    above the step response at every moment. Closed form.
    """
    total = np.asarray(bulk_f) + damper_f
    square = np.maximum(total, LEAST_FARAD) ** 2
    settled = (bulk_ohm * np.square(bulk_f) + damper_ohm * np.square(damper_f)) / square
    return total, np.where(np.asarray(damper_f) > 0.0, settled, bulk_ohm)


def damped_dip_ohm(
    bulk_f: FloatLike, bulk_ohm: FloatLike, damper_f: FloatLike, damper_ohm: FloatLike, bandwidth_rad_s: FloatLike,
    delay_s: FloatLike,
) -> FloatArray:  # fmt: skip
    """Deviation (V) for each ampere of a step, between dead time and the end of the recovery; 0 without a damper.

    Parameters
    ----------
    bulk_f, bulk_ohm, damper_f, damper_ohm : as for :func:`joined_bank`
    bandwidth_rad_s, delay_s : of a source that follows the load after a dead time without a slew limit; all broadcast

    Notes
    -----
    The two banks share the charge with the time constant T of :func:`joined_bank`. Read at half, once and twice the
    time at which a recovery with the bandwidth's own time constant has made most of that (in 3000 random banks at
    least 0.985 of the crest together with both ends). Closed form at each time.
    """
    total, settled = joined_bank(bulk_f, bulk_ohm, damper_f, damper_ohm)
    there = np.asarray(damper_f) > 0.0
    damper, lossy = np.where(there, damper_f, 1.0), np.where(there, damper_ohm, 1.0)
    both = np.maximum(np.asarray(bulk_ohm) + lossy, LEAST_OHM)
    total = np.maximum(total, LEAST_FARAD)
    shared = np.maximum(np.asarray(bulk_f), LEAST_FARAD) * damper / total * both
    w = np.asarray(bandwidth_rad_s, dtype=np.float64)
    rate = 1.0 / shared
    rate = np.where(np.abs(rate - w) < 1e-3 * w, 1.001 * w, rate)
    begun = np.asarray(bulk_ohm) * lossy / both
    crest_s = np.log(rate / w) / (rate - w)
    largest = np.zeros(np.broadcast_shapes(there.shape, crest_s.shape))
    for times in DIP_TIMES:
        left, joined = np.exp(-w * times * crest_s), np.exp(-rate * times * crest_s)
        unshared = joined * np.exp(-rate * delay_s) - w * (left - joined) / (rate - w)
        volts = (delay_s + (1.0 - left) / w) / total + settled * left + (begun - settled) * unshared
        largest = np.maximum(largest, volts)
    return np.where(there, largest, 0.0)


def stable_conductance_s(
    source_ohm: FloatLike, source_h: FloatLike, bulk_f: FloatLike, damper_f: FloatLike, damper_ohm: FloatLike
) -> FloatArray:
    """Negative conductance (S) of constant-power loads, P/V^2, at which a bus begins to oscillate or collapses.

    Parameters
    ----------
    source_ohm, source_h : series resistance and inductance of the source
    bulk_f : capacitance whose own resistance is not counted
    damper_f, damper_ohm : damping bank, 0 F where there is none; all broadcast

    Notes
    -----
    On the limit of stability the admittance 1/(R + sL) + sC + sCd/(1 + s Rd Cd) is real at some s = j w: its
    imaginary part is a quadratic in w^2, and its real part there, or 1/R at w = 0, is what a load may take away.
    Without a damping bank this is the smaller of R C/L and 1/R. Closed form (Routh and Hurwitz at the limit).
    """
    ohm, henry, bulk, damper, lossy = np.broadcast_arrays(
        np.maximum(source_ohm, LEAST_OHM), np.maximum(source_h, LEAST_HENRY), np.maximum(bulk_f, LEAST_FARAD),
        np.asarray(damper_f, dtype=np.float64), np.asarray(damper_ohm, dtype=np.float64),
    )  # fmt: skip
    # in units of R and R/L: w L/R = x, C R^2/L = c, Rd Cd R/L = t
    c, d = bulk * ohm**2 / henry, damper * ohm**2 / henry
    t2 = np.square(lossy * damper * ohm / henry)
    square, middle, last = c * t2, t2 * (c - 1.0) + c + d, c + d - 1.0
    inside = middle * middle - 4.0 * square * last
    root = np.sqrt(np.maximum(inside, 0.0))
    half = -0.5 * (middle + np.where(middle >= 0.0, root, -root))
    least = np.ones_like(c)
    for above, below in ((last, half), (half, square)):
        crossing = np.where(np.abs(below) > 0.0, above / np.where(np.abs(below) > 0.0, below, 1.0), -1.0)
        x2 = np.where(inside >= 0.0, crossing, -1.0)
        held = np.maximum(x2, 0.0)
        share = np.where(lossy > 0.0, held * d * np.sqrt(t2) / (1.0 + held * t2), 0.0)
        least = np.where(x2 > 0.0, np.minimum(least, 1.0 / (1.0 + held) + share), least)
    return np.asarray(least / ohm)


def network_rates(
    source_ohm: FloatArray, source_h: FloatArray, bulk_f: FloatArray, bulk_ohm: FloatArray, input_f: FloatArray,
    damper_f: FloatArray, damper_ohm: FloatArray,
) -> FloatArray:  # fmt: skip
    """Rates of change of a damped bus, (..., 4, 4) 1/s, for deviations from rest.

    States: source current, bulk, damper and bus voltage, voltages counted downwards. All of one shape, above 0.
    """
    rates = np.zeros((*source_ohm.shape, 4, 4))
    rates[..., 0, 0], rates[..., 0, 3] = -source_ohm / source_h, 1.0 / source_h
    rates[..., 1, 1], rates[..., 1, 3] = -1.0 / (bulk_ohm * bulk_f), 1.0 / (bulk_ohm * bulk_f)
    rates[..., 2, 2], rates[..., 2, 3] = -1.0 / (damper_ohm * damper_f), 1.0 / (damper_ohm * damper_f)
    rates[..., 3, 0] = -1.0 / input_f
    rates[..., 3, 1], rates[..., 3, 2] = 1.0 / (bulk_ohm * input_f), 1.0 / (damper_ohm * input_f)
    rates[..., 3, 3] = -(1.0 / bulk_ohm + 1.0 / damper_ohm) / input_f
    return rates
