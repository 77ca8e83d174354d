"""Losses of one phase of a synchronous buck stage, by mechanism: forced conduction or diode emulation.

Valid for continuous, forced negative and, with emulation, pulsed inductor current, with edges and dead time
short against the period.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import NamedTuple

import numpy as np

from archopt.physics.arrays import BoolArray, FloatArray, FloatLike
from archopt.physics.buck_light_load import pulses
from archopt.physics.parameters import Gatherable
from archopt.physics.thermal import fixed_point

#: Temperature the resistances are stated at.
REFERENCE_DEGC = 25.0
#: Temperature of switches and winding when duty and ripple are computed.
WARM_DEGC = 85.0
#: Part of the input voltage that is left at least after the drop of the high side, so that duty stays finite.
LEAST_SPAN = 1e-3
LEAST_DUTY = 1e-3
#: Least relative resistance of cold switches and windings; keeps extrapolated coefficients positive.
LEAST_RESISTANCE_FACTOR = 0.2
#: Least exponent of the swing in the core loss of one pulse; keeps odd pairs of Steinmetz exponents finite.
LEAST_PULSE_EXPONENT = 0.5
TINY = 1e-30


@dataclass(frozen=True, slots=True)
class BuckParameters(Gatherable):
    """One phase of each buck stage; every field broadcasts against the operating point.

    core_w is the core loss at the stage's own frequency and a ripple of core_ripple_a peak to peak;
    core_exponent and core_frequency_exponent are Steinmetz exponents of swing and frequency;
    switch_per_k and winding_per_k are relative to the resistance at 25 degC; dead_s is both edges of a cycle;
    gate_from_input is 1 where the gate supply is derived from the stage input, gate_from_output 1 where it is
    the stage's own output, both 0 with a separate bias; the output charges are stated at output_charge_v,
    recovery_c at recovery_a; emulation is 1 where the low side stops at zero current, 0 in forced conduction;
    fold_floor_hz is the lowest frequency its pulses fold to; thermal_k_per_w holds at the air speed of the
    study. max_duty, min_on_s and min_off_s are carried for the limits.
    """

    frequency_hz: FloatArray
    inductance_h: FloatArray
    winding_ohm: FloatArray
    core_w: FloatArray
    core_ripple_a: FloatArray
    core_exponent: FloatArray
    core_frequency_exponent: FloatArray
    high_side_ohm: FloatArray
    low_side_ohm: FloatArray
    switch_per_k: FloatArray
    winding_per_k: FloatArray
    rise_s: FloatArray
    fall_s: FloatArray
    dead_s: FloatArray
    diode_v: FloatArray
    high_side_gate_c: FloatArray
    low_side_gate_c: FloatArray
    gate_v: FloatArray
    gate_from_input: FloatArray
    gate_from_output: FloatArray
    high_side_output_c: FloatArray
    low_side_output_c: FloatArray
    output_charge_v: FloatArray
    recovery_c: FloatArray
    recovery_a: FloatArray
    input_capacitor_ohm: FloatArray
    quiescent_a: FloatArray
    emulation: FloatArray
    fold_floor_hz: FloatArray
    thermal_k_per_w: FloatArray
    max_duty: FloatArray
    min_on_s: FloatArray
    min_off_s: FloatArray


MECHANISMS = (
    "high_side_conduction_w",
    "low_side_conduction_w",
    "winding_w",
    "core_w",
    "overlap_w",
    "dead_time_w",
    "output_charge_w",
    "recovery_w",
    "input_capacitor_w",
    "gate_w",
    "controller_w",
)


@dataclass(frozen=True, slots=True)
class BuckLosses:
    """Watts per phase by mechanism, in the broadcast shape of the operating point (some are read-only views).

    The fields named in MECHANISMS come from the stage input; bias_w is what the separate bias supply delivers
    besides. duty is what the operating point asks for and may exceed 1; on_s follows it. ripple_a is the swing
    of the inductor current, peak to peak. thermal_gain of 1 or more is thermal runaway; losses are then those of
    a gain of 0.95.
    """

    high_side_conduction_w: FloatArray
    low_side_conduction_w: FloatArray
    winding_w: FloatArray
    core_w: FloatArray
    overlap_w: FloatArray
    dead_time_w: FloatArray
    output_charge_w: FloatArray
    recovery_w: FloatArray
    input_capacitor_w: FloatArray
    gate_w: FloatArray
    controller_w: FloatArray
    bias_w: FloatArray
    duty: FloatArray
    ripple_a: FloatArray
    on_s: FloatArray
    temperature_degc: FloatArray
    thermal_gain: FloatArray

    @property
    def total_w(self) -> FloatArray:
        """Sum of what the stage input delivers (W), without the separate bias."""
        total = self.high_side_conduction_w + self.low_side_conduction_w
        for name in MECHANISMS[2:]:
            total = total + getattr(self, name)
        return total


def _duty_and_off_voltage(
    p: BuckParameters, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike
) -> tuple[FloatArray, FloatArray]:
    """Duty asked for and the voltage across the inductance while the low side conducts (V), warm."""
    warm_switch = 1.0 + p.switch_per_k * (WARM_DEGC - REFERENCE_DEGC)
    warm_winding = 1.0 + p.winding_per_k * (WARM_DEGC - REFERENCE_DEGC)
    low_ohm = p.low_side_ohm * warm_switch
    off_v = output_v + current_a * (low_ohm + p.winding_ohm * warm_winding)
    span_v = input_v + current_a * (low_ohm - p.high_side_ohm * warm_switch)
    asked = np.maximum(off_v, 0.0) / np.maximum(span_v, LEAST_SPAN * np.asarray(input_v))
    return asked, off_v


def duty(p: BuckParameters, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike) -> FloatArray:
    """Duty the operating point asks for, with resistive drops at 85 degC; above 1 where the input is too low.

    Parameters
    ----------
    p : parameters per phase
    input_v, output_v : stage input (above 0) and output voltage (V)
    current_a : output current of one phase (A); all broadcast

    Notes
    -----
    Volt-second balance: D (Vin - I Rhigh - Vo - I Rw) = (1 - D)(Vo + I (Rlow + Rw)), so
    D = (Vo + I (Rlow + Rw)) / (Vin + I (Rlow - Rhigh)). Closed form; the application note RC5051 AN50 p. 9
    has the same with a diode for the low side.
    """
    return _duty_and_off_voltage(p, input_v, output_v, current_a)[0]


def ripple_a(p: BuckParameters, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike) -> FloatArray:
    """Peak-to-peak inductor ripple (A) per phase in continuous conduction; 0 where the duty reaches 1.

    Parameters as for :func:`duty`. In emulation the swing of a pulse is at most this.

    Notes
    -----
    (Vo + I (Rlow + Rw)) (1 - D) / (L f): the falling slope over the off-time. Closed form.
    """
    asked, off_v = _duty_and_off_voltage(p, input_v, output_v, current_a)
    off_share = 1.0 - np.clip(asked, LEAST_DUTY, 1.0)
    return np.maximum(off_v, 0.0) * off_share / (p.inductance_h * p.frequency_hz)


def ripple_square_a2(
    p: BuckParameters, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike
) -> FloatArray:
    """Mean square (A^2) of the current one phase sends into the output capacitor. Parameters as for :func:`duty`.

    Notes
    -----
    Mean square of the inductor current less the square of its mean: ripple^2 / 12 in continuous conduction, more
    in emulation, where the current comes in pulses. Closed form.
    """
    return ripple_square_at(operating_point(p, input_v, output_v, current_a))


def ripple_square_at(at: Point) -> FloatArray:
    """Mean square (A^2) of :func:`ripple_square_a2` at an operating point."""
    square: FloatArray = np.maximum(at.rms_square - at.current_a * at.current_a, 0.0)
    return square


def thermal_gain(
    p: BuckParameters, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike
) -> FloatArray:
    """Rise of one phase's loss per kelvin times its thermal resistance; 1 or more is thermal runaway.

    Parameters as for :func:`duty`. The same number :func:`losses` reports, without the losses.
    """
    return thermal_gain_at(p, operating_point(p, input_v, output_v, current_a))


def thermal_gain_at(p: BuckParameters, at: Point) -> FloatArray:
    """Gain of :func:`thermal_gain` at an operating point."""
    high_w, low_w, winding_w = _conduction(p, at)
    gain: FloatArray = p.thermal_k_per_w * (p.switch_per_k * (high_w + low_w) + p.winding_per_k * winding_w)
    return gain


def output_charge_energy_j(
    high_side_c: FloatLike, low_side_c: FloatLike, charge_v: FloatLike, input_v: FloatLike
) -> FloatArray:
    """Energy lost a cycle (J) when the high side turns on hard into both output capacitances.

    Parameters
    ----------
    high_side_c, low_side_c : output charge of the switches (C) at charge_v
    charge_v, input_v : voltage of the statement and of the stage input (V); all broadcast

    Notes
    -----
    The input delivers V Qlow(V), of which Elow(V) is stored; the high side burns Ehigh(V):
    V Qlow + Ehigh - Elow. With charge growing as the root of voltage, Q(v) = Q0 sqrt(v / v0), the stored
    energy, the integral of v dQ, is Q V / 3, and the sum V (2 Qlow + Qhigh) / 3. Closed form.
    """
    root = np.sqrt(input_v / np.maximum(charge_v, TINY))
    energy: FloatArray = np.asarray(input_v) * root * ((2.0 * low_side_c + high_side_c) * (1.0 / 3.0))
    return energy


def hard_switched_share(p: BuckParameters, input_v: FloatLike, valley_a: FloatLike) -> FloatArray:
    """Share (0 to 1) of the output-charge loss that remains at a valley current (A, negative where reversed).

    A reversed valley current swings the switch node during one dead time (half of dead_s), moving the charge
    |valley| dead/2 of the total; what is left to be switched hard is a voltage smaller in proportion, and the
    loss of a linear capacitance falls with its square. Continuous through zero valley current. Closed form.
    """
    root = np.sqrt(input_v / np.maximum(p.output_charge_v, TINY))
    charge_c = np.maximum((p.high_side_output_c + p.low_side_output_c) * root, TINY)
    moved_c = np.maximum(-np.asarray(valley_a), 0.0) * (0.5 * p.dead_s)
    left = np.maximum(1.0 - np.minimum(moved_c / charge_c, 1.0), 0.0)
    share: FloatArray = left * left
    return share


class Point(NamedTuple):
    """Inductor current of one operating point: duty within its bounds, swing and what follows from it; see
    :func:`operating_point`.
    """

    input_v: FloatArray
    output_v: FloatArray
    current_a: FloatArray
    asked: FloatArray
    duty: FloatArray  # share of the conducting time that the high side conducts
    ripple_a: FloatArray  # in continuous conduction
    stopped: BoolArray  # where the current comes in pulses
    swing_share: FloatArray  # swing of a pulse over that ripple; 1 unless the low side has stopped
    frequency_share: FloatArray  # pulses a second over the stage's frequency
    frequency_hz: FloatArray
    valley_a: FloatArray
    carried_a: FloatArray  # the valley current where it is not reversed
    peak_a: FloatArray
    rms_square: FloatArray


def operating_point(p: BuckParameters, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike) -> Point:
    """Inductor current of one phase, from which losses, ripple and thermal gain follow. Parameters as for :func:`duty`.
    """
    current = np.asarray(current_a, dtype=np.float64)
    asked, off_v = _duty_and_off_voltage(p, input_v, output_v, current_a)
    d = np.clip(asked, LEAST_DUTY, 1.0)
    ripple = np.maximum(off_v, 0.0) * (1.0 - d) / (p.inductance_h * p.frequency_hz)
    half = 0.5 * ripple
    valley, peak = current - half, np.maximum(current + half, 0.0)
    rms_square = current * current + ripple * ripple * (1.0 / 12.0)
    swing_share = frequency_share = np.ones(())
    stopped: BoolArray = np.zeros((), dtype=bool)
    if np.any(p.emulation):
        pulse = pulses(p.emulation, p.fold_floor_hz, p.frequency_hz, current, ripple)
        stopped, swing_share, frequency_share = pulse.stopped, pulse.swing_share, pulse.frequency_share
        swing = ripple * swing_share
        valley = np.where(stopped, 0.0, valley)
        peak = np.where(stopped, swing, peak)
        rms_square = np.where(stopped, pulse.conducting_share * swing * swing * (1.0 / 3.0), rms_square)
    return Point(
        np.asarray(input_v, dtype=np.float64),
        np.asarray(output_v, dtype=np.float64),
        current,
        asked,
        d,
        ripple,
        stopped,
        swing_share,
        frequency_share,
        p.frequency_hz * frequency_share,
        valley,
        np.maximum(valley, 0.0),
        peak,
        rms_square,
    )


def _conduction(p: BuckParameters, at: Point) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Loss (W) of high side, low side and winding at 25 degC."""
    # the dead time is a larger part of a shorter pulse
    dead_share = p.dead_s * p.frequency_hz / np.maximum(at.swing_share, TINY)
    off_share = np.maximum(1.0 - at.duty - dead_share, 0.0)
    high_w = p.high_side_ohm * at.duty * at.rms_square
    return high_w, p.low_side_ohm * off_share * at.rms_square, p.winding_ohm * at.rms_square


