"""The checks of every rail's stage: steady, and through the largest unannounced jump."""

from __future__ import annotations

import numpy as np

from archopt.model.board import Solution
from archopt.model.converter_loss import BEYOND, any_measured, beyond_percent, edge_percent, is_measured
from archopt.model.hardware import Hardware, short_time_a
from archopt.model.limits import Ledger
from archopt.model.parameters import BUCK, LINEAR, BoolArray, FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.situation import Droop, Situation, at_states
from archopt.model.space import BUS_NAMES, FIXED
from archopt.model.stages import Switching, conduction_ratio, headroom_v, switching
from archopt.model.states import FALLBACK, JUMP, MIX
from archopt.physics.output_ripple import half_swing_v


def check_rails(situation: Situation, droop: Droop, ledger: Ledger) -> None:
    """Check droop, release, duty, times, headroom, input range, current and temperature of every stage."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution, stages, rails = situation.solution, situation.stages.take(np.s_[:, None]), problem.rails
    names = situation.rail_names
    places = (names, states.place_names)
    ledger.add("rail droop", droop.droop_percent, 100.0, at_most=True, axes=places)
    ledger.add("rail release", droop.release_percent, 100.0, at_most=True, axes=places)
    steady = np.concatenate([states.of_kind(MIX), states.of_kind(FALLBACK)])
    axes = (situation.state_names(steady), names)
    volts, amps = at_states(solution.stage_v, steady), at_states(solution.current_a, steady)
    running = at_states(hardware.running, steady)
    on = np.repeat(~states.off[steady][:, None], len(volts), axis=1).transpose(1, 0, 2)
    per_phase = amps / running
    drop_v = np.where(rails.remote_sense, amps * at_states(solution.pour_ohm, steady), 0.0)
    duty = conduction_ratio(stages, ..., volts, rails.voltage_v + drop_v, per_phase)
    frequency = stages.frequency_hz
    is_buck = stages.kind == BUCK
    ledger.add(
        "duty", 100.0 * duty, 100.0 * stages.max_duty, at_most=True, axes=axes,
        applies=on & (stages.kind != LINEAR),
    )  # fmt: skip
    idle = conduction_ratio(stages, ..., volts, rails.voltage_v, np.zeros_like(per_phase))  # the shortest on-time
    ledger.add(
        "on-time", 1e9 * idle / frequency, 1e9 * stages.min_on_s, at_most=False, axes=axes,
        applies=on & is_buck,
    )  # fmt: skip
    ledger.add(
        "off-time", 1e9 * (1.0 - duty) / frequency, 1e9 * stages.min_off_s, at_most=False, axes=axes,
        applies=on & is_buck,
    )  # fmt: skip
    ledger.add(
        "headroom", headroom_v(stages, ..., volts, rails.voltage_v + drop_v, amps), 0.0, at_most=False, axes=axes,
        applies=on & (stages.kind == LINEAR),
    )  # fmt: skip
    ledger.add("stage input range", volts, stages.input_min_v, at_most=False, axes=axes, applies=on)
    ledger.add("stage input range", volts, stages.input_max_v, at_most=True, axes=axes, applies=on)
    limit_a = stages.phase_limit_a
    ledger.add("stage current", per_phase, limit_a, at_most=True, axes=axes, applies=on)
    own = family_maximum_a(situation) / hardware.phases
    ledger.add(
        "stage current", own, situation.stages.phase_limit_a, at_most=True,
        axes=(tuple(f"{name} at its own maximum" for name in names),),
    )  # fmt: skip
    moved = switching(stages, ..., running, volts, rails.voltage_v, amps)
    square = running * moved.square_a2
    bank_w = hardware.bank_esr_ohm[:, None, :] * square  # warms the bank, not the stage
    heat = (at_states(solution.stage_loss_w, steady) - bank_w) / running + hardware.bias_w[:, None, :]
    temperature = states.ambient_degc[steady][:, None] + stages.thermal_k_per_w * heat
    junction = problem.study.derating.junction_degc
    ledger.add("stage temperature", temperature, junction, at_most=True, axes=axes, applies=on)
    ledger.add("thermal gain", moved.gain, 1.0, at_most=True, axes=axes, applies=on)
    capacitors = problem.capacitors
    bank = situation.designs.rail("bank")
    pieces = problem.bank_counts[situation.designs.rail("bank_count")]
    permitted = pieces * capacitors.ripple_a[bank] * problem.study.derating.current
    ledger.add("capacitor ripple", np.sqrt(square), permitted[:, None, :], at_most=True, axes=axes, applies=on)
    swing = swing_v(hardware, moved)
    ledger.add(
        "output ripple", 100.0 * swing / rails.voltage_v, 100.0 * rails.ripple_v / rails.voltage_v, at_most=True,
        axes=axes, applies=on,
    )  # fmt: skip
    check_measured(situation, ledger)
    rail_axes = (names,)
    ledger.add(
        "loop capacitance range",
        1e6 * hardware.bank_f,
        1e6 * situation.stages.loop_min_f,
        at_most=False,
        axes=rail_axes,
    )
    ledger.add(
        "loop capacitance range",
        1e6 * hardware.bank_most_f,
        1e6 * situation.stages.loop_max_f,
        at_most=True,
        axes=rail_axes,
    )


def check_measured(situation: Situation, ledger: Ledger) -> None:
    """Check that no measured stage is used beyond its points, in any state."""
    states, hardware, solution = situation.states, situation.hardware, situation.solution
    stages = situation.problem.stages
    if not any_measured(stages.measured):
        return
    stage = np.broadcast_to(hardware.stage[:, None, :], solution.stage_v.shape)
    beyond = beyond_percent(
        stages.measured, stage, solution.stage_v, situation.problem.rails.voltage_v,
        solution.current_a / hardware.running,
    )  # fmt: skip
    on = is_measured(stages.measured, stage) & ~states.off
    shape = (*on.shape[:2], -1)
    ledger.add(
        "measured range", beyond.reshape(shape), float(edge_percent()[0]), at_most=True,
        axes=(states.name, tuple(f"{name} stage {what}" for name in situation.rail_names for what in BEYOND)),
        applies=np.broadcast_to(on[..., None], beyond.shape).reshape(shape),
    )  # fmt: skip


def output_ripple_v(problem: Problem, hardware: Hardware, solution: Solution, index: IntArray) -> FloatArray:
    """Return how far the output ripple takes each rail from its mean in some states, (P, states, R) V.

    With the bank as it is at the end of its life, half of what swings.
    """
    volts, amps, running = (
        at_states(values, index) for values in (solution.stage_v, solution.current_a, hardware.running)
    )
    stage = hardware.stage[:, None, :]
    return swing_v(hardware, switching(problem.stages, stage, running, volts, problem.rails.voltage_v, amps))


def swing_v(hardware: Hardware, moved: Switching) -> FloatArray:
    """Return half of what the outputs swing, (P, states, R) V, with the banks at the end of their life."""
    return half_swing_v(moved.ripple_a, moved.charge_c, hardware.bank_f[:, None, :], hardware.bank_esr_ohm[:, None, :])


def jump_spare_v(situation: Situation) -> FloatArray:
    """Return how far each stage's input may still fall after the jump before it loses its rail, (P, B, R) V.

    Its input range, its duty with the drops at what the running phases carry, a linear regulator's dropout.
    """
    problem, hardware = situation.problem, situation.hardware
    solution, stages, rails = situation.solution, situation.stages.take(np.s_[:, None]), problem.rails
    jump = situation.states.of_kind(JUMP)
    volts, amps = at_states(solution.stage_v, jump), at_states(solution.current_a, jump)
    per_phase = np.minimum(amps / at_states(hardware.running, jump), stages.phase_limit_a)
    drop_v = np.where(rails.remote_sense, amps * at_states(solution.pour_ohm, jump), 0.0)
    duty = conduction_ratio(stages, ..., volts, rails.voltage_v + drop_v, per_phase)
    spare = np.where(stages.kind == LINEAR, np.inf, volts * (1.0 - duty / stages.max_duty))
    spare = np.minimum(spare, volts - stages.input_min_v)
    return np.minimum(spare, headroom_v(stages, ..., volts, rails.voltage_v + drop_v, amps))


def family_maximum_a(situation: Situation) -> FloatArray:
    """Return the current of each rail at its own maximum with its children at rated load, (P, R) A.

    One rail may reach its own maximum; that all of a family do at once is what the study's coincidence denies.
    """
    rails, hardware = situation.problem.rails, situation.hardware
    most = np.broadcast_to(rails.max_a, hardware.stage.shape).copy()
    p, child = np.nonzero(hardware.parent >= 0)
    parent = hardware.parent[p, child]
    drawn_w = (situation.states.rated_a * rails.voltage_v)[child] * situation.solution.step_ratio[p, -1, child]
    np.add.at(most, (p, parent), drawn_w / rails.voltage_v[parent])
    return most


def check_jump(situation: Situation, ledger: Ledger) -> None:
    """Check that every stage and converter lives through the largest unannounced jump at the dipped bus.

    Where the study asks for spare converters, those left after as many have failed take the jump.
    """
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution = situation.solution
    jump = states.of_kind(JUMP)
    volts = at_states(solution.stage_v, jump)
    axes = (situation.state_names(jump), situation.rail_names)
    on = ~states.off[jump]
    spare = jump_spare_v(situation)
    ledger.add("jump survival: stage input", volts, volts - spare, at_most=False, axes=axes, applies=on)
    converters = problem.converters
    index = np.maximum(hardware.converter, 0)[..., None]
    applies = (hardware.converter >= 0)[..., None]
    fixed = (situation.designs.bus("control") == FIXED)[..., None]
    band_v, units = hardware.band_v, hardware.units_band
    top = states.bands - 1
    top_v, top_units = band_v[..., top, None], units[..., top, None]
    slew = np.maximum(converters.slew_v_per_s[index], 1e-3)
    rising = (top_v > band_v) & ~fixed & (np.arange(states.places) < states.bands)  # nothing moves the fall-back
    rise_s = np.where(rising, problem.study.control.response_ms * 1e-3 + (top_v - band_v) / slew, 0.0)
    wait_s = np.where(units < top_units, converters.wakeup_s[index], 0.0)
    charge_a = np.where(rising, hardware.bulk_nominal_f[..., None] * slew, 0.0)
    bus_a = solution.bus_a[:, jump].transpose(0, 2, 1) + charge_a
    in_time: BoolArray = np.maximum(rise_s, wait_s) <= converters.overload_s[index]
    bus_v = solution.bus_v[:, jump].transpose(0, 2, 1)
    carrying = np.maximum(units - problem.study.derating.spare_converters, 0.5)
    bound = carrying * short_time_a(problem, index, bus_v, guaranteed=in_time)
    names = tuple(f"{name} converter" for name in BUS_NAMES)
    ledger.add(
        "jump survival: short-time current", bus_a, bound, at_most=True,
        axes=(names, situation.state_names(jump)), applies=applies,
    )  # fmt: skip
