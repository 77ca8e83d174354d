"""How many plane pairs each rail's pour takes: cheap copper against its loss, within drop, ampacity and layers."""

from __future__ import annotations

import numpy as np

from archopt.model.problem import Problem
from archopt.model.space import BUS_A
from archopt.physics.ampacity import current_limit_a
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.conditions import Conditions
from archopt.search.genome import Plan

TIGHTER = (1.0, 4.0, 16.0, 64.0, 1e6)  # copper price factors tried until the layer budget holds


def square_hours(problem: Problem) -> FloatArray:
    """Return the hour-weighted square of each rail's current, A^2 h / 1000 a year, (R,)."""
    states = problem.states
    energy = states.with_hours
    amps = np.where(states.off[energy], 0.0, states.current_a[energy])
    return np.asarray((amps**2 * states.hours[energy][:, None]).sum(axis=0) * 1e-3)


def least_pairs(problem: Problem, stack: IntArray) -> FloatArray:
    """Return the pairs drop and ampacity ask of each pour, (P, R)."""
    rails, board = problem.rails, problem.study.board
    amps = np.maximum(problem.states.mix_a.max(axis=0), problem.states.rated_a)
    loop_ohm = 2.0 * rails.squares * problem.sheet_ohm[stack][:, None]
    spare_v = rails.voltage_v * rails.drop_budget - 2.0 * amps * rails.pour_via_ohm
    drop = amps * loop_ohm / np.maximum(spare_v, 1e-6)
    thickness = problem.stacks.thickness_m[stack][:, None]
    one = np.asarray(current_limit_a(rails.copper_width_m, thickness, board.copper_rise_k, inner=True))
    return np.asarray(np.ceil(np.maximum(drop, amps / one) - 1e-9), dtype=np.float64)


def choose_pairs(problem: Problem, plan: Plan, feed: IntArray, seen: Conditions) -> IntArray:
    """Return the pairs of each rail's pour, (P, R), least in money within the layer budget."""
    layout, rails, board = problem.layout, problem.rails, problem.study.board
    stack = plan.board["stack"]
    choices = np.unique(np.concatenate([problem.space.allowed[c] for c in columns(layout.rail("pairs"))]))
    may = np.stack([np.isin(choices, problem.space.allowed[c]) for c in columns(layout.rail("pairs"))])
    loop_ohm = 2.0 * rails.squares * problem.sheet_ohm[stack][:, None]
    heat = plan.price[:, None] * loop_ohm * square_hours(problem) * seen.marginal.mean(axis=(1, 2))[:, None]
    heat = heat[..., None] / choices  # (P, R, choices)
    least = least_pairs(problem, stack)
    most = problem.stacks.pairs[stack][:, None, None]
    short = np.maximum(least[..., None] - choices, 0.0) * 1e6 + np.maximum(choices - most, 0) * 1e9
    short = short + np.where(may, 0.0, 1e12)
    area = rails.copper_area_m2
    used = np.stack([(feed == BUS_A + b).any(axis=1) for b in range(2)], axis=1)
    planes = (np.minimum(plan.bus["pairs"], most[:, 0]) * used * problem.planes.area_m2).sum(axis=1)
    room = problem.stacks.pairs[stack] * board.area_cm2 * 1e-4 * board.usable_copper_share - planes
    out = np.zeros(feed.shape, dtype=np.int64)
    open_ = np.ones(len(feed), dtype=bool)
    for factor in TIGHTER:
        money = heat + short + (plan.copper_price * factor)[:, None, None] * area[:, None] * choices
        pairs = choices[money.argmin(axis=2)]
        out = np.where(open_[:, None], pairs, out)
        open_ &= (out * area).sum(axis=1) > room + 1e-12
        if not open_.any():
            break
    return out


def columns(span: slice) -> range:
    """Return the columns of a slice."""
    return range(span.start, span.stop)

