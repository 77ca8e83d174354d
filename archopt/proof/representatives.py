"""The designs of a space laid out to be counted and gone through: one representative of each, in mixed radix.

Genes without effect have one value in a representative, as :mod:`archopt.model.canonical` gives them, and what can
never meet its limits, whatever else is chosen, is left out where one look at the choices tells. The factors are
made by the canonical form itself, so that both agree.
"""

from __future__ import annotations

import itertools
import math
from collections.abc import Callable, Iterator
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from archopt.model.canonical import bus_pinned, tidy_bias, tidy_buses, tidy_copper, tidy_rails
from archopt.model.problem import Problem, bank_effective_f, bank_most_f
from archopt.model.space import BUS_A, PARENT, Designs
from archopt.physics.arrays import BoolArray, FloatArray, IntArray

LIMIT = 20_000_000
MOST_PRODUCTS = 100_000
MOST_NUMBERED = 2**62  # representatives are numbered in 64 bits
MOST_VOLTAGES = 1_000_000
SET_FIELDS = ("nominal_v", "control", "lower_v", "upper_v")


Possible = Callable[[int, int, IntArray], BoolArray]
"""Told a rail, a feed and choices (N, 5) of stage, phases, fewest, bank and its count: which may be legal, (N,)."""


@dataclass(frozen=True)
class Factor:
    """Values that some columns take together: columns (C,), values (N, C)."""

    columns: IntArray
    values: IntArray

    def where(self, keep: BoolArray) -> Factor:
        """Return the factor with some of its values."""
        return Factor(self.columns, self.values[keep])


@dataclass(frozen=True)
class Product:
    """Every combination of the factors' values, the last factor's changing fastest; other columns are 0."""

    factors: tuple[Factor, ...]

    @cached_property
    def size(self) -> int:
        """Number of combinations."""
        return math.prod(len(factor.values) for factor in self.factors)

    def fill(self, rows: IntArray, start: int) -> None:
        """Write the combinations from number ``start`` on into rows of noughts, (P, columns), in place."""
        number = np.arange(start, start + len(rows))
        for factor in reversed(self.factors):
            number, place = np.divmod(number, len(factor.values))
            rows[:, factor.columns] = factor.values[place]


class Representatives:
    """All representatives of a problem's designs, numbered; ``rows`` returns any stretch of them."""

    def __init__(self, problem: Problem, products: list[Product]) -> None:
        self.problem = problem
        self.products = products
        self.edges = np.concatenate([[0], np.cumsum([product.size for product in products], dtype=np.int64)])

    def __len__(self) -> int:
        return int(self.edges[-1])

    def rows(self, start: int, stop: int) -> IntArray:
        """Return undecided design rows of the representatives numbered from start to stop, (P, columns)."""
        stop = min(stop, len(self))
        rows = np.zeros((max(stop - start, 0), self.problem.layout.width), dtype=np.int64)
        place = int(np.searchsorted(self.edges, start, side="right")) - 1
        done = 0
        while done < len(rows):
            first = start + done - int(self.edges[place])
            count = min(self.products[place].size - first, len(rows) - done)
            self.products[place].fill(rows[done : done + count], first)
            done += count
            place += 1
        return rows


def combinations(problem: Problem) -> int:
    """Return how many combinations of values the columns may hold, neutral choices counted."""
    return math.prod(max(len(values), 1) for values in problem.space.allowed)


def representatives(problem: Problem, possible: Possible | None = None) -> Representatives | None:
    """Return the representatives of a space, None where it is too large even to be counted this way.

    possible : which choices of a rail may meet their own limits at all; all where not told
    """
    makers = ProductMaker(problem, possible)
    feeds = math.prod(len(makers.rail_values("feed", r)) for r in range(problem.layout.rails))
    if feeds * len(makers.board_values("stack")) > MOST_PRODUCTS:
        return None
    for bus in range(2):
        if math.prod(len(makers.bus_values(field, bus)) for field in SET_FIELDS) > MOST_VOLTAGES:
            return None
    products = []
    total = 0
    for product in makers.products():
        if product.size:
            products.append(product)
            total += product.size
        if len(products) > MOST_PRODUCTS or total > MOST_NUMBERED:
            return None
    return Representatives(problem, products)


def grid_of(values: list[IntArray]) -> IntArray:
    """Return every combination of some value lists, (N, lists)."""
    return np.stack([axis.ravel() for axis in np.meshgrid(*values, indexing="ij")], axis=1).astype(np.int64)


