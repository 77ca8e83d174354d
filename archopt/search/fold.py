"""Fold: given one board's buses and schedule, the rails' own fronts of energy and cost are added up, cap by cap.

With the buses held, energy and cost are nearly sums over the rails and the worst droop is a maximum. So under each
droop cap every rail has a front of its own; folding them one after another, one point a box, gives a front of whole
boards. Energies are first order around the board folded, costs are exact; whatever looks good is evaluated in full.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from moocore import is_nondominated

from archopt.model.canonical import canonical
from archopt.model.cost import bill, count_pieces, unit_price
from archopt.model.hardware import bias_per_phase_w
from archopt.model.options import option_index
from archopt.model.space import BUS_A, PARENT, Designs
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.search.completion import Completion
from archopt.search.conditions import Conditions, conditions_of, first_conditions
from archopt.search.rail_tables import CAPS, ILLEGAL_KWH, NO_COUNT, RailTable

BOXES = 64  # points a folded front keeps, about
RAIL_BOXES = 24  # points a rail's front keeps, about
COUPLED_LOAD = 1.1  # what a child draws from its parent over what it delivers


@dataclass(frozen=True)
class RailFront:
    """One rail's front under one cap, energy rising: kWh at the board input, currency, and what makes each point.

    All (n,). option is a row of the rail's table, bank a place among its banks.
    """

    energy: FloatArray
    cost: FloatArray
    option: IntArray
    bank: IntArray
    count: IntArray
    feed: IntArray


@dataclass(frozen=True)
class Base:
    """One decided design to fold around: its row, objectives, conditions (of one design) and prices of its parts.

    unit, fresh (parts,): unit price, and what a part number not yet on the board adds. need_a (R,): current each
    rail must carry with its children, 0 without any.
    """

    row: IntArray
    objectives: FloatArray
    seen: Conditions
    unit: FloatArray
    fresh: FloatArray
    need_a: FloatArray
    bias: int


class Fold:
    """Folds designs of one problem; shares the tables completion reads."""

    def __init__(self, completion: Completion) -> None:
        self.completion = completion
        self.evaluator = completion.evaluator
        self.problem = completion.problem
        self.layout = completion.layout
        self.bias_w = bias_per_phase_w(self.problem)
        self.places = [option_places(completion, table) for table in completion.tables]

    def propose(self, rows: IntArray, objectives: FloatArray) -> tuple[IntArray, FloatArray]:
        """Return undecided rows folded around decided ones (M, columns), with predicted objectives (N, 3)."""
        self.completion.banks.ensure(np.arange(len(CAPS)))
        found = [self.around(base) for base in self.bases(rows, objectives)]
        if not found:
            return np.zeros((0, self.layout.width), dtype=np.int64), np.zeros((0, 3))
        return np.concatenate([each[0] for each in found]), np.concatenate([each[1] for each in found])

    def bases(self, rows: IntArray, objectives: FloatArray) -> list[Base]:
        """Return what folding around each of the designs reads."""
        genome, problem = self.completion.genome, self.problem
        designs = Designs(self.layout, rows)
        one = np.ones(len(rows))
        plan = genome.decode(genome.encode(rows, one, 0.02 * one, np.zeros(len(rows), dtype=np.int64)))
        seen = conditions_of(self.evaluator, designs, first_conditions(self.evaluator, plan))
        pieces = count_pieces(problem, designs)
        unit = unit_price(problem.parts, np.maximum(pieces, 1) * problem.study.economics.boards_per_year)
        fresh = np.where(pieces > 0, 0.0, self.completion.new_part)
        need = children_need_a(self.completion, designs)
        return [
            Base(
                rows[k], objectives[k],
                Conditions(*(getattr(seen, name)[k : k + 1] for name in (
                    "volts", "top_volts", "dipped", "marginal", "parent_marginal"))),
                unit[k], fresh[k], need[k], int(designs.board("bias")[k]),
            )
            for k in range(len(rows))
        ]  # fmt: skip

    def around(self, base: Base) -> tuple[IntArray, FloatArray]:
        """Return the boards folded around one, undecided, and what they are predicted to be."""
        fronts = [self.rail_fronts(table, base) for table in self.completion.tables]
        rows, energy, cap = [], [], []
        for place in range(len(CAPS)):
            here = [each[place] for each in fronts]
            if not all(len(each.energy) for each in here):
                continue
            total, choice = fold([(each.energy, each.cost) for each in here], BOXES)
            rows.append(self.rows(base, here, choice))
            energy.append(total[:, 0])
            cap.append(np.full(len(total), float(CAPS[place])))
        if not rows:
            return np.zeros((0, self.layout.width), dtype=np.int64), np.zeros((0, 3))
        every = np.concatenate(rows)
        self.supply_gates(every)
        kwh = base.objectives[0] + np.concatenate(energy) - self.energy_of(base)
        money = bill(self.problem, canonical(self.problem, Designs(self.layout, every))).total
        return every, np.column_stack([kwh, money, np.concatenate(cap)])

    def supply_gates(self, rows: IntArray) -> None:
        """Give boards whose gates take more than their bias supply has the cheapest that has enough, in place."""
        biases, designs = self.problem.biases, Designs(self.layout, rows)
        offered = self.completion.genome.allowed_board("bias")
        offered = offered[offered > 0]
        if not len(offered):
            return
        gates_w = (self.bias_w[designs.rail("stage")] * designs.rail("phases")).sum(axis=1)
        chosen = designs.board("bias")
        short = (chosen > 0) & (gates_w > biases.max_power_w[np.maximum(chosen, 1) - 1])
        price = self.problem.parts.price[biases.part[offered - 1], 1]
        for value in offered[np.argsort(-price, kind="stable")]:  # the cheapest that fits is written last
            fits = short & (gates_w <= biases.max_power_w[value - 1])
            chosen[fits] = value

    def energy_of(self, base: Base) -> float:
        """Return what the rails of the base itself draw by the tables, kWh at the board input."""
        designs = Designs(self.layout, base.row[None])
        total = 0.0
        stage, phases, fewest = (designs.rail(name) for name in ("stage", "phases", "fewest"))
        option = option_index(self.evaluator.options, stage, phases, fewest, self.problem.phases_high)[0]
        for table in self.completion.tables:
            r = table.rail
            place = int(self.places[r][option[r]])
            feed = int(designs.rail("feed")[0, r])
            kwh, weight, _ = self.at_feed(table, base, feed)
            bank = int(designs.rail("bank")[0, r])
            esr = self.completion.esr[bank] / self.problem.bank_counts[designs.rail("bank_count")[0, r]]
            total += float(kwh[place] + weight * table.ripple[place] * esr)
        return total

    def at_feed(self, table: RailTable, base: Base, feed: int) -> tuple[FloatArray, float, BoolArray]:
        """Return energy at the board input (O,), the marginal energy of the feed, and which options may take it."""
        seen, r = base.seen, table.rail
        bias_kwh = np.where(table.bias_fed, table.bias_kwh / self.bias_efficiency(base), 0.0)
        carries = self.problem.stages.phase_limit_a[table.stage] * table.phases >= base.need_a[r]
        if BUS_A <= feed < PARENT:
            b = feed - BUS_A
            band = np.arange(table.energy.shape[0])
            at = table.energy[band, seen.volts[0, b]].astype(np.float64)  # (B, O)
            top = table.energy[band, seen.top_volts[0, b]]
            ok = table.bus_ok[b] & (np.maximum(at, top) < 0.5 * ILLEGAL_KWH).all(axis=0) & carries
            marginal = seen.marginal[0, b]
            return (at * marginal[:, None]).sum(axis=0) + bias_kwh, float(marginal.mean()), ok
        spot = next(place for place in table.places if place.feed == feed)
        weight = float(seen.parent_marginal[0]) if feed >= PARENT else 1.0
        return spot.kwh.astype(np.float64) * weight + bias_kwh, weight, spot.ok & carries

    def bias_efficiency(self, base: Base) -> float:
        """Return the efficiency of the board's bias supply; 1 without one."""
        return float(self.problem.biases.efficiency[base.bias - 1]) if base.bias else 1.0

    def feeds(self, table: RailTable, base: Base) -> list[int]:
        """Return the feeds a rail may take: the buses there are, the input, and the parent it has."""
        designs = Designs(self.layout, base.row[None])
        own = int(designs.rail("feed")[0, table.rail])
        buses = [BUS_A + b for b in range(2) if designs.bus("converter")[0, b] > 0]
        there = [place.feed for place in table.places if place.feed < PARENT or place.feed == own]
        return [own] if own >= PARENT else [*buses, *there]

    def rail_fronts(self, table: RailTable, base: Base) -> list[RailFront]:
        """Return the front of one rail under every cap."""
        completion = self.completion
        each = base.unit + completion.place_cost
        second, has = np.maximum(table.second, 0), table.second >= 0
        stage_cost = each[table.part] * table.phases + base.fresh[table.part]
        stage_cost += np.where(has, each[second] * table.phases + base.fresh[second], 0.0)
        part = table.bank_part
        bank_cost = each[part][:, None] * completion.pieces + base.fresh[part][:, None]  # (K, counts + 1)
        esr = completion.esr[table.banks][:, None] / np.maximum(completion.pieces, 1.0)
        parts: list[list[tuple[FloatArray, FloatArray, IntArray, IntArray, IntArray, int]]] = [[] for _ in CAPS]
        for feed in self.feeds(table, base):
            kwh, weight, ok = self.at_feed(table, base, feed)
            option = np.flatnonzero(ok & ((base.bias > 0) | ~table.bias_fed))
            if not len(option):
                continue
            counts = self.least_counts(table, base, feed)[:, option]  # (caps, o, K)
            bank = np.arange(len(table.banks))
            cost = stage_cost[option][:, None] + bank_cost[bank, counts]
            energy = kwh[option][:, None] + weight * table.ripple[option][:, None] * esr[bank, counts]
            for cap in range(len(CAPS)):
                o, k = np.nonzero(counts[cap] < NO_COUNT)
                parts[cap].append((energy[cap, o, k], cost[cap, o, k], option[o], k, counts[cap, o, k], feed))
        return [rail_front(found) for found in parts]

    def least_counts(self, table: RailTable, base: Base, feed: int) -> IntArray:
        """Return the least index of bank count under every cap, (caps, O, K)."""
        if BUS_A <= feed < PARENT:
            band = np.arange(table.energy.shape[0])
            counts = table.bus_counts[:, band, base.seen.dipped[0, feed - BUS_A]].max(axis=1)  # (caps, K, O)
            return np.asarray(counts.transpose(0, 2, 1), dtype=np.int64)
        place = next(k for k, spot in enumerate(table.places) if spot.feed == feed)
        return np.asarray(table.place_counts[:, place].transpose(0, 2, 1), dtype=np.int64)

    def rows(self, base: Base, fronts: list[RailFront], choice: IntArray) -> IntArray:
        """Return undecided rows: the base with every rail's chosen point, choice (n, R)."""
        rows = np.repeat(base.row[None], len(choice), axis=0)
        designs = Designs(self.layout, rows)
        for table, front in zip(self.completion.tables, fronts, strict=True):
            r = table.rail
            at = choice[:, r]
            option = front.option[at]
            designs.rail("stage")[:, r] = table.stage[option]
            designs.rail("phases")[:, r] = table.phases[option]
            designs.rail("fewest")[:, r] = table.fewest[option]
            designs.rail("bank")[:, r] = table.banks[front.bank[at]]
            designs.rail("bank_count")[:, r] = front.count[at]
            designs.rail("feed")[:, r] = front.feed[at]
        return rows


