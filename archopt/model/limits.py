"""The limits table: every limit's name, unit and engineering tolerance, and its slack in every design.

One limit is checked in many places and states; a :class:`Ledger` keeps the worst of each. Slack is in the
limit's trade unit, positive where it is met; divided by the tolerance it can be summed and compared.
"""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np

from archopt.model.board import Solution
from archopt.model.cost import Bill, copper_area_m2
from archopt.model.hardware import Hardware
from archopt.model.parameters import BUCK, LINEAR, BoolArray, FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES, FIXED, INPUT, PARENT, Designs
from archopt.model.stages import conduction_ratio, headroom_v, ripple_a, slew_down_a_per_s, slew_up_a_per_s
from archopt.model.states import FALLBACK, JUMP, MIX, StateTable
from archopt.physics.ampacity import current_limit_a
from archopt.physics.stability import least_capacitance_f, regulated_source_h, resistance_limit_ohm
from archopt.physics.transient import rail_droop_v

ROOM = 1e9  # slack of a check that does not apply


@dataclass(frozen=True)
class Limit:
    """One row of the limits table. tolerance: in the unit, or a share of the bound where ``relative``."""

    name: str
    unit: str
    tolerance: float
    relative: bool = False


LIMITS = (
    Limit("rail droop", "% of budget", 5.0),
    Limit("rail release", "% of budget", 5.0),
    Limit("bus dip", "% of bus", 1.0),
    Limit("stage input range", "V", 0.25),
    Limit("bus output range", "V", 0.25),
    Limit("duty", "%", 2.0),
    Limit("on-time", "ns", 5.0),
    Limit("off-time", "ns", 20.0),
    Limit("headroom", "V", 0.05),
    Limit("stage current", "A", 0.05, relative=True),
    Limit("stage temperature", "K", 5.0),
    Limit("converter current", "A", 0.05, relative=True),
    Limit("converter power", "W", 0.05, relative=True),
    Limit("converter temperature", "K", 5.0),
    Limit("jump survival: stage input", "V", 0.25),
    Limit("jump survival: short-time current", "A", 0.05, relative=True),
    Limit("bus drop", "% of bus", 0.5),
    Limit("rail drop", "% of rail", 0.5),
    Limit("copper ampacity", "A", 0.05, relative=True),
    Limit("layer budget", "cm2", 0.05, relative=True),
    Limit("stability", "ratio", 0.1),
    Limit("start-up capacitance", "uF", 0.05, relative=True),
    Limit("input current", "A", 0.05, relative=True),
    Limit("deliverable power", "W", 0.05, relative=True),
    Limit("capacitor voltage", "V", 0.5),
    Limit("capacitor ripple", "A", 0.05, relative=True),
    Limit("loop capacitance range", "uF", 0.05, relative=True),
    Limit("bias supply power", "W", 0.05, relative=True),
    Limit("choices that fit together", "choices", 0.1),
    Limit("cost cap", "currency", 0.02, relative=True),
    Limit("area cap", "cm2", 0.02, relative=True),
)
INDEX = {limit.name: k for k, limit in enumerate(LIMITS)}


@dataclass(frozen=True)
class Place:
    """Where a limit was checked: axis labels of the slack array behind the design axis."""

    axes: tuple[tuple[str, ...], ...]


@dataclass
class Worst:
    """The worst place of one limit in each design: value, bound, slack, normalised (P,) and its text."""

    value: FloatArray
    bound: FloatArray
    slack: FloatArray
    normalised: FloatArray
    where: list[str] | None = None


