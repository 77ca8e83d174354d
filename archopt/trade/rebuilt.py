"""A solved problem and its designs put together again from what a result's files hold.

The problem record carries the resolved study, the states and the catalogue rows that its designs use. From
these alone the same problem is compiled with those parts as the only ones on offer, and a design's choices and
stored decisions become a row of it, so that direct physics answers as it did when the result was written.
"""

from __future__ import annotations

import math
from dataclasses import fields, is_dataclass
from types import NoneType, UnionType
from typing import Any, get_args, get_origin, get_type_hints

import numpy as np

from archopt.errors import OutputError
from archopt.inputs.parts import FAMILIES
from archopt.inputs.resolved import Catalogue, LoadTable, ResolvedStudy
from archopt.model.board import DirectStages
from archopt.model.compiled import first_row
from archopt.model.evaluator import Detail, evaluate_in
from archopt.model.parameters import IntArray
from archopt.model.problem import Problem, compile_problem
from archopt.model.space import BUS_NAMES, Designs
from archopt.model.states import KIND_NAMES, MIX, StateTable
from archopt.physics.measured import LossTable

Data = dict[str, Any]


def built(kind: Any, value: Any) -> Any:
    """Return plain data as a value of a type of the resolved study; null numbers are the infinite ones."""
    origin = get_origin(kind)
    if is_dataclass(kind) and isinstance(kind, type):
        hints = get_type_hints(kind)
        return kind(**{f.name: built(hints[f.name], value[f.name]) for f in fields(kind) if f.name in value})
    if origin is tuple:
        return tuple(built(get_args(kind)[0], entry) for entry in value)
    if origin is dict:
        return {key: built(get_args(kind)[1], entry) for key, entry in value.items()}
    if origin is UnionType and NoneType in get_args(kind):
        return None if value is None else built(next(a for a in get_args(kind) if a is not NoneType), value)
    if kind is float:
        return math.inf if value is None else float(value)
    return value


def study_of(record: Data) -> ResolvedStudy:
    """Return the resolved study of a problem record; a long load series has no rows any more, its states do.

    Raises
    ------
    OutputError : the record holds no study.
    """
    data = dict(record.get("study") or {})
    if not data:
        raise OutputError("the result holds no study to compute from; solve it again")
    none = np.zeros(0)
    load = LoadTable(none, np.zeros((0, 0)), np.zeros((0, 0), dtype=bool), none, none, (), series=False)
    hints = get_type_hints(ResolvedStudy)
    skipped = ("load", "assumed", "stated", "incumbent")
    there = [f.name for f in fields(ResolvedStudy) if f.name not in skipped and f.name in data]
    words = {name: built(hints[name], data[name]) for name in there}
    words["choices"] = built(hints["choices"], {**data["choices"], "pins": {}, "forbidden_parts": [], "families": []})
    if data["control"].get("transitions_per_day") is None:
        words["control"] = built(hints["control"], {**data["control"], "transitions_per_day": math.nan})
    return ResolvedStudy(load=load, incumbent=None, assumed=(), stated={}, **words)


def catalogue_of(record: Data) -> Catalogue:
    """Return the catalogue rows of a problem record as a catalogue."""
    families = {
        family: {name: FAMILIES[family].model_validate(row) for name, row in rows.items()}
        for family, rows in record["parts"].items()
        if family in FAMILIES
    }
    measured = {
        name: LossTable(
            np.array(table["input_v"]), np.array(table["output_v"]), np.array(table["current_a"]),
            np.array(table["loss_w"]), float(table["local_degc"]), bool(table["output_follows"]),
        )
        for name, table in record.get("measured", {}).items()
    }  # fmt: skip
    return Catalogue({**{name: {} for name in FAMILIES}, **families}, {}, {}, "", measured)


def states_of(record: Data) -> StateTable:
    """Return the states of a problem record."""
    rows, bands = record["states"], record["bands"]
    rails = record["copper"]["rails"]
    kinds = np.array([KIND_NAMES.index(row["kind"]) for row in rows], dtype=np.int64)
    off = np.array([[name in row["off"] for name in rails] for row in rows], dtype=bool)
    current = np.array([[row["current_a"][name] for name in rails] for row in rows])
    band = np.array([row["band"] - 1 for row in rows], dtype=np.int64)
    rated = current[kinds == KIND_NAMES.index("rated at nominal")]
    return StateTable(
        name=tuple(row["state"] for row in rows),
        kind=kinds,
        hours=np.array([row["hours"] for row in rows]),
        input_v=np.array([row["input_v"] for row in rows]),
        ambient_degc=np.array([row["ambient_degc"] for row in rows]),
        current_a=current,
        off=off,
        band=band,
        tap_w=np.array([row["tap_w"] for row in rows]),
        useful_w=np.array([row["load_w"] for row in rows]),
        edges_w=np.array([bands[0]["load_from_w"], *(row["load_to_w"] for row in bands)]),
        mix_a=np.array([*([row["worst_mix_a"][name] for name in rails] for row in bands), rated[0]]),
        after_a=np.array([*([row["after_jump_a"][name] for name in rails] for row in bands), rated[0]]),
        mix_off=np.vstack([off[np.flatnonzero(kinds == MIX)[0::2]], np.zeros((1, len(rails)), dtype=bool)]),
        rated_a=rated[0],
        transitions_per_year=np.array([row["transitions_per_year"] for row in bands]),
        cluster_error=float(record.get("cluster_error") or 0.0),
    )


def problem_of(record: Data) -> Problem:
    """Return the problem of a result with the parts its designs use as the only ones on offer.

    Raises
    ------
    OutputError : the record lacks something that computing takes.
    """
    try:
        return compile_problem(study_of(record), catalogue_of(record), states_of(record))
    except (KeyError, IndexError, TypeError, ValueError) as error:
        raise OutputError(f"the result lacks what it takes to compute from ({error}); solve it again") from error


def row_of(problem: Problem, design: Data) -> IntArray:
    """Return a design of a result as a decided row of its problem.

    Raises
    ------
    OutputError : the design holds a choice that the result has no part for.
    """
    try:
        choices = {name: value for name, value in design["choices"].items() if name in problem.space.names}
        row = problem.space.encode(choices, first_row(problem))
    except KeyError as error:
        raise OutputError(f"{design.get('design')}: the result holds no part {error}") from error
    layout = problem.layout
    volts = np.zeros((2, layout.bands), dtype=np.int64)
    units = np.zeros((2, layout.bands), dtype=np.int64)
    phases = np.zeros((layout.rails, layout.bands), dtype=np.int64)
    for band, entry in enumerate(design["bands"]):
        for bus, name in enumerate(BUS_NAMES):
            if name in entry["volts"]:
                volts[bus, band] = int(np.abs(problem.grid_v - entry["volts"][name]).argmin())
                units[bus, band] = entry["converters"][name]
        phases[:, band] = [entry["phases"][name] for name in problem.rails.names]
    row[layout.volts], row[layout.running_converters] = volts.ravel(), units.ravel()
    row[layout.running_phases] = phases.ravel()
    return row


def detail_of(problem: Problem, rows: IntArray) -> Detail:
    """Return decided rows by direct physics, with every limit's place."""
    designs = Designs(problem.layout, np.atleast_2d(rows))
    stages = DirectStages(problem, problem.states)
    return evaluate_in(problem, problem.states, designs, stages, exact=True, explain=True)
