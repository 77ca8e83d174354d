"""Heuristic genomes to start from: what an architect would draw first, at several prices of energy."""

from __future__ import annotations

import numpy as np

from archopt.model.converter_loss import ConverterLoss
from archopt.model.parameters import FIXED_RATIO
from archopt.model.space import BUS_NAMES, FIXED, FOLLOW, TWO_LEVELS
from archopt.physics.arrays import FloatArray
from archopt.search.genome import Genome, index_of, nearest
from archopt.search.rail_tables import CAPS

LOW_BUS_V = 8.0
SECOND_BUS_V = 5.0
MOVING_RISE = 1.2
PRICES = (0.1, 1.0, 8.0)
ROOM = 1.12  # converter rating wanted over the rails' power
MOST_CONVERTERS = 7
MOST_BULK = 3  # place in the list of bank counts
STARTUP_SHARE = 0.5  # of the capacitance a converter starts into: the stages' own stands beside the bulk bank


def suited_converters(genome: Genome, most: int) -> list[tuple[int, int]]:
    """Return (converter value, count) pairs that carry the board, least price and loss over its life first."""
    problem = genome.problem
    converters, states = problem.converters, problem.states
    offered = genome.allowed_bus("converter", 0)
    offered = offered[offered > 0]
    if not len(offered):
        return []
    power = float((problem.rails.voltage_v * states.rated_a).sum()) * ROOM
    index = offered - 1
    least_v = np.where(
        converters.kind[index] == FIXED_RATIO, converters.ratio[index] * problem.study.supply.low_v,
        converters.output_max_v[index],
    )  # fmt: skip
    carried_w = np.minimum(converters.limit_w[index], converters.limit_a[index] * least_v)
    count = np.ceil(power / np.maximum(carried_w, 1e-9)).astype(np.int64)
    count = np.maximum(count, 1)
    fits = count <= converters.max_parallel[index]
    price = problem.parts.price[converters.part[index], 1] * count
    typical = np.clip(problem.study.control.habitual_v, converters.output_min_v[index],
                      converters.output_max_v[index])  # fmt: skip
    amps = 0.4 * power / typical / count
    loss = ConverterLoss.of(converters, index)(
        np.asarray(problem.study.supply.nominal_v), typical, amps, np.asarray(50.0)
    )
    lifetime = price + genome.scale * loss.total_w * count * 8.76
    order = np.lexsort((index, lifetime, ~fits))[:most]
    return [(int(offered[k]), int(min(count[k], converters.max_parallel[index[k]]))) for k in order]


def converters_by_kind(genome: Genome, most: int) -> list[list[tuple[int, int]]]:
    """Return for each kind on offer at most ``most`` suited (converter value, count) pairs, best first."""
    kinds: dict[int, list[tuple[int, int]]] = {}
    for pair in suited_converters(genome, len(genome.problem.converters.names)):
        kinds.setdefault(int(genome.problem.converters.kind[pair[0] - 1]), []).append(pair)
    return [kinds[kind][:most] for kind in sorted(kinds)]


def give_other_converter(
    genome: Genome, seed: FloatArray, kinds: list[list[tuple[int, int]]], rng: np.random.Generator
) -> None:
    """Put a converter of any kind in charge of bus A at any voltage and control and approve every part, in place.

    A front may hold boards of unlike converters; once one kind has taken the population, no small step leads over.
    """
    problem = genome.problem
    pairs = kinds[int(rng.integers(len(kinds)))]
    converter = pairs[int(min(rng.geometric(0.5) - 1, len(pairs) - 1))]
    control = (FIXED, TWO_LEVELS, FOLLOW)[int(rng.integers(3))]
    volts = rng.uniform(float(problem.grid_v[0]), max(problem.study.control.habitual_v, float(problem.grid_v[0])))
    set_bus(genome, seed, 0, converter, volts, control)
    seed[genome.stage_place] = seed[genome.capacitor_place] = 1.0