def _constant(p: BuckParameters, at: Point) -> tuple[FloatArray, ...]:
    """Losses (W) that do not depend on temperature, in the order of MECHANISMS from core_w, then bias_w."""
    v, frequency = at.input_v, at.frequency_hz
    vf = v * frequency
    charge_j = output_charge_energy_j(p.high_side_output_c, p.low_side_output_c, p.output_charge_v, v)
    gate_c = p.high_side_gate_c + p.low_side_gate_c
    supply_v = p.gate_from_input * v + p.gate_from_output * at.output_v
    pulse_exponent = np.maximum(p.core_exponent - p.core_frequency_exponent + 1.0, LEAST_PULSE_EXPONENT)
    return (
        p.core_w * (at.ripple_a / np.maximum(p.core_ripple_a, TINY)) ** p.core_exponent
        * at.frequency_share * at.swing_share**pulse_exponent,
        vf * (0.5 * p.rise_s * at.carried_a + 0.5 * p.fall_s * at.peak_a),
        0.5 * p.diode_v * p.dead_s * frequency * (np.abs(at.valley_a) + at.peak_a),
        frequency * charge_j * hard_switched_share(p, v, at.valley_a),
        vf * (p.recovery_c / np.maximum(p.recovery_a, TINY)) * at.carried_a,
        p.input_capacitor_ohm * at.duty * np.maximum(at.rms_square - at.duty * at.current_a * at.current_a, 0.0),
        frequency * gate_c * supply_v,
        p.quiescent_a * v,
        (1.0 - p.gate_from_input - p.gate_from_output) * gate_c * p.gate_v * frequency,
    )  # fmt: skip


