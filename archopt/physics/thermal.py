"""Temperature of a part that loses power into moving air."""

from __future__ import annotations

import numpy as np

from archopt.physics.arrays import FloatArray, FloatLike

#: Gain above which the fixed point is no longer followed: losses stay finite, the true gain is reported.
LARGEST_GAIN = 0.95
#: Air never stands still beside a warm part: its own draught, in metres a second (common practice).
STILL_AIR_M_S = 0.2


def fixed_point(
    loss_at_low_w: FloatLike,
    loss_at_high_w: FloatLike,
    low_degc: FloatLike,
    high_degc: FloatLike,
    ambient_degc: FloatLike,
    k_per_w: FloatLike,
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Loss and temperature of a part whose loss is affine in its own temperature.

    Exact while loss is affine between and beyond the two evaluations. From a gain of 1 on no temperature
    balances (thermal runaway); loss and temperature are then those of a gain of 0.95 and stay finite.

    Parameters
    ----------
    loss_at_low_w, loss_at_high_w : loss (W) with the part at ``low_degc`` and ``high_degc``
    low_degc, high_degc : the two different temperatures (degC)
    ambient_degc : local air (degC)
    k_per_w : thermal resistance from local air to the part (K/W)

    All broadcast.

    Returns
    -------
    loss (W), temperature (degC) and gain (1), the rise of loss per kelvin times thermal resistance; 1 or more
    is runaway.

    Notes
    -----
    P(T) = P_a + s (T - T_a) and T = T_a + R P give P = P_a / (1 - R s). Closed form.
    """
    slope = (np.asarray(loss_at_high_w) - loss_at_low_w) / (np.asarray(high_degc) - low_degc)
    gain = slope * k_per_w
    at_ambient = loss_at_low_w + slope * (np.asarray(ambient_degc) - low_degc)
    loss = np.maximum(at_ambient, 0.0) / (1.0 - np.minimum(gain, LARGEST_GAIN))
    temperature = ambient_degc + k_per_w * loss
    return loss, temperature, gain


def thermal_resistance_at(k_per_w: FloatLike, stated_air_m_s: FloatLike, air_m_s: FloatLike) -> FloatArray:
    """Thermal resistance (K/W) at another air speed.

    Laminar forced convection over a flat part: heat transfer grows with the root of speed (Nusselt number
    0.664 Re^0.5 Pr^0.33, textbook). Holds from about 0.2 to 5 m/s; slower air counts as 0.2 m/s because a
    warm part draws its own.

    Parameters
    ----------
    k_per_w : thermal resistance at ``stated_air_m_s`` (K/W)
    stated_air_m_s, air_m_s : air speeds (m/s); all broadcast
    """
    stated = np.maximum(stated_air_m_s, STILL_AIR_M_S)
    actual = np.maximum(air_m_s, STILL_AIR_M_S)
    scaled: FloatArray = k_per_w * np.sqrt(stated / actual)
    return scaled