@dataclass
class Ledger:
    """Collects the worst slack of every limit over P designs; remembers places when ``explain``."""

    count: int
    explain: bool = False
    states: frozenset[str] = frozenset()  # state names, so that a place reads part first, state last
    worst: dict[str, Worst] = field(default_factory=dict)

    def add(
        self,
        name: str,
        value: FloatArray,
        bound: FloatArray | float,
        *,
        at_most: bool,
        axes: tuple[tuple[str, ...], ...] = (),
        applies: BoolArray | bool = True,
    ) -> None:
        """Record one check; value and bound broadcast to (P, *axes), in the limit's unit."""
        limit = LIMITS[INDEX[name]]
        shape = (self.count, *(len(labels) for labels in axes))
        bound_full = np.broadcast_to(bound, shape)
        slack = (bound_full - value) if at_most else (value - bound_full)
        scale = limit.tolerance * np.maximum(np.abs(bound_full), 1e-9) if limit.relative else limit.tolerance
        normalised = np.where(applies, slack / scale, ROOM)
        flat = np.nan_to_num(normalised.reshape(self.count, -1), nan=-ROOM, posinf=ROOM, neginf=-ROOM)
        place = flat.argmin(axis=1)
        rows = np.arange(self.count)
        found = Worst(
            value=np.broadcast_to(value, shape).reshape(self.count, -1)[rows, place],
            bound=bound_full.reshape(self.count, -1)[rows, place],
            slack=slack.reshape(self.count, -1)[rows, place],
            normalised=flat[rows, place],
        )
        if self.explain:
            found.where = [text_of(axes, int(k), self.states) for k in place]
        self.keep(name, found)

    def keep(self, name: str, found: Worst) -> None:
        """Merge a check into the worst so far."""
        known = self.worst.get(name)
        if known is None:
            self.worst[name] = found
            return
        less = found.normalised < known.normalised
        for key in ("value", "bound", "slack", "normalised"):
            setattr(known, key, np.where(less, getattr(found, key), getattr(known, key)))
        if known.where is not None and found.where is not None:
            known.where = [f if bad else k for f, k, bad in zip(found.where, known.where, less, strict=True)]

    def normalised(self) -> FloatArray:
        """Return (P, limits) normalised slack, room where a limit was never checked."""
        out = np.full((self.count, len(LIMITS)), ROOM)
        for name, worst in self.worst.items():
            out[:, INDEX[name]] = worst.normalised
        return out


def text_of(axes: tuple[tuple[str, ...], ...], place: int, states: frozenset[str]) -> str:
    """Return the labels of a flat place, ``part; state``."""
    if not axes:
        return "board; "
    where = np.unravel_index(place, tuple(len(labels) for labels in axes))
    labels = [names[int(k)] for names, k in zip(axes, where, strict=True)]
    if labels[0] in states:
        labels = [*(labels[1:] or ["board"]), labels[0]]
    return "; ".join(labels)


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
    """Return droop and release of all rails at their load steps, with the phases running in each band."""
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
    loop = (
        stages.bandwidth_rad_s[stage],
        stages.delay_s[stage],
        bank_f,
        esr,
        rails.load_slew_a_per_s[:, None],
    )
    droop = rail_droop_v(rails.step_a[:, None], up, *loop, deficit, stages.wakeup_s[stage])
    release = rail_droop_v(rails.step_a[:, None], down, *loop)
    awake = ~states.mix_off.T
    droop, release = np.where(awake, droop, 0.0), np.where(awake, release, 0.0)
    budget = 100.0 / rails.budget_v[:, None]
    return Droop(droop, release, droop * budget, release * budget)


