"""Studies of any size made in code, for measuring: twelve rails as the standard, more or fewer for growth.

The scenario is invented: a board on 40 to 60 V whose rails share bus planes, converters and an input path, step in
groups and take the whole shipped catalogue. The standard has 12 rails, 24 bus voltages and 72 states: 43 with hours,
16 worst mixes (8 bands at both input extremes), 8 after a jump, 2 of rated load at the nominal bus, 3 shown loads.
``separable`` is the same board with every coupling taken away, whose objectives are sums over rails.
"""

from __future__ import annotations

import math
from dataclasses import replace
from functools import cache
from pathlib import Path
from typing import Any

import numpy as np

from archopt.inputs.load import LoadedStudy, loaded_from
from archopt.inputs.problems import Notebook
from archopt.model.evaluator import Evaluator
from archopt.model.parameters import IntArray
from archopt.model.problem import Problem, compile_problem
from archopt.model.space import BUS_A
from archopt.model.states import (
    MAX_BANDS,
    StateTable,
    assemble,
    band_edges,
    band_of,
    every_moment,
    moments_of,
    with_maximum,
)

RAILS, STATES = 12, 72
FEW_BANDS = 3  # where there are few states: most of them would have no hours otherwise
INPUT_LEVELS_V = (48.0, 54.0, 56.0)
LEAST_UTILISATION = 0.12
# name, V, A, tolerance %, step A, step group, sensed at the load
KINDS = (
    ("core", 0.85, 60.0, 5.0, 22.0, None, True),
    ("fabric", 0.9, 40.0, 5.0, 15.0, None, True),
    ("serdes", 0.9, 16.0, 4.0, 4.0, "links", True),
    ("memory_east", 1.1, 18.0, 5.0, 6.0, "memory", True),
    ("memory_west", 1.1, 18.0, 5.0, 6.0, "memory", True),
    ("phy", 1.0, 9.0, 5.0, 3.0, "links", False),
    ("io_1v2", 1.2, 10.0, 5.0, 4.0, None, False),
    ("logic_1v8", 1.8, 8.0, 5.0, 3.0, None, False),
    ("analog_2v5", 2.5, 3.0, 5.0, 1.0, None, False),
    ("io_3v3", 3.3, 8.0, 5.0, 3.0, None, False),
    ("manager_3v3", 3.3, 2.5, 5.0, 1.0, None, False),
    ("storage_5v", 5.0, 6.0, 5.0, 2.5, None, False),
)
PARENT, CHILD = "logic_1v8", "analog_1v0"  # a light rail that may be fed from another: the eleventh kind gives way


def rail_rows(count: int) -> list[dict[str, Any]]:
    """Return the rails' tables; beyond twelve the kinds come again, each time a little smaller."""
    rows = []
    for k in range(count):
        name, volts, amps, tolerance, step, group, sensed = KINDS[k % len(KINDS)]
        turn = k // len(KINDS)
        row: dict[str, Any] = {
            "name": name if not turn else f"{name}_{turn + 1}", "voltage_v": volts,
            "max_current_a": round(amps * 0.9**turn, 3), "tolerance_percent": tolerance,
            "step_a": round(step * 0.9**turn, 3), "remote_sense": sensed, "squares": 1.2 if sensed else 2.0,
        }  # fmt: skip
        if group is not None:
            row["step_group"] = f"{group}_{turn + 1}"
        if name == "manager_3v3" and not turn:  # one rail of each study may be a child
            row |= {"name": CHILD, "voltage_v": 1.0, "max_current_a": 0.8, "step_a": 0.3, "parents": [PARENT]}
        rows.append(row)
    return rows


def load_rows(rails: list[dict[str, Any]], count: int, bands: int) -> list[dict[str, Any]]:
    """Return listed states that fill every band, each with a mix of currents and an input of its own."""
    rows = []
    for k in range(count):
        level = LEAST_UTILISATION + (1.0 - LEAST_UTILISATION) * (k % bands) / max(bands - 1, 1)
        mixed = {
            row["name"]: round(
                row["max_current_a"] * 0.85 * level * (0.94 + 0.06 * math.sin(1.7 * r + 2.3 * k)), 4
            )
            for r, row in enumerate(rails)
        }
        rows.append(
            {
                "name": f"load {k + 1}", "hours": 8760.0 / count, "currents": mixed,
                "input_v": INPUT_LEVELS_V[k % len(INPUT_LEVELS_V)], "inlet_degc": 25.0 + k % 6,
            }
        )
    return rows


def content_of(rails: int, states: int, bands: int) -> dict[str, Any]:
    """Return the study as its file would hold it, with one listed state for each that has hours."""
    rows = rail_rows(rails)
    return {
        "name": f"rails_{rails}",
        "input": {
            "low_v": 40.0, "high_v": 60.0, "nominal_v": 54.0, "inlet_degc": 30.0, "hottest_inlet_degc": 40.0,
            "air_speed_m_s": 2.5, "path": "path_48v_40a",
        },
        "board": {
            "area_cm2": 60.0 * rails, "bus_shared_squares": 1.0, "bus_own_squares": 1.2, "bus_area_cm2": 15.0 * rails,
            "stacks": ["12_layers_3_pairs_2_oz", "14_layers_4_pairs_2_oz", "18_layers_6_pairs_2_oz"],
        },
        "control": {
            "largest_unannounced_jump_percent": 40.0, "transitions_per_day": 60.0, "grid_v": 0.25, "bus_min_v": 6.5,
            "bus_max_v": 12.25,
        },
        "economics": {"boards_per_year": 12000.0, "new_part_cost": 4000.0},
        "load": {"coincidence": 0.85, "states": load_rows(rows, states - 3 * bands - 5, bands)},
        "rails": rows,
    }  # fmt: skip


