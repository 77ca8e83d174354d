"""What each rail may choose, in tables completion can read row by row: energies, windows and bank counts."""

from __future__ import annotations

from dataclasses import dataclass, field

import numpy as np
from numpy.typing import NDArray

from archopt.model.evaluator import Evaluator
from archopt.model.hardware import bias_per_phase_w
from archopt.model.options import band_energy, row_swing
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.problem import bank_effective_f, bank_esr_ohm
from archopt.model.space import BANK_COUNTS, BUS_A, INPUT, PARENT
from archopt.physics.output_ripple import half_swing_v
from archopt.search.archive import significant

Float32Array = NDArray[np.float32]
ByteArray = NDArray[np.uint8]

CAPS = tuple(range(60, 101, 4))  # droop caps, percent of the budget
NO_COUNT = len(BANK_COUNTS)  # index of "no count of this bank will do"
ILLEGAL_KWH = 1e6  # marks an energy at a voltage the option may not see
DROP_SHARE, DROP_V = 0.003, 0.01  # bus voltage lost on the way to a stage, assumed before a design is known
BELOW_GRID_V = 4.0  # how far below the lowest bus voltage a dip is still tabled
RIPPLE_ROOM_V = 1.0  # ripple is read this far above the dipped voltage
LEAST_RIPPLE_V = 1e-9  # keeps a rail that allows no ripple finite


@dataclass(frozen=True)
class Place:
    """A supply that does not move: the board input or a parent rail. ``ok`` (O,), ``kwh`` (O,), ``volts``."""

    feed: int
    ok: BoolArray
    kwh: Float32Array
    volts: float


@dataclass
class RailTable:
    """The options of one rail (O), its banks (K), over bands (B) and the bus grid (G).

    option, stage, phases, fewest, part, second, run_share (O,): second is -1 without an inductor of its own.
    energy (B, G, O) float32 kWh at the stage input, ILLEGAL_KWH where the option may not run.
    bus_ok (2, O): may be fed from the bus. ripple (O,): hour-weighted square of ripple current, A^2 h / 1000.
    bias_kwh (O,): energy a year its gates take from the bias supply.
    """

    rail: int
    option: IntArray
    stage: IntArray
    phases: IntArray
    fewest: IntArray
    part: IntArray
    second: IntArray
    banks: IntArray
    bank_part: IntArray
    energy: Float32Array
    bus_ok: BoolArray
    places: tuple[Place, ...]
    ripple: Float32Array
    bias_fed: BoolArray
    bias_kwh: Float32Array
    counts: BoolArray  # (counts,) allowed by pins
    filled: set[int] = field(default_factory=set)
    bus_counts: ByteArray = field(default_factory=lambda: np.zeros((0, 0, 0, 0, 0), np.uint8))
    place_counts: ByteArray = field(default_factory=lambda: np.zeros((0, 0, 0, 0), np.uint8))


def rail_options(evaluator: Evaluator, r: int) -> IntArray:
    """Return the options of a rail that pins allow, that carry its maximum, each behaviour once."""
    problem, options = evaluator.problem, evaluator.options
    layout, allowed = problem.layout, problem.space.allowed
    ids = np.flatnonzero(options.rail == r)
    stage, phases, fewest = options.stage[ids], options.phases[ids], options.fewest[ids]
    may = {name: allowed[layout.rail(name).start + r] for name in ("stage", "phases", "fewest")}
    ok = np.isin(stage, may["stage"]) & np.isin(phases, may["phases"])
    ok &= np.isin(fewest, may["fewest"]) | (phases == 1)
    ok &= (fewest == 0) | (phases > 1)
    carries = ok & (phases >= problem.phases_low[r, stage])
    ids = ids[carries if carries.any() else ok]
    key = np.column_stack([options.stage[ids], options.phases[ids], options.run[ids]])
    _, first = np.unique(key, axis=0, return_index=True)
    return np.sort(ids[np.sort(first)])


