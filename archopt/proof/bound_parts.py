"""What buses, copper and shared part numbers cost and lose at the least: the rest of the outer bound."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.converter_loss import ConverterLoss
from archopt.model.cost import unit_price
from archopt.model.evaluator import Evaluator
from archopt.model.parameters import FIXED_RATIO
from archopt.model.planes import copper_degc
from archopt.model.problem import Problem
from archopt.model.space import BUS_A
from archopt.model.states import ENERGY
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.physics.copper import RESISTIVITY_DEGC, RESISTIVITY_PER_K
from archopt.proof.bound_rails import EASE, GRID, RATIO, RailOptions, Slots, sampled_least

POWERS = 40
LARGEST = 1.0 + 1e-9
ROUNDS = 160
REFERENCE_LOSS = 1.12  # stage input over output power at which the converters' slope is taken


def least_unit_cost(problem: Problem) -> FloatArray:
    """Return price and placement of a piece of every part number at the best price step a board could reach, (parts,).

    No board holds more of a part than every rail and bus at its most pieces of it.
    """
    layout, allowed = problem.layout, problem.space.allowed
    most = np.zeros(len(problem.parts.names))
    for r in range(layout.rails):
        stages = allowed[layout.rail("stage").start + r]
        phases = np.minimum(problem.phases_high[r, stages], allowed[layout.rail("phases").start + r].max())
        second = problem.stages.second_part[stages]
        here = np.zeros_like(most)
        np.maximum.at(here, problem.stages.part[stages], phases.astype(np.float64))
        np.maximum.at(here, second[second >= 0], phases[second >= 0].astype(np.float64))
        counts = problem.bank_counts[allowed[layout.rail("bank_count").start + r]].max()
        here[problem.capacitors.part[allowed[layout.rail("bank").start + r]]] = counts
        most += here
    for bus in buses_offered(problem):
        counts = allowed[layout.bus("bulk_count").start + bus]
        most[problem.capacitors.part[allowed[layout.bus("bulk").start + bus]]] += problem.bank_counts[counts].max()
        dampers = allowed[layout.bus("damper").start + bus]
        counts = allowed[layout.bus("damper_count").start + bus]
        most[problem.capacitors.part[dampers[dampers > 0] - 1]] += problem.bank_counts[counts].max()
        units = allowed[layout.bus("count").start + bus].max()
        most[problem.converters.part] += np.minimum(problem.converters.max_parallel, units)
    most = np.maximum(most, 1.0)
    price = unit_price(problem.parts, most * problem.study.economics.boards_per_year)
    price = np.minimum(price, problem.parts.price[:, 0])
    return np.asarray(price + problem.parts.placements * problem.study.economics.placement_cost)


def buses_offered(problem: Problem) -> list[int]:
    """Return the buses a rail may be fed from and that can start."""
    layout, allowed = problem.layout, problem.space.allowed
    feeds = {int(value) for r in range(layout.rails) for value in allowed[layout.rail("feed").start + r]}
    starts = [bool((allowed[layout.bus("converter").start + bus] > 0).any()) for bus in range(2)]
    return [bus for bus in range(2) if BUS_A + bus in feeds and starts[bus]]


def new_part_cost(problem: Problem) -> FloatArray:
    """Return what each part number costs a board for being on it, (parts,)."""
    economics = problem.study.economics
    return np.where(problem.parts.preferred, 0.0, economics.new_part_cost / economics.boards_per_year)


@dataclass(frozen=True)
class Slopes:
    """What a watt of loss on the way costs upstream in each energy state, (S,): hours in kWh a watt, path and bus.

    path: a watt more at the node costs this more in the input path; bus: a watt more on a bus costs this more in its
    converter, at a slope all converters are measured by.
    """

    kwh_per_w: FloatArray
    path: FloatArray
    bus: FloatArray
    useful_w: FloatArray  # (S, R)

    @property
    def node(self) -> FloatArray:
        """Energy a watt lost at the node costs over the year, (S,) kWh."""
        return self.kwh_per_w * (1.0 + self.path)


def make_slopes(evaluator: Evaluator) -> Slopes:
    """Return the slopes: the path's at the useful power, which is its least; a converter's at about its load.

    The loss of the path, R I^2 at the least current the node's power can mean, is convex in that power: its tangent at
    the useful power lies below it. Any slope serves for the converters, see :func:`converter_outfits`; one near their
    real slope serves best.
    """
    problem, states = evaluator.problem, evaluator.states
    energy = states.of_kind(ENERGY)
    useful = np.where(states.off[energy], 0.0, states.current_a[energy]) * problem.rails.voltage_v
    input_v = states.input_v[energy]
    path = 2.0 * problem.path.resistance_ohm * useful.sum(axis=1) / input_v**2
    power = REFERENCE_LOSS * useful.sum(axis=1)
    converters = problem.converters
    best = np.full(len(energy), np.inf)
    slope = np.zeros(len(energy))
    step = 0.02 * np.maximum(power, 1.0)
    for c in range(len(converters.names)):
        ratio = converters.ratio[c]
        ends = (max(converters.output_min_v[c], problem.grid_v[0]), min(converters.output_max_v[c], problem.grid_v[-1]))
        volts = ratio * input_v if ratio > 0 else np.full(len(energy), 0.5 * sum(ends))
        for units in range(1, int(converters.max_parallel[c]) + 1):
            if units * converters.limit_w[c] < power.max():
                continue
            low, high = (unit_losses(evaluator, c, units, input_v, volts, power + side * step) for side in (-1.0, 1.0))
            better = low + high < best
            slope = np.where(better, (high - low) / (2.0 * step), slope)
            best = np.where(better, low + high, best)
    return Slopes(states.hours[energy] * 1e-3, path, np.maximum(slope, 0.0), useful)


def unit_losses(
    evaluator: Evaluator, converter: int, units: int, input_v: FloatArray, bus_v: FloatArray, power_w: FloatArray
) -> FloatArray:
    """Return the loss of some running units of one converter, W; states along the first axis."""
    states = evaluator.states
    ambient = states.ambient_degc[states.of_kind(ENERGY)]
    shape = np.broadcast_shapes(np.shape(input_v), np.shape(bus_v), np.shape(power_w))
    ambient = ambient.reshape(-1, *([1] * (len(shape) - 1)))
    current = np.broadcast_to(power_w / bus_v / units, shape)
    index = np.full(shape, converter)
    found = ConverterLoss.of(evaluator.problem.converters, index)(
        np.broadcast_to(input_v, shape), np.broadcast_to(bus_v, shape), current, np.broadcast_to(ambient, shape)
    )
    return np.asarray(found.total_w * units)


@dataclass(frozen=True)
class Outfit:
    """One way to furnish a bus: cost, converter row, and energy (B, K) beyond the slope's share; inf where illegal."""

    cost: float
    converter: int
    energy_kwh: FloatArray


