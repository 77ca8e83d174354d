"""Losses and headroom of a linear regulator."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.physics.arrays import FloatArray, FloatLike
from archopt.physics.parameters import Gatherable

TINY = 1e-30


@dataclass(frozen=True, slots=True)
class LinearParameters(Gatherable):
    """Each regulator; dropout_v is at rated_a, thermal_k_per_w holds at the air speed of the study."""

    quiescent_a: FloatArray
    dropout_v: FloatArray
    rated_a: FloatArray
    thermal_k_per_w: FloatArray


MECHANISMS = ("pass_element_w", "quiescent_w")


@dataclass(frozen=True, slots=True)
class LinearLosses:
    """Watts by mechanism and the junction temperature, in the broadcast shape of the operating point."""

    pass_element_w: FloatArray
    quiescent_w: FloatArray
    temperature_degc: FloatArray

    @property
    def total_w(self) -> FloatArray:
        """Sum of both mechanisms (W)."""
        return self.pass_element_w + self.quiescent_w


def losses(
    p: LinearParameters,
    input_v: FloatLike,
    output_v: FloatLike,
    current_a: FloatLike,
    ambient_degc: FloatLike,
) -> LinearLosses:
    """Losses of a linear regulator: (Vin - Vo) I + Iq Vin; the pass element never generates power.

    Parameters
    ----------
    p : parameters
    input_v, output_v : terminal voltages (V)
    current_a : output current (A), not negative
    ambient_degc : local air (degC); all broadcast
    """
    pass_w = np.maximum(np.asarray(input_v) - output_v, 0.0) * current_a
    quiescent_w = p.quiescent_a * np.asarray(input_v)
    temperature = ambient_degc + p.thermal_k_per_w * (pass_w + quiescent_w)
    shape = np.shape(temperature)
    return LinearLosses(*(np.broadcast_to(result, shape) for result in (pass_w, quiescent_w, temperature)))


def headroom_v(
    p: LinearParameters, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike
) -> FloatArray:
    """Voltage left above dropout (V), negative where it falls out: Vin - Vo - Vdropout I / I rated.

    Dropout is in proportion to current, as of a pass element fully on. Parameters as for :func:`losses`.
    """
    dropout_v = p.dropout_v * (current_a / np.maximum(p.rated_a, TINY))
    return np.asarray(input_v) - output_v - dropout_v