def heuristic_genomes(genome: Genome, most: int) -> FloatArray:
    """Return at most ``most`` seeds: every suited converter on a low and a habitual bus, each control, two buses.

    Price of energy and droop cap take turns, so that neighbouring seeds differ in them.
    """
    suited = suited_converters(genome, MOST_CONVERTERS) or [(0, 1)]
    blank = np.zeros(len(genome.genes))
    blank[genome.stage_place] = blank[genome.capacitor_place] = 1.0
    blank[genome.place["copper"]] = np.log(0.02)
    blank[genome.place["price"]] = np.log(genome.scale)
    caps = (len(CAPS) - 1, len(CAPS) // 2, 0)
    habitual = genome.problem.study.control.habitual_v
    layouts: list[tuple[float, int, float | None]] = [
        (LOW_BUS_V, TWO_LEVELS, None),
        (LOW_BUS_V, FIXED, None),
        (habitual, FIXED, None),
        (LOW_BUS_V, FOLLOW, None),
        (habitual, FIXED, SECOND_BUS_V),
        (habitual, FOLLOW, None),
    ]
    seeds = [blank]
    for volts, control, second in layouts:
        for converter in suited:
            seed = blank.copy()
            turn = len(seeds)
            seed[genome.place["price"]] = np.log(PRICES[turn % 3] * genome.scale)
            seed[genome.place["cap"]] = caps[(turn // 3) % 3]
            set_bus(genome, seed, 0, converter, volts, control)
            if second is not None:
                set_bus(genome, seed, 1, converter, second, FIXED)
            seeds.append(seed)
    return np.array(seeds[:most])


def set_bus(
    genome: Genome, seed: FloatArray, b: int, converter: tuple[int, int], volts: float, control: int
) -> None:
    """Write one bus into a genome, as near to what is wanted as the space allows."""
    problem, name = genome.problem, BUS_NAMES[b]

    def put(field: str, value: int) -> None:
        allowed = genome.allowed_bus(field, b)
        there = nearest(allowed, np.array([value]))
        seed[genome.place[f"{name}.{field}"]] = float(index_of(allowed, there)[0])

    if not (genome.allowed_bus("converter", b) > 0).any():
        return
    put("converter", converter[0])
    put("count", converter[1])
    put("control", control)
    put("pairs", 1)
    if converter[0] and problem.converters.kind[converter[0] - 1] == FIXED_RATIO:
        volts = float(problem.converters.ratio[converter[0] - 1]) * problem.study.supply.high_v
    elif converter[0]:
        table = problem.converters
        volts = float(
            np.clip(volts, table.output_min_v[converter[0] - 1], table.output_max_v[converter[0] - 1])
        )
    bulk, pieces = suited_bulk(genome, b, volts * (1.0 if control == FIXED else MOVING_RISE), converter)
    put("bulk", bulk)
    put("bulk_count", pieces)
    if control != FIXED:
        volts *= MOVING_RISE  # the nominal of a moving bus is its upper limit
    put("nominal_v", int(np.abs(problem.grid_v - volts).argmin()))
    if control != FIXED:
        gene = genome.genes[genome.place[f"{name}.down"]]
        step = float(problem.grid_v[1] - problem.grid_v[0]) if len(problem.grid_v) > 1 else 1.0
        seed[genome.place[f"{name}.down"]] = min(gene.high, round((1.0 - 1.0 / MOVING_RISE) * volts / step))


def suited_bulk(genome: Genome, b: int, volts: float, converter: tuple[int, int]) -> tuple[int, int]:
    """Return the bulk capacitor and count with the most capacitance the bus converters start into safely."""
    problem = genome.problem
    bulk, counts = genome.allowed_bus("bulk", b), genome.allowed_bus("bulk_count", b)
    if not len(bulk) or not len(counts):
        return 0, 0
    capacitors, value, units = problem.capacitors, *converter
    limit_f = STARTUP_SHARE * problem.converters.startup_max_f[value - 1] * units if value else np.inf
    rated = capacitors.rated_v[bulk] * problem.study.derating.voltage >= volts
    size = np.where(rated, capacitors.capacitance_f[bulk], 0.0)[:, None] * problem.bank_counts[counts]
    fits = np.where((size <= limit_f) & (counts <= MOST_BULK), size, -size * 1e-6)
    k, n = np.unravel_index(int(fits.argmax()), fits.shape)
    return int(bulk[k]), int(counts[n])