class ProductMaker:
    """Makes the products of a problem: one for each feeding of the rails, stack, need of a bias and control."""

    def __init__(self, problem: Problem, possible: Possible | None = None) -> None:
        self.problem = problem
        self.possible = possible
        self.layout = problem.layout
        self.allowed = problem.space.allowed
        self.rail_tables: dict[tuple[int, int], Factor] = {}
        self.bus_tables: dict[int, Factor] = {}
        self.moving_tables: dict[tuple[int, int], Factor] = {}
        self.bias_tables: dict[int | None, Factor] = {}
        rails, capacitors = problem.rails, problem.capacitors
        self.least_f = bank_effective_f(problem.study, capacitors, rails.voltage_v[:, None])
        self.most_f = bank_most_f(capacitors, rails.voltage_v[:, None])

    def rail_values(self, field: str, r: int) -> IntArray:
        """Return what a rail column may hold."""
        return np.asarray(self.allowed[self.layout.rail(field).start + r])

    def bus_values(self, field: str, bus: int) -> IntArray:
        """Return what a bus column may hold."""
        return np.asarray(self.allowed[self.layout.bus(field).start + bus])

    def board_values(self, field: str) -> IntArray:
        """Return what a board column may hold."""
        return np.asarray(self.allowed[self.layout.board(field)])

    def rail_columns(self, fields: tuple[str, ...], r: int) -> IntArray:
        """Return the columns of some choices of one rail."""
        return np.array([self.layout.rail(field).start + r for field in fields])

    def bus_columns(self, fields: tuple[str, ...], bus: int) -> IntArray:
        """Return the columns of some choices of one bus."""
        return np.array([self.layout.bus(field).start + bus for field in fields])

    def blank(self, count: int) -> Designs:
        """Return rows of noughts with a stage in every rail, so that the canonical form can read them."""
        rows = np.zeros((count, self.layout.width), dtype=np.int64)
        for r in range(self.layout.rails):
            rows[:, self.layout.rail("stage").start + r] = self.rail_values("stage", r)[0]
        return Designs(self.layout, rows)

    def products(self) -> Iterator[Product]:
        """Yield the products, which share no design."""
        for feed in self.feeds():
            used = [BUS_A + bus in feed for bus in range(2)]
            rails = [self.rail(r, value) for r, value in enumerate(feed)]
            buses = [self.bus(bus) if used[bus] else None for bus in range(2)]
            for stack in self.board_values("stack"):
                copper = self.copper(feed, int(stack))
                for control in itertools.product(*(controls_of(table) for table in buses)):
                    moved = [self.moving(bus, control[bus]) if used[bus] else None for bus in range(2)]
                    biased = self.with_bias(control[0] if used[0] else None)
                    yield from self.by_need(rails, copper, moved, biased, self.supervisor(control))

    def feeds(self) -> Iterator[tuple[int, ...]]:
        """Yield how the rails may be fed: no parent has a parent, bus A carries more, a used bus can start.

        Every feeding left out is either a misfit, and so breaks a limit, or stands for the same board with the buses
        exchanged, which is there.
        """
        rails = range(self.layout.rails)
        power = self.problem.rails.voltage_v * self.problem.states.rated_a
        starts = [bool((self.bus_values("converter", bus) > 0).any()) for bus in range(2)]
        exchange = not bus_pinned(self.problem)
        for feed in itertools.product(*(self.rail_values("feed", r).tolist() for r in rails)):
            if any(value >= PARENT and feed[value - PARENT] >= PARENT for value in feed):
                continue
            if any(BUS_A + bus in feed and not starts[bus] for bus in range(2)):
                continue
            carried = [float(np.where(np.array(feed) == BUS_A + bus, power, 0.0).sum()) for bus in range(2)]
            if not (exchange and carried[1] > carried[0] * (1.0 + 1e-12)):
                yield feed

    def rail(self, r: int, feed: int) -> Factor:
        """Return feed, stage, phases, fewest, bank and its count of one rail from one feed.

        Left out, because they break a limit on any board: stages that the feed cannot serve, phases that the rail's
        own maximum overloads, banks outside the capacitance the stage's loop is made for.
        """
        if (r, feed) in self.rail_tables:
            return self.rail_tables[r, feed]
        problem = self.problem
        stages = self.rail_values("stage", r)
        stages = stages[problem.feed_ok[r, stages, feed]]
        fields = ("stage", "phases", "fewest")
        first = grid_of([stages, self.rail_values("phases", r), self.rail_values("fewest", r)])
        designs = self.blank(len(first))
        columns = self.rail_columns(fields, r)
        designs.rows[:, columns] = first
        tidy_rails(problem, designs)
        first = np.unique(designs.rows[:, columns], axis=0) if len(first) else first
        first = first[first[:, 1] >= problem.phases_low[r, first[:, 0]]]
        banks = grid_of([self.rail_values("bank", r), self.rail_values("bank_count", r)])
        banks = banks[problem.capacitor_ok[r, banks[:, 0]]]
        pieces = problem.bank_counts[banks[:, 1]]
        low, high = problem.stages.loop_min_f[first[:, 0]], problem.stages.loop_max_f[first[:, 0]]
        fits = (1e6 * (self.least_f[r, banks[:, 0]] * pieces))[None, :] >= (1e6 * low)[:, None]
        fits &= (1e6 * (self.most_f[r, banks[:, 0]] * pieces))[None, :] <= (1e6 * high)[:, None]
        a, b = np.nonzero(fits)
        values = np.concatenate([np.full((len(a), 1), feed), first[a], banks[b]], axis=1)
        if self.possible is not None and len(values):
            values = values[self.possible(r, feed, values[:, 1:])]
        table = Factor(self.rail_columns(("feed", *fields, "bank", "bank_count"), r), values)
        self.rail_tables[r, feed] = table
        return table

    def bus(self, bus: int) -> Factor:
        """Return converter, count, fewest, nominal, control and limits of one bus in use."""
        if bus in self.bus_tables:
            return self.bus_tables[bus]
        converters = self.bus_values("converter", bus)
        units = [self.bus_values(field, bus) for field in ("count", "fewest")]
        volts = [self.bus_values(field, bus) for field in SET_FIELDS]
        parts = []
        for converter in converters[converters > 0]:
            one = self.tidied_bus(bus, ("converter", "count", "fewest"), [np.array([converter]), *units])
            other = self.tidied_bus(bus, ("converter", *SET_FIELDS), [np.array([converter]), *volts])[:, 1:]
            a, b = np.divmod(np.arange(len(one) * len(other)), len(other))
            parts.append(np.concatenate([one[a], other[b]], axis=1))
        columns = self.bus_columns(("converter", "count", "fewest", *SET_FIELDS), bus)
        self.bus_tables[bus] = Factor(columns, np.concatenate(parts))
        return self.bus_tables[bus]

    def tidied_bus(self, bus: int, fields: tuple[str, ...], values: list[IntArray]) -> IntArray:
        """Return what the canonical form makes of some choices of a bus in use, without repeats."""
        raw = grid_of(values)
        designs = self.blank(len(raw))
        designs.rail("feed")[:, 0] = BUS_A + bus
        columns = self.bus_columns(fields, bus)
        designs.rows[:, columns] = raw
        tidy_buses(self.problem, designs)
        return np.asarray(np.unique(designs.rows[:, columns], axis=0))

    def copper(self, feed: tuple[int, ...], stack: int) -> list[Factor]:
        """Return the stack, the pairs of every net and the bulk banks of the buses in use."""
        factors = [Factor(np.array([self.layout.board("stack")]), np.array([[stack]]))]
        first = self.layout.rail("pairs").start
        factors += [self.pairs(first + r, stack, feed) for r in range(self.layout.rails)]
        for bus in range(2):
            if BUS_A + bus in feed:
                factors.append(self.pairs(self.layout.bus("pairs").start + bus, stack, feed))
                bank = grid_of([self.bus_values("bulk", bus), self.bus_values("bulk_count", bus)])
                factors.append(Factor(self.bus_columns(("bulk", "bulk_count"), bus), bank))
                fields = ("damper", "damper_count")
                columns = self.bus_columns(fields, bus)
                lossy = self.tidied_bus(bus, fields, [self.bus_values(field, bus) for field in fields])
                factors.append(Factor(columns, lossy))
        return factors

    def pairs(self, column: int, stack: int, feed: tuple[int, ...]) -> Factor:
        """Return the pairs one net may take of a stack."""
        values = self.allowed[column]
        designs = self.blank(len(values))
        designs.rail("feed")[:] = feed
        designs.rows[:, self.layout.board("stack")] = stack
        designs.rows[:, column] = values
        tidy_copper(self.problem, designs)
        return Factor(np.array([column]), np.unique(designs.rows[:, column])[:, None])

    def moving(self, bus: int, kind: int) -> Factor:
        """Return the choices of a bus in use with one kind of control."""
        if (bus, kind) not in self.moving_tables:
            table = self.bus(bus)
            self.moving_tables[bus, kind] = table.where(table.values[:, 4] == kind)
        return self.moving_tables[bus, kind]

    def supervisor(self, control: tuple[int, ...]) -> Factor:
        """Return the supervisors that can move the buses so controlled; none where nothing moves.

        With none that can, only a bus that turns out never to move is legal, and that one is there as a fixed one.
        """
        table, values = self.problem.supervisors, self.board_values("supervisor")
        needed, buses = max(control), sum(kind > 0 for kind in control)
        if needed == 0:
            values = np.zeros(1, dtype=np.int64)
        elif len(table.names):
            index = np.maximum(values - 1, 0)
            values = values[(values > 0) & (table.level[index] >= needed) & (table.buses[index] >= buses)]
        else:
            values = values[:0]
        return Factor(np.array([self.layout.board("supervisor")]), values[:, None])

    def by_need(
        self, rails: list[Factor], copper: list[Factor], buses: list[Factor | None], biased: Factor, keeper: Factor
    ) -> Iterator[Product]:
        """Yield the products without a stage on bias, then those where rail r is the first that is on it."""
        wants = [self.problem.stages.bias_fed[table.values[:, 1]] for table in rails]
        plain = [table.where(~want) for table, want in zip(rails, wants, strict=True)]
        yield Product((*copper, *plain, *(table for table in buses if table is not None), keeper))
        second = [] if buses[1] is None else [buses[1]]
        for r, want in enumerate(wants):
            if want.any():
                on_bias = (*plain[:r], rails[r].where(want), *rails[r + 1 :])
                yield Product((*copper, *on_bias, biased, *second, keeper))

    def with_bias(self, kind: int | None) -> Factor:
        """Return bus A with one kind of control, and a bias supply and its feed that suit it; None: no bus A."""
        if kind in self.bias_tables:
            return self.bias_tables[kind]
        places = np.array([self.layout.board("bias"), self.layout.board("bias_feed")])
        hungry = np.flatnonzero(self.problem.stages.bias_fed)
        if not len(hungry):
            return Factor(places, np.zeros((0, 2), dtype=np.int64))
        first = None if kind is None else self.moving(0, kind)
        given = np.zeros((1, 0), dtype=np.int64) if first is None else first.values
        columns = np.zeros(0, dtype=np.int64) if first is None else first.columns
        extra = grid_of([self.board_values("bias"), self.board_values("bias_feed")])
        a, b = np.divmod(np.arange(len(given) * len(extra)), len(extra))
        designs = self.blank(len(a))
        designs.rail("stage")[:, 0] = hungry[0]
        designs.rail("feed")[:, 0] = 0 if kind is None else BUS_A
        designs.rows[:, columns] = given[a]
        designs.rows[:, places] = extra[b]
        tidy_bias(self.problem, designs)
        every = np.concatenate([columns, places])
        self.bias_tables[kind] = Factor(every, np.unique(designs.rows[:, every], axis=0))
        return self.bias_tables[kind]


