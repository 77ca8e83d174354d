"""Direct-current resistance of copper: foils, traces, wires, via barrels, and nets given in squares."""

from __future__ import annotations

import numpy as np

from archopt.physics.arrays import FloatArray, FloatLike

#: Annealed copper at 20 degC (IEC 60028; NBS Handbook 100): ohm metre, and per kelvin.
RESISTIVITY_OHM_M = 1.7241e-8
RESISTIVITY_PER_K = 0.00393
RESISTIVITY_DEGC = 20.0
#: One ounce a square foot in kg/m2, and the density of copper in kg/m3 (IEC 60028).
OUNCE_KG_M2 = 0.30515
DENSITY_KG_M3 = 8890.0
#: Least cross-section in square metres and least length; keep results finite.
TINY = 1e-15


def resistivity_ohm_m(temperature_degc: FloatLike) -> FloatArray:
    """Resistivity (ohm m) of annealed copper at a temperature (degC), any shape.

    Linear in temperature, good from about -50 to 200 degC; never below a tenth of the value at 20 degC.
    Source: IEC 60028, NBS Handbook 100.
    """
    relative = 1.0 + RESISTIVITY_PER_K * (np.asarray(temperature_degc) - RESISTIVITY_DEGC)
    value: FloatArray = RESISTIVITY_OHM_M * np.maximum(relative, 0.1)
    return value


def foil_thickness_m(weight_oz: FloatLike) -> FloatArray:
    """Thickness (m) of a foil of a weight (oz/ft2) before anything is etched away: 34.3 um an ounce."""
    return np.asarray(weight_oz) * (OUNCE_KG_M2 / DENSITY_KG_M3)


def sheet_resistance_ohm(thickness_m: FloatLike, temperature_degc: FloatLike) -> FloatArray:
    """Resistance (ohm) of one square of a sheet by thickness (m) and temperature (degC); both broadcast."""
    return resistivity_ohm_m(temperature_degc) / np.maximum(thickness_m, TINY)


def conductor_resistance_ohm(
    length_m: FloatLike, section_m2: FloatLike, temperature_degc: FloatLike
) -> FloatArray:
    """Resistance (ohm) of a conductor of even cross-section: a wire, a pin, a bus bar.

    Parameters
    ----------
    length_m : length along the current (m)
    section_m2 : cross-section (m2)
    temperature_degc : its temperature (degC); all broadcast
    """
    resistance: FloatArray = resistivity_ohm_m(temperature_degc) * length_m / np.maximum(section_m2, TINY)
    return resistance


def trace_resistance_ohm(
    length_m: FloatLike, width_m: FloatLike, thickness_m: FloatLike, temperature_degc: FloatLike
) -> FloatArray:
    """Resistance (ohm) of a trace or pour of even width.

    Parameters
    ----------
    length_m, width_m, thickness_m : dimensions (m), the finished thickness
    temperature_degc : its temperature (degC); all broadcast
    """
    return conductor_resistance_ohm(length_m, np.asarray(width_m) * thickness_m, temperature_degc)


def via_resistance_ohm(
    length_m: FloatLike, drill_diameter_m: FloatLike, plating_m: FloatLike, temperature_degc: FloatLike
) -> FloatArray:
    """Resistance (ohm) of one plated barrel of annealed-copper resistivity.

    Parameters
    ----------
    length_m : length of the barrel the current runs through (m)
    drill_diameter_m : diameter before plating (m); the finished hole is narrower by two platings
    plating_m : thickness of the barrel wall (m); a wall thicker than the radius fills the hole
    temperature_degc : its temperature (degC); all broadcast

    Notes
    -----
    Cross-section pi t (d - t) of the ring inside the drilled hole. Closed form.
    """
    wall = np.minimum(plating_m, 0.5 * np.asarray(drill_diameter_m))
    return conductor_resistance_ohm(length_m, np.pi * wall * (drill_diameter_m - wall), temperature_degc)


def squares_matrix(shared_squares: float, own_squares: FloatArray) -> FloatArray:
    """Port resistance matrix in squares of a plane that all loads share up to a point, then leave one by one.

    Parameters
    ----------
    shared_squares : squares that carry every load's current
    own_squares : shape (R,), squares each load has to itself

    Returns
    -------
    Shape (R, R): shared everywhere, own added on the diagonal. Times sheet resistance it gives the drop of
    every load from every load's current, and I^T R I is the loss.
    """
    own = np.asarray(own_squares, dtype=np.float64)
    return np.full((own.size, own.size), float(shared_squares)) + np.diag(own)
