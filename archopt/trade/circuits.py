"""Averaged circuits of a design's rails, buses and jumps, from a problem and its solution by direct physics.

They hold exactly the numbers the limits were checked with: the lowest bus, aged capacitors, the phases and
converters that run.
"""

from __future__ import annotations

from dataclasses import dataclass, field, replace

import numpy as np

from archopt.model.evaluator import Detail
from archopt.model.hardware import short_time_a
from archopt.model.parameters import FIXED_RATIO, LINEAR, FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.rail_checks import jump_spare_v
from archopt.model.situation import DroopTerms, Situation, droop_terms
from archopt.model.space import FIXED
from archopt.model.states import JUMP
from archopt.physics.averaged import RESTORING, LoadStep, RailCircuit
from archopt.physics.averaged_board import BoardWave, Rise, StageCircuit, board_wave
from archopt.physics.averaged_bus import STAYS, BusCircuit, Command, PowerTrain

SETTLED = 3.0  # a bus takes the next step after so many times the time its voltage comes back in


@dataclass(frozen=True)
class Waves:
    """A batch of designs ready to be looked at in time."""

    problem: Problem
    detail: Detail
    situation: Situation
    terms: DroopTerms
    spare_v: FloatArray  # (P, B + 1, R)
    mix_at: IntArray = field(repr=False)  # (B + 1,) states, the fall-back last
    jump_at: IntArray = field(repr=False)


def waves_of(problem: Problem, detail: Detail) -> Waves:
    """Return what every circuit of a batch is made from."""
    states = problem.states
    situation = Situation(problem, states, detail.designs, detail.hardware, detail.solution, detail.bill)
    return Waves(
        problem, detail, situation, droop_terms(situation), jump_spare_v(situation), states.mix_low,
        states.of_kind(JUMP),
    )  # fmt: skip


def at(values: FloatArray, shape: tuple[int, ...], place: tuple[int, int, int]) -> float:
    """Return one value of terms that broadcast to (P, R, B)."""
    return float(np.broadcast_to(values, shape)[place])


def rail_case(
    waves: Waves, p: int, rail: int, band: int, *, rises: bool, step: LoadStep | None = None
) -> tuple[RailCircuit, LoadStep]:
    """Return a rail's circuit and its step (or release) in a band; another step where one is given."""
    terms, hardware = waves.terms, waves.detail.hardware
    shape, place = waves.detail.droop.droop_v.shape, (p, rail, band)

    def value(name: str) -> float:
        return at(getattr(terms, name), shape, place)

    stage = int(hardware.stage[p, rail])
    running, fitted = int(hardware.running_band[p, rail, band]), int(hardware.phases[p, rail])
    if step is None:
        ends = ("before_a", "after_a") if rises else ("mix_a", "left_a")
        first, last = value(ends[0]), value(ends[1])
        span = value("step_a")
        # the closed forms take the whole step even where the load has less room
        step = LoadStep(last - span, last, value("load_slew_a_per_s")) if rises else LoadStep(
            last + span, last, value("load_slew_a_per_s")
        )
        if not rises:
            step = replace(step, before_a=max(first, step.before_a))
    limit_a = running * float(waves.problem.stages.phase_limit_a[stage]) if running < fitted else np.inf
    circuit = RailCircuit(
        output_v=float(waves.problem.rails.voltage_v[rail]),
        up_a_per_s=value("up_a_per_s"),
        down_a_per_s=value("down_a_per_s"),
        bandwidth_rad_s=value("rise_rad_s" if rises else "fall_rad_s"),
        delay_s=value("delay_s"),
        capacitance_f=value("capacitance_f"),
        esr_ohm=value("esr_ohm"),
        limit_a=limit_a,
        wakeup_s=value("wakeup_s"),
        awake_up_a_per_s=value("up_a_per_s") * fitted / running,
    )
    return circuit, step


def source_limit_a(waves: Waves, p: int, bus: int, band: int) -> float:
    """Return the short-time current of the converters that run in a band, A."""
    hardware = waves.detail.hardware
    bus_v = waves.detail.solution.bus_v[p, waves.jump_at[band], bus]
    unit_a = short_time_a(waves.problem, hardware.converter[p, bus], bus_v, guaranteed=True)
    return float(unit_a) * int(hardware.units_band[p, bus, band])


