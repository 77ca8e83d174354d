"""Stability of a bus that feeds constant-power loads through a source resistance and inductance.

A stage that holds its output draws less current at more voltage: to small signals the resistance -V^2/P.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from archopt.physics.arrays import FloatArray, FloatLike
from archopt.physics.bus_network import network_rates

#: Least resistance (ohm) and voltage (V) that count; keep results finite.
LEAST_OHM = 1e-9
LEAST_V = 1e-3
LEAST_POWER_W = 1e-9
LEAST_HENRY = 1e-12
LEAST_FARAD = 1e-12
PEAK_SAMPLES = 24


def least_capacitance_f(
    source_ohm: FloatLike, source_h: FloatLike, power_w: FloatLike, bus_v: FloatLike
) -> FloatArray:
    """Bus capacitance (F) above which the bus is stable, where the source resistance is below V^2/P.

    Parameters
    ----------
    source_ohm, source_h : series resistance (ohm) and inductance (H) of the source
    power_w : constant power drawn (W)
    bus_v : bus voltage (V); all broadcast

    Notes
    -----
    L di/dt = Vs - R i - v, C dv/dt = i - P/v. The trace of the linearised system, -R/L + P/(C V^2), must be
    negative: C > L P / (R V^2). Closed form.
    """
    voltage = np.maximum(bus_v, LEAST_V)
    capacitance: FloatArray = source_h * power_w / (np.maximum(source_ohm, LEAST_OHM) * voltage * voltage)
    return capacitance


def resistance_limit_ohm(power_w: FloatLike, bus_v: FloatLike) -> FloatArray:
    """Source resistance (ohm) below which the bus is stable: V^2/P. Closed form (the determinant).

    Parameters
    ----------
    power_w : constant power drawn (W)
    bus_v : bus voltage (V); both broadcast
    """
    return np.square(bus_v) / np.maximum(power_w, LEAST_POWER_W)


def deliverable_power_w(source_v: FloatLike, source_ohm: FloatLike) -> FloatArray:
    """Most power (W) a source (V) can push through a series resistance (ohm): Vs^2/(4 R). Closed form."""
    return np.square(source_v) / (4.0 * np.maximum(source_ohm, LEAST_OHM))


def regulated_source_h(output_ohm: FloatLike, bandwidth_hz: FloatLike) -> FloatArray:
    """Inductance (H) a regulated source of an output impedance (ohm) shows above its bandwidth (Hz).

    R/(2 pi bandwidth): the loop holds the impedance up to its crossover, beyond it rises with frequency.
    """
    inductance: FloatArray = output_ohm / (2.0 * np.pi * np.maximum(bandwidth_hz, LEAST_POWER_W))
    return inductance


def damped_peak(ratio: FloatLike) -> FloatArray:
    """Peak output impedance of an L-C filter over its characteristic impedance, best damped in parallel.

    Parameters
    ----------
    ratio : capacitance of the damping branch over the filter's, above 0; any shape

    Notes
    -----
    sqrt(2 (2 + n)) / n with the damping resistor chosen for the least peak (textbook, from memory; a minimax
    search over the resistor agrees).
    """
    n = np.maximum(ratio, LEAST_OHM)
    peak: FloatArray = np.sqrt(2.0 * (2.0 + n)) / n
    return peak


def bank_impedance_ohm(
    frequency_hz: FloatLike, bulk_f: FloatLike, bulk_esr_ohm: FloatLike, input_f: FloatLike
) -> NDArray[np.complex128]:
    """Impedance (ohm, complex) of a bulk bank with ESR beside capacitance without resistance.

    Parameters
    ----------
    frequency_hz : where it is asked for, above 0
    bulk_f, bulk_esr_ohm : bulk bank (F, ohm)
    input_f : capacitance beside it (F); all broadcast
    """
    s = 2j * np.pi * np.asarray(frequency_hz)
    bulk = bulk_esr_ohm + 1.0 / (s * np.maximum(bulk_f, LEAST_FARAD))
    return np.asarray(1.0 / (1.0 / bulk + s * np.asarray(input_f)))


def output_peak_ohm(
    source_ohm: FloatLike, source_h: FloatLike, bulk_f: FloatLike, bulk_esr_ohm: FloatLike, input_f: FloatLike,
    damper_f: FloatLike = 0.0, damper_ohm: FloatLike = 0.0,
) -> FloatArray:  # fmt: skip
    """Largest impedance (ohm) over frequency that a bus shows its loads: source, banks and stage inputs.

    Parameters
    ----------
    source_ohm, source_h : series resistance (ohm) and inductance (H) of the source
    bulk_f, bulk_esr_ohm, input_f : as for :func:`bank_impedance_ohm`
    damper_f, damper_ohm : a damping bank beside them, 0 F where there is none; all broadcast

    Notes
    -----
    Read where the circuit's modes ring, at a tenth of the resonance of the source's inductance with all of the
    capacitance to ten times that with the stages' alone (where a bulk bank of large ESR leaves the stages to
    ring), and at direct current, where it is R. The bulk bank's own ESR damps it, and the damping bank.
    """
    ohm, henry, bulk, esr, beside, damper, lossy = np.broadcast_arrays(
        np.maximum(source_ohm, LEAST_OHM), np.maximum(source_h, LEAST_HENRY), np.maximum(bulk_f, LEAST_FARAD),
        np.maximum(bulk_esr_ohm, LEAST_OHM), np.maximum(input_f, LEAST_FARAD), np.asarray(damper_f),
        np.maximum(damper_ohm, LEAST_OHM),
    )  # fmt: skip
    found = damper > 0.0
    if not found.any():
        return _undamped_peak_ohm(ohm, henry, bulk, esr, beside)
    out = np.empty(ohm.shape)
    out[~found] = _undamped_peak_ohm(*(values[~found] for values in (ohm, henry, bulk, esr, beside)))
    out[found] = _damped_peak_ohm(*(values[found] for values in (ohm, henry, bulk, esr, beside, damper, lossy)))
    return out


def _damped_peak_ohm(
    ohm: FloatArray, henry: FloatArray, bulk: FloatArray, esr: FloatArray, beside: FloatArray, damper: FloatArray,
    lossy: FloatArray,
) -> FloatArray:  # fmt: skip
    """Largest impedance (ohm) of a bus with a damping bank, (N,)."""
    rates = network_rates(ohm, henry, bulk, esr, beside, damper, lossy)
    low = 0.1 / np.sqrt(henry * (bulk + beside + damper))
    high = 10.0 / np.sqrt(henry * np.maximum(beside, 0.03 * np.minimum(bulk, damper)))
    share = np.linspace(0.0, 1.0, 2 * PEAK_SAMPLES)

    def impedance(w: FloatArray) -> FloatArray:
        bank = bank_impedance_ohm(w / (2.0 * np.pi), bulk[:, None], esr[:, None], beside[:, None])
        source = ohm[:, None] + 1j * w * henry[:, None]
        branch = lossy[:, None] + 1.0 / (1j * w * damper[:, None])
        return np.abs(1.0 / (1.0 / bank + 1.0 / source + 1.0 / branch))

    swept = low[:, None] * (high / low)[:, None] ** share
    ringing = np.maximum(np.abs(np.linalg.eigvals(rates).imag), low[:, None])
    w = np.concatenate([swept, ringing], axis=1)
    at_peak = np.take_along_axis(w, impedance(w).argmax(axis=1)[:, None], axis=1)
    step = (high / low)[:, None] ** (share[1] - share[0])
    near = at_peak / step * step ** (2.0 * share)  # a second, closer look around the highest
    return np.asarray(np.maximum(np.maximum(impedance(w).max(axis=1), impedance(near).max(axis=1)), ohm))


def _undamped_peak_ohm(
    ohm: FloatArray, henry: FloatArray, bulk: FloatArray, esr: FloatArray, beside: FloatArray
) -> FloatArray:
    """Largest impedance (ohm) of a bus without a damping bank, any shape."""
    low = 0.1 / np.sqrt(henry * (bulk + beside))
    high = 10.0 / np.sqrt(henry * np.maximum(beside, 0.03 * bulk))
    swept = low[..., None] * (high / low)[..., None] ** np.linspace(0.0, 1.0, PEAK_SAMPLES)
    # 1/Z = 0 is a cubic in s; where two of its roots are a pair the peak lies at their frequency
    square = beside * bulk * esr * henry
    companion = np.zeros((*ohm.shape, 3, 3))
    companion[..., 0, 0] = -(henry * (bulk + beside) + beside * bulk * esr * ohm) / square
    companion[..., 0, 1] = -(ohm * (bulk + beside) + bulk * esr) / square
    companion[..., 0, 2] = -1.0 / square
    companion[..., 1, 0] = companion[..., 2, 1] = 1.0
    ringing = np.maximum(np.abs(np.linalg.eigvals(companion).imag), low[..., None])
    hertz = np.concatenate([swept, ringing], axis=-1) / (2.0 * np.pi)
    bank = bank_impedance_ohm(hertz, bulk[..., None], esr[..., None], beside[..., None])
    source = ohm[..., None] + 2j * np.pi * hertz * henry[..., None]
    peak: FloatArray = np.maximum(np.abs(bank * source / (bank + source)).max(axis=-1), ohm)
    return peak


def impedance_margin_db(peak_ohm: FloatLike, power_w: FloatLike, bus_v: FloatLike) -> FloatArray:
    """Margin (dB) of an impedance below the loads' negative input resistance V^2/P: 20 log10 of the ratio.

    Above 0 dB at every frequency the product of source impedance and load admittance stays inside the unit
    circle, so that no phase can make it unstable (Middlebrook's criterion).

    Parameters
    ----------
    peak_ohm : largest impedance of the source over frequency (ohm)
    power_w : constant power drawn (W)
    bus_v : bus voltage (V); all broadcast
    """
    ratio = resistance_limit_ohm(power_w, bus_v) / np.maximum(peak_ohm, LEAST_OHM)
    return np.asarray(20.0 * np.log10(np.maximum(ratio, LEAST_OHM)))