def check_rails(situation: Situation, droop: Droop, ledger: Ledger) -> None:
    """Check droop, release, duty, times, headroom, input range, current and temperature of every stage."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution, stages, rails = situation.solution, problem.stages, problem.rails
    names = situation.rail_names
    bands = tuple(f"band {k + 1}" for k in range(states.bands))
    ledger.add("rail droop", droop.droop_percent, 100.0, at_most=True, axes=(names, bands))
    ledger.add("rail release", droop.release_percent, 100.0, at_most=True, axes=(names, bands))
    steady = np.concatenate([states.of_kind(MIX), states.of_kind(FALLBACK)])
    axes = (situation.state_names(steady), names)
    volts, amps = solution.stage_v[:, steady], solution.current_a[:, steady]
    running = hardware.running[:, steady]
    stage = np.broadcast_to(hardware.stage[:, None, :], volts.shape)
    on = ~states.off[steady]
    per_phase = amps / running
    drop_v = np.where(rails.remote_sense, amps * hardware.pour_ohm[:, None, :], 0.0)
    duty = conduction_ratio(stages, stage, volts, rails.voltage_v + drop_v, per_phase)
    frequency = stages.frequency_hz[stage]
    is_buck = stages.kind[stage] == BUCK
    ledger.add(
        "duty", 100.0 * duty, 100.0 * stages.max_duty[stage], at_most=True, axes=axes,
        applies=on & (stages.kind[stage] != LINEAR),
    )  # fmt: skip
    ledger.add(
        "on-time", 1e9 * duty / frequency, 1e9 * stages.min_on_s[stage], at_most=False, axes=axes,
        applies=on & is_buck,
    )  # fmt: skip
    ledger.add(
        "off-time", 1e9 * (1.0 - duty) / frequency, 1e9 * stages.min_off_s[stage], at_most=False, axes=axes,
        applies=on & is_buck,
    )  # fmt: skip
    ledger.add(
        "headroom", headroom_v(stages, stage, volts, rails.voltage_v + drop_v, amps), 0.0, at_most=False, axes=axes,
        applies=on & (stages.kind[stage] == LINEAR),
    )  # fmt: skip
    ledger.add("stage input range", volts, stages.input_min_v[stage], at_most=False, axes=axes, applies=on)
    ledger.add("stage input range", volts, stages.input_max_v[stage], at_most=True, axes=axes, applies=on)
    limit_a = stages.phase_limit_a[stage]
    ledger.add("stage current", per_phase, limit_a, at_most=True, axes=axes, applies=on)
    own = rails.max_a / hardware.phases
    ledger.add(
        "stage current", own, stages.phase_limit_a[hardware.stage], at_most=True,
        axes=(tuple(f"{name} at its own maximum" for name in names),),
    )  # fmt: skip
    heat = solution.stage_loss_w[:, steady] / running + hardware.bias_w[:, None, :]
    temperature = states.ambient_degc[steady][:, None] + stages.thermal_k_per_w[stage] * heat
    junction = problem.study.derating.junction_degc
    ledger.add("stage temperature", temperature, junction, at_most=True, axes=axes, applies=on)
    ripple = np.sqrt(running / 12.0) * ripple_a(stages, stage, volts, rails.voltage_v, per_phase)
    capacitors = problem.capacitors
    bank = situation.designs.rail("bank")
    pieces = problem.bank_counts[situation.designs.rail("bank_count")]
    permitted = pieces * capacitors.ripple_a[bank] * problem.study.derating.current
    ledger.add("capacitor ripple", ripple, permitted[:, None, :], at_most=True, axes=axes, applies=on)
    bank_uf = 1e6 * hardware.bank_f
    rail_axes = (names,)
    ledger.add(
        "loop capacitance range",
        bank_uf,
        1e6 * stages.loop_min_f[hardware.stage],
        at_most=False,
        axes=rail_axes,
    )
    ledger.add(
        "loop capacitance range",
        bank_uf,
        1e6 * stages.loop_max_f[hardware.stage],
        at_most=True,
        axes=rail_axes,
    )


def check_jump(situation: Situation, ledger: Ledger) -> None:
    """Check that every stage and converter lives through the largest unannounced jump at the dipped bus."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution, stages, rails = situation.solution, problem.stages, problem.rails
    jump = states.of_kind(JUMP)
    volts, amps = solution.stage_v[:, jump], solution.current_a[:, jump]
    axes = (situation.state_names(jump), situation.rail_names)
    stage = np.broadcast_to(hardware.stage[:, None, :], volts.shape)
    on = ~states.off[jump]
    running = hardware.running[:, jump]
    per_phase = np.minimum(amps / running, stages.phase_limit_a[stage])
    drop_v = np.where(rails.remote_sense, amps * hardware.pour_ohm[:, None, :], 0.0)
    duty = conduction_ratio(stages, stage, volts, rails.voltage_v + drop_v, per_phase)
    spare = np.where(stages.kind[stage] == LINEAR, np.inf, volts * (1.0 - duty / stages.max_duty[stage]))
    spare = np.minimum(spare, volts - stages.input_min_v[stage])
    linear = headroom_v(stages, stage, volts, rails.voltage_v + drop_v, amps)
    spare = np.minimum(spare, linear)
    ledger.add("jump survival: stage input", volts, volts - spare, at_most=False, axes=axes, applies=on)
    converters = problem.converters
    index = np.maximum(hardware.converter, 0)[..., None]
    applies = (hardware.converter >= 0)[..., None] & ~hardware.fixed_ratio[..., None]
    fixed = (situation.designs.bus("control") == FIXED)[..., None]
    band_v, units = hardware.band_v, hardware.units_band
    top_v, top_units = band_v[..., -1:], units[..., -1:]
    slew = np.maximum(converters.slew_v_per_s[index], 1e-3)
    rising = (top_v > band_v) & ~fixed
    rise_s = np.where(rising, problem.study.control.response_ms * 1e-3 + (top_v - band_v) / slew, 0.0)
    wait_s = np.where(units < top_units, converters.wakeup_s[index], 0.0)
    charge_a = np.where(rising, hardware.bulk_nominal_f[..., None] * slew, 0.0)
    bus_a = solution.bus_a[:, jump].transpose(0, 2, 1) + charge_a
    bound = units * np.where(
        np.maximum(rise_s, wait_s) <= converters.overload_s[index],
        np.maximum(converters.overload_a[index], converters.limit_a[index]),
        converters.limit_a[index],
    )
    names = tuple(f"{name} converter" for name in BUS_NAMES)
    ledger.add(
        "jump survival: short-time current", bus_a, bound, at_most=True,
        axes=(names, situation.state_names(jump)), applies=applies,
    )  # fmt: skip


