"""Completion: given buses, prices, a droop cap and approved parts, every rail takes its least cost option.

Cost of an option is money plus price x energy. Rails are taken one after another; a part number nobody else
uses yet is charged in full, one already on the board is free, so rails gather on few part numbers.
"""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from archopt.model.cost import count_pieces, unit_price
from archopt.model.evaluator import Evaluator
from archopt.model.space import BANK_COUNTS, BUS_A, PARENT, TWO_LEVELS, Designs
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.search.conditions import Conditions, conditions_of, first_conditions
from archopt.search.copper_choice import choose_pairs
from archopt.search.genome import Genome, Plan, at_least, at_most
from archopt.search.rail_tables import (
    ILLEGAL_KWH,
    NO_COUNT,
    BankCounts,
    ByteArray,
    Float32Array,
    RailTable,
    make_rail_tables,
)

UNAPPROVED = 1e4  # money: an unapproved part is taken only where no approved one is legal
ILLEGAL = 1e7
ROOM_STEPS = 6  # grid steps a schedule may leave the line of its genes by
FIRST_CHARGE = 0.3  # share of the new part cost charged while the board is not yet known


@dataclass
class Board:
    """What the rails of P designs have chosen so far.

    option, bank, count, feed (P, R): option is a row of the rail's table, feed -1 where nothing is chosen.
    users (P, parts): rails using each part number; unit (P, parts): unit prices; biased (P,): rails on bias.
    """

    option: IntArray
    bank: IntArray
    count: IntArray
    feed: IntArray
    users: IntArray
    unit: FloatArray
    biased: IntArray


@dataclass(frozen=True)
class Offer:
    """What one rail can have from one feed: the score of every option with its best bank, (P, O).

    paid, counts (n, K, O): money of every bank and the least index of its count; at (P,): the row of a plan there.
    """

    feed: int
    score: Float32Array
    paid: Float32Array
    counts: ByteArray
    at: IntArray

    def bank_of(self, plans: IntArray, option: IntArray) -> tuple[IntArray, IntArray]:
        """Return the place of the best bank and the index of its count for one option of each plan."""
        row = self.at[plans]
        bank = self.paid[row, :, option].argmin(axis=1)
        return bank, self.counts[row, bank, option].astype(np.int64)