def losses(
    p: BuckParameters,
    input_v: FloatLike,
    output_v: FloatLike,
    current_a: FloatLike,
    ambient_degc: FloatLike,
) -> BuckLosses:
    """Losses of one phase, with switches and winding at their own temperature.

    Finite on every finite input with input_v above 0. All heat of the phase counts against thermal_k_per_w,
    the gate power of a separate bias included. A gate supply from the stage's own output draws the gate charge
    at the output voltage; what those milliamperes cost on their way through the stage is neglected.

    Parameters
    ----------
    p : parameters per phase
    input_v, output_v : stage input (above 0) and output voltage (V)
    current_a : output current of one phase (A), not negative
    ambient_degc : local air (degC); all broadcast

    Notes
    -----
    rms^2 = I^2 + ripple^2 / 12; overlap V f (t_rise max(valley, 0) + t_fall peak) / 2; dead time
    Vd f dead (|valley| + peak) / 2; recovery V f Q max(valley, 0) / rated; core by the power of ripple that
    Steinmetz found (1892); input capacitor D (1 - D) I^2 + D ripple^2 / 12. Textbook forms, checked against
    SNVS276G p. 26 and two ROHM notes. In emulation below zero valley current (see buck_light_load) the valley
    is 0, a pulse swings by p during the share c of the time, rms^2 = c p^2 / 3, and everything that is lost per
    cycle is lost as often as there are pulses. The output charge is then that of a node at 0 V: the ringing
    of the idle node is not followed.
    """
    at = operating_point(p, input_v, output_v, current_a)
    high_w, low_w, winding_w = _conduction(p, at)
    constant = _constant(p, at)
    switch_w = high_w + low_w
    at_reference = switch_w + winding_w
    for loss_w in constant:
        at_reference = at_reference + loss_w
    per_k = p.switch_per_k * switch_w + p.winding_per_k * winding_w
    _, temperature, gain = fixed_point(
        at_reference,
        at_reference + per_k,
        REFERENCE_DEGC,
        REFERENCE_DEGC + 1.0,
        ambient_degc,
        p.thermal_k_per_w,
    )
    rise_k = temperature - REFERENCE_DEGC
    switch_factor = np.maximum(1.0 + p.switch_per_k * rise_k, LEAST_RESISTANCE_FACTOR)
    winding_factor = np.maximum(1.0 + p.winding_per_k * rise_k, LEAST_RESISTANCE_FACTOR)
    conduction = (high_w * switch_factor, low_w * switch_factor, winding_w * winding_factor)
    on_s = at.asked * at.swing_share / p.frequency_hz
    state = (at.asked, at.ripple_a * at.swing_share, on_s, temperature, gain)
    shape = np.shape(temperature)
    return BuckLosses(*(np.broadcast_to(result, shape) for result in (*conduction, *constant, *state)))
