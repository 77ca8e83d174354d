"""Which single changes of a design can dominate it at all: exactly, and to first order.

Exact are the cost, the layer budget, the current of a rail at its own maximum and the least droop a rail can have
with its bank: a change these rule out needs no evaluation. Energy is first order: it leaves out what a change does
to the rest of the board.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.cost import bill, copper_area_m2
from archopt.model.evaluator import stepped_droop
from archopt.model.hardware import setting_error_v
from archopt.model.options import option_index
from archopt.model.parameters import FIXED_RATIO
from archopt.model.space import BUS_A, FOLLOW, INPUT, PARENT, Designs
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.search.changes import choice_layout
from archopt.search.conditions import Conditions
from archopt.search.copper_choice import square_hours
from archopt.search.fold import Fold

TIE = 1e-9  # relative: costs nearer than this are equal
DROOP_TIE = 1e-3  # percent: droop tables hold 7 digits
ENERGY_MARGIN = 2e-4  # of the energy lost: how much first order may be wrong about a change
NEAR_STEPS = 2  # changes of an ordered bus choice a screened pass tries, in steps


@dataclass(frozen=True)
class Sorted:
    """What became of the changes of one design: (n,) each, one true of every change that is ruled out."""

    costs_more: BoolArray
    impossible: BoolArray
    not_worth: BoolArray


class Screen:
    """Rules out changes of designs of one problem."""

    def __init__(self, fold: Fold) -> None:
        self.fold = fold
        self.evaluator = fold.evaluator
        self.problem = fold.problem
        self.layout = choice_layout(fold.problem)
        self.square_hours = square_hours(fold.problem)
        options = fold.evaluator.options
        self.ripple, self.gates_kwh = np.zeros(len(options.rail)), np.zeros(len(options.rail))
        for table in fold.completion.tables:
            own = np.flatnonzero(options.rail == table.rail)
            place = fold.places[table.rail][own]
            self.ripple[own] = table.ripple[place]
            self.gates_kwh[own] = np.where(table.bias_fed, table.bias_kwh, 0.0)[place]

    def sort(
        self, row: IntArray, objectives: FloatArray, seen: Conditions | None, changed: IntArray, rail: IntArray
    ) -> Sorted:
        """Sort the changes ``changed`` (n, C) of a decided design: its row, objectives and, to screen, conditions.

        rail (n,): the rail changed, -1 for bus and board. Without conditions nothing is screened to first order.
        """
        designs = Designs(self.layout, changed)
        costs_more = self.least_cost(designs) > objectives[1] * (1.0 + TIE)
        impossible = self.impossible(designs, rail, float(objectives[2]))
        not_worth = np.zeros(len(changed), dtype=bool)
        if seen is not None:
            open_ = np.flatnonzero(~costs_more & ~impossible)
            not_worth[open_] = self.not_worth(row, float(objectives[0]), seen, changed[open_], rail[open_])
        return Sorted(costs_more, impossible & ~costs_more, not_worth)

    def least_cost(self, designs: Designs) -> FloatArray:
        """Return what changed designs cost at least, (n,): without a supervisor, which the schedule may not need."""
        bare = designs.copy()
        bare.rows[:, self.layout.board("supervisor")] = 0
        return np.asarray(bill(self.problem, bare).total)

    def impossible(self, designs: Designs, rail: IntArray, droop: float) -> BoolArray:
        """Return which changes break a limit, or droop beyond ``droop`` %, whatever the schedule does, (n,)."""
        problem, board = self.problem, self.problem.study.board
        stage, phases = designs.rail("stage"), designs.rail("phases")
        every = np.arange(stage.shape[1])
        out = (phases < problem.phases_low[every, stage]).any(axis=1)
        offered = problem.stacks.pairs[designs.board("stack")] * board.area_cm2 * 1e-4 * board.usable_copper_share
        out |= copper_area_m2(problem, designs) > offered * (1.0 + TIE)
        on_rail = np.flatnonzero((rail >= 0) & ~out)
        least = self.least_droop(designs.take(on_rail), rail[on_rail])
        out[on_rail] |= stepped_droop(least - DROOP_TIE) > droop
        return np.asarray(out)

    def least_droop(self, designs: Designs, rail: IntArray) -> FloatArray:
        """Return the droop of one rail of each design at the highest voltage its feed can have, (n,) percent."""
        every = np.arange(len(rail))
        options = self.evaluator.options
        option = self.options(designs)[every, rail]
        feed = designs.rail("feed")
        own = feed[every, rail]
        row = options.row[option]  # (n, places)
        nodes = options.rows.droop_nodes_v[row]  # (n, places, nodes)
        above = (nodes < self.highest_v(designs, own)[:, None, None]).sum(axis=2)
        node = np.minimum(above, nodes.shape[2] - 1)
        bank, count = (designs.rail(name)[every, rail][:, None] for name in ("bank", "bank_count"))
        place = np.arange(row.shape[1])
        least = options.rows.droop_percent[row, bank, count, place, node].max(axis=1).astype(np.float64)
        has_children = (feed == (rail + PARENT)[:, None]).any(axis=1)
        return np.where(has_children, 0.0, least)

    def highest_v(self, designs: Designs, feed: IntArray) -> FloatArray:
        """Return the highest voltage each design's feed can have, (n,) V."""
        problem = self.problem
        supply, rails, table = problem.study.supply, problem.rails, problem.converters
        parent = np.maximum(feed - PARENT, 0)
        fixed = np.where(feed == INPUT, supply.high_v, rails.voltage_v[parent])
        if not len(table.names):
            return fixed
        every, b = np.arange(len(feed)), np.clip(feed - BUS_A, 0, 1)
        converter = np.maximum(designs.bus("converter")[every, b] - 1, 0)
        top = problem.grid_v[np.maximum(designs.bus("upper_v"), designs.bus("nominal_v"))[every, b]]
        top = top + setting_error_v(problem, converter, top)
        top = np.where(table.kind[converter] == FIXED_RATIO, table.ratio[converter] * supply.high_v, top)
        return np.where((feed >= BUS_A) & (feed < PARENT), top, fixed)

    def options(self, designs: Designs) -> IntArray:
        """Return the option of every rail, (n, R)."""
        stage, phases, fewest = (designs.rail(name) for name in ("stage", "phases", "fewest"))
        return option_index(self.evaluator.options, stage, phases, fewest, self.problem.phases_high)

    def not_worth(
        self, row: IntArray, energy: float, seen: Conditions, changed: IntArray, rail: IntArray
    ) -> BoolArray:
        """Return which changes first order says lose more, or are far on a bus, (n,)."""
        base = row[: self.layout.choices]
        out = np.zeros(len(changed), dtype=bool)
        on_rail = np.flatnonzero(rail >= 0)
        before = np.repeat(base[None], len(on_rail), axis=0)
        change = self.rail_kwh(changed[on_rail], rail[on_rail], seen) - self.rail_kwh(before, rail[on_rail], seen)
        out[on_rail] = ~(change <= ENERGY_MARGIN * energy)
        was, after = Designs(self.layout, base[None]), Designs(self.layout, changed)
        fields = ("nominal_v", "lower_v", "upper_v")
        moved = np.stack([np.abs(after.bus(field) - was.bus(field)) for field in fields]).max(axis=(0, 2))
        same = (after.bus("converter") == was.bus("converter")).all(axis=1)
        follows = (after.bus("control") != was.bus("control")) & (after.bus("control") == FOLLOW)
        out |= (rail < 0) & same & (moved > NEAR_STEPS) & ~follows.any(axis=1)
        return out

    def rail_kwh(self, changed: IntArray, rail: IntArray, seen: Conditions) -> FloatArray:
        """Return what one rail of each design takes from the board input, (n,) kWh; inf where it may not run."""
        designs = Designs(self.layout, changed)
        every = np.arange(len(rail))
        options = self.evaluator.options
        option = self.options(designs)[every, rail]
        feed = designs.rail("feed")[every, rail]
        rows, row = options.rows, options.row[option]
        place = np.arange(row.shape[1])
        b = np.clip(feed - BUS_A, 0, 1)
        volts = seen.volts[0, b]  # (n, places)
        marginal = seen.marginal[0, b]
        on_bus = (rows.energy_kwh[row, place, volts] * marginal).sum(axis=1)
        parent = np.maximum(feed - PARENT, 0)
        behind = rows.child_kwh[row, place, parent[:, None]].sum(axis=1) * seen.parent_marginal[0]
        kwh = np.where(feed == INPUT, rows.input_kwh[row, place].sum(axis=1), np.where(feed >= PARENT, behind, on_bus))
        weight = np.where(feed == INPUT, 1.0, np.where(feed >= PARENT, seen.parent_marginal[0], marginal.mean(axis=1)))
        bank, count, pairs = (designs.rail(name)[every, rail] for name in ("bank", "bank_count", "pairs"))
        esr_ohm = self.fold.completion.esr[bank] / self.problem.bank_counts[count]
        kwh += self.gates_kwh[option] + weight * self.ripple[option] * esr_ohm
        stack = designs.board("stack")
        loop_ohm = 2.0 * self.problem.rails.squares[rail] * self.problem.sheet_ohm[stack] / np.maximum(pairs, 1)
        kwh += weight * loop_ohm * self.square_hours[rail]
        grid = self.problem.grid_v[volts]
        legal = (grid >= rows.need_v[row, place]) & (grid <= rows.high_v[row, place])
        on_a_bus = (feed >= BUS_A) & (feed < PARENT)
        return np.where(on_a_bus & ~legal.all(axis=1), np.inf, kwh)