def check_buses(situation: Situation, ledger: Ledger) -> None:
    """Check range, current, power, temperature, dip, drop, start-up and stability of every bus."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution, converters, study = situation.solution, problem.converters, problem.study
    used = hardware.converter >= 0
    if not used.any():
        return
    index = np.maximum(hardware.converter, 0)
    regulated = used & ~hardware.fixed_ratio
    steady = np.concatenate([states.of_kind(MIX), states.of_kind(FALLBACK)])
    names = tuple(f"{name} converter" for name in BUS_NAMES)
    axes = (situation.state_names(steady), names)
    units = hardware.units_running[:, steady]
    carrying = np.maximum(units - study.derating.spare_converters, 0.5)
    bus_a, bus_w = solution.bus_a[:, steady], solution.bus_w[:, steady]
    here = used[:, None, :]
    ledger.add(
        "converter current", bus_a / carrying, converters.limit_a[index][:, None, :], at_most=True, axes=axes,
        applies=here,
    )  # fmt: skip
    ledger.add(
        "converter power", bus_w / carrying, converters.limit_w[index][:, None, :], at_most=True, axes=axes,
        applies=here,
    )  # fmt: skip
    ledger.add(
        "converter temperature", solution.converter_degc[:, steady], study.derating.junction_degc, at_most=True,
        axes=axes, applies=here,
    )  # fmt: skip
    bands = tuple(f"band {k + 1}" for k in range(states.bands))
    bus_axes = (BUS_NAMES, bands)
    band_v = hardware.band_v
    nominal_v = problem.grid_v[situation.designs.bus("nominal_v")]
    low_v = np.minimum(band_v.min(axis=2), nominal_v)
    high_v = np.maximum(band_v.max(axis=2), nominal_v)
    ledger.add(
        "bus output range",
        low_v,
        converters.output_min_v[index],
        at_most=False,
        axes=(BUS_NAMES,),
        applies=regulated,
    )
    ledger.add(
        "bus output range",
        high_v,
        converters.output_max_v[index],
        at_most=True,
        axes=(BUS_NAMES,),
        applies=regulated,
    )
    set_v = np.where(
        hardware.fixed_ratio[..., None], (converters.ratio[index] * study.supply.low_v)[..., None], band_v
    )
    dip = 100.0 * solution.dip_v / set_v
    ledger.add(
        "bus dip", dip, study.control.bus_dip_percent, at_most=True, axes=bus_axes, applies=used[..., None]
    )
    rail_axes = (situation.state_names(steady), situation.rail_names)
    on_bus = hardware.on_bus.any(axis=1)[:, None, :]
    bus_of = np.where(hardware.on_bus[:, 1], 1, 0)[:, None, :]
    feed_v = np.take_along_axis(
        solution.bus_v[:, steady], np.broadcast_to(bus_of, on_bus.shape).repeat(len(steady), 1), 2
    )
    drop = 100.0 * (1.0 - solution.stage_v[:, steady] / np.maximum(feed_v, 1e-3))
    ledger.add(
        "bus drop", drop, study.board.bus_drop_budget_percent, at_most=True, axes=rail_axes,
        applies=on_bus & ~states.off[steady],
    )  # fmt: skip
    ledger.add(
        "start-up capacitance", 1e6 * hardware.bulk_nominal_f,
        1e6 * converters.startup_max_f[index] * hardware.units, at_most=True, axes=(BUS_NAMES,), applies=used,
    )  # fmt: skip
    top_v = np.where(hardware.fixed_ratio, converters.ratio[index] * study.supply.high_v, high_v)
    bulk_rated = problem.capacitors.rated_v[situation.designs.bus("bulk")] * study.derating.voltage
    ledger.add("capacitor voltage", top_v, bulk_rated, at_most=True, axes=(BUS_NAMES,), applies=used)
    check_stability(situation, ledger, index, used)


def check_stability(situation: Situation, ledger: Ledger, index: IntArray, used: BoolArray) -> None:
    """Check the bus capacitance against constant-power loads after a jump, at the dipped voltage."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    converters, path = problem.converters, problem.path
    jump = states.of_kind(JUMP)
    power = np.maximum(situation.solution.bus_w[:, jump].transpose(0, 2, 1), 1e-3)
    volts = np.maximum(situation.solution.bus_v[:, jump].transpose(0, 2, 1), 1e-3)
    units = hardware.units_band
    ratio = converters.ratio[index][..., None]
    output_ohm = converters.output_ohm[index][..., None] / units
    bandwidth_hz = converters.bandwidth_rad_s[index][..., None] / (2.0 * np.pi)
    fixed_ratio = hardware.fixed_ratio[..., None]
    source_ohm = np.where(fixed_ratio, output_ohm + path.resistance_ohm * ratio**2, output_ohm)
    source_h = np.where(
        fixed_ratio, path.inductance_h * ratio**2, regulated_source_h(output_ohm, bandwidth_hz)
    )
    source_ohm = np.maximum(source_ohm, 1e-6)
    least = least_capacitance_f(source_ohm, source_h, power, volts)
    margin = np.minimum(hardware.bulk_f[..., None] / np.maximum(least, 1e-12), 1e6)
    resistive = np.minimum(resistance_limit_ohm(power, volts) / source_ohm, 1e6)
    bound = problem.study.control.stability_margin
    axes = (BUS_NAMES, situation.state_names(jump))
    ledger.add(
        "stability", np.minimum(margin, resistive), bound, at_most=False, axes=axes, applies=used[..., None]
    )