def option_places(completion: Completion, table: RailTable) -> IntArray:
    """Return, for every option of the problem, its place in a rail's table by what it does; 0 where it has none."""
    options = completion.evaluator.options
    own = np.flatnonzero(options.rail == table.rail)

    def key(ids: IntArray) -> list[bytes]:
        return [
            np.concatenate([[options.stage[k], options.phases[k]], options.run[k]]).tobytes() for k in ids
        ]

    known = {name: place for place, name in enumerate(key(table.option))}
    out = np.zeros(len(options.rail), dtype=np.int64)
    out[own] = [known.get(name, 0) for name in key(own)]
    return out


def children_need_a(completion: Completion, designs: Designs) -> FloatArray:
    """Return the current each parent rail must carry with its children, (P, R); 0 for rails without any."""
    rails = completion.problem.rails
    feed = designs.rail("feed")
    need = np.zeros(feed.shape)
    p, child = np.nonzero(feed >= PARENT)
    parent = feed[p, child] - PARENT
    drawn = COUPLED_LOAD * (rails.voltage_v * rails.max_a)[child] / rails.voltage_v[parent]
    np.add.at(need, (p, parent), drawn)
    return np.where(need > 0, need + rails.max_a, 0.0)


def rail_front(found: list[tuple[FloatArray, FloatArray, IntArray, IntArray, IntArray, int]]) -> RailFront:
    """Return the front of what a rail may take: energy, cost, option, bank, count and feed of each batch."""
    if not found:
        none, empty = np.zeros(0, dtype=np.int64), np.zeros(0)
        return RailFront(empty, empty, none, none, none, none)
    energy, cost = (np.concatenate([each[k] for each in found]) for k in range(2))
    keep = boxed(energy, cost, RAIL_BOXES)
    option, bank, count = (np.concatenate([each[k] for each in found])[keep] for k in (2, 3, 4))
    feed = np.concatenate([np.full(len(each[0]), each[5]) for each in found])[keep]
    return RailFront(energy[keep], cost[keep], option, bank, count, feed)


