"""A bus in time: its source, bulk bank and stage inputs, and constant-power loads that jump.

The source is one of two. A regulated converter's loop follows what the bus draws at its bandwidth, after a
dead time at every step, and brings the voltage back to its command. A fixed-ratio converter, or a regulated
one seen as its output impedance, is a voltage behind a resistance and an inductance. Loads hold their power
whatever the voltage is, until it falls to their lock-out: there the bus is lost.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.physics.arrays import FloatArray
from archopt.physics.averaged import LEAST_SPAN_S, RESTORING, Rate, integrate, pieces

#: The stages' input capacitance that is counted at least: keeps the bus voltage a state of its own (F).
LEAST_INPUT_F = 1e-8
LEAST_OHM = 1e-6
LEAST_HENRY = 1e-12
LOST_SHARE = 0.02
SETTLING = 8.0


@dataclass(frozen=True, slots=True)
class BusCircuit:
    """A bus and its source, plain numbers.

    Parameters
    ----------
    bus_v : bus voltage before anything happens (V)
    bulk_f, bulk_esr_ohm : bulk bank (F, ohm)
    input_f : the stages' own input capacitance, without resistance (F)
    bandwidth_rad_s, delay_s : of a regulated converter's loop (rad/s) and its dead time (s)
    source_ohm, source_h : series resistance and inductance of the source (ohm, H)
    follows : the loop follows the load (regulated); otherwise the source is a voltage behind its impedance
    limit_a : most the source carries for a short time (A)
    lockout_v : bus voltage at which the first load stops (V)
    restoring : bandwidth of the voltage's return to its command, as a share of the loop's (1)
    damper_f, damper_ohm : a damping bank beside the bulk bank (F, ohm); 0 F where there is none
    """

    bus_v: float
    bulk_f: float
    bulk_esr_ohm: float
    input_f: float
    bandwidth_rad_s: float
    delay_s: float
    source_ohm: float
    source_h: float
    follows: bool
    limit_a: float = np.inf
    lockout_v: float = 0.0
    restoring: float = RESTORING
    damper_f: float = 0.0
    damper_ohm: float = 0.0

    @property
    def capacitance_f(self) -> float:
        """Everything that holds the bus up (F)."""
        return self.bulk_f + self.damper_f + self.input_f

    @property
    def response_s(self) -> float:
        """About how long the source takes to answer a step (s)."""
        if self.follows:
            return self.delay_s + 3.0 / self.bandwidth_rad_s
        period_s = 2.0 * np.pi * float(np.sqrt(max(self.source_h, LEAST_HENRY) * self.capacitance_f))
        return self.delay_s + period_s + 3.0 * self.source_ohm * self.capacitance_f


@dataclass(frozen=True, slots=True)
class PowerTrain:
    """Power drawn from a bus: a rise from before to after (W) in equal steps, one every ``spacing_s``.

    ``slew_w_per_s`` is how fast each step rises; the first begins at time 0.
    """

    before_w: float
    after_w: float
    steps: int = 1
    spacing_s: float = 0.0
    slew_w_per_s: float = np.inf

    @property
    def starts_s(self) -> FloatArray:
        """When each step begins (s), (steps,)."""
        return np.arange(max(self.steps, 1), dtype=np.float64) * self.spacing_s

    @property
    def rise_s(self) -> float:
        """How long one step takes (s)."""
        return abs(self.after_w - self.before_w) / max(self.steps, 1) / self.slew_w_per_s

    def power_w(self, time_s: FloatArray | float) -> FloatArray:
        """Power (W) at some times (s); a step without slew counts from its own moment on."""
        since_s = np.asarray(time_s)[..., None] - self.starts_s
        done = (since_s >= 0.0) * 1.0 if self.rise_s <= 0.0 else np.clip(since_s / self.rise_s, 0.0, 1.0)
        return np.asarray(self.before_w + (self.after_w - self.before_w) * done.mean(axis=-1))


@dataclass(frozen=True, slots=True)
class Command:
    """A change of the bus voltage: it begins so long after the jump (s), at a slew (V/s), and ends at a voltage."""

    begins_s: float = np.inf
    slew_v_per_s: float = 1.0
    top_v: float = 0.0

    def rise_v(self, time_s: float, from_v: float) -> float:
        """How far the command has moved (V)."""
        if not np.isfinite(self.begins_s):
            return 0.0
        moved_v = self.slew_v_per_s * max(time_s - self.begins_s, 0.0)
        return float(np.sign(self.top_v - from_v) * min(moved_v, abs(self.top_v - from_v)))

    def rate_v_per_s(self, time_s: float, from_v: float) -> float:
        """How fast the command moves (V/s); 0 before and after."""
        moving = self.begins_s <= time_s < self.ends_s(from_v)
        return float(np.sign(self.top_v - from_v)) * self.slew_v_per_s if moving else 0.0

    def ends_s(self, from_v: float) -> float:
        """When it has arrived (s)."""
        return self.begins_s + abs(self.top_v - from_v) / max(self.slew_v_per_s, 1e-9)


@dataclass(frozen=True, slots=True)
class BusWave:
    """A bus in time: (T,) each; ``lost_s`` is when the first load locked out, inf when none did."""

    time_s: FloatArray
    bus_v: FloatArray
    source_a: FloatArray
    power_w: FloatArray
    lost_s: float

    @property
    def survives(self) -> bool:
        """Whether every load kept running."""
        return not np.isfinite(self.lost_s)

    @property
    def lowest_v(self) -> float:
        """Lowest bus voltage (V)."""
        return float(self.bus_v.min())

    @property
    def dip_v(self) -> float:
        """Largest fall below the voltage of before (V)."""
        return float(max(self.bus_v[0] - self.bus_v.min(), 0.0))

    @property
    def largest_a(self) -> float:
        """Largest current of the source (A)."""
        return float(self.source_a.max())


STAYS = Command()


def bus_wave(
    circuit: BusCircuit, train: PowerTrain, command: Command = STAYS, end_s: float | None = None
) -> BusWave:
    """Return a bus in time from the first step of its loads' power.

    Without ``end_s`` it is followed until the source has answered the last step and the command has arrived.
    """
    starts_s = train.starts_s
    if end_s is None:
        end_s = float(starts_s[-1]) + train.rise_s + SETTLING * circuit.response_s / 3.0
        if np.isfinite(command.begins_s):
            end_s = max(end_s, command.ends_s(circuit.bus_v) + SETTLING * circuit.response_s)
    input_f, bulk_f = max(circuit.input_f, LEAST_INPUT_F), max(circuit.bulk_f, LEAST_INPUT_F)
    esr = max(circuit.bulk_esr_ohm, LEAST_OHM)
    henry = max(circuit.source_h, LEAST_HENRY)
    damped, damper_ohm = circuit.damper_f > 0.0, max(circuit.damper_ohm, LEAST_OHM)
    before_a = train.before_w / circuit.bus_v
    w = circuit.bandwidth_rad_s
    restoring_s = circuit.restoring * w * circuit.capacitance_f
    floor_v = max(circuit.lockout_v, LOST_SHARE * circuit.bus_v)

    def rate_from(start_s: float) -> Rate:
        now_s = start_s + LEAST_SPAN_S
        waiting = bool(np.any((now_s >= starts_s) & (now_s < starts_s + circuit.delay_s)))
        power_w = float(train.power_w(now_s))
        steady = train.rise_s <= 0.0
        charging_a = circuit.capacitance_f * command.rate_v_per_s(now_s, circuit.bus_v)

        def rate(time_s: float, y: FloatArray) -> list[float]:
            current_a, bulk_v, bus_v = y[0], y[1], max(y[2], 0.5 * floor_v)
            drawn_a = (power_w if steady else float(train.power_w(time_s))) / bus_v
            rise_v = command.rise_v(time_s, circuit.bus_v)
            change = 0.0
            if not waiting:
                if circuit.follows:
                    wanted_a = drawn_a + restoring_s * (circuit.bus_v + rise_v - bus_v) + charging_a
                    change = w * (wanted_a - current_a)
                else:
                    change = (circuit.bus_v + rise_v - bus_v - circuit.source_ohm * (current_a - before_a)) / henry
            if current_a >= circuit.limit_a:
                change = min(change, 0.0)
            from_bulk_a = (bulk_v - bus_v) / esr
            if not damped:
                return [change, -from_bulk_a / bulk_f, (current_a + from_bulk_a - drawn_a) / input_f]
            from_damper_a = (y[3] - bus_v) / damper_ohm
            bus_rate = (current_a + from_bulk_a + from_damper_a - drawn_a) / input_f
            return [change, -from_bulk_a / bulk_f, bus_rate, -from_damper_a / circuit.damper_f]

        return rate

    kinks = [*starts_s, *(starts_s + circuit.delay_s), *((starts_s + train.rise_s) if train.rise_s > 0 else ())]
    if np.isfinite(command.begins_s):
        kinks += [command.begins_s, command.ends_s(circuit.bus_v)]
    volts = (circuit.bus_v,) * (3 if damped else 2)
    scale = (max(before_a, train.after_w / circuit.bus_v, 1e-3), *volts)
    time_s, state, lost_s = integrate(
        rate_from, (before_a, *volts), pieces([float(k) for k in kinks], end_s), scale,
        lost=lambda _, y: float(y[2] - floor_v), method="LSODA",
    )  # fmt: skip
    return BusWave(time_s, state[:, 2], state[:, 0], train.power_w(time_s), lost_s)


def bus_eigenvalues(circuit: BusCircuit, power_w: float) -> FloatArray:
    """Return the real parts of the eigenvalues of a bus linearised at a constant power, (3,) or (4,) 1/s.

    State: source current, bulk voltage, bus voltage, and the damping bank's where there is one. The loads are the
    conductance -P/V^2. The dead time is left out: it belongs to the step.
    """
    gain_s = power_w / circuit.bus_v**2
    input_f, esr = max(circuit.input_f, LEAST_INPUT_F), max(circuit.bulk_esr_ohm, LEAST_OHM)
    if circuit.follows:
        w = circuit.bandwidth_rad_s
        source = [-w, 0.0, -w * (gain_s + circuit.restoring * w * circuit.capacitance_f)]
    else:
        henry = max(circuit.source_h, LEAST_HENRY)
        source = [-circuit.source_ohm / henry, 0.0, -1.0 / henry]
    bulk_f = max(circuit.bulk_f, LEAST_INPUT_F)
    matrix = np.array(
        [
            source,
            [0.0, -1.0 / (esr * bulk_f), 1.0 / (esr * bulk_f)],
            [1.0 / input_f, 1.0 / (esr * input_f), (gain_s - 1.0 / esr) / input_f],
        ]
    )
    if circuit.damper_f > 0.0:
        ohm, small = max(circuit.damper_ohm, LEAST_OHM), matrix
        matrix = np.zeros((4, 4))
        matrix[:3, :3] = small
        matrix[2, 2] -= 1.0 / (ohm * input_f)
        matrix[2, 3] = 1.0 / (ohm * input_f)
        matrix[3, 2], matrix[3, 3] = 1.0 / (ohm * circuit.damper_f), -1.0 / (ohm * circuit.damper_f)
    return np.asarray(np.sort(np.linalg.eigvals(matrix).real)[::-1])