def loaded_with(content: dict[str, Any]) -> LoadedStudy:
    """Return a study from what its file would hold."""
    name = f"{content['name']}.toml"
    return loaded_from(content, Path(name), None, Notebook(name))


def unreduced(loaded: LoadedStudy) -> StateTable:
    """Return one state a listed state, however many there are, and the zero-hour ones."""
    study = loaded.study
    moments = with_maximum(study, moments_of(study, study.load))
    edges = band_edges(moments.useful_w)
    band = band_of(moments.useful_w, edges)
    energy = every_moment(study, moments, band, np.flatnonzero(moments.hours > 0))
    named = tuple(moments.label[int(k)] for k in np.flatnonzero(moments.hours > 0))
    return assemble(study, moments, band, edges, replace(energy, name=named), 0.0)


def problem_of(rails: int = RAILS, states: int = STATES) -> Problem:
    """Return the compiled problem of some rails in some states (24 at least)."""
    bands = MAX_BANDS if states >= 3 * MAX_BANDS + 5 + 2 * MAX_BANDS else FEW_BANDS
    loaded = loaded_with(content_of(rails, states, bands))
    return compile_problem(loaded.study, loaded.catalogue, unreduced(loaded))


def separable(rails: int = RAILS, states: int = STATES, pins: dict[str, Any] | None = None) -> Problem:
    """Return the rails with every coupling off: energy and cost are sums over rails, droop a maximum.

    One bus fixed at 12 V from one pinned converter whose loss is a line in its current, without dip or droop of its
    own and without a limit; no shared copper, no input resistance; no separate bias, no supervisor; one price a part
    whatever the quantity and no cost of a new part number. Copper, stack and bulk are pinned.
    """
    content = content_of(rails, states, MAX_BANDS if states == STATES else FEW_BANDS)
    content["name"] = "separable"
    for row in content["rails"]:
        row.pop("step_group", None)
        row.pop("parents", None)
    content["board"] |= {"bus_shared_squares": 0.0, "area_cm2": 3000.0, "stacks": ["18_layers_6_pairs_2_oz"]}
    content["control"] |= {"kinds": ["fixed"]}
    content["economics"] |= {"new_part_cost": 0.0}
    draft = loaded_with(content)
    stages = draft.catalogue.families["buck_stages"].values()
    content["choices"] = {
        "max_buses": 1, "direct": False, "forbidden_families": ["bias_supplies", "supervisors", "single_stages"],
        "forbidden_parts": [row.name for row in stages if getattr(row, "gate_supply", "") == "bias"],
        "pin": {
            "bus_a.converter": "wide_bus_600w", "bus_a.count": 1, "bus_a.fewest": "all", "bus_a.nominal_v": 12.0,
            "bus_a.bulk": "polymer_470u_16v_can", "bus_a.bulk_count": 32, "bus_a.pairs": 4,
            "bus_a.damper": "none",
            **(pins or {}),
        },
    }  # fmt: skip
    loaded = loaded_with(content)
    problem = compile_problem(loaded.study, loaded.catalogue, unreduced(loaded))
    converters, capacitors = problem.converters, problem.capacitors
    nothing, boundless = np.zeros(len(converters.names)), np.full(len(converters.names), 1e9)
    bulk = np.array([name == "polymer_470u_16v_can" for name in capacitors.names])
    return replace(
        problem,
        parts=replace(problem.parts, price=np.repeat(problem.parts.price[:, 1:2], 4, axis=1)),
        path=replace(problem.path, resistance_ohm=0.0),
        capacitors=replace(capacitors, esr_ohm=np.where(bulk, 0.0, capacitors.esr_ohm)),
        converters=replace(
            converters, loss=replace(converters.loss, resistance_ohm=nothing), limit_a=boundless, limit_w=boundless,
            overload_a=boundless, startup_max_f=boundless, bandwidth_rad_s=boundless, delay_s=nothing,
            output_ohm=nothing, accuracy=nothing, setting_grid_v=nothing,
        ),
    )


@cache
def evaluator(rails: int = RAILS, states: int = STATES) -> Evaluator:
    """Return the evaluator of the standard study, or of one of another size."""
    return Evaluator(problem_of(rails, states))


def drawn(evaluator: Evaluator, count: int, seed: int = 1) -> IntArray:
    """Return decided designs drawn at random: four rails of five on bus A, every other feed, part and count too."""
    problem, rng = evaluator.problem, np.random.default_rng(seed)
    layout, space = problem.layout, problem.space
    rows = np.stack([rng.choice(values, count) for values in space.allowed] + [
        np.zeros(count, dtype=np.int64) for _ in range(layout.width - len(space.allowed))
    ], axis=1)  # fmt: skip
    for r in range(layout.rails):
        feed, stage, phases, bank = (layout.rail(field).start + r for field in ("feed", "stage", "phases", "bank"))
        pairs = np.argwhere(problem.feed_ok[r])  # stage, feed
        weight = np.where(pairs[:, 1] == BUS_A, 4.0 / max((pairs[:, 1] == BUS_A).sum(), 1), 1.0 / len(pairs))
        pick = rng.choice(len(pairs), count, p=weight / weight.sum())
        rows[:, stage], rows[:, feed] = pairs[pick].T
        rows[:, phases] = problem.phases_low[r, rows[:, stage]]
        rows[:, bank] = rng.choice(np.flatnonzero(problem.capacitor_ok[r]), count)
    converter = layout.bus("converter").start
    rows[:, converter] = rng.choice(np.arange(1, len(problem.converters.names) + 1), count)
    return evaluator.decide(rows)
