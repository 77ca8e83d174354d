"""A whole design computed again, slowly: one number at a time, from the study and the catalogue rows.

Nothing here reads the arrays the model compiles. What is shared with it: the list of states (checked by tests
of their own), the names of the choices, and closed forms of the physics room for transients and copper.
"""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import dataclass, field, replace
from typing import cast

from archopt.inputs.parts import (
    BiasSupply,
    BuckStage,
    BusConverter,
    Capacitor,
    CopperFoil,
    Inductor,
    InputPath,
    LinearRegulator,
    Part,
    SingleStage,
    Stack,
    Supervisor,
)  # fmt: skip
from archopt.inputs.resolved import Catalogue, Rail, ResolvedStudy
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.model.states import ENERGY, FALLBACK, HELD, JUMP, MIX, StateTable
from archopt.physics.transient import bus_dip_v, rail_droop_v
from equivalence.reference_copper import Copper
from equivalence.reference_measured import measured_unit
from equivalence.reference_stage import Point, buck_phase, converter_unit, linear_unit, thermal_k_per_w

TWO_PI = 2.0 * math.pi
ORDER = ("input", "bus_a", "bus_b")


@dataclass
class Bus:
    """One used bus: its converter, copper and what holds it up."""

    name: str
    row: BusConverter
    units: int
    nominal_v: float
    volts: list[float]  # by band, the fall-back last
    running: list[int]  # by band, the fall-back last
    pairs: int
    held_f: list[float]  # by band, effective at its voltage, with the stages' own inputs
    damper_f: list[float]
    damper_ohm: float
    stored_f: float  # at most
    esr_ohm: float
    rails: list[int]

    @property
    def follows_input(self) -> bool:
        return self.row.kind == "fixed_ratio"


@dataclass
class Net:
    """One rail as built."""

    rail: Rail
    feed: str
    row: BuckStage | SingleStage | LinearRegulator
    coil: Inductor | None
    phases: int
    running: list[int]  # by band, the fall-back last
    bank_f: float
    bank_ohm: float
    pairs: int


@dataclass
class StateResult:
    """The board in one state."""

    input_w: float = 0.0
    path_w: float = 0.0
    loss_w: float = 0.0
    node_v: float = 0.0
    bias_w: float = 0.0
    stage_v: list[float] = field(default_factory=list)
    stage_in_w: list[float] = field(default_factory=list)
    current_a: list[float] = field(default_factory=list)
    bus_v: dict[str, float] = field(default_factory=dict)
    converter_w: dict[str, float] = field(default_factory=dict)
    plane_w: dict[str, float] = field(default_factory=dict)