def bus_case(waves: Waves, p: int, bus: int, band: int) -> BusCircuit:
    """Return a bus's circuit in a band, at its lowest setting and lowest input."""
    problem, hardware, solution = waves.problem, waves.detail.hardware, waves.detail.solution
    converters, path = problem.converters, problem.path
    index = int(hardware.converter[p, bus])
    units = int(hardware.units_band[p, bus, band])
    ohm = float(converters.output_ohm[index]) / units
    w = float(converters.bandwidth_rad_s[index])
    fixed = bool(converters.kind[index] == FIXED_RATIO)
    if fixed:
        ratio = float(converters.ratio[index])
        ohm, henry = ohm + path.resistance_ohm * ratio**2, path.inductance_h * ratio**2
        volts = float(solution.bus_v[p, waves.mix_at[band], bus])
    else:
        henry = ohm / w
        volts = float(hardware.set_v[p, waves.jump_at[band], bus])
    beside = float(hardware.input_f[p, bus])
    damper_f = float(np.broadcast_to(hardware.damper_f, hardware.bulk_f.shape)[p, bus, band])
    return BusCircuit(
        bus_v=volts,
        bulk_f=float(hardware.bulk_f[p, bus, band]) - beside - damper_f,
        bulk_esr_ohm=float(hardware.main_esr_ohm[p, bus]),
        damper_f=damper_f,
        damper_ohm=float(hardware.damper_ohm[p, bus]),
        input_f=beside,
        bandwidth_rad_s=w,
        delay_s=0.0 if fixed else float(converters.delay_s[index]),
        source_ohm=ohm,
        source_h=henry,
        follows=not fixed,
        limit_a=source_limit_a(waves, p, bus, band),
    )


def settled_s(circuit: BusCircuit) -> float:
    """Return how long a bus takes until the next step finds it as the first did, s."""
    if circuit.follows:
        return SETTLED / (circuit.restoring * circuit.bandwidth_rad_s)
    return 2.0 * circuit.response_s


def bus_step(waves: Waves, p: int, bus: int, band: int) -> PowerTrain:
    """Return the largest coincident step of a bus in a band, on top of what stands on it."""
    solution = waves.detail.solution
    step_w = float(solution.step_w[p, bus, band])
    mix_w = float(solution.bus_w[p, waves.mix_at[band], bus])
    jump_w = float(solution.bus_w[p, waves.jump_at[band], bus])
    standing = max(mix_w, jump_w - step_w)
    return PowerTrain(standing, standing + step_w)


def command_of(waves: Waves, p: int, bus: int, band: int, to_band: int) -> Command:
    """Return how the bus is raised after a jump from one band to another; it stays where nothing moves it."""
    problem, hardware = waves.problem, waves.detail.hardware
    control, index = problem.study.control, int(hardware.converter[p, bus])
    moves = waves.detail.designs.bus("control")[p, bus] != FIXED and not hardware.fixed_ratio[p, bus]
    moves = moves and band < problem.states.bands  # nothing moves the fall-back
    rise_v = float(hardware.band_v[p, bus, to_band] - hardware.band_v[p, bus, band])
    if not moves or rise_v <= 0:
        return STAYS
    top_v = float(hardware.set_v[p, waves.jump_at[band], bus]) + rise_v
    return Command(control.response_ms * 1e-3, max(float(problem.converters.slew_v_per_s[index]), 1e-3), top_v)


def stage_cases(waves: Waves, p: int, bus: int, band: int, before_a: FloatArray) -> tuple[IntArray, list[StageCircuit]]:
    """Return the rails on a bus and their circuits in a band, from given loads (R,) A."""
    problem, hardware, solution = waves.problem, waves.detail.hardware, waves.detail.solution
    stages, state = problem.stages, int(waves.jump_at[band])
    rails = np.flatnonzero(hardware.on_bus[p, bus] & ~problem.states.off[state])
    bus_v = float(solution.bus_v[p, state, bus])
    out = []
    shape = waves.detail.droop.droop_v.shape
    for r in rails:
        stage = int(hardware.stage[p, r])
        amps, drawn_w = float(solution.current_a[p, state, r]), float(solution.stage_in_w[p, state, r])
        stage_v, output_v = float(solution.stage_v[p, state, r]), float(problem.rails.voltage_v[r])
        henry = float(stages.inductance_h[stage])
        out.append(
            StageCircuit(
                output_v=output_v,
                before_a=float(before_a[r]),
                max_duty=float(stages.max_duty[stage]),
                turns=float(stages.turns[stage]),
                inductance_h=0.0 if np.isnan(henry) or stages.kind[stage] == LINEAR else henry,
                phases=int(hardware.running_band[p, r, band]),
                all_phases=int(hardware.phases[p, r]),
                phase_limit_a=float(stages.phase_limit_a[stage]),
                bandwidth_rad_s=at(waves.terms.rise_rad_s, shape, (p, int(r), band)),
                delay_s=float(stages.delay_s[stage]),
                wakeup_s=float(stages.wakeup_s[stage]),
                capacitance_f=float(hardware.bank_f[p, r]),
                esr_ohm=float(hardware.bank_esr_ohm[p, r]),
                in_over_out=drawn_w / max(amps * output_v, 1e-9),
                drop_ohm=max(bus_v - stage_v, 0.0) * bus_v / max(drawn_w, 1e-9),
                lockout_v=stage_v - float(waves.spare_v[p, band, r]),
                restoring=RESTORING,
            )
        )
    return rails, out


