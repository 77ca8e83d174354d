"""The topology of a design: which feeds it has, and how its buses are controlled; as a number and in words.

Two unlike buses have the same topology whichever of them is bus A.
"""

from __future__ import annotations

import numpy as np

from archopt.model.canonical import buses_used
from archopt.model.parameters import FIXED_RATIO, BoolArray, IntArray
from archopt.model.problem import Problem
from archopt.model.space import FIXED, FOLLOW, INPUT, TWO_LEVELS, Designs

FEED_PATTERNS = ("direct", "one bus", "one bus and direct", "two buses", "two buses and direct")
CONTROL_WORDS = ("fixed ratio", "fixed", "two levels", "follows load")
"""How a bus is controlled, from the stillest; a kind has a bit for each that one of its buses shows."""
PLACE = {FIXED: 1, TWO_LEVELS: 2, FOLLOW: 3}
WAYS = 1 << len(CONTROL_WORDS)
MOVING = (1 << 2) | (1 << 3)


def topology_kinds(problem: Problem, rows: IntArray) -> IntArray:
    """Return the topology of design rows as a number, (P,): feed pattern x the ways its buses are controlled."""
    designs = Designs(problem.layout, np.atleast_2d(rows))
    used = buses_used(designs)
    direct = (designs.rail("feed") == INPUT).any(axis=1)
    buses = used.sum(axis=1)
    pattern = np.where(buses == 0, 0, 2 * buses - 1 + direct)
    bit = np.array([1 << PLACE[control] for control in (FIXED, TWO_LEVELS, FOLLOW)])[designs.bus("control")]
    if len(problem.converters.names):
        kind = problem.converters.kind[np.maximum(designs.bus("converter") - 1, 0)]
        bit = np.where(kind == FIXED_RATIO, 1, bit)
    ways = np.bitwise_or.reduce(np.where(used, bit, 0), axis=1)
    return np.asarray(pattern * WAYS + ways, dtype=np.int64)


def kind_words(kind: int) -> str:
    """Return a topology in words: ``one bus, follows load``."""
    pattern, ways = divmod(int(kind), WAYS)
    words = [word for place, word in enumerate(CONTROL_WORDS) if ways >> place & 1]
    return ", ".join([FEED_PATTERNS[pattern], *([" and ".join(words)] if words else [])])


def has_moving_bus(kinds: IntArray) -> BoolArray:
    """Return which topologies have a bus that moves by the load, (P,)."""
    return np.asarray(kinds % WAYS & MOVING > 0)


def topology(problem: Problem, rows: IntArray) -> list[str]:
    """Return the topology of each design in words, (P,)."""
    return [kind_words(kind) for kind in topology_kinds(problem, rows)]
