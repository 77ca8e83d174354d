"""Losses of a converter from the board input to an intermediate bus, or straight to a rail, by mechanism."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.physics.arrays import FloatArray, FloatLike
from archopt.physics.parameters import Gatherable
from archopt.physics.thermal import fixed_point

#: Temperature the resistance is stated at.
REFERENCE_DEGC = 25.0
#: Range of voltage over its nominal value in which the power laws are followed; keeps them finite.
RATIO_RANGE = (1e-2, 1e2)
#: Least relative resistance of a cold converter; keeps extrapolated coefficients positive.
LEAST_RESISTANCE_FACTOR = 0.2


@dataclass(frozen=True, slots=True)
class ConverterParameters(Gatherable):
    """One unit of each converter; every field broadcasts against the operating point.

    fixed_w depends on nothing; switching_w is the magnetics and switching loss at both nominal voltages;
    resistance_ohm is referred to the output, at 25 degC, and rises by resistance_per_k a kelvin;
    thermal_k_per_w holds at the air speed of the study.
    """

    fixed_w: FloatArray
    switching_w: FloatArray
    input_exponent: FloatArray
    output_exponent: FloatArray
    input_nominal_v: FloatArray
    output_nominal_v: FloatArray
    linear_w_per_a: FloatArray
    resistance_ohm: FloatArray
    resistance_per_k: FloatArray
    thermal_k_per_w: FloatArray


MECHANISMS = ("fixed_w", "switching_w", "linear_w", "resistive_w")


@dataclass(frozen=True, slots=True)
class ConverterLosses:
    """Watts per unit by mechanism, in the broadcast shape of the operating point (some are read-only views).

    measured_w stands instead of all mechanisms where a unit's loss is read from a measured table; None where no
    unit's is. thermal_gain of 1 or more is thermal runaway; losses are then those of a gain of 0.95.
    """

    fixed_w: FloatArray
    switching_w: FloatArray
    linear_w: FloatArray
    resistive_w: FloatArray
    temperature_degc: FloatArray
    thermal_gain: FloatArray
    measured_w: FloatArray | None = None

    @property
    def total_w(self) -> FloatArray:
        """Sum of all mechanisms (W)."""
        sum_w = self.fixed_w + self.switching_w + self.linear_w + self.resistive_w
        return sum_w if self.measured_w is None else sum_w + self.measured_w


def thermal_gain(p: ConverterParameters, current_a: FloatLike) -> FloatArray:
    """Rise of one unit's loss per kelvin times its thermal resistance at a current (A); 1 or more is runaway."""
    square = np.square(np.asarray(current_a, dtype=np.float64))
    gain: FloatArray = p.thermal_k_per_w * p.resistance_per_k * p.resistance_ohm * square
    return gain


def losses(
    p: ConverterParameters,
    input_v: FloatLike,
    output_v: FloatLike,
    current_a: FloatLike,
    ambient_degc: FloatLike,
) -> ConverterLosses:
    """Losses of one unit, with the resistive part at its own temperature.

    Parameters
    ----------
    p : parameters per unit
    input_v, output_v : terminal voltages (V), above 0
    current_a : output current of one unit (A), not negative
    ambient_degc : local air (degC); all broadcast

    Notes
    -----
    fixed + switching (Vin/Vin0)^a (Vo/Vo0)^b + k I + R I^2 (1 + alpha (T - 25)), T the fixed point of local
    air + thermal resistance x loss. The polynomial in current is the usual description of a converter's
    measured losses (common practice); the exponents say how its magnetics see the voltages.
    """
    i = np.asarray(current_a)
    input_ratio = np.clip(input_v / p.input_nominal_v, *RATIO_RANGE)
    output_ratio = np.clip(output_v / p.output_nominal_v, *RATIO_RANGE)
    switching_w = p.switching_w * input_ratio**p.input_exponent * output_ratio**p.output_exponent
    linear_w = p.linear_w_per_a * i
    resistive_w = p.resistance_ohm * i * i
    at_reference = p.fixed_w + switching_w + linear_w + resistive_w
    _, temperature, gain = fixed_point(
        at_reference,
        at_reference + p.resistance_per_k * resistive_w,
        REFERENCE_DEGC,
        REFERENCE_DEGC + 1.0,
        ambient_degc,
        p.thermal_k_per_w,
    )
    factor = np.maximum(1.0 + p.resistance_per_k * (temperature - REFERENCE_DEGC), LEAST_RESISTANCE_FACTOR)
    results = (p.fixed_w, switching_w, linear_w, resistive_w * factor, temperature, gain)
    shape = np.shape(temperature)
    return ConverterLosses(*(np.broadcast_to(result, shape) for result in results))
