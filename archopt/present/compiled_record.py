"""The compiled problem as plain data: states, bands, copper and parts, enough to recompute a result later."""

from __future__ import annotations

from typing import Any

import numpy as np

from archopt.inputs.parts import Part
from archopt.model.parameters import FloatArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES
from archopt.model.states import KIND_NAMES
from archopt.present.record import Data, problem_data


def by_rail(problem: Problem, values: FloatArray) -> dict[str, float]:
    """Return one value a rail, by its name."""
    return {name: float(value) for name, value in zip(problem.rails.names, values, strict=True)}


def state_rows(problem: Problem) -> list[Data]:
    """Return every operating state with what each stage carries in it."""
    states = problem.states
    return [
        {
            "state": name,
            "kind": KIND_NAMES[int(states.kind[s])],
            "hours": float(states.hours[s]),
            "input_v": float(states.input_v[s]),
            "ambient_degc": float(states.ambient_degc[s]),
            "band": int(states.band[s]) + 1,
            "load_w": float(states.useful_w[s]),
            "tap_w": float(states.tap_w[s]),
            "current_a": by_rail(problem, states.current_a[s]),
            "off": [name for name, off in zip(problem.rails.names, states.off[s], strict=True) if off],
        }
        for s, name in enumerate(states.name)
    ]


def band_rows(problem: Problem) -> list[Data]:
    """Return the bands of load power with their worst mix and what a jump makes of it."""
    states = problem.states
    energy = np.isin(np.arange(len(states.kind)), states.with_hours)
    return [
        {
            "band": k + 1,
            "load_from_w": float(states.edges_w[k]),
            "load_to_w": float(states.edges_w[k + 1]),
            "hours": float(states.hours[energy & (states.band == k)].sum()),
            "worst_mix_a": by_rail(problem, states.mix_a[k]),
            "after_jump_a": by_rail(problem, states.after_a[k]),
            "transitions_per_year": [float(x) for x in states.transitions_per_year[k]],
        }
        for k in range(states.bands)
    ]


def used_parts(problem: Problem, designs: list[Data]) -> dict[str, dict[str, Data]]:
    """Return the catalogue rows the designs use, by family and name, and the board's own tables."""
    wanted: set[str] = {problem.path.name}
    for design in designs:
        wanted |= {str(value) for value in design["choices"].values()}
    families = problem.catalogue.families
    for stage in list(wanted & set(families.get("buck_stages", {}))):
        wanted.add(str(getattr(families["buck_stages"][stage], "inductor", "")))
    out: dict[str, dict[str, Data]] = {}
    for family, rows in families.items():
        always = family in ("stacks", "copper_foils")
        picked: dict[str, Part] = {name: row for name, row in rows.items() if always or name in wanted}
        if picked:
            out[family] = {name: row.model_dump() for name, row in picked.items()}
    return out


def measured_parts(problem: Problem, parts: dict[str, dict[str, Data]]) -> dict[str, Data]:
    """Return the loss tables of the parts that are read from one, by part."""
    return {
        name: {
            "input_v": table.input_v.tolist(), "output_v": table.output_v.tolist(),
            "current_a": table.current_a.tolist(), "loss_w": table.loss_w.tolist(),
            "local_degc": table.local_degc, "output_follows": table.output_follows,
        }
        for rows in parts.values() for name in rows
        if (table := problem.catalogue.measured.get(name)) is not None
    }  # fmt: skip


def compiled_record(problem: Problem, designs: list[Data]) -> Data:
    """Return the problem record of a solve: study, assumptions, states, bands, parts, copper."""
    data = problem_data(
        problem.study,
        states=state_rows(problem),
        bands=band_rows(problem),
        parts=used_parts(problem, designs),
        copper={
            "rails": list(problem.rails.names),
            "bus_squares_one_way": dict(zip(BUS_NAMES, problem.bus_squares.tolist(), strict=True)),
            "bus_area_cm2": dict(zip(BUS_NAMES, (1e4 * problem.planes.area_m2).tolist(), strict=True)),
            "sheet_ohm_one_layer": dict(zip(problem.stacks.names, problem.sheet_ohm.tolist(), strict=True)),
            "pour_squares_one_way": by_rail(problem, problem.rails.squares),
            "pour_area_cm2": by_rail(problem, 1e4 * problem.rails.copper_area_m2),
        },
    )
    measured = measured_parts(problem, data["parts"])
    if measured:
        data["measured"] = measured
    data["bus_grid_v"] = problem.grid_v.tolist()
    data["cluster_error"] = problem.states.cluster_error
    data["sources"] = {key: row.model_dump() for key, row in problem.catalogue.sources.items()}
    return data


def space_record(problem: Problem) -> dict[str, Any]:
    """Return the size of the space and what is on offer."""
    space = problem.space
    offered = {
        "stages": len(np.flatnonzero(problem.feed_ok.any(axis=(0, 2)))),
        "bus converters": len(problem.converters.names),
        "capacitors": len(problem.capacitors.names),
        "board stacks": len(problem.stacks.names),
        "supervisors": len(problem.supervisors.names),
        "bias supplies": len(problem.biases.names),
    }
    return {
        "choices": len(space.names),
        "designs_log10": space.log10_size,
        "options": [
            {"choice": name, "values": len(values)}
            for name, values in zip(space.names, space.allowed, strict=True)
            if len(values) > 1
        ],
        "parts": [{"family": family, "offered": count} for family, count in offered.items()],
    }
