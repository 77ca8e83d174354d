"""Averaged circuits integrated in time: a rail whose load changes suddenly.

Switching is averaged away: the stage is a current that the loop steers. After a dead time the loop asks for
the load's current and for what brings the capacitor back, at its bandwidth; the current rises and falls no
faster than the inductors of the running phases allow at full and at zero duty, and waits at the limit of the
running phases until the others are awake. This is what the closed forms of :mod:`archopt.physics.transient`
are derived for, with the voltage's return to its set point added.
"""

from __future__ import annotations

from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from itertools import pairwise
from typing import Any

import numpy as np
from scipy.integrate import solve_ivp

from archopt.physics.arrays import FloatArray

#: Bandwidth at which the voltage comes back to its set point, as a share of the loop's own: where the zero of
#: a usual compensation lies (common practice: a fifth to a tenth of the crossover). At 0 the loop follows the
#: load alone, which is what the closed forms are exact for.
RESTORING = 0.1
SAMPLES = 160
TOLERANCE = 1e-6
LEAST_SPAN_S = 1e-12
LEAST_FARAD = 1e-12

Rate = Callable[[float, FloatArray], FloatArray | list[float]]


@dataclass(frozen=True, slots=True)
class RailCircuit:
    """One rail's stage and output bank, plain numbers.

    Parameters
    ----------
    output_v : set point before the step (V)
    up_a_per_s, down_a_per_s : fastest rise and fall of the running phases' summed current (A/s)
    limit_a : most the running phases carry (A); inf where nothing limits
    bandwidth_rad_s, delay_s : loop bandwidth (rad/s) and dead time before the current moves (s)
    wakeup_s : delay from the step until added phases carry current (s)
    awake_up_a_per_s : fastest rise once they do (A/s)
    capacitance_f, esr_ohm : output bank
    load_line_ohm : set point falls by this much for every ampere of load (ohm)
    restoring : bandwidth of the voltage's return as a share of the loop's (1)
    """

    output_v: float
    up_a_per_s: float
    down_a_per_s: float
    bandwidth_rad_s: float
    delay_s: float
    capacitance_f: float
    esr_ohm: float
    limit_a: float = np.inf
    wakeup_s: float = 0.0
    awake_up_a_per_s: float = 0.0
    load_line_ohm: float = 0.0
    restoring: float = RESTORING

    @property
    def later_up_a_per_s(self) -> float:
        """Fastest rise after the wake-up (A/s)."""
        return max(self.awake_up_a_per_s, self.up_a_per_s)


@dataclass(frozen=True, slots=True)
class LoadStep:
    """A change of load current at time 0: from before to after (A) at a slew (A/s)."""

    before_a: float
    after_a: float
    slew_a_per_s: float

    @property
    def ramp_s(self) -> float:
        """How long the load takes (s)."""
        return abs(self.after_a - self.before_a) / max(self.slew_a_per_s, 1e-9)

    def load_a(self, time_s: FloatArray | float) -> FloatArray:
        """Load current (A) at some times (s), any shape."""
        ramp_s = self.ramp_s
        share = np.clip(np.asarray(time_s) / ramp_s, 0.0, 1.0) if ramp_s > LEAST_SPAN_S else 1.0
        return np.asarray(self.before_a + (self.after_a - self.before_a) * share)


@dataclass(frozen=True, slots=True)
class RailWave:
    """A rail in time: (T,) each. ``settled_v`` is the set point after the step."""

    time_s: FloatArray
    output_v: FloatArray
    stage_a: FloatArray
    load_a: FloatArray
    settled_v: float

    @property
    def droop_v(self) -> float:
        """Largest fall below the set point after the step (V)."""
        return float(max(self.settled_v - self.output_v.min(), 0.0))

    @property
    def release_v(self) -> float:
        """Largest rise above the set point after the step (V)."""
        return float(max(self.output_v.max() - self.settled_v, 0.0))


def pieces(kinks_s: Iterable[float], end_s: float) -> list[tuple[float, float]]:
    """Return the stretches between kinks from 0 to the end, none of them empty."""
    inside = sorted({0.0, end_s, *(k for k in kinks_s if 0.0 < k < end_s)})
    kept = [0.0]
    for at_s in inside[1:]:
        if at_s - kept[-1] > LEAST_SPAN_S:
            kept.append(at_s)
    return list(pairwise(kept))


