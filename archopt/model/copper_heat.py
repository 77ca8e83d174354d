"""How warm the copper of every net runs in every state, and what that makes of its resistance.

A whole net is taken at the temperature of its most crowded place (neck, or disc of 3 mm): local air of the state
and the rise of that place at its current, by the form of IPC-2221 on the layer pairs the net has. The limits are
held against the same rise. Elsewhere the net is cooler, so that its resistance is overstated: by less than
0.00393 / K of that rise, which is 7 % of the copper's own loss at a rise of 20 K and nothing for a cool net.

The rise follows from the current alone (the form was measured on copper that warmed as it did), so that a pour,
whose current is given, has no loop to run away in; a plane feeds constant powers, and is part of the fixed point.
"""

from __future__ import annotations

import numpy as np

from archopt.model.hardware import Hardware, place_limits_a
from archopt.model.parameters import FloatArray
from archopt.model.planes import copper_degc
from archopt.model.problem import Problem
from archopt.model.states import StateTable
from archopt.physics.ampacity import RISE_EXPONENT
from archopt.physics.copper import RESISTIVITY_DEGC, RESISTIVITY_PER_K

RISE_POWER = 1.0 / RISE_EXPONENT
#: What the resistance follows: beyond it solder and laminate are gone, and the limit tells by how much.
MOST_RISE_K = 150.0


def rise_k(problem: Problem, load: FloatArray) -> FloatArray:
    """Return the rise (K) of a place at a share of the current its permitted rise allows; any shape."""
    return np.asarray(problem.study.board.copper_rise_k * load**RISE_POWER)


class CopperHeat:
    """Resistance of pours and planes as warm as they run: P designs, S states, R rails."""

    def __init__(self, problem: Problem, states: StateTable, hardware: Hardware) -> None:
        self.problem, self.states, self.hardware = problem, states, hardware
        reference = 1.0 + RESISTIVITY_PER_K * (copper_degc(problem.study) - RESISTIVITY_DEGC)
        self.per_k = RESISTIVITY_PER_K / reference
        self.cold = (1.0 + RESISTIVITY_PER_K * (states.ambient_degc - RESISTIVITY_DEGC)) / reference  # (S,)
        limit_a = hardware.pairs * problem.pour_limit_a[hardware.stack]
        self.one_amp_k = rise_k(problem, 1.0 / np.maximum(limit_a, 1e-12))  # (P, R)
        self.plane_limit_a = place_limits_a(problem, hardware.stack, hardware.bus_pairs)  # (P, 2, K)

    def factor(self, rise: FloatArray) -> FloatArray:
        """Return resistance over that at the temperature of ``sheet_ohm``; rise (P, S, n) K."""
        return np.asarray(self.cold[:, None] + self.per_k * np.minimum(rise, MOST_RISE_K))

    def pour_rise_k(self) -> FloatArray:
        """Return the rise of every rail's pour at the current of its load, (P, S, R) K: a product, no power."""
        return np.asarray(self.one_amp_k[..., None] * np.ascontiguousarray(self.states.warming.T)).transpose(0, 2, 1)

    def with_children(self, rise: FloatArray, current_a: FloatArray) -> None:
        """Set the rise of the pours of rails with children, which draw on top of the load; in place, (P, S, R)."""
        p, r = np.nonzero(self.hardware.children)
        rise[p, :, r] = self.one_amp_k[p, r][:, None] * current_a[p, :, r] ** RISE_POWER

    def pour_ohm(self, rise: FloatArray) -> FloatArray:
        """Return the loop resistance of every pour, (P, S, R) ohm, its via fields as warm as its copper."""
        return self.hardware.pour_ohm[:, None, :] * self.factor(rise)

    def plane_rise_k(self, rail_a: FloatArray, bias_a: FloatArray) -> FloatArray:
        """Return the rise of both planes, (P, S, 2) K, from stage currents (P, S, R) and the bias supply's (P, S)."""
        planes, on_bus = self.problem.planes, self.hardware.on_bus
        load = np.zeros((len(bias_a), 2, bias_a.shape[1]))
        for bus in range(2):
            if not on_bus[:, bus].any():
                continue
            through = np.einsum("psr,cr->psc", rail_a * on_bus[:, bus, None], planes.place_share[bus])
            if bus == 0:
                through += bias_a[..., None] * planes.place_bias[bus]
            load[:, bus] = (through / np.maximum(self.plane_limit_a[:, None, bus], 1e-12)).max(axis=2)
        return rise_k(self.problem, load).transpose(0, 2, 1)