def converter_outfits(
    evaluator: Evaluator, slots: Slots, slopes: Slopes, unit_cost: FloatArray, most_w: FloatArray, *,
    alone: bool, buses: int,
) -> list[Outfit]:  # fmt: skip
    """Return every converter and count that may furnish a bus, with its cheapest bulk bank.

    A converter's loss less slope x power is least somewhere between the power it must and the power it can carry,
    which is no more than useful power and the most the rails can lose (most_w (S,)): that least, which no design goes
    below, is the outfit's own energy, and slope x power is charged to what the bus feeds. As many units run as lose
    least. With ``alone`` the bus carries every rail, so at least all useful power, and the converters must carry the
    worst mixes; the node is anywhere between the input and what the path may take.
    """
    problem, states = evaluator.problem, evaluator.states
    converters, layout, allowed = problem.converters, problem.layout, problem.space.allowed
    energy = states.of_kind(ENERGY)
    band = states.band[energy]
    input_v = states.input_v[energy]
    node_v = np.maximum(input_v - problem.path.limit_a * problem.path.resistance_ohm, 0.5 * input_v)
    useful = slopes.useful_w.sum(axis=1)
    mix_w = (problem.rails.voltage_v * states.mix_a).sum(axis=1)
    fresh = new_part_cost(problem)
    pairs: set[tuple[int, int]] = set()
    bulk = np.inf
    on_rails = np.concatenate([allowed[layout.rail("bank").start + r] for r in range(layout.rails)])
    shared = problem.capacitors.part[on_rails]
    for bus in buses_offered(problem):
        for c in allowed[layout.bus("converter").start + bus]:
            counts = np.clip(allowed[layout.bus("count").start + bus], 1, converters.max_parallel[c - 1])
            pairs |= {(int(c) - 1, int(n)) for n in counts} if c > 0 else set()
        banks = problem.capacitors.part[allowed[layout.bus("bulk").start + bus]]
        pieces = problem.bank_counts[allowed[layout.bus("bulk_count").start + bus]]
        alien = np.where(np.isin(banks, shared), 0.0, fresh[banks] / buses)
        bulk = min(bulk, float((unit_cost[banks] * pieces.min() + alien).min()))
    outfits = []
    for c, n in sorted(pairs):
        carrying = max(n - problem.study.derating.spare_converters, 0.5)
        places = np.flatnonzero(slots_of(problem, slots, c))
        if not len(places) or (alone and carrying * converters.limit_w[c] * LARGEST < mix_w.max()):
            continue
        top = np.maximum(np.minimum(n * converters.limit_w[c], 1.1 * useful + most_w), useful * 1.01)
        power = (useful if alone else 0.0 * useful)[:, None] + np.linspace(0.0, 1.0, POWERS) * (
            top - (useful if alone else 0.0 * useful)
        )[:, None]
        least = np.full((len(energy), len(places)), np.inf)
        spans = [slots.high_v[:, places]]
        if converters.kind[c] == FIXED_RATIO:
            spans += [slots.bus_v[:, places], 0.5 * (spans[0] + slots.bus_v[:, places])]
        for units in range(1, n + 1):
            for volts in spans:
                for node in (node_v, input_v):
                    loss = unit_losses(
                        evaluator, c, units, node[:, None, None], volts[:, :, None], power[:, None, :]
                    ) - slopes.bus[:, None, None] * power[:, None, :]
                    least = np.minimum(least, sampled_least(loss))
        held = np.zeros((states.mix_a.shape[0], len(places)))
        np.add.at(held, band, slopes.node[:, None] * least)
        own = np.full((len(held), len(slots.kind)), np.inf)
        own[:, places] = held
        if alone and converters.kind[c] != FIXED_RATIO:
            amps = mix_w[:, None] / slots.high_v[:1, places]
            own[:, places] = np.where(amps <= carrying * converters.limit_a[c] * LARGEST, own[:, places], np.inf)
        part = converters.part[c]
        price = n * piece_cost(problem, part, n * buses if buses > 1 else n)
        outfits.append(Outfit(float(price + fresh[part] / buses + bulk), c, own))
    return outfits


