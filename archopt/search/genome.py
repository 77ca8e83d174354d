"""The bus genome: what evolves. Buses, board, prices of energy and copper, a droop cap and the approved parts.

Everything a rail chooses is completed from it (:mod:`archopt.search.completion`). A genome is a row of numbers
for the engine; :class:`Plan` is a batch of them decoded; both ways respect pins, because a category gene is
a place in the list of values the space allows.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.problem import Problem
from archopt.model.space import BUS_A, BUS_NAMES, FIXED, PARENT, Designs
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.search.operators import Gene
from archopt.search.rail_tables import CAPS

LEAST_PRICE, MOST_PRICE = 0.02, 50.0  # of energy, as a multiple of price x life
LEAST_COPPER, MOST_COPPER = 1e-4, 10.0  # currency a pair and square centimetre
MOST_SPAN = 24  # grid steps a limit may lie from the nominal
DIRECT_FIELDS = ("converter", "count", "fewest", "control", "bulk", "bulk_count", "pairs")
BOARD_FIELDS = ("stack", "bias", "bias_feed", "supervisor")


@dataclass
class Plan:
    """P genomes decoded. Bus fields (P, 2), board fields (P,), as values of the design row's columns.

    price (P,): money a kWh a year; copper_price (P,): money a pair and square metre; cap (P,): index of CAPS;
    stage_ok (P, N), capacitor_ok (P, K): approved; parent (P, R): rail each is to be fed from, -1 when free.
    """

    bus: dict[str, IntArray]
    board: dict[str, IntArray]
    price: FloatArray
    copper_price: FloatArray
    cap: IntArray
    stage_ok: BoolArray
    capacitor_ok: BoolArray
    parent: IntArray

    def __len__(self) -> int:
        return len(self.price)

    def take(self, index: IntArray) -> Plan:
        """Return some of the plans."""
        return Plan(
            {name: values[index] for name, values in self.bus.items()},
            {name: values[index] for name, values in self.board.items()},
            self.price[index],
            self.copper_price[index],
            self.cap[index],
            self.stage_ok[index],
            self.capacitor_ok[index],
            self.parent[index],
        )


def energy_price_scale(problem: Problem) -> float:
    """Return what a kilowatt-hour a year is worth over the board's life, currency."""
    economics = problem.study.economics
    worth = economics.energy_price_per_kwh * economics.life_years * economics.cooling_overhead
    return max(worth / max(economics.upstream_efficiency, 0.1), 1e-3)