def make_rail_tables(evaluator: Evaluator) -> tuple[RailTable, ...]:
    """Return the tables of every rail; bank counts are filled when a droop cap is first asked for."""
    problem, tables, states = evaluator.problem, evaluator.tables, evaluator.states
    nodes_kwh, _ = band_energy(problem, states, tables)
    hours = np.zeros(len(states.hours))
    hours[states.with_hours] = states.hours[states.with_hours]
    middle = tables.ripple_square.shape[2] // 2
    return tuple(
        make_rail_table(evaluator, r, nodes_kwh, hours, middle)
        for r in range(problem.layout.rails)
    )


def make_rail_table(
    evaluator: Evaluator, r: int, nodes_kwh: FloatArray, hours: FloatArray, middle: int
) -> RailTable:
    """Return the table of one rail."""
    problem, options, states = evaluator.problem, evaluator.options, evaluator.states
    rows, layout = options.rows, problem.layout
    ids = rail_options(evaluator, r)
    stage, row = options.stage[ids], options.row[ids]  # (O,), (O, B)
    band = np.arange(row.shape[1])
    grid = problem.grid_v
    energy = rows.energy_kwh[row, band].transpose(1, 2, 0)  # (B, G, O)
    at_stage = grid * (1.0 - DROP_SHARE) - DROP_V
    need, high = rows.need_v[row, band].T[:, None, :], rows.high_v[row, band].T[:, None, :]
    legal = (at_stage[None, :, None] >= need) & (grid[None, :, None] <= high)
    energy = np.where(legal, energy, ILLEGAL_KWH)
    feeds = problem.space.allowed[layout.rail("feed").start + r]
    ok = problem.feed_ok[r, stage]  # (O, F)
    places = []
    supply = problem.study.supply
    for feed in feeds:
        if feed == INPUT:
            fits = (supply.low_v >= need[:, 0]).all(axis=0) & (supply.high_v <= high[:, 0]).all(axis=0)
            kwh = rows.input_kwh[row, band].sum(axis=1)
            places.append(Place(INPUT, ok[:, INPUT] & fits, kwh.astype(np.float32), supply.low_v))
        elif feed >= PARENT:
            volts = float(problem.rails.voltage_v[feed - PARENT])
            fits = (volts >= need[:, 0]).all(axis=0) & (volts <= high[:, 0]).all(axis=0)
            kwh = parent_band_kwh(evaluator, row, nodes_kwh, feed - PARENT)
            places.append(Place(int(feed), ok[:, feed] & fits, kwh.astype(np.float32), volts))
    running = options.run[ids].astype(np.float64)
    band_h = np.zeros(states.places)
    np.add.at(band_h, states.band, hours)
    square = evaluator.tables.ripple_square[row, :, middle]  # (O, B, S)
    ripple = np.einsum("obs,s,bs->o", square, hours, states.band[None, :] == band[:, None])
    bias_w = bias_per_phase_w(problem)[stage]
    layout_count = problem.space.allowed[layout.rail("bank_count").start + r]
    banks = problem.space.allowed[layout.rail("bank").start + r]
    return RailTable(
        rail=r,
        option=ids,
        stage=stage,
        phases=options.phases[ids],
        fewest=options.fewest[ids],
        part=problem.stages.part[stage],
        second=problem.stages.second_part[stage],
        banks=banks,
        bank_part=problem.capacitors.part[banks],
        energy=significant(energy, 7).astype(np.float32),
        bus_ok=np.stack([ok[:, BUS_A + k] & (BUS_A + k in feeds) for k in range(2)]),
        places=tuple(places),
        ripple=(ripple * 1e-3).astype(np.float32),
        bias_fed=problem.stages.bias_fed[stage],
        bias_kwh=(bias_w * (running @ band_h) * 1e-3).astype(np.float32),
        counts=np.isin(np.arange(NO_COUNT), layout_count),
    )


def parent_band_kwh(evaluator: Evaluator, row: IntArray, nodes_kwh: FloatArray, j: int) -> FloatArray:
    """Return the stage input energy a year from parent rail ``j``, (O,) kWh."""
    tables = evaluator.tables
    volts = evaluator.problem.rails.voltage_v[j : j + 1]
    used = np.unique(row)
    at = np.zeros((len(nodes_kwh), nodes_kwh.shape[1]))
    stage = tables.row_stage[used]
    place = (volts - tables.start_v[stage]) / tables.step_v[stage]
    node = np.clip(place.astype(np.int64), 0, nodes_kwh.shape[2] - 2)
    t = np.clip(place - node, 0.0, 1.0)[:, None]
    at[used] = nodes_kwh[used, :, node] * (1.0 - t) + nodes_kwh[used, :, node + 1] * t
    return np.asarray(at[row, np.arange(row.shape[1])].sum(axis=1))


