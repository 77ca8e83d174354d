"""Current a copper neck or trace may carry for a temperature rise, and the rise for a current."""

from __future__ import annotations

import numpy as np

from archopt.physics.arrays import BoolArray, FloatArray, FloatLike

#: IPC-2221: I = k dT^0.44 A^0.725 with A in square mil.
RISE_EXPONENT = 0.44
SECTION_EXPONENT = 0.725
INNER_FACTOR = 0.024
OUTER_FACTOR = 0.048
SQUARE_MIL_M2 = 25.4e-6**2
#: Least cross-section in square mil; keeps the rise finite.
LEAST_SECTION = 1e-6


def _factor_times_section(width_m: FloatLike, thickness_m: FloatLike, inner: bool | BoolArray) -> FloatArray:
    """Current for a rise of one kelvin (A)."""
    section = np.maximum(np.asarray(width_m) * thickness_m / SQUARE_MIL_M2, LEAST_SECTION)
    factor: FloatArray = np.where(inner, INNER_FACTOR, OUTER_FACTOR) * section**SECTION_EXPONENT
    return factor


def current_limit_a(
    width_m: FloatLike, thickness_m: FloatLike, rise_k: FloatLike, inner: bool | BoolArray = True
) -> FloatArray:
    """Current (A) that warms a trace or neck by a given rise.

    The fit covers about 35 A, 10 to 100 K and widths to 10 mm, without planes nearby that would spread heat;
    it is on the safe side beside a plane.

    Parameters
    ----------
    width_m, thickness_m : cross-section (m)
    rise_k : temperature rise over the board around it (K), not negative
    inner : whether the copper lies inside the board; all broadcast

    Notes
    -----
    I = k dT^0.44 A^0.725, A in square mil, k 0.024 inside and 0.048 outside (IPC-2221).
    """
    limit: FloatArray = (
        _factor_times_section(width_m, thickness_m, inner) * np.maximum(rise_k, 0.0) ** RISE_EXPONENT
    )
    return limit


def temperature_rise_k(
    current_a: FloatLike, width_m: FloatLike, thickness_m: FloatLike, inner: bool | BoolArray = True
) -> FloatArray:
    """Temperature rise (K) of a trace or neck at a current (A): the inverse of :func:`current_limit_a`."""
    relative = np.abs(current_a) / _factor_times_section(width_m, thickness_m, inner)
    rise: FloatArray = relative ** (1.0 / RISE_EXPONENT)
    return rise