def check_copper(situation: Situation, ledger: Ledger) -> None:
    """Check drops, ampacity and the layer budget."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    rails, board, solution = problem.rails, problem.study.board, situation.solution
    steady = np.concatenate([states.of_kind(MIX), states.of_kind(FALLBACK)])
    axes = (situation.state_names(steady), situation.rail_names)
    amps = solution.current_a[:, steady]
    drop = amps * hardware.pour_ohm[:, None, :] / rails.voltage_v
    ledger.add("rail drop", 100.0 * drop, 100.0 * rails.drop_budget, at_most=True, axes=axes)
    thickness = problem.stacks.thickness_m[hardware.stack][:, None]
    pairs = situation.designs.rail("pairs")
    limit_a = pairs * current_limit_a(rails.copper_width_m, thickness, board.copper_rise_k, inner=True)
    ledger.add("copper ampacity", amps, limit_a[:, None, :], at_most=True, axes=axes)
    width_m = np.sqrt(board.bus_area_cm2 * 1e-4 / max(board.bus_shared_squares + board.bus_own_squares, 0.1))
    bus_pairs = situation.designs.bus("pairs")
    bus_limit = bus_pairs * current_limit_a(width_m, thickness, board.copper_rise_k, inner=True)
    bus_axes = (situation.state_names(steady), tuple(f"{name} plane" for name in BUS_NAMES))
    ledger.add(
        "copper ampacity", solution.bus_a[:, steady], bus_limit[:, None, :], at_most=True, axes=bus_axes,
        applies=(hardware.converter >= 0)[:, None, :],
    )  # fmt: skip
    stack_pairs = problem.stacks.pairs[hardware.stack]
    offered = stack_pairs * board.area_cm2 * board.usable_copper_share
    ledger.add("layer budget", 1e4 * copper_area_m2(problem, situation.designs), offered, at_most=True)


def check_board(situation: Situation, ledger: Ledger) -> None:
    """Check the input path, the bias supply, caps, and that the choices fit together."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution, board = situation.solution, problem.study.board
    steady = np.concatenate([states.of_kind(MIX), states.of_kind(JUMP), states.of_kind(FALLBACK)])
    axes = (situation.state_names(steady),)
    ledger.add("input current", solution.input_a[:, steady], problem.path.limit_a, at_most=True, axes=axes)
    every = (states.name,)
    most = states.input_v**2 / (4.0 * max(problem.path.resistance_ohm, 1e-12))
    wanted = solution.input_w - solution.path_w + solution.missing_w
    ledger.add("deliverable power", wanted, most, at_most=True, axes=every)
    needs_bias = (hardware.bias_w > 0).any(axis=1)
    if len(problem.biases.names):
        bound = problem.biases.max_power_w[np.maximum(hardware.bias, 0)]
        demand = solution.bias_out_w[:, steady]
        applies = needs_bias[:, None] & (hardware.bias >= 0)[:, None]
        ledger.add("bias supply power", demand, bound[:, None], at_most=True, axes=axes, applies=applies)
    if np.isfinite(board.cost_cap):
        ledger.add("cost cap", situation.bill.total, board.cost_cap, at_most=True)
    if np.isfinite(board.area_cap_cm2):
        ledger.add("area cap", situation.bill.area_mm2 * 0.01, board.area_cap_cm2, at_most=True)
    ledger.add("choices that fit together", misfits(situation).astype(np.float64), 0.0, at_most=True)


