"""Local search on design rows: single and paired changes of one choice, with what must move along with it.

Here parents and the other couplings change that completion, rail by rail, does not see.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

from archopt.model.problem import Problem
from archopt.model.space import BUS_A, FOLLOW, PARENT, RAIL_FIELDS, Layout
from archopt.physics.arrays import IntArray
from archopt.search.genome import at_least, at_most

PAIRED_SHARE = 0.5
BULK_WEIGHT = 3.0
FOLLOW_ROOM = 4  # grid steps around the used limits of a moving bus that a neighbour's schedule may take
NEAR_SHARE = 0.8  # ordered choices: share of steps to a next value rather than anywhere

Move = Callable[[IntArray, np.random.Generator], None]


class Neighbours:
    """Draws neighbours of design rows; rows returned are not yet decided."""

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        self.layout: Layout = problem.layout
        self.allowed = problem.space.allowed
        rails = self.layout.rails
        rail_moves: list[tuple[float, Move]] = [
            (3.0, self.move_stage),
            (1.5, self.move_phases),
            (0.7, self.move_fewest),
            (2.0, self.move_bank),
            (2.0, self.move_count),
            (1.0, self.move_pairs),
            (1.2, self.move_feed),
        ]
        board_moves: list[tuple[float, Move]] = [
            (2.0, self.move_bus_order),
            (1.0, self.move_bus_kind),
            (0.6, self.move_board),
            (BULK_WEIGHT, self.move_bulk),
            (0.5, self.move_damper),
            (1.5, self.replace_stage),
            (1.0, self.replace_bank),
        ]
        weights = [weight * rails / 4.0 for weight, _ in rail_moves] + [weight for weight, _ in board_moves]
        self.moves = [move for _, move in (*rail_moves, *board_moves)]
        self.edges = np.cumsum(weights) / np.sum(weights)

    def draw(self, rows: IntArray, rng: np.random.Generator) -> IntArray:
        """Return one neighbour of every row, (P, columns)."""
        out = rows.copy()
        for row in out:
            self.change(row, rng)
            if rng.random() < PAIRED_SHARE:
                self.change(row, rng)
            self.give_room(row)
        return out

    def change(self, row: IntArray, rng: np.random.Generator) -> None:
        """Make one move on a row, in place."""
        place = int(np.searchsorted(self.edges, rng.random(), side="right"))
        self.moves[min(place, len(self.moves) - 1)](row, rng)

    def give_room(self, row: IntArray) -> None:
        """Widen the limits of a bus that follows the load, so that its schedule may move."""
        for b in range(2):
            control = row[self.layout.bus("control").start + b]
            if control != FOLLOW:
                continue
            low, high = (self.layout.bus(field).start + b for field in ("lower_v", "upper_v"))
            row[low] = at_most(self.allowed[low], row[low] - FOLLOW_ROOM)
            row[high] = at_least(self.allowed[high], row[high] + FOLLOW_ROOM)

    def column(self, field: str, r: int) -> int:
        """Return the column of a rail choice."""
        return RAIL_FIELDS.index(field) * self.layout.rails + r

    def any_rail(self, rng: np.random.Generator) -> int:
        """Return a rail at random."""
        return int(rng.integers(self.layout.rails))

    def other(self, column: int, row: IntArray, rng: np.random.Generator) -> None:
        """Give a column another of its values."""
        values = self.allowed[column]
        values = values[values != row[column]]
        if len(values):
            row[column] = values[rng.integers(len(values))]

    def step(self, column: int, row: IntArray, rng: np.random.Generator) -> None:
        """Move an ordered column to a next value, or now and then anywhere."""
        values = self.allowed[column]
        if len(values) < 2 or rng.random() >= NEAR_SHARE:
            self.other(column, row, rng)
            return
        place = int(np.searchsorted(values, row[column]))
        size = 1 if rng.random() < 0.7 else 2
        place += size if rng.random() < 0.5 else -size
        row[column] = values[min(max(place, 0), len(values) - 1)]

    def stages_for(self, r: int, feed: int) -> IntArray:
        """Return the stages a rail may take from a feed."""
        values = self.allowed[self.column("stage", r)]
        return np.asarray(values[self.problem.feed_ok[r, values, feed]])

    def set_stage(self, row: IntArray, r: int, stage: int, rng: np.random.Generator) -> None:
        """Give a rail a stage and phases it can carry its current with."""
        row[self.column("stage", r)] = stage
        low, high = int(self.problem.phases_low[r, stage]), int(self.problem.phases_high[r, stage])
        extra = 0 if rng.random() < 0.6 else int(rng.integers(0, max(high - low, 0) + 1))
        values = self.allowed[self.column("phases", r)]
        row[self.column("phases", r)] = values[np.abs(values - min(low + extra, high)).argmin()]

    def move_stage(self, row: IntArray, rng: np.random.Generator) -> None:
        """Another stage for one rail, half of the time one already on the board."""
        r = self.any_rail(rng)
        values = self.stages_for(r, int(row[self.column("feed", r)]))
        values = values[values != row[self.column("stage", r)]]
        if rng.random() < 0.5:
            there = row[self.layout.rail("stage")]
            shared = values[np.isin(values, there)]
            values = shared if len(shared) else values
        if len(values):
            self.set_stage(row, r, int(values[rng.integers(len(values))]), rng)

    def move_phases(self, row: IntArray, rng: np.random.Generator) -> None:
        """One phase more or fewer."""
        self.step(self.column("phases", self.any_rail(rng)), row, rng)

    def move_fewest(self, row: IntArray, rng: np.random.Generator) -> None:
        """Shed phases at light load, or not."""
        self.other(self.column("fewest", self.any_rail(rng)), row, rng)

    def move_bank(self, row: IntArray, rng: np.random.Generator) -> None:
        """Another capacitor for one rail, half of the time one on the board; about the same capacitance."""
        r = self.any_rail(rng)
        column = self.column("bank", r)
        values = self.allowed[column][self.allowed[column] != row[column]]
        if rng.random() < 0.5:
            shared = values[np.isin(values, row[self.layout.rail("bank")])]
            values = shared if len(shared) else values
        if len(values):
            self.set_bank(row, r, int(values[rng.integers(len(values))]), rng)

    def set_bank(self, row: IntArray, r: int, bank: int, rng: np.random.Generator) -> None:
        """Give a rail a capacitor and a count near the capacitance it had."""
        self.refill(row, self.column("bank", r), self.column("bank_count", r), bank, rng)

    def refill(self, row: IntArray, column: int, counts: int, bank: int, rng: np.random.Generator) -> None:
        """Write a capacitor into one column and a count near the capacitance there was into another."""
        size = self.problem.capacitors.capacitance_f
        old = int(row[column])
        pieces = self.problem.bank_counts[row[counts]] * size[old] / size[bank]
        values = self.allowed[counts]
        place = int(np.abs(np.log(self.problem.bank_counts[values] / max(pieces, 1e-9))).argmin())
        place += int(rng.integers(-1, 2))
        row[column] = bank
        row[counts] = values[min(max(place, 0), len(values) - 1)]

    def move_count(self, row: IntArray, rng: np.random.Generator) -> None:
        """A larger or smaller bank."""
        self.step(self.column("bank_count", self.any_rail(rng)), row, rng)

    def move_pairs(self, row: IntArray, rng: np.random.Generator) -> None:
        """A plane pair more or fewer for one pour."""
        self.step(self.column("pairs", self.any_rail(rng)), row, rng)

    def move_feed(self, row: IntArray, rng: np.random.Generator) -> None:
        """Another feed for one rail, with a stage that takes it."""
        r = self.any_rail(rng)
        column = self.column("feed", r)
        values = self.allowed[column][self.allowed[column] != row[column]]
        if not len(values):
            return
        feed = int(values[rng.integers(len(values))])
        stages = self.stages_for(r, feed)
        if not len(stages):
            return
        row[column] = feed
        if feed >= PARENT and row[self.column("feed", feed - PARENT)] >= PARENT:
            self.feed_from_bus(row, feed - PARENT)
        if row[self.column("stage", r)] not in stages:
            shared = stages[np.isin(stages, row[self.layout.rail("stage")])]
            pool = shared if len(shared) and rng.random() < 0.5 else stages
            self.set_stage(row, r, int(pool[rng.integers(len(pool))]), rng)
        if feed in {BUS_A, BUS_A + 1}:
            self.furnish(row, feed - BUS_A)

    def feed_from_bus(self, row: IntArray, r: int) -> None:
        """Feed a rail from bus A where it may be: a parent has no parent."""
        column = self.column("feed", r)
        if BUS_A in self.allowed[column] and len(self.stages_for(r, BUS_A)):
            row[column] = BUS_A

    def furnish(self, row: IntArray, b: int) -> None:
        """Give a bus that was not used a converter like the other's, so that it can start."""
        layout = self.layout
        column = layout.bus("converter").start + b
        if row[column] > 0:
            return
        for field in ("converter", "count", "fewest", "nominal_v", "control", "lower_v", "upper_v", "bulk",
                      "bulk_count", "pairs"):  # fmt: skip
            there = layout.bus(field).start
            value = row[there + 1 - b]
            values = self.allowed[there + b]
            row[there + b] = value if value in values else values[-1]

    def used_bus(self, row: IntArray, rng: np.random.Generator) -> int:
        """Return a bus in use, at random; bus A where none is."""
        feed = row[self.layout.rail("feed")]
        used = [b for b in range(2) if (feed == BUS_A + b).any()]
        return used[int(rng.integers(len(used)))] if used else 0

    def move_bus_order(self, row: IntArray, rng: np.random.Generator) -> None:
        """Voltage, limits, counts or pairs of a bus, up or down."""
        b = self.used_bus(row, rng)
        fields = ("nominal_v", "nominal_v", "lower_v", "upper_v", "count", "bulk_count", "bulk_count", "pairs")
        self.step(self.layout.bus(fields[int(rng.integers(len(fields)))]).start + b, row, rng)

    def move_bus_kind(self, row: IntArray, rng: np.random.Generator) -> None:
        """Converter, control, bulk capacitor or the fewest running of a bus."""
        b = self.used_bus(row, rng)
        fields = ("converter", "control", "bulk", "fewest")
        field = fields[int(rng.integers(len(fields)))]
        column = self.layout.bus(field).start + b
        self.other(column, row, rng)
        if field == "converter" and row[column] == 0:
            values = self.allowed[column]
            row[column] = values[-1]

    def move_bulk(self, row: IntArray, rng: np.random.Generator) -> None:
        """Another bulk capacitor of about the same capacitance for a bus, or a larger or smaller bank of the same."""
        b = self.used_bus(row, rng)
        column, counts = (self.layout.bus(field).start + b for field in ("bulk", "bulk_count"))
        values = self.allowed[column][self.allowed[column] != row[column]]
        if len(values) and rng.random() < 0.5:
            self.refill(row, column, counts, int(values[rng.integers(len(values))]), rng)
        else:
            self.step(counts, row, rng)

    def move_damper(self, row: IntArray, rng: np.random.Generator) -> None:
        """Another damping bank for a bus, or none; or a larger or smaller one."""
        b = self.used_bus(row, rng)
        column, counts = (self.layout.bus(field).start + b for field in ("damper", "damper_count"))
        if row[column] == 0 or rng.random() < 0.5:
            self.other(column, row, rng)
        else:
            self.step(counts, row, rng)

    def move_board(self, row: IntArray, rng: np.random.Generator) -> None:
        """Another stack, bias supply, bias feed or supervisor."""
        fields = ("stack", "stack", "stack", "bias", "bias_feed", "supervisor")
        self.other(self.layout.board(fields[int(rng.integers(len(fields)))]), row, rng)

    def replace_stage(self, row: IntArray, rng: np.random.Generator) -> None:
        """Replace one stage by another on every rail that can take it."""
        there = row[self.layout.rail("stage")]
        old = int(there[rng.integers(len(there))])
        rails = np.flatnonzero(there == old)
        feed = row[self.layout.rail("feed")]
        values = self.stages_for(int(rails[0]), int(feed[rails[0]]))
        values = values[values != old]
        if not len(values):
            return
        shared = values[np.isin(values, there)]
        pool = shared if len(shared) and rng.random() < 0.6 else values
        stage = int(pool[rng.integers(len(pool))])
        for r in rails:
            if stage in self.stages_for(int(r), int(feed[r])):
                self.set_stage(row, int(r), stage, rng)

    def replace_bank(self, row: IntArray, rng: np.random.Generator) -> None:
        """Replace one capacitor by another on every rail that can take it."""
        there = row[self.layout.rail("bank")]
        old = int(there[rng.integers(len(there))])
        rails = np.flatnonzero(there == old)
        values = self.allowed[self.column("bank", int(rails[0]))]
        values = values[values != old]
        if not len(values):
            return
        shared = values[np.isin(values, there)]
        pool = shared if len(shared) and rng.random() < 0.6 else values
        bank = int(pool[rng.integers(len(pool))])
        for r in rails:
            if bank in self.allowed[self.column("bank", int(r))]:
                self.set_bank(row, int(r), bank, rng)