def jump_rises(problem: Problem, rails: IntArray, rise_a: FloatArray, spacing_s: float) -> list[Rise]:
    """Return a jump made of steps no larger than each rail's own, rails of one group together.

    Parameters
    ----------
    rails, rise_a : rails on the bus (K,) and how far each rises in all (K,), A
    spacing_s : from one step to the next
    """
    step_a, group = problem.rails.step_a[rails], problem.rails.step_group[rails]
    slew = problem.rails.load_slew_a_per_s[rails]
    size = np.maximum(step_a, 1e-3 * np.maximum(rise_a, 1e-9))
    left = np.maximum(rise_a, 0.0)
    out: list[Rise] = []
    now_s = 0.0
    while left.max(initial=0.0) > 1e-9:
        for one in np.unique(group):
            here = np.flatnonzero((group == one) & (left > 1e-9))
            for k in here:
                part = min(float(size[k]), float(left[k]))
                out.append(Rise(int(k), now_s, part, float(slew[k])))
                left[k] -= part
            now_s += spacing_s if len(here) else 0.0
    return out


@dataclass(frozen=True)
class Jump:
    """A jump of everything on one bus: the wave, the rails in it, their circuits, and the bus's."""

    wave: BoardWave
    rails: IntArray
    stages: list[StageCircuit]
    circuit: BusCircuit

    def spare_v(self) -> FloatArray:
        """Least distance of every stage's input from where it stops, (K,) V; 0 where it stopped."""
        lockout = np.array([stage.lockout_v for stage in self.stages])
        return np.asarray(np.maximum((self.wave.stage_v - lockout).min(axis=0), 0.0))


def jump_of(
    waves: Waves, p: int, bus: int, band: int, before_a: FloatArray | None = None,
    after_a: FloatArray | None = None, to_band: int | None = None,
) -> Jump:  # fmt: skip
    """Return a bus and its rails in time through a jump from a band's worst mix, or between given loads (R,)."""
    solution, problem = waves.detail.solution, waves.problem
    mix, jump = int(waves.mix_at[band]), int(waves.jump_at[band])
    before = solution.current_a[p, mix] if before_a is None else before_a
    after = solution.current_a[p, jump] if after_a is None else after_a
    rails, stages = stage_cases(waves, p, bus, band, before)
    circuit = bus_case(waves, p, bus, band)
    rise_a = (after - before)[rails]
    count = len(jump_rises(problem, rails, rise_a, 0.0))
    spacing_s = min(settled_s(circuit), problem.study.control.response_ms * 1e-3 / (count + 1))
    rises = jump_rises(problem, rails, rise_a, spacing_s)
    ratios = np.array([stage.in_over_out for stage in stages])
    listed_w = float((after[rails] * problem.rails.voltage_v[rails] * ratios).sum())
    other_w = max(float(solution.bus_w[p, jump, bus]) - listed_w, 0.0) if after_a is None else 0.0
    top = problem.states.bands - 1 if to_band is None else to_band
    wave = board_wave(circuit, stages, rises, command_of(waves, p, bus, band, top), other_w)
    return Jump(wave, rails, stages, circuit)


def tightest_band(waves: Waves, p: int, bus: int) -> int | None:
    """Return the band whose jump leaves the stages on a bus least room, None where nothing is on in any.

    Bands that no load rises from are asked only where it rises from none.
    """
    states = waves.problem.states
    on = waves.detail.hardware.on_bus[p, bus] & ~states.off[waves.jump_at]
    room = np.where(on, waves.spare_v[p], np.inf).min(axis=1)
    rises = ((states.after_a - states.mix_a > 1e-9) & on).any(axis=1)
    room = np.where(rises | ~rises.any(), room, np.inf)
    band = int(np.argmin(room))
    return band if np.isfinite(room[band]) else None
