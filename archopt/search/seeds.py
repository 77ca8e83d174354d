"""Heuristic genomes to start from: what an architect would draw first, at several prices of energy."""

from __future__ import annotations

import numpy as np

from archopt.model.parameters import FIXED_RATIO
from archopt.model.space import BUS_NAMES, FIXED, FOLLOW, TWO_LEVELS
from archopt.physics import bus_converter
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.genome import Genome, index_of, nearest
from archopt.search.rail_tables import CAPS

LOW_BUS_V = 8.0
SECOND_BUS_V = 5.0
PRICES = (0.1, 1.0, 8.0)
ROOM = 1.25  # converter rating wanted over the rails' power


def suited_converters(genome: Genome, most: int) -> list[tuple[int, int]]:
    """Return (converter value, count) pairs that carry the board: cheapest and least lossy first, in turn."""
    problem = genome.problem
    converters, states = problem.converters, problem.states
    offered = genome.allowed_bus("converter", 0)
    offered = offered[offered > 0]
    if not len(offered):
        return []
    power = float((problem.rails.voltage_v * states.rated_a).sum()) * ROOM
    index = offered - 1
    count = np.ceil(power / np.maximum(converters.limit_w[index], 1e-9)).astype(np.int64)
    count = np.maximum(count, 1)
    fits = count <= converters.max_parallel[index]
    price = problem.parts.price[converters.part[index], 1] * count
    typical = np.clip(problem.study.control.habitual_v, converters.output_min_v[index],
                      converters.output_max_v[index])  # fmt: skip
    amps = 0.4 * power / typical / count
    loss = bus_converter.losses(
        converters.loss.take(index), np.asarray(problem.study.supply.nominal_v), typical, amps, np.asarray(50.0)
    )
    cheap = np.lexsort((index, price, ~fits))
    frugal = np.lexsort((index, loss.total_w * count, ~fits))
    turn = [int(k) for pair in zip(cheap, frugal, strict=True) for k in pair]
    unique = list(dict.fromkeys(turn))[:most]
    return [(int(offered[k]), int(min(count[k], converters.max_parallel[index[k]]))) for k in unique]


def heuristic_genomes(genome: Genome, most: int) -> FloatArray:
    """Return at most ``most`` seeds: habitual and low buses, each control, two buses, none; three prices."""
    suited = suited_converters(genome, 4)
    kinds: list[list[float]] = []
    blank = np.zeros(len(genome.genes))
    blank[genome.stage_place] = 1.0
    blank[genome.capacitor_place] = 1.0
    blank[genome.place["copper"]] = np.log(0.02)
    caps = (len(CAPS) - 1, len(CAPS) // 2, 0)
    habitual = genome.problem.study.control.habitual_v
    layouts: list[tuple[float, int, float | None]] = [
        (habitual, FIXED, None),
        (habitual, FOLLOW, None),
        (LOW_BUS_V, FOLLOW, None),
        (LOW_BUS_V, FIXED, None),
        (habitual, TWO_LEVELS, None),
        (habitual, FIXED, SECOND_BUS_V),
    ]
    turn = 0
    for price in PRICES:
        for converter in suited or [(0, 1)]:
            for volts, control, second in layouts:
                seed = blank.copy()
                seed[genome.place["price"]] = np.log(price * genome.scale)
                seed[genome.place["cap"]] = caps[turn % 3]
                set_bus(genome, seed, 0, converter, volts, control)
                if second is not None:
                    set_bus(genome, seed, 1, converter, second, FIXED)
                kinds.append(list(seed))
                turn += 1
    none = blank.copy()
    none[genome.place["price"]] = np.log(genome.scale)
    seeds = np.array([list(none), *kinds])
    step = max(1, -(-len(seeds) // most))
    return seeds[::step][:most]


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
    put("bulk_count", 3)
    put("pairs", 1)
    put("bulk", suited_bulk(genome, b, volts))
    if converter[0] and problem.converters.kind[converter[0] - 1] != FIXED_RATIO:
        table = problem.converters
        volts = float(
            np.clip(volts, table.output_min_v[converter[0] - 1], table.output_max_v[converter[0] - 1])
        )
    put("nominal_v", int(np.abs(problem.grid_v - volts).argmin()))
    if control != FIXED:
        gene = genome.genes[genome.place[f"{name}.down"]]
        step = float(problem.grid_v[1] - problem.grid_v[0]) if len(problem.grid_v) > 1 else 1.0
        seed[genome.place[f"{name}.down"]] = min(gene.high, round(0.2 * volts / step))


def suited_bulk(genome: Genome, b: int, volts: float) -> int:
    """Return the bulk capacitor with the most capacitance among those rated for the bus."""
    problem = genome.problem
    offered: IntArray = genome.allowed_bus("bulk", b)
    capacitors = problem.capacitors
    rated = capacitors.rated_v[offered] * problem.study.derating.voltage >= volts
    size = np.where(rated, capacitors.capacitance_f[offered], 0.0)
    return int(offered[size.argmax()]) if len(offered) else 0