def lower_front(first: FloatArray, second: FloatArray) -> IntArray:
    """Return the nondominated points of two objectives, the first rising, the second falling; equals once."""
    order = np.lexsort((second, first))
    ranked = second[order]
    before = np.minimum.accumulate(ranked)
    new = np.concatenate([[True], ranked[1:] < before[:-1]]) if len(order) else np.zeros(0, dtype=bool)
    return np.asarray(order[new])


def boxed(first: FloatArray, second: FloatArray, boxes: int | None) -> IntArray:
    """Return the front of two objectives, its ends and one point a box along it: the nearest to the ideal."""
    front = lower_front(first, second)
    if boxes is None or len(front) <= boxes:
        return front
    x, y = first[front], second[front]
    x = (x - x[0]) / max(x[-1] - x[0], 1e-300)
    y = (y - y[-1]) / max(y[0] - y[-1], 1e-300)
    box = np.floor(0.5 * (x + 1.0 - y) * boxes)  # both rise along the front
    box[0], box[-1] = -1.0, boxes + 1.0
    order = np.lexsort((x + y, box))
    first_of_box = np.concatenate([[True], box[order][1:] != box[order][:-1]])
    return np.asarray(front[np.sort(order[first_of_box])])


def fold(fronts: list[tuple[FloatArray, FloatArray]], boxes: int | None) -> tuple[FloatArray, IntArray]:
    """Return the front of sums of one point a rail: objectives (n, 2) and the points chosen (n, R).

    fronts: energy and cost of each rail's points. ``boxes`` bounds what is kept after each rail; None keeps all, so
    that the front is exact.
    """
    total = np.zeros((1, 2))
    choice = np.zeros((1, 0), dtype=np.int64)
    for energy, cost in fronts:
        first = (total[:, 0, None] + energy).ravel()
        second = (total[:, 1, None] + cost).ravel()
        keep = boxed(first, second, boxes)
        before, own = np.divmod(keep, len(energy))
        total = np.column_stack([first[keep], second[keep]])
        choice = np.column_stack([choice[before], own])
    return total, choice


def promising(predicted: FloatArray, archive: FloatArray, most: int) -> IntArray:
    """Return which predicted points no archived one dominates, at most so many, the farthest ahead of it first."""
    if not len(predicted):
        return np.zeros(0, dtype=np.int64)
    every = np.concatenate([archive, predicted])
    ahead = np.flatnonzero(is_nondominated(every)[len(archive) :])
    if len(ahead) <= most:
        return ahead
    width = every.max(axis=0) - every.min(axis=0)
    width = np.where(width > 0.0, width, 1.0)
    gain = np.full(len(ahead), np.inf)
    for k, place in enumerate(ahead):
        if len(archive):
            gain[k] = ((archive - predicted[place]) / width).max(axis=1).min()
    return np.sort(ahead[np.argsort(-gain, kind="stable")[:most]])
