"""What the limits are checked on: a batch of solved designs, and the droop and release of their rails."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property
from typing import Any

import numpy as np
from numpy.typing import NDArray

from archopt.model.board import Solution
from archopt.model.cost import Bill
from archopt.model.hardware import Hardware
from archopt.model.parameters import FloatArray, IntArray, StageTable
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.model.stages import loop_bandwidth_rad_s, slew_down_a_per_s, slew_up_a_per_s
from archopt.model.states import JUMP, StateTable
from archopt.physics.transient import rail_droop_v


@dataclass(frozen=True)
class Situation:
    """What every check reads."""

    problem: Problem
    states: StateTable
    designs: Designs
    hardware: Hardware
    solution: Solution
    bill: Bill

    @cached_property
    def stages(self) -> StageTable:
        """The numbers of every design's stages, (P, R)."""
        return self.problem.stages.take(self.hardware.stage)

    @property
    def rail_names(self) -> tuple[str, ...]:
        """Rails with a stage of their own."""
        return self.problem.rails.names

    def state_names(self, index: IntArray) -> tuple[str, ...]:
        """Names of some states."""
        return tuple(self.states.labels[index])


def at_states(values: NDArray[Any], index: IntArray) -> FloatArray:
    """Return (P, S, n) values in some states, (P, states, n).

    States come first in memory: what is one number a design and rail then runs along with long stretches of it.
    """
    return np.asarray(values.transpose(1, 0, 2)[index], dtype=np.float64).transpose(1, 0, 2)


@dataclass(frozen=True)
class Droop:
    """Droop and release of every rail at every place, V, (P, R, B + 1), and as a share of the budget in percent."""

    droop_v: FloatArray
    release_v: FloatArray
    droop_percent: FloatArray
    release_percent: FloatArray


@dataclass(frozen=True)
class DroopTerms:
    """What droop and release of every rail at every place follow from, (P, R, B + 1) or broadcasting to it; SI.

    before, after : load before and after the step; left : load after the release from the mix, mix : before it
    rise, fall : loop bandwidth at the lighter end of each; deficit : load beyond what runs
    """

    before_a: FloatArray
    after_a: FloatArray
    mix_a: FloatArray
    left_a: FloatArray
    step_a: FloatArray
    up_a_per_s: FloatArray
    down_a_per_s: FloatArray
    rise_rad_s: FloatArray
    fall_rad_s: FloatArray
    delay_s: FloatArray
    capacitance_f: FloatArray
    esr_ohm: FloatArray
    load_slew_a_per_s: FloatArray
    deficit_a: FloatArray
    wakeup_s: FloatArray


def family_step_a(situation: Situation) -> FloatArray:
    """Return the largest coincident step of each rail with its children in each band, (P, R, B) A.

    A child is a constant power to its parent: its step appears there as current of the parent, at the child's
    power in over out, all at once. Rails of one step group add, others do not.
    """
    rails, hardware = situation.problem.rails, situation.hardware
    own = np.broadcast_to(rails.step_a[:, None], (*hardware.stage.shape, situation.states.places))
    p, child = np.nonzero(hardware.parent >= 0)
    if not len(p):
        return own
    parent = hardware.parent[p, child]
    drawn_w = (rails.step_a * rails.voltage_v)[child][:, None] * situation.solution.step_ratio[p, :, child]
    seen_a = drawn_w / rails.voltage_v[parent][:, None]
    largest = own.copy()
    for group in np.unique(rails.step_group[child]):
        together = np.where((rails.step_group == group)[:, None], own, 0.0)
        mine = rails.step_group[child] == group
        np.add.at(together, (p[mine], parent[mine]), seen_a[mine])
        largest = np.maximum(largest, together)
    return largest


def droop_terms(situation: Situation) -> DroopTerms:
    """Return the terms of droop and release of all rails, with the phases running in each band.

    The loop is as fast as its lighter end lets it be: a rise starts at the load a step below the highest, a
    release ends a step below the mix. Children draw from the rail before and after, and step it with their own steps.
    """
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    rails, stages = problem.rails, situation.stages.take(np.s_[..., None])
    jump = states.of_kind(JUMP)
    stage_v = at_states(situation.solution.stage_v, jump).transpose(0, 2, 1)  # (P, R, B)
    running = at_states(hardware.running_band.transpose(0, 2, 1), np.arange(states.places)).transpose(0, 2, 1)
    volts = rails.voltage_v[:, None]
    extra = np.maximum(at_states(situation.solution.current_a, jump).transpose(0, 2, 1) - states.after_a.T, 0.0)
    mix = states.mix_a.T + extra
    step = family_step_a(situation)
    after = np.minimum(mix + step, np.maximum(rails.max_a[:, None] + extra, mix))
    deficit = np.maximum(after - running * stages.phase_limit_a, 0.0)
    before, left = np.maximum(after - step, 0.0), np.maximum(mix - step, 0.0)
    p, r = np.nonzero(stages.folded_share[..., 0] < 1.0)  # the others are as fast at any load
    folding, at_v, output_v = stages.take((p, r)), stage_v[p, r], rails.voltage_v[r][:, None]

    def bandwidth(load_a: FloatArray) -> FloatArray:
        found = stages.bandwidth_rad_s * np.ones_like(stage_v)
        found[p, r] = loop_bandwidth_rad_s(folding, ..., at_v, output_v, load_a[p, r] / running[p, r])
        return found

    return DroopTerms(
        before_a=before,
        after_a=after,
        mix_a=mix,
        left_a=left,
        step_a=step,
        up_a_per_s=slew_up_a_per_s(stages, ..., running, stage_v, volts),
        down_a_per_s=slew_down_a_per_s(stages, ..., running, volts),
        rise_rad_s=bandwidth(before),
        fall_rad_s=bandwidth(left),
        delay_s=stages.delay_s,
        capacitance_f=hardware.bank_f[..., None],
        esr_ohm=hardware.bank_esr_ohm[..., None],
        load_slew_a_per_s=rails.load_slew_a_per_s[:, None],
        deficit_a=np.where(running < hardware.phases[..., None], deficit, 0.0),
        wakeup_s=stages.wakeup_s,
    )


def rail_droop(situation: Situation) -> Droop:
    """Return droop and release of all rails at their load steps."""
    terms = droop_terms(situation)
    loop = (terms.delay_s, terms.capacitance_f, terms.esr_ohm, terms.load_slew_a_per_s)
    droop = rail_droop_v(terms.step_a, terms.up_a_per_s, terms.rise_rad_s, *loop, terms.deficit_a, terms.wakeup_s)
    release = rail_droop_v(terms.step_a, terms.down_a_per_s, terms.fall_rad_s, *loop)
    awake = ~situation.states.mix_off.T
    droop, release = np.where(awake, droop, 0.0), np.where(awake, release, 0.0)
    budget = 100.0 / situation.problem.rails.budget_v[:, None]
    return Droop(droop, release, droop * budget, release * budget)