class Completion:
    """Completes plans of one problem to design rows."""

    def __init__(self, evaluator: Evaluator, genome: Genome) -> None:
        self.evaluator = evaluator
        self.problem = evaluator.problem
        self.genome = genome
        self.layout = self.problem.layout
        self.tables = make_rail_tables(evaluator)
        self.banks = BankCounts(evaluator, self.tables)
        power = self.problem.rails.voltage_v * self.problem.states.rated_a
        self.order = np.argsort(-power, kind="stable")
        economics = self.problem.study.economics
        self.new_part = np.where(
            self.problem.parts.preferred, 0.0, economics.new_part_cost / economics.boards_per_year
        )
        self.place_cost = self.problem.parts.placements * economics.placement_cost
        self.pieces = np.array([*BANK_COUNTS, 0], dtype=np.float64)
        self.esr = self.problem.capacitors.esr_ohm * self.problem.study.derating.esr_end_of_life

    def complete(self, plan: Plan) -> IntArray:
        """Return decided design rows: completed at a first schedule, then again at the one decided."""
        self.banks.ensure(plan.cap)
        first = first_conditions(self.evaluator, plan)
        quantity = np.full(len(self.problem.parts.names), 4.0 * self.problem.study.economics.boards_per_year)
        unit = np.broadcast_to(unit_price(self.problem.parts, quantity), (len(plan), len(quantity)))
        board = self.empty(plan, unit)
        self.sweep(plan, first, board, FIRST_CHARGE)
        raw = self.rows(plan, board, first)
        rows = self.evaluator.decide(raw)
        return self.again(self.aligned(plan, board, raw, rows), rows, board)

    def aligned(self, plan: Plan, board: Board, raw: IntArray, rows: IntArray) -> Plan:
        """Return the plan with its buses exchanged, and the board's feeds with them, where deciding did so."""
        before, after = (Designs(self.layout, each).rail("feed") for each in (raw, rows))
        on_bus = (before == BUS_A) | (before == BUS_A + 1)
        swapped = (on_bus & (before != after)).any(axis=1)
        if not swapped.any():
            return plan
        board.feed = after.copy()
        turned = {f: np.where(swapped[:, None], values[:, ::-1], values) for f, values in plan.bus.items()}
        return replace(plan, bus=turned)

    def again(self, plan: Plan, rows: IntArray, board: Board) -> IntArray:
        """Return decided rows completed anew at the schedule, dips and price steps of decided ``rows``."""
        designs = Designs(self.layout, rows)
        seen = conditions_of(self.evaluator, designs, first_conditions(self.evaluator, plan))
        pieces = count_pieces(self.problem, designs)
        quantity = np.maximum(pieces, 1) * self.problem.study.economics.boards_per_year
        board.unit = unit_price(self.problem.parts, quantity)
        self.sweep(plan, seen, board, 1.0)
        return self.evaluator.decide(self.rows(plan, board, seen))

    def empty(self, plan: Plan, unit: FloatArray) -> Board:
        """Return a board on which only the plan's bulk capacitors and converters stand."""
        shape = (len(plan), self.layout.rails)
        users = np.zeros((len(plan), len(self.problem.parts.names)), dtype=np.int64)
        every = np.arange(len(plan))
        for b in range(2):
            there = plan.bus["converter"][:, b] > 0
            part = self.problem.capacitors.part[plan.bus["bulk"][:, b]]
            np.add.at(users, (every[there], part[there]), 1)
        option, bank, count = (np.zeros(shape, dtype=np.int64) for _ in range(3))
        feed = np.full(shape, -1, dtype=np.int64)
        return Board(option, bank, count, feed, users, unit, np.zeros(len(plan), dtype=np.int64))

    def sweep(self, plan: Plan, seen: Conditions, board: Board, charge: float) -> None:
        """Let every rail choose once, parents last, each seeing what the others have chosen."""
        parents = np.unique(plan.parent[plan.parent >= 0])
        order = [*(r for r in self.order if r not in parents), *(r for r in self.order if r in parents)]
        for r in order:
            self.choose(self.tables[r], plan, seen, board, charge)

    def choose(self, table: RailTable, plan: Plan, seen: Conditions, board: Board, charge: float) -> None:
        """Let one rail of every plan take its best option."""
        r = table.rail
        every = np.arange(len(plan))
        self.remove(table, board)
        fresh = np.where(board.users > 0, 0.0, self.new_part * charge)
        stage_cost = self.stage_cost(table, plan, board, fresh)
        bank_cost = self.bank_cost(table, plan, board, fresh)
        heavy = self.overloaded(table, plan, board)
        if heavy is not None:
            stage_cost += heavy
        offers = [
            offer
            for b in range(2)
            if (offer := self.bus_offer(table, b, plan, seen, stage_cost, bank_cost)) is not None
        ]
        offers += [
            self.place_offer(table, k, plan, seen, stage_cost, bank_cost) for k in range(len(table.places))
        ]
        best = np.stack([offer.score.min(axis=1) for offer in offers])
        which = best.argmin(axis=0)
        for turn, offer in enumerate(offers):
            here = every[which == turn]
            option = offer.score[here].argmin(axis=1)
            board.option[here, r] = option
            board.bank[here, r], board.count[here, r] = offer.bank_of(here, option)
            board.feed[here, r] = offer.feed
        board.count[:, r] = np.minimum(board.count[:, r], np.flatnonzero(table.counts)[-1])
        self.put(table, board)

    def remove(self, table: RailTable, board: Board) -> None:
        """Take a rail's parts off the board."""
        self.count(table, board, -1)

    def put(self, table: RailTable, board: Board) -> None:
        """Put a rail's parts on the board."""
        self.count(table, board, 1)

    def count(self, table: RailTable, board: Board, step: int) -> None:
        """Add ``step`` users to every part number a rail uses."""
        r = table.rail
        chosen = np.flatnonzero(board.feed[:, r] >= 0)
        option = board.option[chosen, r]
        np.add.at(board.users, (chosen, table.part[option]), step)
        second = table.second[option]
        has = second >= 0
        np.add.at(board.users, (chosen[has], second[has]), step)
        np.add.at(board.users, (chosen, table.bank_part[board.bank[chosen, r]]), step)
        np.add.at(board.biased, chosen, step * table.bias_fed[option].astype(np.int64))

    def stage_cost(self, table: RailTable, plan: Plan, board: Board, fresh: FloatArray) -> Float32Array:
        """Return money of stage, inductor, their new part numbers and the gate supply, (P, O)."""
        each = board.unit + self.place_cost
        second = np.maximum(table.second, 0)
        has = table.second >= 0
        cost = each[:, table.part] * table.phases + fresh[:, table.part]
        cost += np.where(has, each[:, second] * table.phases + fresh[:, second], 0.0)
        cost += np.where(plan.stage_ok[:, table.stage], 0.0, UNAPPROVED)
        if table.bias_fed.any():
            cost += self.bias_cost(table, plan, board)
        return cost.astype(np.float32)

    def bias_cost(self, table: RailTable, plan: Plan, board: Board) -> FloatArray:
        """Return money of gate power and, for the first rail that needs it, of the bias supply, (P, O)."""
        biases = self.problem.biases
        offered = self.genome.allowed_board("bias")
        offered = offered[offered > 0]
        if not len(biases.names) or not len(offered):
            return np.where(table.bias_fed, ILLEGAL, 0.0)[None, :]
        chosen = plan.board["bias"]
        index = np.where(chosen > 0, chosen, offered[0]) - 1
        part = biases.part[index]
        own = board.unit[np.arange(len(plan)), part] + self.place_cost[part] + self.new_part[part]
        own += plan.price * biases.no_load_w[index] * 8.76
        own = np.where(board.biased > 0, 0.0, own)
        each = (plan.price / biases.efficiency[index])[:, None] * table.bias_kwh
        return np.where(table.bias_fed, own[:, None] + each, 0.0)

    def bank_cost(self, table: RailTable, plan: Plan, board: Board, fresh: FloatArray) -> Float32Array:
        """Return money of every bank and count with placement and new part number, (P, K, counts + 1)."""
        part = table.bank_part
        each = board.unit[:, part] + self.place_cost[part]
        fixed = fresh[:, part] + np.where(plan.capacitor_ok[:, table.banks], 0.0, UNAPPROVED)
        cost = each[:, :, None] * self.pieces + fixed[:, :, None]
        cost[:, :, NO_COUNT] = ILLEGAL
        return cost.astype(np.float32)

    def overloaded(self, table: RailTable, plan: Plan, board: Board) -> Float32Array | None:
        """Return a penalty for options that cannot carry the rail and its children, (P, O); None without any."""
        children = plan.parent == table.rail
        if not children.any():
            return None
        problem = self.problem
        volts = problem.rails.voltage_v
        extra = (children * (volts * problem.rails.max_a)).sum(axis=1) * 1.1 / volts[table.rail]
        need = problem.rails.max_a[table.rail] + extra
        carries = problem.stages.phase_limit_a[table.stage] * table.phases
        short = np.where(children.any(axis=1)[:, None], carries < need[:, None], False)
        return np.where(short, 1e5, 0.0).astype(np.float32)

    def bus_offer(
        self, table: RailTable, b: int, plan: Plan, seen: Conditions, stage_cost: Float32Array,
        bank_cost: Float32Array,
    ) -> Offer | None:  # fmt: skip
        """Return what a rail can have from one bus; None where no plan has that bus."""
        there = (plan.bus["converter"][:, b] > 0) & (plan.parent[:, table.rail] < 0)
        if not there.any() or not table.bus_ok[b].any():
            return None
        here = np.flatnonzero(there)
        bands = table.energy.shape[0]
        energy = np.zeros((len(here), table.energy.shape[2]), np.float32)
        counts = np.zeros((len(here), *table.bus_counts.shape[3:]), np.uint8)
        cap = plan.cap[here]
        for band in range(bands):
            weight = seen.marginal[here, b, band, None].astype(np.float32)
            energy += table.energy[band][seen.volts[here, b, band]] * weight
            np.maximum(counts, table.bus_counts[cap, band, seen.dipped[here, b, band]], out=counts)
        bad = energy > 0.5 * ILLEGAL_KWH
        moving = seen.top_volts[here, b] != seen.volts[here, b]
        for top in np.flatnonzero(moving.any(axis=0)):
            bad |= table.energy[top][seen.top_volts[here, b, top]] > 0.5 * ILLEGAL_KWH
        ok = table.bus_ok[b] & ~bad
        price = plan.price[here, None].astype(np.float32)
        marginal = seen.marginal[here, b].mean(axis=1)[:, None].astype(np.float32)
        score = self.with_banks(
            table, BUS_A + b, price, marginal, counts, bank_cost[here], stage_cost[here] + price * energy, ok
        )
        if len(here) == len(plan):
            return score
        full = np.full((len(plan), len(table.option)), 10 * ILLEGAL, np.float32)
        full[here] = score.score
        at = np.zeros(len(plan), dtype=np.int64)
        at[here] = np.arange(len(here))
        return replace(score, score=full, at=at)

    def place_offer(
        self, table: RailTable, k: int, plan: Plan, seen: Conditions, stage_cost: Float32Array,
        bank_cost: Float32Array,
    ) -> Offer:  # fmt: skip
        """Return what a rail can have from the input or a parent rail."""
        place = table.places[k]
        wanted = plan.parent[:, table.rail]
        fits = wanted < 0 if place.feed < PARENT else wanted == place.feed - PARENT
        counts = table.place_counts[plan.cap, k]
        marginal = seen.parent_marginal if place.feed >= PARENT else np.ones(len(plan))
        weight = marginal[:, None].astype(np.float32)
        price = plan.price[:, None].astype(np.float32)
        ok = place.ok & np.ones_like(fits)[:, None]
        cost = stage_cost + price * weight * place.kwh
        offer = self.with_banks(table, place.feed, price, weight, counts, bank_cost, cost, ok)
        offer.score[~fits] = 10 * ILLEGAL
        return offer

    def with_banks(
        self, table: RailTable, feed: int, price: Float32Array, marginal: Float32Array, counts: ByteArray,
        bank_cost: Float32Array, cost: Float32Array, ok: BoolArray,
    ) -> Offer:  # fmt: skip
        """Return each option with its best bank: cost (P, O) without bank, counts (P, K, O) the least index."""
        count, banks = counts.shape[:2]
        width = NO_COUNT + 1
        base = (np.arange(count * banks, dtype=np.int32) * width).reshape(count, banks, 1)
        esr = (self.esr[table.banks, None] / np.maximum(self.pieces, 1.0)).astype(np.float32)
        paid = bank_cost.reshape(-1).take(counts + base, mode="clip")
        # a bank loses by the ripple of the option it serves
        lost = esr.reshape(-1).take(counts + base[:1], mode="clip")
        lost *= table.ripple
        lost *= (price * marginal)[:, :, None]
        paid += lost
        score = cost + paid.min(axis=1)
        return Offer(
            feed, np.where(ok, score, score + np.float32(ILLEGAL)), paid, counts, np.arange(count)
        )

    def rows(self, plan: Plan, board: Board, seen: Conditions) -> IntArray:
        """Return undecided design rows of the boards."""
        rows = np.zeros((len(plan), self.layout.width), dtype=np.int64)
        designs = Designs(self.layout, rows)
        for r, table in enumerate(self.tables):
            option = board.option[:, r]
            designs.rail("stage")[:, r] = table.stage[option]
            designs.rail("phases")[:, r] = table.phases[option]
            designs.rail("fewest")[:, r] = table.fewest[option]
            designs.rail("bank")[:, r] = table.banks[board.bank[:, r]]
        designs.rail("feed")[:] = board.feed
        designs.rail("bank_count")[:] = board.count
        for field, values in plan.bus.items():
            designs.bus(field)[:] = values
        for field, values in plan.board.items():
            designs.board(field)[:] = values
        designs.rail("pairs")[:] = choose_pairs(self.problem, plan, board.feed, seen)
        self.widen(plan, designs)
        return rows

    def widen(self, plan: Plan, designs: Designs) -> None:
        """Give a bus that follows the load room around the line of its genes; the schedule takes what it needs."""
        for b in range(2):
            low = self.genome.allowed_bus("lower_v", b)
            high = self.genome.allowed_bus("upper_v", b)
            follow = plan.bus["control"][:, b] > TWO_LEVELS
            if not len(low) or not len(high):
                continue
            lower, upper = designs.bus("lower_v")[:, b], designs.bus("upper_v")[:, b]
            lower[:] = np.where(follow, at_most(low, lower - ROOM_STEPS), lower)
            upper[:] = np.where(follow, at_least(high, upper + ROOM_STEPS), upper)