def integrate(
    rate_from: Callable[[float], Rate],
    state: Sequence[float],
    stretches: Sequence[tuple[float, float]],
    scale: Sequence[float],
    lost: Callable[[float, FloatArray], float] | None = None,
    method: str = "RK45",
    samples: int = SAMPLES,
) -> tuple[FloatArray, FloatArray, float]:
    """Return times (T,), states (T, N) and when it was lost (s), inf when never.

    Parameters
    ----------
    rate_from : returns the rate of change that holds from a given time to the next kink
    state : (N,) at time 0
    stretches : between kinks, as :func:`pieces` gives them
    scale : (N,) size of each state, for the tolerance
    lost : becomes negative where the circuit stops working; integration ends there
    method, samples : of the integration, and times kept of each stretch
    """
    found: Callable[[float, FloatArray], float] | None = None
    if lost is not None:
        inner = lost

        def found(time_s: float, y: FloatArray) -> float:
            return inner(time_s, y)

        found.terminal, found.direction = True, -1.0  # type: ignore[attr-defined]
    now = np.asarray(state, dtype=np.float64)
    times: list[FloatArray] = []
    states: list[FloatArray] = []
    for start_s, stop_s in stretches:
        if lost is not None and lost(start_s, now) < 0.0:
            return np.concatenate([*times, [start_s]]), np.vstack([*states, now[None]]), start_s
        wanted = np.linspace(start_s, stop_s, samples)
        solved: Any = solve_ivp(  # type: ignore[call-overload]
            rate_from(start_s), (start_s, stop_s), now, method=method, t_eval=wanted, rtol=TOLERANCE,
            atol=TOLERANCE * np.asarray(scale), max_step=(stop_s - start_s) / 12.0, events=found,
        )  # fmt: skip
        times.append(np.asarray(solved.t))
        states.append(np.asarray(solved.y).T)
        if solved.status == 1:
            at_s = float(solved.t_events[0][0])
            times.append(np.array([at_s]))
            states.append(np.asarray(solved.y_events[0])[:1])
            return np.concatenate(times), np.vstack(states), at_s
        now = np.asarray(solved.y)[:, -1]
    return np.concatenate(times), np.vstack(states), float("inf")


def rail_wave(circuit: RailCircuit, step: LoadStep, end_s: float | None = None) -> RailWave:
    """Return a rail in time from the moment its load begins to change.

    The stage carries the load of before and the bank is at its set point. Without ``end_s`` it is followed
    until the current has caught up and half the deviation is gone again.
    """
    w, farad = circuit.bandwidth_rad_s, max(circuit.capacitance_f, LEAST_FARAD)
    rise_a = step.after_a - step.before_a
    ramp_s = step.ramp_s
    slew = circuit.up_a_per_s if rise_a >= 0 else circuit.down_a_per_s
    waits = step.after_a > circuit.limit_a
    if end_s is None:
        end_s = max(circuit.delay_s, ramp_s, circuit.wakeup_s if waits else 0.0) + 1.2 * abs(rise_a) / slew + 8.0 / w
    restoring_s = circuit.restoring * w * farad
    set_v = circuit.output_v - circuit.load_line_ohm * rise_a

    def rate_from(start_s: float) -> Rate:
        now_s = start_s + LEAST_SPAN_S  # two kinks closer than this are one
        moves, awake = now_s >= circuit.delay_s, now_s >= circuit.wakeup_s
        up = circuit.later_up_a_per_s if awake else circuit.up_a_per_s

        def rate(time_s: float, y: FloatArray) -> list[float]:
            load_a = float(step.load_a(time_s))
            change = 0.0
            if moves:
                wanted = load_a + restoring_s * (set_v - y[1])
                change = min(max(w * (wanted - y[0]), -circuit.down_a_per_s), up)
                if waits and not awake and y[0] >= circuit.limit_a:
                    change = min(change, 0.0)
            return [change, (y[0] - load_a) / farad]

        return rate

    kinks = [circuit.delay_s, ramp_s, *([circuit.wakeup_s] if waits else [])]
    time_s, state, _ = integrate(
        rate_from, (step.before_a, circuit.output_v), pieces(kinks, end_s),
        (max(abs(rise_a), 1e-3), max(0.01 * circuit.output_v, 1e-4)),
    )  # fmt: skip
    load_a = step.load_a(time_s)
    return RailWave(time_s, state[:, 1] + circuit.esr_ohm * (state[:, 0] - load_a), state[:, 0], load_a, set_v)
