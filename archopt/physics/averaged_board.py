"""A bus and its rails coupled in time, for a jump of the whole board.

Every rail is the averaged stage of :mod:`archopt.physics.averaged`, its fastest rise following from the
voltage at its input at every moment; what its inductors carry is the power it draws, with its losses, from
the bus of :mod:`archopt.physics.averaged_bus`, through the plane. So the steps of the loads reach the bus
only as fast as the stages follow them, and the dip slows the stages down.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from archopt.physics.arrays import FloatArray
from archopt.physics.averaged import LEAST_SPAN_S, Rate, integrate, pieces
from archopt.physics.averaged_bus import LEAST_HENRY, LEAST_INPUT_F, LEAST_OHM, STAYS, BusCircuit, Command

LEAST_SLEW = 1.0
LEAST_VOLT = 0.3


@dataclass(frozen=True, slots=True)
class StageCircuit:
    """One rail behind the bus, plain numbers.

    Parameters
    ----------
    output_v, before_a : set point (V) and load before (A)
    max_duty, turns : largest duty and primary over secondary turns (1)
    inductance_h : of one phase (H); inf current slew where it is 0 (linear)
    phases, all_phases : running before the jump, and fitted
    phase_limit_a : most one phase carries (A)
    bandwidth_rad_s, delay_s, wakeup_s : of the loop and of added phases
    capacitance_f, esr_ohm : output bank
    in_over_out : stage input power over output power (1)
    drop_ohm : plane resistance to the stage (ohm), with the other stages' currents at their share
    lockout_v : stage input at which it stops (V)
    restoring : bandwidth of the voltage's return as a share of the loop's (1)
    """

    output_v: float
    before_a: float
    max_duty: float
    turns: float
    inductance_h: float
    phases: int
    all_phases: int
    phase_limit_a: float
    bandwidth_rad_s: float
    delay_s: float
    wakeup_s: float
    capacitance_f: float
    esr_ohm: float
    in_over_out: float
    drop_ohm: float
    lockout_v: float
    restoring: float


@dataclass(frozen=True, slots=True)
class Rise:
    """A rise of one rail's load (A) beginning at a time (s), at a slew (A/s)."""

    rail: int
    begins_s: float
    rise_a: float
    slew_a_per_s: float


@dataclass(frozen=True, slots=True)
class BoardWave:
    """A bus and its rails in time: (T,), rails (T, R)."""

    time_s: FloatArray
    bus_v: FloatArray
    source_a: FloatArray
    power_w: FloatArray
    stage_v: FloatArray
    output_v: FloatArray
    lost_s: float

    @property
    def survives(self) -> bool:
        """Whether every stage kept running."""
        return not np.isfinite(self.lost_s)

    @property
    def dip_v(self) -> float:
        """Largest fall of the bus below its voltage of before (V)."""
        return float(max(self.bus_v[0] - self.bus_v.min(), 0.0))

    def droop_v(self) -> FloatArray:
        """Largest fall of every rail below its voltage of before (V), (R,)."""
        return np.asarray(np.maximum(self.output_v[0] - self.output_v.min(axis=0), 0.0))