class Genome:
    """Genes of a problem, and the way from genomes to plans and from design rows back to genomes."""

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        self.layout = problem.layout
        self.genes: list[Gene] = []
        self.place: dict[str, int] = {}
        self.scale = energy_price_scale(problem)
        self.parents = [self.parents_of(r) for r in range(self.layout.rails)]
        allowed = problem.space.allowed
        self.used_stages = np.unique(np.concatenate([allowed[c] for c in columns(self.layout.rail("stage"))]))
        banks = np.unique(np.concatenate([allowed[c] for c in columns(self.layout.rail("bank"))]))
        self.used_capacitors = banks
        self._build()

    def parents_of(self, r: int) -> IntArray:
        """Return the rails a rail may be fed from."""
        feeds = self.problem.space.allowed[self.layout.rail("feed").start + r]
        return np.asarray(feeds[feeds >= PARENT] - PARENT, dtype=np.int64)

    def _add(self, name: str, kind: str, low: float, high: float, group: str = "") -> None:
        self.place[name] = len(self.genes)
        self.genes.append(Gene(name, kind, float(low), float(high), group))  # type: ignore[arg-type]

    def allowed_bus(self, field: str, bus: int) -> IntArray:
        """Return what a bus column may hold."""
        return np.asarray(self.problem.space.allowed[self.layout.bus(field).start + bus], dtype=np.int64)

    def allowed_board(self, field: str) -> IntArray:
        """Return what a board column may hold."""
        return np.asarray(self.problem.space.allowed[self.layout.board(field)])

    def _build(self) -> None:
        orderly = {"count", "bulk_count", "pairs", "nominal_v"}
        for bus, name in enumerate(BUS_NAMES):
            for field in (*DIRECT_FIELDS, "nominal_v"):
                last = max(len(self.allowed_bus(field, bus)) - 1, 0)
                self._add(f"{name}.{field}", "integer" if field in orderly else "category", 0, last, name)
            steps = min(MOST_SPAN, len(self.problem.grid_v) - 1)
            open_ = len(self.allowed_bus("nominal_v", bus)) > 0 and len(self.allowed_bus("converter", bus)) > 1
            self._add(f"{name}.down", "integer", 0, steps if open_ else 0, name)
            self._add(f"{name}.up", "integer", 0, steps if open_ else 0, name)
        for field in BOARD_FIELDS:
            self._add(f"board.{field}", "category", 0, max(len(self.allowed_board(field)) - 1, 0))
        self._add("price", "real", np.log(LEAST_PRICE * self.scale), np.log(MOST_PRICE * self.scale))
        self._add("copper", "real", np.log(LEAST_COPPER), np.log(MOST_COPPER))
        self._add("cap", "integer", 0, len(CAPS) - 1)
        for r, parents in enumerate(self.parents):
            if len(parents):
                self._add(f"parent.{r}", "category", 0, len(parents))
        for s in self.used_stages:
            self._add(f"stage.{s}", "bit", 0, 1)
        for k in self.used_capacitors:
            self._add(f"capacitor.{k}", "bit", 0, 1)
        self.stage_place = np.array([self.place[f"stage.{s}"] for s in self.used_stages], dtype=np.int64)
        self.capacitor_place = np.array(
            [self.place[f"capacitor.{k}"] for k in self.used_capacitors], dtype=np.int64
        )

    def decode(self, genomes: FloatArray) -> Plan:
        """Return the plans of genomes (P, genes)."""
        problem = self.problem
        count = len(genomes)
        whole = np.rint(genomes).astype(np.int64)
        bus: dict[str, IntArray] = {}
        for field in (*DIRECT_FIELDS, "nominal_v"):
            values = [
                self.allowed_bus(field, b)[whole[:, self.place[f"{name}.{field}"]]]
                for b, name in enumerate(BUS_NAMES)
            ]
            bus[field] = np.stack(values, axis=1)
        for field, key, sign in (("lower_v", "down", -1), ("upper_v", "up", 1)):
            values = []
            for b, name in enumerate(BUS_NAMES):
                wanted = bus["nominal_v"][:, b] + sign * whole[:, self.place[f"{name}.{key}"]]
                values.append(nearest(self.allowed_bus(field, b), wanted))
            bus[field] = np.stack(values, axis=1)
        board = {f: self.allowed_board(f)[whole[:, self.place[f"board.{f}"]]] for f in BOARD_FIELDS}
        stage_ok = np.zeros((count, len(problem.stages.names)), dtype=bool)
        stage_ok[:, self.used_stages] = whole[:, self.stage_place] > 0
        capacitor_ok = np.zeros((count, len(problem.capacitors.names)), dtype=bool)
        capacitor_ok[:, self.used_capacitors] = whole[:, self.capacitor_place] > 0
        parent = np.full((count, self.layout.rails), -1, dtype=np.int64)
        for r, parents in enumerate(self.parents):
            if len(parents):
                chosen = whole[:, self.place[f"parent.{r}"]]
                parent[:, r] = np.where(chosen > 0, parents[np.maximum(chosen - 1, 0)], -1)
        # a rail that is a parent is fed from a bus or the input itself
        has_children = np.zeros_like(parent, dtype=bool)
        for r in range(self.layout.rails):
            fed = np.flatnonzero((parent[:, r] >= 0) & ~has_children[:, r])
            grand = fed[parent[fed, parent[fed, r]] >= 0]
            parent[grand, r] = -1
            fed = np.flatnonzero(parent[:, r] >= 0)
            has_children[fed, parent[fed, r]] = True
        return Plan(
            bus=bus,
            board=board,
            price=np.exp(genomes[:, self.place["price"]]),
            copper_price=np.exp(genomes[:, self.place["copper"]]) * 1e4,
            cap=whole[:, self.place["cap"]],
            stage_ok=stage_ok,
            capacitor_ok=capacitor_ok,
            parent=parent,
        )

    def learn(self, genomes: FloatArray, rows: IntArray, forget: BoolArray) -> FloatArray:
        """Return genomes that say what became of them in the decided design rows.

        Limits a moving bus used become its line; the bits of parts not used are cleared where ``forget``.
        """
        out = genomes.copy()
        designs = Designs(self.layout, rows)
        self._write_buses(out, designs)
        stage_used, capacitor_used = self.parts_used(designs)
        for places, used, index in (
            (self.stage_place, stage_used, self.used_stages),
            (self.capacitor_place, capacitor_used, self.used_capacitors),
        ):
            held = used[:, index].astype(np.float64)
            known = out[:, places]
            out[:, places] = np.where(forget[:, None], held, np.maximum(known, held))
        return out

    def encode(self, rows: IntArray, price: FloatArray, copper: FloatArray, cap: IntArray) -> FloatArray:
        """Return genomes of decided design rows with the given prices (multiples of the scale) and caps."""
        out = np.zeros((len(rows), len(self.genes)))
        designs = Designs(self.layout, rows)
        for field in BOARD_FIELDS:
            value = designs.board(field)
            out[:, self.place[f"board.{field}"]] = index_of(self.allowed_board(field), value)
        out[:, self.place["price"]] = np.log(np.clip(price, LEAST_PRICE, MOST_PRICE) * self.scale)
        out[:, self.place["copper"]] = np.log(np.clip(copper, LEAST_COPPER, MOST_COPPER))
        out[:, self.place["cap"]] = cap
        feed = designs.rail("feed")
        for r, parents in enumerate(self.parents):
            if len(parents):
                found = feed[:, r, None] == parents + PARENT
                out[:, self.place[f"parent.{r}"]] = np.where(found.any(axis=1), found.argmax(axis=1) + 1, 0)
        return self.learn(out, rows, np.ones(len(rows), dtype=bool))

    def _write_buses(self, out: FloatArray, designs: Designs) -> None:
        feed = designs.rail("feed")
        for b, name in enumerate(BUS_NAMES):
            used = (feed == BUS_A + b).any(axis=1)
            none = np.flatnonzero(self.allowed_bus("converter", b) == 0)
            if len(none):
                out[~used, self.place[f"{name}.converter"]] = none[0]
            for field in (*DIRECT_FIELDS, "nominal_v"):
                place = index_of(self.allowed_bus(field, b), designs.bus(field)[:, b])
                out[used, self.place[f"{name}.{field}"]] = place[used]
            nominal = designs.bus("nominal_v")[:, b]
            moves = used & (designs.bus("control")[:, b] != FIXED)
            down = nominal - designs.bus("lower_v")[:, b]
            up = designs.bus("upper_v")[:, b] - nominal
            for key, span in (("down", down), ("up", up)):
                column = self.place[f"{name}.{key}"]
                out[moves, column] = np.clip(span, 0, self.genes[column].high)[moves]

    def parts_used(self, designs: Designs) -> tuple[BoolArray, BoolArray]:
        """Return which stages (P, N) and output capacitors (P, K) the designs use."""
        every = np.arange(len(designs))[:, None]
        stage = np.zeros((len(designs), len(self.problem.stages.names)), dtype=bool)
        stage[every, designs.rail("stage")] = True
        capacitor = np.zeros((len(designs), len(self.problem.capacitors.names)), dtype=bool)
        capacitor[every, designs.rail("bank")] = True
        return stage, capacitor


