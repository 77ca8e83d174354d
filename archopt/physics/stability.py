"""Stability of a bus that feeds constant-power loads through a source resistance and inductance.

A stage that holds its output draws less current at more voltage: to small signals the resistance -V^2/P.
"""

from __future__ import annotations

import numpy as np

from archopt.physics.arrays import FloatArray, FloatLike

#: Least resistance (ohm) and voltage (V) that count; keep results finite.
LEAST_OHM = 1e-9
LEAST_V = 1e-3
LEAST_POWER_W = 1e-9


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