def dipped_grid_v(evaluator: Evaluator) -> FloatArray:
    """Return the voltages bank counts are tabled at: the bus grid, continued below it for dips."""
    grid = evaluator.problem.grid_v
    step = float(grid[1] - grid[0]) if len(grid) > 1 else 0.25
    below = min(int(BELOW_GRID_V / step), int((grid[0] - 0.2) / step))
    return np.concatenate([grid[0] - step * np.arange(below, 0, -1), grid])


class BankCounts:
    """Fills, cap by cap, the least index of bank count that meets a droop cap at a dipped stage voltage."""

    def __init__(self, evaluator: Evaluator, tables: tuple[RailTable, ...]) -> None:
        self.evaluator = evaluator
        self.tables = tables
        self.volts = dipped_grid_v(evaluator)
        self.ripple: dict[int, ByteArray] = {}
        bands = evaluator.states.places
        for table in tables:
            shape = (len(table.banks), len(table.option))
            table.bus_counts = np.zeros((len(CAPS), bands, len(self.volts), *shape), np.uint8)
            table.place_counts = np.zeros((len(CAPS), max(len(table.places), 1), *shape), np.uint8)

    def ensure(self, caps: IntArray) -> None:
        """Fill the tables of the caps (indices of CAPS) not yet filled."""
        for table in self.tables:
            missing = [int(cap) for cap in np.unique(caps) if int(cap) not in table.filled]
            if missing:
                self.fill(table, missing)
                table.filled.update(missing)

    def fill(self, table: RailTable, caps: list[int]) -> None:
        """Fill one rail's counts under some caps."""
        options = self.evaluator.options
        row = options.row[table.option]
        used, place = np.unique(row, return_inverse=True)
        place = place.reshape(row.shape)
        percent = options.rows.droop_percent[np.ix_(used, table.banks)]  # (U, K, counts, B, nodes)
        percent = np.ascontiguousarray(np.moveaxis(percent, -1, 0))
        nodes = options.rows.droop_nodes_v[used]
        for cap in caps:
            least_v = least_voltage(nodes, percent, float(CAPS[cap]), table.counts)  # (U, K, counts, B)
            least_v = np.maximum(least_v, options.rows.jump_v[used][:, None, None, :])
            self.fill_cap(table, cap, least_v, used, place)

    def fill_cap(self, table: RailTable, cap: int, least_v: FloatArray, used: IntArray, place: IntArray) -> None:
        """Fill one rail's counts under one cap from the least voltages of its table rows, (U, K, counts, B).

        used (U,): the rows; place (O, B): the row among them of every option.
        """
        bands = np.arange(place.shape[1])
        volts = self.volts_of(table)
        order = np.argsort(volts, kind="stable")
        met = np.searchsorted(volts[order], least_v - 1e-9)  # voltages, from the lowest, at which it is not met
        met_first = np.minimum.accumulate(met, axis=2).astype(np.uint8).transpose(2, 0, 3, 1)
        shape = met_first.shape[1:]  # (U, B, K)
        flat = np.ascontiguousarray(met_first).reshape(NO_COUNT, -1)
        rank = np.argsort(order, kind="stable").astype(np.uint8)[:, None]
        counts = np.zeros((len(volts), flat.shape[1]), np.uint8)
        for count in range(NO_COUNT):
            counts += (rank < flat[count]).view(np.uint8)
        counts = np.maximum(counts.reshape(-1, *shape), self.ripple_counts(table, used))
        spread = counts[:, place, bands]  # (V, O, B, K)
        table.bus_counts[cap] = spread[: len(self.volts)].transpose(2, 0, 3, 1)
        for k in range(len(table.places)):
            table.place_counts[cap, k] = spread[len(self.volts) + k].max(axis=1).T

    def volts_of(self, table: RailTable) -> FloatArray:
        """Return the voltages a rail's counts are tabled at: the dipped grid, then its unmoving supplies."""
        return np.concatenate([self.volts, [spot.volts for spot in table.places]])

    def ripple_volts_of(self, table: RailTable) -> FloatArray:
        """Return the voltages ripple is read at: above the dipped grid, and the highest of the board input."""
        high_v = self.evaluator.problem.study.supply.high_v
        places = [high_v if spot.feed == INPUT else spot.volts for spot in table.places]
        return np.concatenate([self.volts + RIPPLE_ROOM_V, places])

    def ripple_counts(self, table: RailTable, used: IntArray) -> ByteArray:
        """Return the least count index each bank needs to stand the ripple, (V, U, B, K), made once."""
        if table.rail not in self.ripple:
            evaluator = self.evaluator
            mix = evaluator.states.mix_high
            rms = np.sqrt(evaluator.tables.ripple_square[used][:, mix])  # (U, B, nodes)
            stage = evaluator.tables.row_stage[used]
            start, step = evaluator.tables.start_v[stage], evaluator.tables.step_v[stage]
            node = np.rint((self.ripple_volts_of(table)[:, None] - start) / step)
            node = np.clip(node, 0, rms.shape[2] - 1).astype(np.int64)  # (V, U)
            permitted = evaluator.problem.capacitors.ripple_a[table.banks]
            permitted = permitted * evaluator.problem.study.derating.current
            pieces = rms[np.arange(len(rms)), :, node][..., None] / permitted
            pieces = np.maximum(pieces, self.quiet_pieces(table, used))
            index = np.searchsorted(np.array(BANK_COUNTS, dtype=np.float64), pieces - 1e-9)
            offered = np.append(np.flatnonzero(table.counts), NO_COUNT)  # pins may leave gaps
            self.ripple[table.rail] = offered[np.searchsorted(offered, index)].astype(np.uint8)
        return self.ripple[table.rail]


    def quiet_pieces(self, table: RailTable, used: IntArray) -> FloatArray:
        """Return how many pieces of each bank keep the output ripple within its allowance, (V, U, B, K)."""
        evaluator = self.evaluator
        problem, rail = evaluator.problem, table.rail
        volts = self.ripple_volts_of(table)[:, None]
        ripple_a, charge_c = row_swing(problem, evaluator.states, evaluator.tables, used, volts)  # (U, B, V)
        piece_f = bank_effective_f(problem.study, problem.capacitors, float(problem.rails.voltage_v[rail]))
        esr_ohm = bank_esr_ohm(problem.study, problem.capacitors)
        one_v = half_swing_v(ripple_a[..., None], charge_c[..., None], piece_f[table.banks], esr_ohm[table.banks])
        return np.asarray(one_v.transpose(2, 0, 1, 3) / max(float(problem.rails.ripple_v[rail]), LEAST_RIPPLE_V))