def piece_cost(problem: Problem, part: int, pieces: int) -> float:
    """Return price and placement of one of so many pieces of a part number on a board."""
    economics = problem.study.economics
    quantity = np.full(len(problem.parts.names), pieces * economics.boards_per_year)
    return float(unit_price(problem.parts, quantity)[part] + problem.parts.placements[part] * economics.placement_cost)


def slots_of(problem: Problem, slots: Slots, converter: int) -> BoolArray:
    """Return at which slots a converter's bus may stand, (K,) bool."""
    converters = problem.converters
    if converters.kind[converter] == FIXED_RATIO:
        return np.asarray((slots.kind == RATIO) & (slots.of == converter))
    low, high = converters.output_min_v[converter] - EASE, converters.output_max_v[converter] + EASE
    return np.asarray((slots.kind == GRID) & (slots.need_v >= low) & (slots.need_v <= high))


def stack_outfits(evaluator: Evaluator, slopes: Slopes, planes: int) -> FloatArray:
    """Return cost and least pour energy of every stack that can hold the rails' pours and planes, (stacks, 2).

    Pours share the layer budget. The least of their losses is bounded by the Lagrangian dual of that share: at any
    price of copper, every pour at its own best number of pairs, less the price of the budget, bounds the sum from
    below. Copper is taken as cold as the air; own currents only, as those of children add to them.
    """
    problem, states = evaluator.problem, evaluator.states
    energy, rails, board = states.of_kind(ENERGY), problem.rails, problem.study.board
    reference = 1.0 + RESISTIVITY_PER_K * (copper_degc(problem.study) - RESISTIVITY_DEGC)
    cold = (1.0 + RESISTIVITY_PER_K * (states.ambient_degc - RESISTIVITY_DEGC)) / reference
    amps = np.where(states.off[energy], 0.0, states.current_a[energy])
    square = (slopes.node[:, None] * cold[energy, None] * amps**2).sum(axis=0)  # (R,) kWh an ohm
    mix = states.mix_low
    column = problem.layout.rail("pairs").start
    plane_area = float(np.sort(np.broadcast_to(problem.planes.area_m2, (2,)))[:planes].sum())
    outfits = []
    for stack in problem.space.allowed[problem.layout.board("stack")]:
        offered = problem.stacks.pairs[stack] * board.area_cm2 * board.usable_copper_share * 1e-4 * LARGEST - plane_area
        losses, areas = [], []
        for r in range(len(rails.names)):
            pairs = np.unique(np.clip(problem.space.allowed[column + r], 1, problem.stacks.pairs[stack]))
            ohm = 2.0 * (rails.squares[r] * problem.sheet_ohm[stack] / pairs + rails.pour_via_ohm[r])
            drop = (states.current_a[mix, r][:, None] * cold[mix][:, None] * ohm).max(axis=0) + rails.tap_drop_v[r]
            fits = drop <= rails.drop_budget[r] * rails.voltage_v[r] * LARGEST
            fits &= pairs * problem.pour_limit_a[stack, r] * LARGEST >= states.current_a[mix, r].max()
            losses.append(np.where(fits, square[r] * ohm, np.inf))
            areas.append(pairs * rails.copper_area_m2[r])
        value = least_copper(losses, areas, offered)
        if np.isfinite(value):
            outfits.append((float(problem.stacks.price_per_cm2[stack] * board.area_cm2), value))
    return np.array(outfits).reshape(-1, 2)