def columns(span: slice) -> range:
    """Return the columns of a slice."""
    return range(span.start, span.stop)


def nearest(values: IntArray, wanted: IntArray) -> IntArray:
    """Return the nearest of sorted values, the lower on ties; the wanted itself where there are none."""
    if not len(values):
        return wanted
    place = np.clip(np.searchsorted(values, wanted), 1, max(len(values) - 1, 1))
    if len(values) == 1:
        return np.full_like(wanted, values[0])
    low, high = values[place - 1], values[place]
    return np.where(wanted - low <= high - wanted, low, high)


def at_least(values: IntArray, wanted: IntArray) -> IntArray:
    """Return the smallest of sorted values not below the wanted one, else the largest."""
    return np.asarray(values[np.minimum(np.searchsorted(values, wanted), len(values) - 1)])


def at_most(values: IntArray, wanted: IntArray) -> IntArray:
    """Return the largest of sorted values not above the wanted one, else the smallest."""
    return np.asarray(values[np.maximum(np.searchsorted(values, wanted, side="right") - 1, 0)])


def index_of(values: IntArray, wanted: IntArray) -> IntArray:
    """Return the place of each wanted value among sorted values; 0 where it is not there."""
    place = np.clip(np.searchsorted(values, wanted), 0, max(len(values) - 1, 0))
    return np.where(values[place] == wanted, place, 0) if len(values) else np.zeros_like(wanted)