def least_voltage(nodes: FloatArray, percent: Float32Array, cap: float, counts: BoolArray) -> FloatArray:
    """Return the least stage voltage from which droop stays within the cap, (U, K, counts, B); inf if never.

    nodes (U, nodes) rising; percent (nodes, U, K, counts, B) falling with voltage; counts: allowed by pins.
    """
    last = len(percent) - 1
    above = np.zeros(percent.shape[1:], dtype=np.int8)
    for values in percent:
        above += values > cap
    low = np.clip(above.astype(np.int64) - 1, 0, last - 1)
    flat = low * low.size + np.arange(low.size).reshape(low.shape)
    p_low, p_high = percent.ravel()[flat], percent.ravel()[flat + low.size]
    node_v = np.arange(len(nodes))[:, None, None, None] * (last + 1) + low
    v_low, v_high = nodes.ravel()[node_v], nodes.ravel()[node_v + 1]
    r_low, r_high = 1.0 / np.maximum(p_low, 1e-6), 1.0 / np.maximum(p_high, 1e-6)  # nearly straight in headroom
    share = np.clip((1.0 / cap - r_low) / np.maximum(r_high - r_low, 1e-12), 0.0, 1.0)
    found = np.where(above == 0, 0.0, v_low + share * (v_high - v_low))
    found = np.where(above > last, np.inf, found)
    return np.where(counts[None, None, :, None], found, np.inf)
