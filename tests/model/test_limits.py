"""Every limit can be broken, and what the ledger says of it follows by hand from the study and the catalogue."""

from __future__ import annotations

import math
from collections.abc import Callable
from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from equivalence.reference import Net, Reference
from equivalence.reference_stage import converter_unit
from equivalence.shipped import decided, evaluator_of
from numpy.typing import NDArray

from archopt.inputs.parts import BuckStage, Capacitor, CopperFoil, LinearRegulator, SingleStage
from archopt.model.board import DirectStages
from archopt.model.evaluator import Detail, evaluate_in
from archopt.model.limits import INDEX, LIMITS, ROOM
from archopt.model.overlaps import Overlaps
from archopt.model.parameters import LINEAR
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.model.states import FALLBACK, MIX

STUDIES = ("telecom_six", "industrial_ten")
COUNT, SEED = 300, 11
SAME = 1e-7


def rows_of(name: str) -> NDArray[np.int64]:
    return decided(name, COUNT, SEED)


def detail_of(problem: Problem, rows: NDArray[np.int64]) -> Detail:
    states = problem.states
    designs = Designs(problem.layout, rows)
    return evaluate_in(problem, states, designs, DirectStages(problem, states), exact=True, explain=True)


@cache
def slack_of(name: str) -> NDArray[np.float64]:
    evaluator = evaluator_of(name)
    return np.concatenate([evaluator.evaluate(rows_of(name)[k : k + 50]).slack for k in range(0, COUNT, 50)])


def broken(limit: str) -> list[tuple[str, int]]:
    """Return designs that break a limit, study and row."""
    column = INDEX[limit]
    return [(name, int(p)) for name in STUDIES for p in np.flatnonzero(slack_of(name)[:, column] < 0.0)]


def stricter(problem: Problem, limit: str) -> Problem:
    """Return the problem changed so that ordinary designs break a limit the shipped studies leave room for."""
    board, stages = problem.study.board, problem.stages
    if limit == "cost cap":
        return replace(problem, study=replace(problem.study, board=replace(board, cost_cap=10.0)))
    if limit == "area cap":
        return replace(problem, study=replace(problem.study, board=replace(board, area_cap_cm2=1.0)))
    if limit == "deliverable power":
        return replace(problem, path=replace(problem.path, resistance_ohm=20.0))
    if limit == "off-time":
        return replace(problem, stages=replace(stages, min_off_s=np.full(len(stages.names), 5e-6)))
    if limit == "thermal gain":
        hot = replace(stages.buck, thermal_k_per_w=stages.buck.thermal_k_per_w * 1e3)
        return replace(problem, stages=replace(stages, buck=hot))
    if limit == "headroom":
        linear = replace(stages.linear, dropout_v=np.full(len(stages.names), 500.0))
        return replace(problem, stages=replace(stages, linear=linear))
    if limit == "bus drop":
        return replace(problem, study=replace(problem.study, board=replace(board, bus_drop_budget_percent=1e-4)))
    if limit == "layer budget":
        thin = replace(board, usable_copper_share=board.usable_copper_share * 0.05)
        return replace(problem, study=replace(problem.study, board=thin))
    if limit == "via ampacity":
        return replace(problem, rails=replace(problem.rails, via_limit_a=np.full(len(problem.rails.names), 1e-3)))
    if limit == "crowding":
        heap = Overlaps(np.ones((1, 2 + len(problem.rails.names))), ("(1, 2) mm",))
        return replace(problem, overlaps=heap)
    if limit == "bus output range":
        narrow = np.full(len(problem.converters.names), 1.0)
        return replace(problem, converters=replace(problem.converters, output_max_v=narrow))
    if limit in ("stability", "impedance margin", "input impedance margin"):
        control = replace(problem.study.control, stability_margin=1e5)
        return replace(problem, study=replace(problem.study, control=control))
    if limit == "bias supply power":
        return replace(problem, biases=replace(problem.biases, max_power_w=problem.biases.max_power_w * 1e-3))
    return problem


# no shipped part is a measured one: tests/model/test_measured_parts.py breaks this limit on a part of its own
ELSEWHERE = {"measured range"}


