"""The fields of plated holes under the pads of a floorplan: what they resist, and what they may carry."""

from __future__ import annotations

import numpy as np

from archopt.inputs.floorplan_shape import Floorplan, Region, ViaField, spots_of
from archopt.physics.ampacity import current_limit_a
from archopt.physics.copper import via_resistance_ohm


def via_field_ohm(vias: ViaField, temperature_degc: float) -> float:
    """Resistance (ohm) of a field of vias in parallel at a temperature (degC)."""
    one = via_resistance_ohm(vias.length_mm * 1e-3, vias.drill_mm * 1e-3, vias.plating_um * 1e-6, temperature_degc)
    return float(one) / vias.count


def via_field_limit_a(vias: ViaField, rise_k: float) -> float:
    """Current (A) a field of vias may carry for a rise (K), shared alike by all of it.

    One barrel is a trace inside the board of the section of its ring, pi t (d - t) by the diameter before plating
    (common practice; IPC-2221 gives no form of its own for vias).
    """
    drill_m, plating_m = vias.drill_mm * 1e-3, vias.plating_um * 1e-6
    wall_m = min(plating_m, 0.5 * drill_m)
    return vias.count * float(current_limit_a(np.pi * (drill_m - wall_m), wall_m, rise_k, inner=True))


def fields_of(plan: Floorplan, region: Region) -> dict[str, list[ViaField]]:
    """Return the via fields of every port of a net, the source among them."""
    found: dict[str, list[ViaField]] = {}
    for port, spot in spots_of(plan, region):
        found.setdefault(port, []).append(spot.vias)
    return found


def fields_ohm(plan: Floorplan, region: Region, temperature_degc: float) -> dict[str, float]:
    """Resistance (ohm) of the via fields of every port of a net; the pads of a port are in parallel."""
    return {
        port: 1.0 / sum(1.0 / via_field_ohm(vias, temperature_degc) for vias in fields)
        for port, fields in fields_of(plan, region).items()
    }


def fields_limit_a(plan: Floorplan, region: Region, rise_k: float) -> dict[str, float]:
    """Current (A) every port of a net may carry through its vias, which share it as they conduct."""
    found = {}
    for port, fields in fields_of(plan, region).items():
        siemens = np.array([1.0 / via_field_ohm(vias, 20.0) for vias in fields])
        limits = np.array([via_field_limit_a(vias, rise_k) for vias in fields])
        found[port] = float((limits * siemens.sum() / siemens).min())
    return found
