"""What is on offer to each choice, and the decision space built from it with the person's pins applied."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass

import numpy as np

from archopt.errors import Problem as InputProblem
from archopt.inputs.resolved import ResolvedStudy
from archopt.model.parameters import (
    BiasTable,
    BoolArray,
    CapacitorTable,
    ConverterTable,
    FloatArray,
    IntArray,
    StackTable,
    StageTable,
    SupervisorTable,
)
from archopt.model.rails import RailArrays
from archopt.model.space import (
    BANK_COUNTS,
    BUS_A,
    BUS_NAMES,
    CONTROL_NAMES,
    FEWEST_NAMES,
    PARENT,
    RAIL_FIELDS,
    Layout,
    Space,
    choice_names,
)
from archopt.model.states import own_rails

Choice = tuple[IntArray, dict[int, str]]  # the values a column may hold and their names


@dataclass(frozen=True)
class Offers:
    """What is on offer before pins: the pieces a space is built from."""

    rails: RailArrays
    stages: StageTable
    converters: ConverterTable
    capacitors: CapacitorTable
    supervisors: SupervisorTable
    biases: BiasTable
    stacks: StackTable
    grid_v: FloatArray
    feed_ok: BoolArray
    capacitor_ok: BoolArray
    bulk_ok: BoolArray
    damper_ok: BoolArray
    phases_high: IntArray


def restricted(values: IntArray, pins: tuple[str, ...] | None, labels: dict[int, str]) -> IntArray:
    """Return the values a pin leaves."""
    if pins is None:
        return values
    keep = []
    for value in values:
        label = labels.get(int(value), str(int(value)))
        if any(label == pin or same_number(label, pin) for pin in pins):
            keep.append(int(value))
    return np.array(keep, dtype=np.int64)


def same_number(first: str, second: str) -> bool:
    """Tell whether two texts are the same number."""
    try:
        return abs(float(first) - float(second)) < 1e-9
    except ValueError:
        return False


def with_none(items: Iterable[str]) -> dict[int, str]:
    """Return value names where 0 is none and rows count from 1."""
    return {0: "none", **{k + 1: item for k, item in enumerate(items)}}


def counted(count: int, first: int = 0) -> IntArray:
    """Return the whole numbers from ``first``, ``count`` of them."""
    return np.arange(first, first + count, dtype=np.int64)


def rail_choices(study: ResolvedStudy, offers: Offers, r: int) -> dict[str, Choice]:
    """Return the choices of one rail."""
    numbers = {k: str(k) for k in range(33)}
    feeds = {0: "input", 1: BUS_NAMES[0], 2: BUS_NAMES[1]}
    feeds |= {PARENT + j: name for j, name in enumerate(offers.rails.names)}
    usable = offers.feed_ok[r].any(axis=1)
    most = int(offers.phases_high[r][usable].max(initial=1))
    return {
        "feed": (np.flatnonzero(offers.feed_ok[r].any(axis=0)), feeds),
        "stage": (np.flatnonzero(usable), dict(enumerate(offers.stages.names))),
        "phases": (counted(most, 1), numbers),
        "fewest": (counted(2), dict(enumerate(FEWEST_NAMES))),
        "bank": (np.flatnonzero(offers.capacitor_ok[r]), dict(enumerate(offers.capacitors.names))),
        "bank_count": (counted(len(BANK_COUNTS)), {k: str(count) for k, count in enumerate(BANK_COUNTS)}),
        "pairs": (counted(study.board.max_pairs_per_net, 1), numbers),
    }


def bus_choices(study: ResolvedStudy, offers: Offers) -> dict[str, Choice]:
    """Return the choices of one bus; a bus the study has no use for keeps the first value of each."""
    numbers = {k: str(k) for k in range(33)}
    grid = counted(len(offers.grid_v))
    volts = {k: f"{value:g}" for k, value in enumerate(offers.grid_v)}
    converters = len(offers.converters.names) + 1 if study.choices.max_buses else 1
    parallel = int(offers.converters.max_parallel.max(initial=1))
    kinds = np.array([k for k, name in enumerate(CONTROL_NAMES) if name in study.control.kinds], dtype=np.int64)
    return {
        "converter": (counted(converters), with_none(offers.converters.names)),
        "count": (counted(parallel, 1), numbers),
        "fewest": (counted(2), dict(enumerate(FEWEST_NAMES))),
        "nominal_v": (grid, volts),
        "control": (kinds, dict(enumerate(CONTROL_NAMES))),
        "lower_v": (grid, volts),
        "upper_v": (grid, volts),
        "bulk": (np.flatnonzero(offers.bulk_ok), dict(enumerate(offers.capacitors.names))),
        "bulk_count": (counted(len(BANK_COUNTS)), {k: str(count) for k, count in enumerate(BANK_COUNTS)}),
        "pairs": (counted(study.board.max_pairs_per_net, 1), numbers),
        "damper": (np.append(0, 1 + np.flatnonzero(offers.damper_ok)), with_none(offers.capacitors.names)),
        "damper_count": (counted(len(BANK_COUNTS)), {k: str(count) for k, count in enumerate(BANK_COUNTS)}),
    }


def board_choices(offers: Offers) -> list[Choice]:
    """Return the choices of the whole board, in column order."""
    return [
        (counted(len(offers.stacks.names)), dict(enumerate(offers.stacks.names))),
        (counted(len(offers.biases.names) + 1), with_none(offers.biases.names)),
        (counted(2), {0: "input", 1: BUS_NAMES[0]}),
        (counted(len(offers.supervisors.names) + 1), with_none(offers.supervisors.names)),
    ]


def build_space(study: ResolvedStudy, layout: Layout, offers: Offers) -> Space:
    """Return the decision space with pins applied."""
    names = choice_names(offers.rails.names)
    rails = [rail_choices(study, offers, r) for r in range(layout.rails)]
    columns: list[Choice] = [rail[field] for field in RAIL_FIELDS for rail in rails]
    second = study.choices.max_buses > 1
    for values, labels in bus_choices(study, offers).values():
        columns += [(values, labels), (values if second else values[:1], labels)]
    columns += board_choices(offers)
    return Space(
        layout=layout,
        rail_names=offers.rails.names,
        grid_v=offers.grid_v,
        allowed=tuple(
            restricted(values, study.choices.pins.get(name), labels)
            for name, (values, labels) in zip(names, columns, strict=True)
        ),
        names=names,
        values=tuple(labels for _, labels in columns),
    )


def empty_rails(study: ResolvedStudy, offers: Offers) -> list[InputProblem]:
    """Return a problem for every rail that nothing on offer can make or hold up."""
    problems = []
    for r, rail in enumerate(own_rails(study)):
        place = f"rails.{rail.name}"
        if not offers.feed_ok[r].any():
            text = f"no stage on offer makes {rail.voltage_v:g} V at {offers.rails.max_a[r]:g} A (grown) from any feed"
            problems.append(InputProblem(study.file, place, text))
        if not offers.capacitor_ok[r].any():
            text = f"no capacitor allowed for this rail is rated for {rail.voltage_v:g} V after derating"
            problems.append(InputProblem(study.file, f"{place}.capacitors", text))
    if not len(offers.stacks.names):
        problems.append(InputProblem(study.file, "board.stacks", "no board stack is left to choose"))
    return problems


def empty_choices(study: ResolvedStudy, space: Space) -> list[InputProblem]:
    """Return a problem for every pin that names nothing or leaves nothing."""
    problems = []
    known = set(space.names)
    for name, wanted in study.choices.pins.items():
        if name not in known:
            problems.append(InputProblem(study.file, f"choices.pin.{name}", "no such choice in this study"))
        elif not len(space.allowed[space.names.index(name)]):
            text = f"none of {', '.join(wanted)} is possible here"
            problems.append(InputProblem(study.file, f"choices.pin.{name}", text))
    return problems


def contradictions(study: ResolvedStudy, offers: Offers, space: Space) -> list[InputProblem]:
    """Return a problem for every rail whose pins, with those of the buses, leave no feed and stage together."""
    problems = []
    layout = space.layout
    for r, rail in enumerate(own_rails(study)):
        feeds = space.allowed[layout.rail("feed").start + r]
        stages = space.allowed[layout.rail("stage").start + r]
        for bus in range(2):
            if not (space.allowed[layout.bus("converter").start + bus] > 0).any():
                feeds = feeds[feeds != BUS_A + bus]
        if not offers.feed_ok[r][np.ix_(stages, feeds)].any():
            named = [name for name in study.choices.pins if name.split(".")[0] in (rail.name, *BUS_NAMES)]
            text = "nothing offered can feed it"
            text += f" while {', '.join(named)} are pinned as they are" if named else ""
            problems.append(InputProblem(study.file, f"rails.{rail.name}", text))
    return problems