def least_copper(losses: list[FloatArray], areas: list[FloatArray], offered: float) -> float:
    """Return a lower bound of the pours' energy within an area on offer, inf where even the least does not fit."""
    if any(not np.isfinite(loss).any() for loss in losses):
        return np.inf
    least = sum(float(area[np.isfinite(loss)].min()) for loss, area in zip(losses, areas, strict=True))
    if least > offered:
        return np.inf
    free = sum(float(loss.min()) for loss in losses)
    scale = max(free, 1e-9) / max(offered, 1e-9)
    best = free
    for price in scale * np.geomspace(1e-3, 1e3, 61):
        found = sum(float((loss + price * area).min()) for loss, area in zip(losses, areas, strict=True))
        best = max(best, found - price * offered)
    return best


def charges(
    problem: Problem, rails: list[RailOptions], energy_kwh: list[FloatArray], price: float
) -> tuple[list[FloatArray], list[IntArray]]:
    """Return each rail's charge for part numbers of its options and banks, (M,), and the choice it then makes.

    A part number costs the board once if any rail uses it. Sharing that cost out between the rails, in whatever
    shares, charges a board never more: every rail that uses the part pays its own share only. The shares that charge
    most at a price of energy are found by subgradient steps; any shares bound every design.
    """
    fresh = new_part_cost(problem)
    stages, capacitors = problem.stages, problem.capacitors
    used = []
    for rail in rails:
        stage = rail.stage[rail.option]
        second = stages.second_part[stage]
        parts = (stages.part[stage], np.where(second >= 0, second, -1), capacitors.part[rail.bank])
        used.append(np.stack(parts, axis=1))
    count = len(rails)
    able = np.zeros((count, len(fresh) + 1), dtype=bool)
    for r, columns in enumerate(used):
        able[r, columns[np.isfinite(energy_kwh[r])].ravel()] = True
    able[:, -1] = False
    cost = np.append(fresh, 0.0)
    share = np.where(able, cost / np.maximum(able.sum(axis=0), 1), 0.0)
    base = [rail.cost + price * energy for rail, energy in zip(rails, energy_kwh, strict=True)]
    # no charge is negative, none above that of three new part numbers: only these can ever be chosen
    near = [np.flatnonzero(score <= score.min() + 3.0 * fresh.max(initial=0.0)) for score in base]
    close = [columns[mine] for columns, mine in zip(used, near, strict=True)]
    best, best_value = share, -np.inf
    for turn in range(ROUNDS):
        asked = np.zeros_like(share)
        value = 0.0
        for r, columns in enumerate(close):
            score = base[r][near[r]] + share[r][columns].sum(axis=1)
            chosen = int(score.argmin())
            value += float(score[chosen])
            asked[r, columns[chosen]] = 1.0
        if value > best_value:
            best, best_value = share.copy(), value
        asked[:, -1] = 0.0
        step = 0.5 * cost / (1.0 + turn / 12.0)
        share = onto_simplex(np.where(able, share + step * asked, -np.inf), cost)
    paid = [best[r][columns].sum(axis=1) for r, columns in enumerate(used)]
    picked = [int((base[r] + paid[r]).argmin()) for r in range(count)]
    return paid, [np.array(place) for place in picked]


def onto_simplex(values: FloatArray, total: FloatArray) -> FloatArray:
    """Return each column moved to the nearest point that is not negative and sums to its total, (rows, columns)."""
    order = -np.sort(-values, axis=0)
    held = np.where(np.isfinite(order), order, 0.0)
    rank = np.arange(1, len(values) + 1)[:, None]
    over = (np.cumsum(held, axis=0) - total) / rank
    inside = np.isfinite(order) & (order > over)
    last = np.maximum(inside.sum(axis=0) - 1, 0)
    level = over[last, np.arange(values.shape[1])]
    return np.where(np.isfinite(values), np.maximum(values - level, 0.0), 0.0)