def misfits(situation: Situation) -> IntArray:
    """Return how many choices of each design cannot be combined, (P,)."""
    problem, hardware, designs = situation.problem, situation.hardware, situation.designs
    stage, feed = hardware.stage, hardware.feed
    rail = np.arange(stage.shape[1])
    count = (~problem.feed_ok[rail, stage, feed]).sum(axis=1)
    count += (hardware.phases > problem.stages.max_phases[stage]).sum(axis=1)
    count += (~problem.capacitor_ok[rail, designs.rail("bank")]).sum(axis=1)
    parent = np.maximum(hardware.parent, 0)
    grandparent = np.take_along_axis(hardware.parent, parent, axis=1)
    count += ((hardware.parent >= 0) & (grandparent >= 0)).sum(axis=1)
    used = hardware.on_bus.any(axis=2)
    count += (used & (hardware.converter < 0)).sum(axis=1)
    if len(problem.converters.names):
        most = problem.converters.max_parallel[np.maximum(hardware.converter, 0)]
        count += ((hardware.converter >= 0) & (hardware.units > most)).sum(axis=1)
    pairs = problem.stacks.pairs[hardware.stack][:, None]
    count += (designs.rail("pairs") > pairs).sum(axis=1)
    count += (used & (designs.bus("pairs") > pairs)).sum(axis=1)
    return count + bias_misfits(situation) + supervisor_misfits(situation, used)


def bias_misfits(situation: Situation) -> IntArray:
    """Return 1 where gates need a bias that is missing or cannot run from its feed."""
    problem, hardware = situation.problem, situation.hardware
    needs = (hardware.bias_w > 0).any(axis=1)
    if not len(problem.biases.names):
        return needs.astype(np.int64)
    index = np.maximum(hardware.bias, 0)
    supply = problem.study.supply
    biases = problem.biases
    low_bus = hardware.band_v[:, 0].min(axis=1) - hardware_dip(situation)
    high_bus = hardware.band_v[:, 0].max(axis=1)
    on_bus = hardware.bias_on_bus
    low = np.where(on_bus, low_bus, supply.low_v)
    high = np.where(on_bus, high_bus, supply.high_v)
    fits = (biases.input_min_v[index] <= low) & (biases.input_max_v[index] >= high)
    fits &= on_bus | biases.isolated[index] | (not supply.isolation)
    fits &= ~on_bus | hardware.on_bus[:, 0].any(axis=1)
    return np.where(needs, ~((hardware.bias >= 0) & fits), False).astype(np.int64)


def hardware_dip(situation: Situation) -> FloatArray:
    """Return the deepest dip of bus A, V, (P,)."""
    return np.asarray(situation.solution.dip_v[:, 0].max(axis=1))


def supervisor_misfits(situation: Situation, used: BoolArray) -> IntArray:
    """Return 1 where a bus moves and nothing that can move it is on the board."""
    problem, hardware = situation.problem, situation.hardware
    control = situation.designs.bus("control")
    level = np.where(used, control, 0)
    needed, buses = level.max(axis=1), (level > 0).sum(axis=1)
    if not len(problem.supervisors.names):
        return (needed > 0).astype(np.int64)
    index = np.maximum(hardware.supervisor, 0)
    fits = (problem.supervisors.level[index] >= needed) & (problem.supervisors.buses[index] >= buses)
    return ((needed > 0) & ~((hardware.supervisor >= 0) & fits)).astype(np.int64)


def check_all(situation: Situation, droop: Droop, *, explain: bool = False) -> Ledger:
    """Check every limit of a batch of solved designs."""
    ledger = Ledger(len(situation.designs), explain=explain, states=frozenset(situation.states.name))
    check_rails(situation, droop, ledger)
    check_jump(situation, ledger)
    check_buses(situation, ledger)
    check_copper(situation, ledger)
    check_board(situation, ledger)
    return ledger


__all__ = ["INPUT", "LIMITS", "PARENT", "Droop", "Ledger", "Limit", "Situation", "check_all", "rail_droop"]
