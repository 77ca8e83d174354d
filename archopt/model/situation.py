"""What the limits are checked on: a batch of solved designs, and the droop and release of their rails."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.board import Solution
from archopt.model.cost import Bill
from archopt.model.hardware import Hardware
from archopt.model.parameters import FloatArray, IntArray
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

    @property
    def rail_names(self) -> tuple[str, ...]:
        """Rails with a stage of their own."""
        return self.problem.rails.names

    def state_names(self, index: IntArray) -> tuple[str, ...]:
        """Names of some states."""
        return tuple(self.states.name[int(k)] for k in index)


@dataclass(frozen=True)
class Droop:
    """Droop and release of every rail in every band, V, (P, R, B), and as a share of the budget in percent."""

    droop_v: FloatArray
    release_v: FloatArray
    droop_percent: FloatArray
    release_percent: FloatArray


def rail_droop(situation: Situation) -> Droop:
    """Return droop and release of all rails at their load steps, with the phases running in each band.

    The loop is as fast as its lighter end lets it be: a rise starts at the load a step below the highest, a
    release ends a step below the mix. What children draw stays on the rail before and after.
    """
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    rails, stages = problem.rails, problem.stages
    jump = states.of_kind(JUMP)
    stage_v = situation.solution.stage_v[:, jump].transpose(0, 2, 1)  # (P, R, B)
    stage = np.broadcast_to(hardware.stage[..., None], stage_v.shape)
    running = hardware.running_band
    volts = rails.voltage_v[:, None]
    extra = np.maximum(situation.solution.current_a[:, jump].transpose(0, 2, 1) - states.after_a.T, 0.0)
    mix = states.mix_a.T + extra
    after = np.minimum(mix + rails.step_a[:, None], np.maximum(rails.max_a[:, None] + extra, mix))
    deficit = np.maximum(after - running * stages.phase_limit_a[stage], 0.0)
    deficit = np.where(running < hardware.phases[..., None], deficit, 0.0)
    bank_f, esr = hardware.bank_f[..., None], hardware.bank_esr_ohm[..., None]
    up = slew_up_a_per_s(stages, stage, running, stage_v, volts)
    down = slew_down_a_per_s(stages, stage, running, volts)
    step = rails.step_a[:, None]
    before, left = np.maximum(after - step, 0.0), np.maximum(mix - step, 0.0)
    rise, fall = (
        loop_bandwidth_rad_s(stages, stage, stage_v, volts, load / running) for load in (before, left)
    )
    loop = (
        stages.delay_s[stage],
        bank_f,
        esr,
        rails.load_slew_a_per_s[:, None],
    )
    droop = rail_droop_v(step, up, rise, *loop, deficit, stages.wakeup_s[stage])
    release = rail_droop_v(step, down, fall, *loop)
    awake = ~states.mix_off.T
    droop, release = np.where(awake, droop, 0.0), np.where(awake, release, 0.0)
    budget = 100.0 / rails.budget_v[:, None]
    return Droop(droop, release, droop * budget, release * budget)
