"""Which designs of a front are marked, and for what: the ends, the knee, and the best over its life.

Signatures for the conductor: ``energy_cost_front(objectives)``, ``knee(objectives)`` and
``assign_roles(objectives, topologies, lifetime)``; objectives are (P, 3): energy lost (kWh a year), cost
(currency a board), worst droop or release (% of budget). All return positions in the arrays given.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np

from archopt.physics.arrays import FloatArray, IntArray

DROOP_LIMIT_PERCENT = 100.0
BEST_OF = "best of "


def energy_cost_front(objectives: FloatArray) -> IntArray:
    """Return the designs that nothing within the droop limit beats in energy and cost, by energy.

    Where no design meets the droop limit all are taken. Of designs equal in both the one with least droop,
    then the first, stays.

    Parameters
    ----------
    objectives : (P, 3)

    Raises
    ------
    ValueError : no design is given
    """
    values = np.asarray(objectives, dtype=np.float64)
    if not len(values):
        raise ValueError("there is no design to choose from")
    within = np.flatnonzero(values[:, 2] <= DROOP_LIMIT_PERCENT * (1.0 + 1e-9))
    candidates = within if len(within) else np.arange(len(values))
    order = candidates[np.lexsort((candidates, *values[candidates].T[[2, 1, 0]]))]
    cost = values[order, 1]
    cheapest_before = np.concatenate([[np.inf], np.minimum.accumulate(cost)[:-1]])
    front: IntArray = order[cost < cheapest_before]
    return front


def knee(objectives: FloatArray) -> int:
    """Return the knee of the energy-cost front: the design farthest below the chord between its ends.

    Energy and cost are normalised by the front's ideal and nadir, so that the chord runs from (0, 1) to
    (1, 0); the distance is that along its normal, as in normal-boundary intersection (Das and Dennis). It
    is a geometric knee and says nothing of money: the design of least lifetime cost is marked beside it. On a
    tie, or a front of one or two designs, the one with least energy.
    """
    front = energy_cost_front(objectives)
    values = np.asarray(objectives, dtype=np.float64)[front, :2]
    span = np.ptp(values, axis=0)
    scaled = (values - values.min(axis=0)) / np.where(span > 0, span, 1.0)
    below_chord = 1.0 - scaled.sum(axis=1)
    best = int(np.argmax(np.round(below_chord, 12)))
    return int(front[best])


def assign_roles(
    objectives: FloatArray, topologies: Sequence[str], lifetime: FloatArray
) -> list[list[str]]:
    """Return the roles of each design, most designs having none.

    Parameters
    ----------
    objectives : (P, 3)
    topologies : (P,) topology of each design in words
    lifetime : (P,) lifetime cost, currency

    Raises
    ------
    ValueError : lengths differ
    """
    values = np.asarray(objectives, dtype=np.float64)
    if not len(values) == len(topologies) == len(lifetime):
        raise ValueError("objectives, topologies and lifetime costs must be of equal length")
    roles: list[list[str]] = [[] for _ in topologies]
    if not roles:
        return roles
    energy, cost, droop = values.T
    life = np.asarray(lifetime, dtype=np.float64)
    roles[first_of(energy, cost, droop)].append("least loss")
    roles[first_of(cost, energy, droop)].append("least cost")
    roles[first_of(droop, life, energy)].append("most margin")
    roles[knee(values)].append("knee")
    roles[first_of(life, energy, droop)].append("least lifetime cost")
    for name in dict.fromkeys(topologies):
        members = np.flatnonzero(np.array([topology == name for topology in topologies]))
        best = members[first_of(life[members], energy[members], droop[members])]
        roles[best].append(f"{BEST_OF}{name}")
    return roles


def first_of(*keys: FloatArray) -> int:
    """Return the position least in the first key, ties by the next, then by position."""
    return int(np.lexsort(keys[::-1])[0])