class Reference:
    """One decided design of a problem, computed again."""

    def __init__(self, problem: Problem, row: object) -> None:
        self.study: ResolvedStudy = problem.study
        self.catalogue: Catalogue = problem.catalogue
        self.states: StateTable = problem.states
        self.choices = problem.space.describe(row)  # type: ignore[arg-type]
        designs = Designs(problem.layout, row[None])  # type: ignore[index]
        step = self.study.control.grid_v
        first = math.ceil(self.study.control.bus_min_v / step - 1e-9)
        self.volts = [[(first + int(k)) * step for k in bus] for bus in designs.volts[0]]
        self.units = designs.running_converters[0].tolist()
        self.phases = designs.running_phases[0].tolist()
        self.build()

    def build(self) -> None:
        """Compute the design from study, catalogue, states, choices and stored decisions, wherever they are from."""
        self.own = [rail for rail in self.study.rails if not rail.tap_of]
        self.place = {rail.name: k for k, rail in enumerate(self.own)}
        self.path = cast(InputPath, self.part("input_paths", self.study.supply.path))
        stack = cast(Stack, self.part("stacks", self.choices["board.stack"]))
        self.stack = stack
        foil = next(
            f for f in cast("list[CopperFoil]", list(self.catalogue.families["copper_foils"].values()))
            if f.copper_oz == stack.copper_oz
        )  # fmt: skip
        self.thick_um = foil.finished_um
        self.copper = Copper(self.study, self.own)
        self.nets = [self.net(rail, k) for k, rail in enumerate(self.own)]
        self.buses = [bus for k, name in enumerate(ORDER[1:]) if (bus := self.bus(name, k))]
        self.bias = self.optional("bias_supplies", "board.bias")
        self.supervisor = self.optional("supervisors", "board.supervisor")
        self.step_ratios: list[list[float]] = []  # by band and rail: power in over out at the worst mix
        self.steps_w = self.largest_steps_w()
        self.dips_v = {bus.name: [self.dip_v(bus, k) for k in range(self.states.bands + 1)] for bus in self.buses}
        self.results = [self.solve(s) for s in range(len(self.states.name))]

    def part(self, family: str, name: str) -> Part:
        return self.catalogue.families[family][name]

    def optional(self, family: str, choice: str) -> Part | None:
        name = self.choices[choice]
        return None if name == "none" else self.part(family, name)

    def capacitor(self, name: str, pieces: int, bias_v: float) -> tuple[float, float, float]:
        """Return effective and greatest capacitance and resistance of a bank."""
        row = cast(Capacitor, self.part("capacitors", name))
        derating = self.study.derating
        left = row.capacitance_uf * 1e-6 * (1.0 - row.tolerance_percent / 100.0)
        left *= derating.capacitance_end_of_life / (1.0 + (bias_v / row.half_capacitance_v) ** 2)
        most = row.capacitance_uf * 1e-6 * (1.0 + row.tolerance_percent / 100.0)
        return left * pieces, most * pieces, row.esr_mohm * 1e-3 * derating.esr_end_of_life / pieces

    def net(self, rail: Rail, k: int) -> Net:
        get = lambda what: self.choices[f"{rail.name}.{what}"]  # noqa: E731
        families = ("buck_stages", "single_stages", "linear_regulators")
        row = next(
            self.catalogue.families[f][get("stage")] for f in families
            if get("stage") in self.catalogue.families.get(f, {})
        )  # fmt: skip
        coil = cast(Inductor, self.part("inductors", row.inductor)) if isinstance(row, BuckStage) else None
        bank_f, _, bank_ohm = self.capacitor(get("bank"), int(get("bank_count")), rail.voltage_v)
        return Net(
            rail=rail,
            feed=get("feed"),
            row=cast(BuckStage, row),
            coil=coil,
            phases=int(get("phases")),
            running=[*(max(n, 1) for n in self.phases[k]), int(get("phases"))],
            bank_f=bank_f,
            bank_ohm=bank_ohm,
            pairs=int(get("pairs")),
        )

    def bus(self, name: str, k: int) -> Bus | None:
        get = lambda what: self.choices[f"{name}.{what}"]  # noqa: E731
        rails = [r for r, net in enumerate(self.nets) if net.feed == name]
        if not rails or get("converter") == "none":
            return None
        row = cast(BusConverter, self.part("bus_converters", get("converter")))
        nominal = float(get("nominal_v"))
        volts = [*self.volts[k], nominal]
        top_v = row.ratio * self.study.supply.high_v
        biased_v = [top_v if row.kind == "fixed_ratio" else v for v in volts]
        banks = [self.capacitor(get("bulk"), int(get("bulk_count")), v) for v in biased_v]
        _, stored, esr = banks[0]
        damper, damper_ohm = [0.0] * len(volts), 0.0
        if get("damper") != "none":
            lossy = [self.capacitor(get("damper"), int(get("damper_count")), v) for v in biased_v]
            damper, damper_ohm = [held for held, _, _ in lossy], lossy[0][2]
            stored += lossy[0][1]
        own = sum(
            getattr(self.nets[r].row, "input_capacitance_uf", 0.0) * 1e-6 * self.nets[r].phases for r in rails
        )
        return Bus(
            name=name, row=row, units=int(get("count")), nominal_v=nominal, volts=volts,
            running=[*(max(n, 1) for n in self.units[k]), int(get("count"))], pairs=int(get("pairs")),
            held_f=[held + own for held, _, _ in banks], damper_f=damper,
            damper_ohm=damper_ohm, stored_f=stored + own, esr_ohm=esr, rails=rails,
        )  # fmt: skip

    def point(self, net: Net, running: int, vin: float, amps: float, ambient: float) -> Point:
        """Return the whole stage with its bank: losses of all running phases."""
        air = self.study.supply.air_speed_m_s
        vout, each = net.rail.voltage_v, amps / running

        def terms(degc: float) -> Point:
            if isinstance(net.row, BuckStage) and net.coil is not None:
                return buck_phase(net.row, net.coil, vin, vout, each, degc, air)
            if isinstance(net.row, SingleStage):
                return converter_unit(net.row, vin, vout, each, degc, air)
            return linear_unit(cast(LinearRegulator, net.row), vin, vout, each, degc, air)

        one = self.as_measured(net.row, vin, vout, each, ambient, terms)
        bank = net.bank_ohm * running * one.square_a2
        return replace(one, loss_w=one.loss_w * running + bank, bias_w=one.bias_w * running)

    def converter(self, bus: Bus, vin: float, vout: float, amps: float, ambient: float) -> Point:
        """Return one unit of a bus converter."""
        air = self.study.supply.air_speed_m_s
        terms = lambda degc: converter_unit(bus.row, vin, vout, amps, degc, air)  # noqa: E731
        return self.as_measured(bus.row, vin, vout, amps, ambient, terms)

    def as_measured(
        self, row: Part, vin: float, vout: float, amps: float, ambient: float, terms: Callable[[float], Point]
    ) -> Point:
        """Return one unit by its own terms at a local air, or as its table says where it was measured."""
        table = self.catalogue.measured.get(row.name)
        if table is None:
            return terms(ambient)
        k_per_w = thermal_k_per_w(row, self.study.supply.air_speed_m_s)
        return measured_unit(table, vin, vout, amps, terms(ambient), terms(table.local_degc), ambient, k_per_w)

    def of_kind(self, kind: int) -> list[int]:
        return [s for s in range(len(self.states.name)) if self.states.kind[s] == kind]

    def running_in(self, s: int, net: Net) -> int:
        return net.running[int(self.states.band[s])]

    def pour_ohm(self, s: int, k: int, amps: float) -> float:
        net = self.nets[k]
        return self.copper.pour_ohm(net.rail, self.thick_um, net.pairs, amps, float(self.states.ambient_degc[s]))

    def stage_in(self, s: int, k: int, vin: float, amps: float) -> tuple[float, float]:
        """Return what a stage draws and what it delivers to its bias, W; nothing when off."""
        net = self.nets[k]
        pour = amps**2 * self.pour_ohm(s, k, amps)
        out = amps * net.rail.voltage_v + (pour if net.rail.remote_sense else 0.0)
        if self.states.off[s, k]:
            return out, 0.0
        point = self.point(net, self.running_in(s, net), vin, amps, float(self.states.ambient_degc[s]))
        return out + point.loss_w, point.bias_w

    def currents(self, s: int) -> list[float]:
        """Return stage output currents: the load and what children draw at the parent's voltage."""
        amps = [float(a) for a in self.states.current_a[s]]
        for k, net in enumerate(self.nets):
            if net.feed not in ORDER:
                parent = self.place[net.feed]
                volts = self.own[parent].voltage_v
                amps[parent] += self.stage_in(s, k, volts, float(self.states.current_a[s, k]))[0] / volts
        return amps

    def set_v(self, s: int, bus: Bus) -> float:
        """Return the set bus voltage; where limits are checked with its error, low or high."""
        kind = self.states.kind[s]
        volts = bus.volts[int(self.states.band[s])]
        if kind not in (MIX, JUMP, FALLBACK) or bus.follows_input:
            return volts
        grid = bus.row.setting_grid_v
        error = bus.row.accuracy_percent / 100.0 * volts + (abs(volts - grid * round(volts / grid)) if grid else 0.0)
        return volts + self.side(s) * error

    def side(self, s: int) -> int:
        """Return which side of what is set a state is checked on: -1 low, 1 high, 0 where nothing is checked."""
        kind = self.states.kind[s]
        if kind not in (MIX, JUMP, FALLBACK):
            return 0
        same = [k for k in range(len(self.states.name)) if self.states.kind[k] == kind]
        return 1 if kind != JUMP and same.index(s) % 2 else -1

    def ratio(self, s: int, bus: Bus) -> float:
        """Return output over input of a fixed ratio without load, off by its accuracy where limits are checked."""
        return bus.row.ratio * (1.0 + self.side(s) * bus.row.accuracy_percent / 100.0)

    def undropped_v(self, s: int, net: Net) -> float:
        for bus in self.buses:
            if bus.name == net.feed:
                return self.ratio(s, bus) * float(self.states.input_v[s]) if bus.follows_input else self.set_v(s, bus)
        return float(self.states.input_v[s]) if net.feed == "input" else self.own[self.place[net.feed]].voltage_v

    def largest_steps_w(self) -> dict[str, list[float]]:
        """Return the largest coincident step of each bus in each band, at the mix's power in over out."""
        found: dict[str, list[float]] = {bus.name: [] for bus in self.buses}
        mixes = [s for kind in (MIX, FALLBACK) for s in self.of_kind(kind)[0::2]]
        for s in mixes:
            amps = self.currents(s)
            step: list[float] = []
            ratios: list[float] = []
            for k, net in enumerate(self.nets):
                volts = net.rail.voltage_v
                used = amps[k] * volts
                drawn = self.stage_in(s, k, self.undropped_v(s, net), amps[k])[0] if used > 0 else 0.0
                ratio = min(drawn / used, 3.0) if used > 0 else 1.2
                step.append(self.own_step_a(net.rail) * volts * ratio)
                ratios.append(ratio)
            self.step_ratios.append(ratios)
            for bus in self.buses:
                groups: dict[str, float] = {}
                for k, net in enumerate(self.nets):
                    group = self.own[k].step_group or f"alone {k}"
                    above = self.place.get(net.feed, -1)
                    if k in bus.rails:
                        groups[group] = groups.get(group, 0.0) + step[k]
                    elif above in bus.rails:
                        groups[group] = groups.get(group, 0.0) + step[k] * ratios[above]
                found[bus.name].append(max(groups.values()))
        return found

    def standing_w(self, bus: Bus, band: int) -> float:
        """Return what is on the bus before the last step of the largest jump, or in the worst mix if more."""
        found = []
        for kinds in ((MIX, FALLBACK), (JUMP,)):
            s = next(s for kind in kinds for s in self.of_kind(kind) if self.states.band[s] == band)
            amps = self.currents(s)
            found.append(sum(self.stage_in(s, k, self.undropped_v(s, self.nets[k]), amps[k])[0] for k in bus.rails))
        return max(found[0], found[1] - self.steps_w[bus.name][band])

    def dip_v(self, bus: Bus, band: int) -> float:
        row = bus.row
        volts = row.ratio * self.study.supply.low_v if bus.follows_input else bus.volts[band]
        return float(
            bus_dip_v(
                self.steps_w[bus.name][band], volts, row.crossover_khz * 1e3 * TWO_PI, row.delay_us * 1e-6,
                bus.held_f[band] + bus.damper_f[band], self.joined_ohm(bus, band), self.standing_w(bus, band),
                self.shared_ohm(bus, band),
            )
        )  # fmt: skip

    def joined_ohm(self, bus: Bus, band: int) -> float:
        """Return the resistance of bulk bank and damper once they share the current as their capacitances are."""
        share = bus.damper_f[band] / (bus.held_f[band] + bus.damper_f[band])
        return bus.esr_ohm * (1.0 - share) ** 2 + bus.damper_ohm * share**2

    def shared_ohm(self, bus: Bus, band: int) -> float:
        """Return the largest dip an ampere makes at half, once and twice the time the banks have drifted apart in."""
        main, damper = bus.held_f[band], bus.damper_f[band]
        if damper == 0.0:
            return 0.0
        w, dead = bus.row.crossover_khz * 1e3 * TWO_PI, bus.row.delay_us * 1e-6
        ohms, end = bus.esr_ohm + bus.damper_ohm, self.joined_ohm(bus, band)
        rate = (main + damper) / (main * damper * ohms)
        if abs(rate - w) < 1e-3 * w:
            rate = 1.001 * w
        start = bus.esr_ohm * bus.damper_ohm / ohms
        found = []
        for times in (0.5, 1.0, 2.0):
            after = times * math.log(rate / w) / (rate - w)
            left, gone = math.exp(-w * after), math.exp(-rate * after)
            apart = gone * math.exp(-rate * dead) - w * (left - gone) / (rate - w)
            charge = dead + (1.0 - left) / w
            found.append(charge / (main + damper) + end * left + (start - end) * apart)
        return max(found)

    def solve(self, s: int) -> StateResult:
        """Return the fixed point of one state."""
        states = self.states
        vin0 = float(states.input_v[s])
        ohm = self.path.resistance_mohm * 1e-3
        ambient, band = float(states.ambient_degc[s]), int(states.band[s])
        amps = self.currents(s)
        node = vin0
        set_v = {bus.name: self.set_v(s, bus) for bus in self.buses}
        bus_v = {b.name: self.ratio(s, b) * node if b.follows_input else set_v[b.name] for b in self.buses}
        drops = [0.0] * len(self.nets)
        quiet = 0
        for _ in range(400):
            out = StateResult(current_a=amps)
            bias_delivered = 0.0
            for k, net in enumerate(self.nets):
                if net.feed == "input":
                    volts = node
                elif net.feed in ORDER:
                    feed = bus_v.get(net.feed, 0.0)
                    volts = max(feed - drops[k], 0.3 * feed)
                else:
                    volts = self.own[self.place[net.feed]].voltage_v
                volts = max(volts, 1e-3)
                drawn, bias = self.stage_in(s, k, volts, amps[k])
                bias_delivered += bias
                out.stage_v.append(volts)
                out.stage_in_w.append(drawn)
            bias_row = cast("BiasSupply | None", self.bias)
            bias_w = 0.0
            if bias_row is not None:
                bias_w = bias_row.no_load_mw * 1e-3 + bias_delivered / bias_row.efficiency
            on_bus = bias_row is not None and self.choices["board.bias_feed"] == "bus_a"
            node_w = 0.0 if on_bus else bias_w
            out.bias_w = bias_w
            if self.supervisor is not None:
                node_w += cast(Supervisor, self.supervisor).power_mw * 1e-3
            fresh = [0.0] * len(self.nets)
            moved: dict[str, float] = {}
            for bus in self.buses:
                awake = any(not states.off[s, k] for k in bus.rails)
                into = {k: out.stage_in_w[k] / out.stage_v[k] for k in bus.rails}
                plane = 0.0
                extra = bias_w / bus_v[bus.name] if bus.name == "bus_a" and on_bus and awake else 0.0
                degc = self.copper.plane_degc(bus.name, into, extra, self.thick_um, bus.pairs, ambient)
                drops_v = self.copper.drops_v(bus.name, self.thick_um, bus.pairs, into, degc)
                for k, drop_v in drops_v.items():
                    fresh[k] = drop_v
                    plane += drop_v * into[k]
                total_a, total_w = sum(into.values()), sum(out.stage_in_w[k] for k in bus.rails) + plane
                if bus.name == "bus_a" and on_bus:
                    if awake:
                        total_a += bias_w / bus_v[bus.name]
                        total_w += bias_w
                    else:
                        out.bias_w = 0.0
                units = bus.running[band]
                unit = self.converter(bus, node, bus_v[bus.name], total_a / units, ambient)
                out.plane_w[bus.name] = plane
                out.converter_w[bus.name] = unit.loss_w * units if awake else 0.0
                node_w += total_w + out.converter_w[bus.name] if awake else 0.0
                level = set_v[bus.name]
                if bus.follows_input:
                    sharing = max(units - self.study.derating.spare_converters, 0.5) if self.side(s) < 0 else units
                    level = -bus.row.output_mohm * 1e-3 / sharing * total_a  # the node is added below
                moved[bus.name] = level - (self.dips_v[bus.name][band] if states.kind[s] == JUMP else 0.0)
            if on_bus and not any(bus.name == "bus_a" for bus in self.buses):
                out.bias_w = 0.0
            for k, net in enumerate(self.nets):
                if net.feed == "input":
                    node_w += out.stage_in_w[k]
            before = (node, dict(bus_v), list(drops))
            most = vin0**2 / (4.0 * ohm)
            node = (vin0 + math.sqrt(max(vin0**2 - 4.0 * ohm * node_w, 0.0))) / 2.0
            for bus in self.buses:
                level = moved[bus.name] + (self.ratio(s, bus) * node if bus.follows_input else 0.0)
                bus_v[bus.name] = max(level, 0.3 * set_v[bus.name])
            drops = fresh
            input_a = min(node_w, most) / node
            out.path_w = ohm * input_a**2 + self.path.power_mw * 1e-3
            out.input_w = node_w + out.path_w
            out.node_v, out.bus_v = node, dict(bus_v)
            change = abs(node - before[0]) + sum(abs(bus_v[b] - before[1][b]) for b in bus_v)
            change += sum(abs(a - b) for a, b in zip(drops, before[2], strict=True))
            quiet = quiet + 1 if change < 1e-13 * vin0 else 0
            if quiet > 1:
                break
        out.loss_w = out.input_w - self.useful_w(s, amps)
        return out

    def useful_w(self, s: int, amps: list[float]) -> float:
        """Return what reaches the loads: no credit for copper behind an unsensed stage or for taps."""
        sag = sum(
            amps[k] ** 2 * self.pour_ohm(s, k, amps[k])
            for k, net in enumerate(self.nets)
            if not net.rail.remote_sense
        )
        return float(self.states.useful_w[s]) - sag - float(self.states.tap_w[s])

    def energy_kwh(self) -> float:
        """Return the energy lost a year."""
        energy = [*self.of_kind(ENERGY), *self.of_kind(HELD)]
        total = sum(self.results[s].loss_w * float(self.states.hours[s]) / 1e3 for s in energy)
        counts = self.states.transitions_per_year
        for bus in self.buses:
            if bus.follows_input:
                continue
            for a, low in enumerate(bus.volts[:-1]):
                for b, high in enumerate(bus.volts[:-1]):
                    if high > low:
                        total += float(counts[a, b]) * 0.5 * bus.stored_f * (high**2 - low**2) / 3.6e6
        return total

    def droop_percent(self) -> float:
        """Return the worst droop or release of any rail in any band, percent of its budget."""
        worst = 0.0
        for band, s in enumerate(self.of_kind(JUMP)):
            for k, net in enumerate(self.nets):
                if not self.states.mix_off[band, k]:
                    worst = max(worst, self.deviation_v(s, band, k) / net.rail.droop_budget_v * 100.0)
        return worst

    def own_step_a(self, rail: Rail) -> float:
        """Return the largest step of a rail or one of its taps; a current in a limit, so it grows."""
        return max(r.step_a for r in self.study.rails if rail.name in (r.name, r.tap_of)) * self.study.growth

    def family_step_a(self, band: int, k: int) -> float:
        """Return the largest step of a rail with its children: those of one group together."""

        rail = self.own[k]
        groups = {rail.step_group or f"alone {k}": self.own_step_a(rail)}
        for c, net in enumerate(self.nets):
            if net.feed == rail.name:
                group = net.rail.step_group or f"alone {c}"
                drawn_w = self.own_step_a(net.rail) * net.rail.voltage_v * self.step_ratios[band][c]
                groups[group] = groups.get(group, 0.0) + drawn_w / rail.voltage_v
        return max(groups.values())

    def deviation_v(self, s: int, band: int, k: int) -> float:
        """Return the larger of droop and release of one rail in one band, V."""
        net, result, derating = self.nets[k], self.results[s], self.study.derating
        rail, row, running = net.rail, net.row, net.running[band]
        mine = [r for r in self.study.rails if net.rail.name in (r.name, r.tap_of)]
        step = self.family_step_a(band, k)
        most = sum(r.max_current_a for r in mine) * self.study.growth
        limit = row.phase_current_a * derating.current
        if net.coil is not None:
            limit = min(limit, net.coil.saturation_a * derating.current / 1.2)
        extra = max(result.current_a[k] - float(self.states.after_a[band, k]), 0.0)
        mix = float(self.states.mix_a[band, k]) + extra
        after = min(mix + step, max(most + extra, mix))
        deficit = max(after - running * limit, 0.0) if running < net.phases else 0.0
        up = down = 1e12
        if net.coil is not None and isinstance(row, BuckStage):
            henry = net.coil.inductance_nh * 1e-9
            up = running * max(row.max_duty * result.stage_v[k] - rail.voltage_v, 1e-3) / henry
            down = running * rail.voltage_v / henry
        elif isinstance(row, SingleStage):
            henry = row.inductance_nh * 1e-9
            seen = result.stage_v[k] / row.transformer_ratio
            up = running * max(row.max_duty * seen - rail.voltage_v, 1e-3) / henry
            down = running * rail.voltage_v / henry
        loop = (row.delay_ns * 1e-9, net.bank_f, net.bank_ohm)

        def bandwidth(load: float) -> float:
            full = row.crossover_khz * 1e3 * TWO_PI
            if net.coil is None or not isinstance(row, BuckStage) or row.light_load == "forced":
                return full
            air = self.study.supply.air_speed_m_s
            at = buck_phase(row, net.coil, result.stage_v[k], rail.voltage_v, load / running, 25.0, air)
            return full * (row.folded_crossover_share + (1.0 - row.folded_crossover_share) * at.reach)

        slew = rail.slew_a_per_us * 1e6
        wakeup = getattr(row, "wakeup_us", 0.0) * 1e-6
        rise, fall = bandwidth(max(after - step, 0.0)), bandwidth(max(mix - step, 0.0))
        droop = float(rail_droop_v(step, up, rise, *loop, slew, deficit, wakeup))
        return max(droop, float(rail_droop_v(step, down, fall, *loop, slew)))

    def cost(self) -> float:
        """Return the cost of one board."""
        pieces: dict[str, tuple[Part, int]] = {}

        def add(row: Part, count: int) -> None:
            number = row.part if isinstance(row, BuckStage) else row.name
            known = pieces.get(number, (row, 0))
            pieces[number] = (known[0], known[1] + count)

        for net in self.nets:
            add(net.row, net.phases)
            if net.coil is not None:
                add(net.coil, net.phases)
            name = net.rail.name
            add(self.part("capacitors", self.choices[f"{name}.bank"]), int(self.choices[f"{name}.bank_count"]))
        for bus in self.buses:
            add(bus.row, bus.units)
            add(
                self.part("capacitors", self.choices[f"{bus.name}.bulk"]),
                int(self.choices[f"{bus.name}.bulk_count"]),
            )
            if self.choices[f"{bus.name}.damper"] != "none":
                add(
                    self.part("capacitors", self.choices[f"{bus.name}.damper"]),
                    int(self.choices[f"{bus.name}.damper_count"]),
                )
        for row in (self.bias, self.supervisor, self.path):
            if row is not None:
                add(row, 1)
        money = self.study.economics
        total = self.stack.price_per_cm2 * self.study.board.area_cm2
        preferred = set(self.study.choices.preferred_parts)
        for number, (row, count) in pieces.items():
            yearly = count * money.boards_per_year
            price = row.price_100
            if yearly >= 100_000:
                price = row.price_100k
            elif yearly >= 10_000:
                price = row.price_10k
            elif yearly >= 1_000:
                price = row.price_1k
            total += count * (price + row.placements * money.placement_cost)
            if number not in preferred and row.name not in preferred:
                total += money.new_part_cost / money.boards_per_year
        return total

    def kinds(self) -> set[str]:
        """Return what kinds of design this is."""
        found = {"two buses"} if len(self.buses) == 2 else {"one bus"} if self.buses else {"no bus"}
        for bus in self.buses:
            found.add("fixed ratio" if bus.follows_input else str(self.choices[f"{bus.name}.control"]))
            if min(bus.running) < bus.units:
                found.add("converters shed")
        if any(net.feed == "input" for net in self.nets):
            found.add("direct")
        if any(net.feed not in ORDER for net in self.nets):
            found.add("parent fed")
        if any(isinstance(net.row, BuckStage) and net.row.gate_supply == "bias" for net in self.nets):
            found.add("bias fed")
        if self.bias is not None and self.choices["board.bias_feed"] == "bus_a":
            found.add("bias from bus")
        if any(min(net.running) < net.phases for net in self.nets):
            found.add("phases shed")
        return found