@pytest.mark.parametrize("limit", [limit.name for limit in LIMITS if limit.name not in ELSEWHERE])
def test_every_limit_can_be_broken_and_has_its_size(limit: str) -> None:
    """Slack is bound less value or value less bound, in the limit's unit; scaled by its tolerance."""
    problem = evaluator_of("industrial_ten").problem
    changed = stricter(problem, limit)
    if changed is problem:
        found = broken(limit)
        assert found, "no random design breaks it"
        name, p = found[0]
        changed, row = evaluator_of(name).problem, rows_of(name)[p]
    else:
        # near today's design, with a linear regulator, a regulated bus and, where one is asked for, a bias supply
        rows = rows_of("industrial_ten")[-COUNT // 3 :]
        fed = (Designs(problem.layout, rows).board("bias") > 0) | (limit != "bias supply power")
        linear = (problem.stages.kind[Designs(problem.layout, rows).rail("stage")] == LINEAR).any(axis=1)
        row = rows[fed & linear][-1]
    detail = detail_of(changed, row[None])
    worst = detail.ledger.worst[limit]
    rule = LIMITS[INDEX[limit]]
    value, bound, slack = float(worst.value[0]), float(worst.bound[0]), float(worst.slack[0])
    assert slack < 0.0
    assert abs(abs(bound - value) + slack) <= 1e-9 * max(abs(bound), abs(value))
    scale = rule.tolerance * (max(abs(bound), 1e-9) if rule.relative else 1.0)
    assert float(worst.normalised[0]) == pytest.approx(slack / scale, rel=1e-9)
    assert detail.evaluation.violation[0] >= -float(worst.normalised[0]) * (1 - 1e-12)
    assert worst.where is not None
    assert worst.where[0]


class Hand:
    """A design's figures worked out at a place of the ledger."""

    def __init__(self, reference: Reference) -> None:
        self.reference = reference
        self.study = reference.study

    def place(self, where: str) -> tuple[Net, int, int]:
        """Return rail, its index and state of ``rail; state``."""
        part, _, state = where.partition("; ")
        k = self.reference.place[part]
        return self.reference.nets[k], k, self.reference.states.name.index(state)

    def bus_place(self, where: str) -> tuple[object, int]:
        part, _, state = where.partition("; ")
        bus = next(b for b in self.reference.buses if b.name == part.split()[0])
        return bus, self.reference.states.name.index(state) if state else -1

    def sensed_drop_v(self, net: Net, amps: float, s: int) -> float:
        k = self.reference.place[net.rail.name]
        return amps * self.reference.pour_ohm(s, k, amps) if net.rail.remote_sense else 0.0

    def limit_a(self, net: Net) -> float:
        derating = self.study.derating.current
        limit = net.row.phase_current_a * derating
        return min(limit, net.coil.saturation_a * derating / 1.2) if net.coil is not None else limit

    def duty(self, where: str) -> tuple[float, Net]:
        """Return the duty by volt-second balance with parts at 85 degC."""
        net, k, s = self.place(where)
        result = self.reference.results[s]
        vin, amps = result.stage_v[k], result.current_a[k]
        each = amps / self.reference.running_in(s, net)
        vout = net.rail.voltage_v + self.sensed_drop_v(net, amps, s)
        row = net.row
        if isinstance(row, SingleStage):
            return (vout + each * row.resistance_mohm * 1e-3) * row.transformer_ratio / vin, net
        assert isinstance(row, BuckStage)
        assert net.coil is not None
        hot = 1.0 + row.resistance_per_k * 60.0
        high, low = row.high_side_mohm * 1e-3 * hot, row.low_side_mohm * 1e-3 * hot
        winding = net.coil.winding_mohm * 1e-3 * (1.0 + 0.00393 * 60.0)
        return (vout + each * (low + winding)) / max(vin + each * (low - high), 1e-3 * vin), net

    def bus_current_a(self, where: str) -> tuple[float, object, int]:
        bus, s = self.bus_place(where)
        result = self.reference.results[s]
        amps = sum(result.stage_in_w[k] / result.stage_v[k] for k in bus.rails)  # type: ignore[attr-defined]
        if bus.name == "bus_a" and self.reference.choices["board.bias_feed"] == "bus_a":  # type: ignore[attr-defined]
            amps += result.bias_w / result.bus_v["bus_a"]
        units = bus.running[self.reference.states.band[s]]  # type: ignore[attr-defined]
        return amps, bus, units


Found = tuple[float, float]


def place_of(hand: Hand, name: str) -> int:
    """Return which place a limit names: a band, or the fall-back behind the last one."""
    return len(hand.reference.volts[0]) if name == "fall-back" else int(name.rsplit(maxsplit=1)[-1]) - 1


def hand_droop(hand: Hand, where: str) -> Found:
    part, _, band = where.partition("; ")
    jumps = [s for s, kind in enumerate(hand.reference.states.kind) if kind == 2]
    k, b = hand.reference.place[part], place_of(hand, band)
    volts = hand.reference.deviation_v(jumps[b], b, k)
    return 100.0 * volts / hand.reference.nets[k].rail.droop_budget_v, 100.0


def hand_dip(hand: Hand, where: str) -> Found:
    part, _, band = where.partition("; ")
    bus = next(b for b in hand.reference.buses if b.name == part)
    b = place_of(hand, band)
    low = bus.row.ratio * hand.study.supply.low_v if bus.follows_input else bus.volts[b]
    return 100.0 * hand.reference.dips_v[part][b] / low, hand.study.control.bus_dip_percent


def hand_stage_input(hand: Hand, where: str) -> Found:
    net, k, s = hand.place(where)
    volts = hand.reference.results[s].stage_v[k]
    low = net.row.input_min_v
    if isinstance(net.row, BuckStage) and net.row.gate_supply != "bias":
        low = max(low, 5.5)
    return volts, low if volts < low else net.row.input_max_v


def hand_output_range(hand: Hand, where: str) -> Found:
    bus = next(b for b in hand.reference.buses if b.name == where)
    low, high = min(*bus.volts, bus.nominal_v), max(*bus.volts, bus.nominal_v)
    below, above = bus.row.output_min_v - low, high - bus.row.output_max_v
    return (low, bus.row.output_min_v) if below > above else (high, bus.row.output_max_v)


def hand_duty(hand: Hand, where: str) -> Found:
    duty, net = hand.duty(where)
    return 100.0 * duty, 100.0 * net.row.max_duty  # type: ignore[union-attr]


def hand_on_time(hand: Hand, where: str) -> Found:
    """Shortest without load, where nothing drops: output over input."""
    net, k, s = hand.place(where)
    assert isinstance(net.row, BuckStage)
    duty = net.rail.voltage_v / hand.reference.results[s].stage_v[k]
    return 1e6 * duty / net.row.frequency_khz, max(net.row.min_on_ns, hand.study.derating.min_on_ns)


def hand_headroom(hand: Hand, where: str) -> Found:
    net, k, s = hand.place(where)
    result, row = hand.reference.results[s], net.row
    assert isinstance(row, LinearRegulator)
    amps = result.current_a[k]
    left = result.stage_v[k] - net.rail.voltage_v - hand.sensed_drop_v(net, amps, s)
    return left - row.dropout_mv * 1e-3 * amps / row.phase_current_a, 0.0


def hand_stage_current(hand: Hand, where: str) -> Found:
    if where.endswith(" at its own maximum"):
        name = where.removesuffix(" at its own maximum")
        net = hand.reference.nets[hand.reference.place[name]]

        def own_a(rail: str) -> float:
            return sum(r.max_current_a for r in hand.study.rails if rail in (r.name, r.tap_of)) * hand.study.growth

        most = own_a(name)
        for c, child in enumerate(hand.reference.nets):
            if child.feed == name:
                rated_a = own_a(child.rail.name) * hand.study.coincidence
                drawn_w = rated_a * child.rail.voltage_v * hand.reference.step_ratios[-1][c]
                most += drawn_w / net.rail.voltage_v
        return most / net.phases, hand.limit_a(net)
    net, k, s = hand.place(where)
    amps = hand.reference.results[s].current_a[k]
    return amps / hand.reference.running_in(s, net), hand.limit_a(net)


def hand_temperature(hand: Hand, where: str) -> Found:
    net, k, s = hand.place(where)
    reference, result = hand.reference, hand.reference.results[s]
    running, air = reference.running_in(s, net), hand.study.supply.air_speed_m_s
    ambient = float(reference.states.ambient_degc[s])
    point = reference.point(net, running, result.stage_v[k], result.current_a[k], ambient)
    k_per_w = net.row.thermal_k_per_w * math.sqrt(max(net.row.air_speed_m_s, 0.2) / max(air, 0.2))
    heat = (point.loss_w + point.bias_w) / running - net.bank_ohm * point.square_a2  # the bank warms itself
    return float(reference.states.ambient_degc[s]) + k_per_w * heat, hand.study.derating.junction_degc


def hand_converter_current(hand: Hand, where: str) -> Found:
    amps, bus, units = hand.bus_current_a(where)
    return amps / units, bus.row.max_current_a * hand.study.derating.current  # type: ignore[attr-defined]


def hand_converter_power(hand: Hand, where: str) -> Found:
    amps, bus, units = hand.bus_current_a(where)
    s = hand.bus_place(where)[1]
    volts = hand.reference.results[s].bus_v[bus.name]  # type: ignore[attr-defined]
    return amps * volts / units, bus.row.max_power_w * hand.study.derating.current  # type: ignore[attr-defined]


def hand_bus_drop(hand: Hand, where: str) -> Found:
    net, k, s = hand.place(where)
    result = hand.reference.results[s]
    bus_v = result.bus_v[net.feed]
    return 100.0 * (bus_v - result.stage_v[k]) / bus_v, hand.study.board.bus_drop_budget_percent


def hand_rail_drop(hand: Hand, where: str) -> Found:
    net, k, s = hand.place(where)
    amps = hand.reference.results[s].current_a[k]
    share = hand.study.coincidence * hand.study.growth
    taps = [r.tap_mohm * 1e-3 * r.max_current_a * share for r in hand.study.rails if r.tap_of == net.rail.name]
    drop_v = amps * hand.reference.pour_ohm(s, k, amps) + max(taps, default=0.0)
    return 100.0 * drop_v / net.rail.voltage_v, net.rail.drop_budget_percent


def hand_ampacity(hand: Hand, where: str) -> Found:
    """IPC-2221: I = 0.024 dT^0.44 A^0.725 with A in square mil, a layer inside; times the pairs."""
    board, reference = hand.study.board, hand.reference
    foils = [f for f in reference.catalogue.families["copper_foils"].values() if isinstance(f, CopperFoil)]
    thick_um = next(f.finished_um for f in foils if f.copper_oz == reference.stack.copper_oz)
    copper = reference.copper
    if " plane; " in where and copper.region(where.split(maxsplit=1)[0]) is not None:
        bus, s = hand.bus_place(where)
        result = reference.results[s]
        into = {reference.own[k].name: result.stage_in_w[k] / result.stage_v[k] for k in bus.rails}  # type: ignore[attr-defined]
        pairs = int(reference.choices[f"{bus.name}.pairs"])  # type: ignore[attr-defined]
        amps, limit_a = max(copper.crowding(bus.name, into, thick_um), key=lambda place: place[0] / place[1])  # type: ignore[attr-defined]
        return amps, pairs * limit_a
    if " plane; " in where:
        amps, bus, _ = hand.bus_current_a(where)
        squares = board.bus_shared_squares + board.bus_own_squares
        width_um = math.sqrt(board.bus_area_cm2 * 1e8 / squares)
        pairs = int(reference.choices[f"{bus.name}.pairs"])  # type: ignore[attr-defined]
    else:
        net, k, s = hand.place(where)
        amps, width_um = reference.results[s].current_a[k], net.rail.copper_width_mm * 1e3
        pairs = int(reference.choices[f"{net.rail.name}.pairs"])
        if copper.region(net.rail.name) is not None:
            places = copper.crowding(net.rail.name, {"load": 1.0}, thick_um)
            return amps, pairs * min(limit_a / share for share, limit_a in places)
    mil2 = (width_um / 25.4) * (thick_um / 25.4)
    return amps, pairs * 0.024 * board.copper_rise_k**0.44 * mil2**0.725


def hand_rise(hand: Hand, where: str) -> Found:
    """The same form turned round: dT = permitted (I / limit)^(1 / 0.44)."""
    amps, limit_a = hand_ampacity(hand, where)
    permitted_k = hand.study.board.copper_rise_k
    return permitted_k * (amps / limit_a) ** (1.0 / 0.44), permitted_k


def hand_layers(hand: Hand, where: str) -> Found:
    reference, board, copper = hand.reference, hand.study.board, hand.reference.copper
    areas = [(r.name, r.copper_area_cm2) for r in reference.own]
    areas += [(b.name, board.bus_area_cm2) for b in reference.buses]
    used = sum(int(reference.choices[f"{name}.pairs"]) * copper.area_cm2(name, stated) for name, stated in areas)
    return used, reference.stack.pairs * board.area_cm2 * board.usable_copper_share


def hand_start_up(hand: Hand, where: str) -> Found:
    bus = next(b for b in hand.reference.buses if b.name == where)
    return 1e6 * bus.stored_f, bus.row.startup_max_uf * bus.units


def hand_input_current(hand: Hand, where: str) -> Found:
    s = hand.reference.states.name.index(where.partition("; ")[2])
    result, path = hand.reference.results[s], hand.reference.path
    amps = math.sqrt((result.path_w - path.power_mw * 1e-3) / (path.resistance_mohm * 1e-3))
    return amps, path.max_current_a * hand.study.derating.current


def hand_ripple(hand: Hand, where: str) -> Found:
    net, k, s = hand.place(where)
    reference, result = hand.reference, hand.reference.results[s]
    running = reference.running_in(s, net)
    ambient = float(reference.states.ambient_degc[s])
    point = reference.point(net, running, result.stage_v[k], result.current_a[k], ambient)
    capacitor = reference.catalogue.families["capacitors"][reference.choices[f"{net.rail.name}.bank"]]
    pieces = int(reference.choices[f"{net.rail.name}.bank_count"])
    rms = math.sqrt(running * point.square_a2)
    return rms, pieces * capacitor.ripple_a * hand.study.derating.current  # type: ignore[attr-defined]


def summed_swing_a(ripple_a: float, duty: float, phases: int) -> float:
    """Return the swing of triangles spread over the period: their sum is straight between the corners of all."""

    def one(at: float) -> float:
        x = at % 1.0
        return ripple_a * (x / duty if x <= duty else (1.0 - x) / (1.0 - duty))

    corners = [k / phases + shift for k in range(phases) for shift in (0.0, duty)]
    sums = [sum(one(corner - k / phases) for k in range(phases)) for corner in corners]
    return max(sums) - min(sums)


def hand_output_ripple(hand: Hand, where: str) -> Found:
    net, k, s = hand.place(where)
    reference, result = hand.reference, hand.reference.results[s]
    running, amps, row = reference.running_in(s, net), result.current_a[k], net.row
    ambient = float(reference.states.ambient_degc[s])
    assert isinstance(row, BuckStage | SingleStage)
    period_s = 1e-3 / row.frequency_khz
    if isinstance(row, SingleStage):
        air = hand.study.supply.air_speed_m_s
        unit = converter_unit(row, result.stage_v[k], net.rail.voltage_v, amps / running, ambient, air)
        swing, charge = running * unit.ripple_a, running * unit.ripple_a * period_s / 8.0
    else:
        point = reference.point(net, running, result.stage_v[k], amps, ambient)
        swing = summed_swing_a(point.ripple_a, point.duty, running)
        charge = swing * period_s / running / 8.0
        if point.pulse_a:  # what of the triangle lies above the load
            above = point.pulse_a - amps / running
            swing, charge = point.pulse_a, 0.5 * above * point.pulse_s * above / point.pulse_a
    half_v = 0.5 * (swing * net.bank_ohm + charge / net.bank_f)
    return 100.0 * half_v / net.rail.voltage_v, net.rail.ripple_percent


def hand_loop(hand: Hand, where: str) -> Found:
    """At least with the bank aged and at the bottom of its tolerance, at most with it new and at the top."""
    reference = hand.reference
    net = reference.nets[reference.place[where]]
    row = reference.catalogue.families["capacitors"][reference.choices[f"{where}.bank"]]
    assert isinstance(row, Capacitor)
    most_uf = row.capacitance_uf * (1.0 + row.tolerance_percent / 100.0) * int(reference.choices[f"{where}.bank_count"])
    most_uf /= 1.0 + (net.rail.voltage_v / row.half_capacitance_v) ** 2
    least_uf = net.bank_f * 1e6
    short, over = net.row.loop_min_uf - least_uf, most_uf - net.row.loop_max_uf
    if short / net.row.loop_min_uf > over / net.row.loop_max_uf:
        return least_uf, net.row.loop_min_uf
    return most_uf, net.row.loop_max_uf


BY_HAND: dict[str, Callable[[Hand, str], Found]] = {
    "bus dip": hand_dip,
    "stage input range": hand_stage_input,
    "bus output range": hand_output_range,
    "duty": hand_duty,
    "on-time": hand_on_time,
    "headroom": hand_headroom,
    "stage current": hand_stage_current,
    "stage temperature": hand_temperature,
    "converter current": hand_converter_current,
    "converter power": hand_converter_power,
    "bus drop": hand_bus_drop,
    "rail drop": hand_rail_drop,
    "copper ampacity": hand_ampacity,
    "copper temperature rise": hand_rise,
    "layer budget": hand_layers,
    "start-up capacitance": hand_start_up,
    "input current": hand_input_current,
    "capacitor ripple": hand_ripple,
    "output ripple": hand_output_ripple,
    "loop capacitance range": hand_loop,
}


@pytest.mark.parametrize("limit", list(BY_HAND))
def test_value_and_bound_follow_by_hand_at_the_place_told(limit: str) -> None:
    found = broken(limit)
    seen = 0
    for name, p in [*found[:2], *found[-1:]] or [(name, COUNT - 1) for name in STUDIES]:
        problem, row = evaluator_of(name).problem, rows_of(name)[p]
        worst = detail_of(problem, row[None]).ledger.worst[limit]
        assert worst.where is not None
        if worst.normalised[0] >= ROOM:
            continue  # the limit says nothing of this design
        value, bound = BY_HAND[limit](Hand(Reference(problem, row)), worst.where[0])
        seen += 1
        assert float(worst.value[0]) == pytest.approx(value, rel=SAME), (name, p, worst.where[0])
        assert float(worst.bound[0]) == pytest.approx(bound, rel=SAME), (name, p, worst.where[0])
    assert seen


@pytest.mark.parametrize("name", STUDIES)
def test_droop_and_release_follow_by_hand(name: str) -> None:
    evaluator = evaluator_of(name)
    for row in rows_of(name)[-4:]:
        ledger = detail_of(evaluator.problem, row[None]).ledger.worst
        droop, release = ledger["rail droop"], ledger["rail release"]
        worse = droop if droop.value[0] >= release.value[0] else release
        assert worse.where is not None
        value, bound = hand_droop(Hand(Reference(evaluator.problem, row)), worse.where[0])
        assert float(worse.value[0]) == pytest.approx(value, rel=SAME)
        assert float(worse.bound[0]) == bound


@pytest.mark.parametrize("limit", ["rail drop", "stage temperature", "stage current"])
def test_the_place_told_is_the_worst_of_all(limit: str) -> None:
    """By hand over every rail and steady state: nowhere is the slack smaller than at the place told."""
    name = "industrial_ten"
    problem, row = evaluator_of(name).problem, rows_of(name)[-1]
    hand = Hand(Reference(problem, row))
    states = problem.states
    worst = detail_of(problem, row[None]).ledger.worst[limit]
    rule = LIMITS[INDEX[limit]]
    places = [
        f"{rail.name}; {states.name[s]}"
        for s in [*states.of_kind(MIX), *states.of_kind(FALLBACK)]
        for k, rail in enumerate(hand.reference.own)
        if not states.off[s, k]
    ]
    if limit == "stage current":
        places += [f"{rail.name} at its own maximum" for rail in hand.reference.own]
    scaled = []
    for where in places:
        value, bound = BY_HAND[limit](hand, where)
        scaled.append((bound - value) / (rule.tolerance * (abs(bound) if rule.relative else 1.0)))
    assert float(worst.normalised[0]) == pytest.approx(min(scaled), rel=SAME)


def test_costs_and_area_against_their_caps() -> None:
    problem, row = evaluator_of("telecom_six").problem, rows_of("telecom_six")[-1]
    capped = replace(problem.study.board, cost_cap=50.0, area_cap_cm2=20.0)
    detail = detail_of(replace(problem, study=replace(problem.study, board=capped)), row[None])
    cost, area = detail.ledger.worst["cost cap"], detail.ledger.worst["area cap"]
    assert float(cost.value[0]) == pytest.approx(Reference(problem, row).cost(), rel=1e-9)
    assert float(cost.slack[0]) == pytest.approx(50.0 - float(cost.value[0]), rel=1e-9)
    assert float(area.slack[0]) == pytest.approx(20.0 - float(area.value[0]), rel=1e-9)
    assert float(area.normalised[0]) == pytest.approx(float(area.slack[0]) / (0.02 * 20.0), rel=1e-9)