def board_wave(
    bus: BusCircuit, stages: Sequence[StageCircuit], rises: Sequence[Rise], command: Command = STAYS,
    other_w: float = 0.0, end_s: float | None = None,
) -> BoardWave:  # fmt: skip
    """Return a bus and its rails in time from time 0, the loads rising as listed.

    Parameters
    ----------
    other_w : constant power drawn from the bus beside the stages (W), the planes' loss among it
    end_s : without it, followed until the bus has answered the last rise and the command has arrived
    """
    count = len(stages)
    volts = np.array([s.output_v for s in stages])
    before = np.array([s.before_a for s in stages])
    bandwidth = np.array([s.bandwidth_rad_s for s in stages])
    delay = np.array([s.delay_s for s in stages])
    farad = np.array([s.capacitance_f for s in stages])
    esr_ohm = np.array([s.esr_ohm for s in stages])
    ratio = np.array([s.in_over_out for s in stages])
    drop_ohm = np.array([s.drop_ohm for s in stages])
    lockout = np.array([s.lockout_v for s in stages])
    henry = np.array([s.inductance_h for s in stages])
    seen = np.array([s.max_duty / s.turns for s in stages])
    restoring = np.array([s.restoring for s in stages]) * bandwidth * farad
    running, fitted = np.array([s.phases for s in stages]), np.array([s.all_phases for s in stages])
    phase_limit = np.array([s.phase_limit_a for s in stages])
    wakeup = np.array([s.wakeup_s for s in stages])
    per_henry = np.where(henry > 0.0, 1.0 / np.maximum(henry, 1e-12), 1e12)
    total = before.copy()
    needs_more = np.full(count, np.inf)  # when the load first exceeds the running phases
    for rise in sorted(rises, key=lambda r: r.begins_s):
        total[rise.rail] += rise.rise_a
        if total[rise.rail] > running[rise.rail] * phase_limit[rise.rail]:
            needs_more[rise.rail] = min(needs_more[rise.rail], rise.begins_s)
    first = np.full(count, np.inf)
    for rise in rises:
        first[rise.rail] = min(first[rise.rail], rise.begins_s)
    last_s = max((r.begins_s + r.rise_a / r.slew_a_per_s for r in rises), default=0.0)
    if end_s is None:
        end_s = last_s + 3.0 * bus.response_s
        if np.isfinite(command.begins_s):
            end_s = max(end_s, command.ends_s(bus.bus_v) + 3.0 * bus.response_s)
    starts = np.array([r.begins_s for r in rises])
    sizes, slews = np.array([r.rise_a for r in rises]), np.array([r.slew_a_per_s for r in rises])
    of_rail = np.zeros((len(rises), count))
    of_rail[np.arange(len(rises)), [r.rail for r in rises]] = 1.0

    def loads(time_s: FloatArray | float) -> FloatArray:
        risen = np.clip((np.asarray(time_s)[..., None] - starts) * slews, 0.0, sizes)
        return np.asarray(before + risen @ of_rail)

    input_f, bulk_f = max(bus.input_f, LEAST_INPUT_F), max(bus.bulk_f, LEAST_INPUT_F)
    bulk_ohm, source_h = max(bus.bulk_esr_ohm, LEAST_OHM), max(bus.source_h, LEAST_HENRY)
    damped, damper_ohm = int(bus.damper_f > 0.0), max(bus.damper_ohm, LEAST_OHM)
    start_a = (float((before * volts * ratio).sum()) + other_w) / bus.bus_v
    bus_restoring = bus.restoring * bus.bandwidth_rad_s * bus.capacitance_f
    floor_v = LEAST_VOLT * bus.bus_v

    def stage_input(bus_v: FloatArray, amps: FloatArray) -> FloatArray:
        return np.asarray(bus_v - drop_ohm * amps * volts * ratio / bus_v)

    def rate_from(start_s: float) -> Rate:
        now_s = start_s + LEAST_SPAN_S
        moving = now_s >= first + delay
        awake = now_s >= needs_more + wakeup
        active = np.where(awake, fitted, running)
        most = active * phase_limit
        limited = np.isfinite(needs_more) & ~awake
        charging = bus.capacitance_f * command.rate_v_per_s(now_s, bus.bus_v)
        waiting = now_s < bus.delay_s
        # between kinks loads and command are straight lines
        load_0, load_rate = loads(start_s), ((now_s >= starts) & (now_s < starts + sizes / slews)) * slews @ of_rail
        target_0, target_rate = bus.bus_v + command.rise_v(start_s, bus.bus_v), command.rate_v_per_s(now_s, bus.bus_v)
        per_volt, down = active * per_henry, -active * volts * per_henry
        watts_per_amp, halted = volts * ratio, bool(limited.any())

        def rate(time_s: float, y: FloatArray) -> FloatArray:
            source, bulk_v, bus_v = float(y[0]), float(y[1]), max(float(y[2]), floor_v)
            amps, caps = y[3 : 3 + count], y[3 + count : 3 + 2 * count]
            load = load_0 + load_rate * (time_s - start_s)
            stage_v = bus_v - drop_ohm * amps * watts_per_amp / bus_v
            up = np.maximum(per_volt * (seen * stage_v - volts), LEAST_SLEW)
            wanted = load + restoring * (volts - caps)
            change = np.minimum(np.maximum(bandwidth * (wanted - amps), down), up)
            if halted:
                change = np.where(limited & (amps >= most), np.minimum(change, 0.0), change)
            change = change * moving
            drawn = (float(np.maximum(amps, 0.0) @ watts_per_amp) + other_w) / bus_v
            target = target_0 + target_rate * (time_s - start_s)
            if waiting:
                moved = 0.0
            elif bus.follows:
                moved = bus.bandwidth_rad_s * (drawn + bus_restoring * (target - bus_v) + charging - source)
            else:
                moved = (target - bus_v - bus.source_ohm * (source - start_a)) / source_h
            if source >= bus.limit_a:
                moved = min(moved, 0.0)
            from_bulk = (bulk_v - bus_v) / bulk_ohm
            out = np.empty(3 + 2 * count + damped)
            from_damper = 0.0
            if damped:
                from_damper = (float(y[-1]) - bus_v) / damper_ohm
                out[-1] = -from_damper / bus.damper_f
            out[0], out[1], out[2] = moved, -from_bulk / bulk_f, (source + from_bulk + from_damper - drawn) / input_f
            out[3 : 3 + count] = change
            out[3 + count : 3 + 2 * count] = (amps - load) / farad
            return out

        return rate

    def lost(_: float, y: FloatArray) -> float:
        bus_v = max(float(y[2]), floor_v)
        inputs = bus_v - drop_ohm * y[3 : 3 + count] * volts * ratio / bus_v - lockout
        return min(float(inputs.min()), bus_v - floor_v) if count else bus_v - floor_v

    kinks = [*starts, *(starts + sizes / slews), *(first + delay), *(needs_more + wakeup), bus.delay_s]
    if np.isfinite(command.begins_s):
        kinks += [command.begins_s, command.ends_s(bus.bus_v)]
    damper_v = [bus.bus_v] * damped
    scale = 10.0 * np.concatenate([[max(start_a, 1.0)], [bus.bus_v] * 2, np.maximum(before, 1.0), volts, damper_v])
    state = np.concatenate([[start_a, bus.bus_v, bus.bus_v], before, volts, damper_v])
    time_s, found, lost_s = integrate(
        rate_from, [float(x) for x in state], pieces([float(k) for k in kinks if np.isfinite(k)], end_s),
        [float(x) for x in scale], lost=lost, method="LSODA", samples=40,
    )  # fmt: skip
    amps, caps = found[:, 3 : 3 + count], found[:, 3 + count : 3 + 2 * count]
    return BoardWave(
        time_s=time_s,
        bus_v=found[:, 2],
        source_a=found[:, 0],
        power_w=(np.maximum(amps, 0.0) * volts * ratio).sum(axis=1) + other_w,
        stage_v=np.stack([stage_input(found[k, 2], amps[k]) for k in range(len(amps))]),
        output_v=caps + esr_ohm * (amps - loads(time_s)),
        lost_s=lost_s,
    )
