"""The classes of designs the outer bound is made for, one after another."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.problem import Problem
from archopt.model.space import BUS_A, INPUT
from archopt.physics.arrays import BoolArray
from archopt.proof.bound_parts import buses_offered
from archopt.proof.bound_rails import DIRECT, GRID, RAIL, RATIO, Slots

FEW_VOLTAGES = 6


@dataclass(frozen=True)
class Kind:
    """One class of designs: which slots its rails may take, how many buses, and what is known of them.

    alone: one bus feeds every rail, itself or through another rail; fixed: no bus moves; direct: at least one rail
    is fed straight from the input.
    """

    slots: BoolArray
    buses: int
    alone: bool = False
    fixed: bool = False
    direct: bool = False
    coupled: bool = False  # every rail on the bus is held to one voltage by multipliers


def kinds_of(problem: Problem, slots: Slots) -> list[Kind]:
    """Return the classes the space has designs of: every feasible design belongs to one of them.

    A bus that stays stands at a nominal voltage on offer: one that never moves at another is not a fixed one, and
    keeps its supervisor. Few such voltages are a class each, so that all rails stand at the same.
    """
    layout, allowed = problem.layout, problem.space.allowed
    buses = buses_offered(problem)
    feeds = [allowed[layout.rail("feed").start + r] for r in range(layout.rails)]
    direct = any(INPUT in values for values in feeds)
    controls = {int(value) for bus in buses for value in allowed[layout.bus("control").start + bus]}
    grid, parent = slots.kind == GRID, slots.kind == RAIL
    place = np.arange(len(grid))
    nominal = [allowed[layout.bus("nominal_v").start + bus] for bus in buses]
    still = grid & np.isin(slots.of, np.concatenate(nominal)) if buses else grid & False
    out = []
    if 0 in controls and still.any():
        if still.sum() <= FEW_VOLTAGES:
            out += [Kind(parent | (place == k), 1, alone=True, fixed=True) for k in np.flatnonzero(still)]
        else:
            out.append(Kind(parent | still, 1, alone=True, fixed=True, coupled=True))
    if controls - {0} and grid.any():
        out.append(Kind(parent | grid, 1, alone=True, coupled=True))
    ratios = np.flatnonzero(slots.kind == RATIO)
    out += [Kind(parent | (place == k), 1, alone=True, fixed=True) for k in ratios]
    if buses and direct:
        out.append(Kind(np.ones(len(grid), dtype=bool), 1, direct=True))
    if len(buses) > 1 and all(any(BUS_A + bus in values for values in feeds) for bus in buses):
        out.append(Kind(np.ones(len(grid), dtype=bool), 2))
    if direct:
        out.append(Kind(parent | (slots.kind == DIRECT), 0))
    return out
