"""Losses of one stage and one converter at one operating point, from the equations, in plain numbers.

Written from the equations of the design, straight from catalogue rows; nothing of the vectorised model is used.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

from archopt.inputs.parts import BuckStage, BusConverter, Inductor, LinearRegulator, Part, SingleStage

WARM_RISE_K = 60.0  # duty and ripple are those of parts at 85 degC, resistances are stated at 25 degC
COPPER_PER_K = 0.00393


@dataclass(frozen=True)
class Point:
    """One phase or unit: what its input loses, what a separate bias delivers, ripple, duty, temperature.

    square_a2: mean square of what one phase sends into the output bank; reach: load over that of zero valley.
    ripple_a: peak to peak where current never stops; pulse_a, pulse_s: height and length of a pulse where it does.
    """

    loss_w: float
    bias_w: float = 0.0
    square_a2: float = 0.0
    reach: float = 1.0
    duty: float = 0.0
    temperature_degc: float = 0.0
    ripple_a: float = 0.0
    pulse_a: float = 0.0
    pulse_s: float = 0.0


def thermal_k_per_w(row: Part, air_m_s: float) -> float:
    """Return thermal resistance at another air speed: heat transfer grows with the root of speed."""
    stated = max(row.air_speed_m_s, 0.2)
    return float(row.thermal_k_per_w) * math.sqrt(stated / max(air_m_s, 0.2))


def settle(cold_w: float, per_k: float, ambient: float, k_per_w: float) -> float:
    """Return the temperature where loss cold_w + per_k (T - 25) balances the heat removed; gain held at 0.95."""
    gain = min(per_k * k_per_w, 0.95)
    return ambient + k_per_w * (cold_w + per_k * (ambient - 25.0)) / (1.0 - gain)


def buck_phase(
    row: BuckStage, coil: Inductor, vin: float, vout: float, amps: float, ambient: float, air_m_s: float
) -> Point:
    """Return the losses of one phase, in forced conduction or with pulses that stop at zero current."""
    f = row.frequency_khz * 1e3
    henry = coil.inductance_nh * 1e-9
    high, low, winding = row.high_side_mohm * 1e-3, row.low_side_mohm * 1e-3, coil.winding_mohm * 1e-3
    hot_switch = 1.0 + row.resistance_per_k * WARM_RISE_K
    hot_winding = 1.0 + COPPER_PER_K * WARM_RISE_K
    across_off = vout + amps * (low * hot_switch + winding * hot_winding)
    asked = across_off / max(vin + amps * (low - high) * hot_switch, 1e-3 * vin)
    d = min(max(asked, 1e-3), 1.0)
    ripple = across_off * (1.0 - d) / (henry * f)
    valley, peak = amps - ripple / 2.0, max(amps + ripple / 2.0, 0.0)
    rms2 = amps**2 + ripple**2 / 12.0
    reach, high_pulse, often = 1.0, 1.0, 1.0
    if row.light_load == "emulation" and ripple > 0.0 and valley < 0.0:
        reach = amps / (ripple / 2.0)
        often = max(reach, row.fold_floor_khz / row.frequency_khz)
        high_pulse = math.sqrt(reach / often) if often > 0.0 else 0.0
        valley, peak = 0.0, ripple * high_pulse
        rms2 = often * high_pulse * peak**2 / 3.0  # triangles from zero, that share of the time
    pulse_hz = f * often
    dead = row.dead_time_ns * 1e-9
    conduction = high * d * rms2 + low * max(1.0 - d - dead * f / max(high_pulse, 1e-30), 0.0) * rms2
    copper = winding * rms2
    core = coil.core_loss_mw * 1e-3
    core *= (row.frequency_khz / coil.core_frequency_khz) ** coil.core_frequency_exponent
    core *= (ripple / coil.core_ripple_a) ** coil.core_ripple_exponent
    # a pulse of less height is shorter: the same slopes, so energy goes with height to b - a + 1
    core *= often * high_pulse ** max(coil.core_ripple_exponent - coil.core_frequency_exponent + 1.0, 0.5)
    overlap = 0.5 * vin * pulse_hz * 1e-9 * (row.edge_rise_ns * max(valley, 0.0) + row.edge_fall_ns * peak)
    diode = row.diode_v * pulse_hz * (dead / 2.0) * (abs(valley) + peak)
    # charge grows as the root of voltage: V Qlow + Ehigh - Elow with E = Q V / 3
    root = math.sqrt(vin / row.output_charge_at_v)
    q_high, q_low = row.high_side_output_nc * 1e-9 * root, row.low_side_output_nc * 1e-9 * root
    output = pulse_hz * (vin * q_low + q_high * vin / 3.0 - q_low * vin / 3.0)
    if valley < 0.0:
        moved = -valley * dead / 2.0
        total = q_high + q_low
        output *= max(1.0 - moved / total, 0.0) ** 2 if total > 1e-30 else 0.0
    recovery = vin * pulse_hz * row.recovery_nc * 1e-9 * max(valley, 0.0) / row.phase_current_a
    own_input = row.input_capacitor_mohm * 1e-3 * (d * rms2 - (d * amps) ** 2)
    gate_c = (row.high_side_gate_nc + row.low_side_gate_nc) * 1e-9
    gate = gate_c * pulse_hz * {"input": vin, "output": vout, "bias": 0.0}[row.gate_supply]
    bias = gate_c * row.gate_v * pulse_hz if row.gate_supply == "bias" else 0.0
    controller = row.quiescent_ma * 1e-3 * vin
    steady = core + overlap + diode + output + recovery + own_input + gate + controller
    per_k = row.resistance_per_k * conduction + COPPER_PER_K * copper
    k_per_w = thermal_k_per_w(row, air_m_s)
    degc = settle(conduction + copper + steady + bias, per_k, ambient, k_per_w)
    loss = steady + conduction * max(1.0 + row.resistance_per_k * (degc - 25.0), 0.2)
    loss += copper * max(1.0 + COPPER_PER_K * (degc - 25.0), 0.2)
    stopped = (peak, high_pulse / f) if reach < 1.0 else (0.0, 0.0)
    return Point(loss, bias, rms2 - amps**2, reach, asked, degc, ripple, *stopped)


def converter_unit(
    row: BusConverter | SingleStage, vin: float, vout: float, amps: float, ambient: float, air_m_s: float
) -> Point:
    """Return the losses of one unit between the board input and a bus, or a rail."""
    moving = row.switching_w * (vin / row.input_nominal_v) ** row.input_exponent
    moving *= (vout / row.output_nominal_v) ** row.output_exponent
    straight = row.linear_w_per_a * amps
    square = row.resistance_mohm * 1e-3 * amps**2
    cold = row.fixed_w + moving + straight + square
    degc = settle(cold, row.resistance_per_k * square, ambient, thermal_k_per_w(row, air_m_s))
    loss = row.fixed_w + moving + straight
    loss += square * max(1.0 + row.resistance_per_k * (degc - 25.0), 0.2)
    ripple = duty = 0.0
    if isinstance(row, SingleStage):
        turns = row.transformer_ratio
        ratio = min(max(vout * turns / vin, 0.0), 1.0)
        ripple = vout * (1.0 - ratio) / (row.inductance_nh * 1e-9 * row.frequency_khz * 1e3)
        duty = (vout + amps * row.resistance_mohm * 1e-3) * turns / vin
    return Point(loss, square_a2=ripple**2 / 12.0, duty=duty, temperature_degc=degc, ripple_a=ripple)


def linear_unit(row: LinearRegulator, vin: float, vout: float, amps: float, ambient: float, air_m_s: float) -> Point:
    """Return the loss of a linear regulator."""
    loss = max(vin - vout, 0.0) * amps + row.quiescent_ma * 1e-3 * vin
    return Point(loss, temperature_degc=ambient + thermal_k_per_w(row, air_m_s) * loss)