def controls_of(table: Factor | None) -> list[int]:
    """Return the kinds of control a bus may have; fixed for one that is not used."""
    return [0] if table is None else [int(kind) for kind in np.unique(table.values[:, 4])]


def hopeless(problem: Problem, rows: IntArray) -> BoolArray:
    """Return which undecided rows break the layer budget or ask too much of a bulk bank or start-up, (P,).

    Each follows from choices alone: the nominal voltage is one the bus stands at, the bank counts in full towards
    start-up, and pairs times region is what the layer budget adds up.
    """
    designs = Designs(problem.layout, rows)
    feed = designs.rail("feed")
    used = np.stack([(feed == BUS_A + bus).any(axis=1) for bus in range(2)], axis=1)
    pours = (designs.rail("pairs") * problem.rails.copper_area_m2).sum(axis=1)
    taken = pours + (designs.bus("pairs") * used * problem.planes.area_m2).sum(axis=1)
    board = problem.study.board
    offered = problem.stacks.pairs[designs.board("stack")] * board.area_cm2 * board.usable_copper_share
    out = 1e4 * taken > offered * (1.0 + 1e-12)
    if not used.any():
        return np.asarray(out)
    converters, capacitors, derating = problem.converters, problem.capacitors, problem.study.derating
    index = np.maximum(designs.bus("converter") - 1, 0)
    sets = designs.bus("nominal_v") > 0
    bulk, pieces = designs.bus("bulk"), problem.bank_counts[designs.bus("bulk_count")]
    nominal_v: FloatArray = problem.grid_v[designs.bus("nominal_v")]
    out |= (used & sets & (nominal_v > capacitors.rated_v[bulk] * derating.voltage * (1.0 + 1e-12))).any(axis=1)
    started_f = capacitors.capacitance_f[bulk] * (1.0 + capacitors.tolerance[bulk]) * pieces
    able = np.maximum(designs.bus("count") - derating.spare_converters, 0.5)
    out |= (used & (started_f > converters.startup_max_f[index] * able * (1.0 + 1e-12))).any(axis=1)
    return np.asarray(out)
