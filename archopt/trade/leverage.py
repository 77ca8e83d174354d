"""The catalogue numbers that move one design most when each is off by its own spread.

``leverage(problem, row, count=5, prices=3)``: nothing is chosen again and the stored schedule is kept; one
number at a time is raised by the ``spread_percent`` of its row and the year is computed again by direct
physics. Prices carry no spread in the catalogue, so they are raised by a stated share, 10 %, and marked so.
The loss numbers come first, ranked by energy; the prices follow, ranked by cost: a spread that is assumed is
not to crowd out those that are stated. ``lifetime_change`` puts both in one currency.

Rows: ``part, number, value, spread_percent, energy_change_kwh, cost_change, lifetime_change, source``.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass, fields, is_dataclass, replace
from itertools import chain
from typing import TYPE_CHECKING, Any, TypeVar, cast

import numpy as np

from archopt.inputs.parts import BuckStage, CopperFoil, Part
from archopt.inputs.resolved import Catalogue
from archopt.model import parameters as tables_of
from archopt.model.board import DirectStages, solve
from archopt.model.cost import bill, count_pieces
from archopt.model.evaluator import transition_kwh
from archopt.model.hardware import unpack
from archopt.model.parameters import PRICE_STEPS, IntArray
from archopt.model.planes import copper_degc
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.physics.arrays import FloatArray
from archopt.physics.copper import sheet_resistance_ohm
from archopt.trade.money import money_per_kwh
from archopt.trade.pinned import BATCH

if TYPE_CHECKING:
    from _typeshed import DataclassInstance

Table = TypeVar("Table", bound="DataclassInstance")

PRICE_SPREAD_PERCENT = 10.0
PRICE_MARK = "spread assumed; "
PRICE_COLUMNS = ("price_100", "price_1k", "price_10k", "price_100k")

STAGE_FAMILIES = ("buck_stages", "single_stages", "linear_regulators")
TOGETHER = (*STAGE_FAMILIES, "inductors")  # families the stage table is made of
UNIT_LOSSES = (
    "fixed_w", "switching_w", "input_exponent", "output_exponent", "linear_w_per_a", "resistance_mohm",
    "resistance_per_k", "thermal_k_per_w",
)  # fmt: skip
LOSS_COLUMNS: dict[str, tuple[str, ...]] = {
    "buck_stages": (
        "high_side_mohm", "low_side_mohm", "resistance_per_k", "edge_rise_ns", "edge_fall_ns", "dead_time_ns",
        "diode_v", "high_side_gate_nc", "low_side_gate_nc", "high_side_output_nc", "low_side_output_nc",
        "recovery_nc", "input_capacitor_mohm", "quiescent_ma", "thermal_k_per_w",
    ),
    "inductors": (
        "inductance_nh", "winding_mohm", "core_loss_mw", "core_frequency_exponent", "core_ripple_exponent",
    ),
    "single_stages": UNIT_LOSSES,
    "bus_converters": (*UNIT_LOSSES, "output_mohm"),
    "linear_regulators": ("quiescent_ma",),
    "capacitors": ("esr_mohm",),
    "supervisors": ("power_mw",),
    "bias_supplies": ("no_load_mw", "efficiency"),
    "copper_foils": ("finished_um",),
    "input_paths": ("resistance_mohm", "power_mw"),
}  # fmt: skip
"""Columns a loss is computed from. Settings (frequency, gate voltage) and the conditions a number is stated
at are no measured quantities and carry no spread."""


@dataclass(frozen=True)
class Number:
    """One number of one catalogue row: family and row name, column, its value and spread."""

    family: str
    name: str
    column: str
    value: float
    spread_percent: float
    source: str

    @property
    def raised(self) -> float:
        """The value off by its spread; an efficiency is off by the spread of its loss, and falls."""
        share = 0.01 * self.spread_percent
        if self.column == "efficiency":
            return 1.0 - (1.0 - self.value) * (1.0 + share)
        return self.value * (1.0 + share)


def leverage(problem: Problem, row: IntArray, count: int = 5, prices: int = 3) -> list[dict[str, Any]]:
    """Return the loss numbers that move a design's energy most, then the prices that move its cost most.

    Parameters
    ----------
    problem : the compiled problem; its tables are not needed
    row : (width,) a decided design, e.g. the knee
    count, prices : how many loss numbers and how many prices are returned at most
    """
    row = np.asarray(row, dtype=np.int64)
    losses = sorted(loss_rows(problem, row), key=lambda found: -abs(found["energy_change_kwh"]))
    costs = sorted(price_rows(problem, row), key=lambda found: -abs(found["cost_change"]))
    return [*losses[:count], *costs[:prices]]


def loss_rows(problem: Problem, row: IntArray) -> list[dict[str, Any]]:
    """Return a row for every loss number of every part a design uses, in catalogue order."""
    worth = money_per_kwh(problem.study) * problem.study.economics.life_years
    numbers = list(loss_numbers(problem, row))
    of_stages = [number for number in numbers if number.family in TOGETHER]
    together = dict(zip(of_stages, stage_changes_kwh(problem, row, of_stages), strict=True))
    base = float(annual_kwh(problem, row[None])[0])
    out = []
    for number in numbers:
        change = together.get(number)
        if change is None:
            change = float(annual_kwh(perturbed(problem, number), row[None])[0]) - base
        out.append(record(number, change, 0.0, change * worth))
    return out


def stage_changes_kwh(problem: Problem, row: IntArray, numbers: Sequence[Number]) -> list[float]:
    """Return the change of a design's year by each number of its stages and coils, solved in one batch.

    Each number adds the stages it belongs to, made again with it, to the end of the stage table, and one copy
    of the design that uses them; the first copy uses none.
    """
    used = {problem.stages.names[k] for k in Designs(problem.layout, row[None]).rail("stage")[0]}
    rows = np.repeat(row[None], len(numbers) + 1, axis=0)
    stage = Designs(problem.layout, rows).rail("stage")
    tables, count = [problem.stages], len(problem.stages.names)
    for copy, number in enumerate(numbers, start=1):
        table = tables_of.stage_table(problem.study, only_stages(problem, number, used), problem.parts)
        for place, name in enumerate(table.names):
            stage[copy][stage[0] == problem.stages.names.index(name)] = count + place
        tables.append(table)
        count += len(table.names)
    energy = annual_kwh(replace(problem, stages=joined(tables)), rows)
    return [float(value) for value in energy[1:] - energy[0]]


def only_stages(problem: Problem, number: Number, used: set[str]) -> Catalogue:
    """Return a catalogue with one number off and no stages but the used ones that number belongs to."""
    families = changed_families(problem.catalogue, number)
    kept: dict[str, dict[str, Part]] = {"inductors": families["inductors"]}
    for family in STAGE_FAMILIES:
        kept[family] = {
            name: part
            for name, part in families.get(family, {}).items()
            if name in used and number.name in {name, getattr(part, "inductor", "")}
        }
    return replace(problem.catalogue, families=kept)


def joined(tables: Sequence[Table]) -> Table:
    """Return parameter tables one behind the other, field by field."""
    first = tables[0]
    values: dict[str, Any] = {}
    for one in fields(first):
        held = [getattr(table, one.name) for table in tables]
        if isinstance(held[0], tuple):
            values[one.name] = tuple(chain.from_iterable(held))
        elif is_dataclass(held[0]):
            values[one.name] = joined(held)
        else:
            values[one.name] = np.concatenate(held)
    return replace(first, **values)


def price_rows(problem: Problem, row: IntArray) -> list[dict[str, Any]]:
    """Return a row for the price of every part number on the board, and of the board itself."""
    designs = Designs(problem.layout, row[None])
    pieces = count_pieces(problem, designs)[0]
    base = float(bill(problem, designs).total[0])
    parts = problem.parts
    out = []
    for part in np.flatnonzero(pieces):
        quantity = pieces[part] * problem.study.economics.boards_per_year
        step = int(np.searchsorted(np.array(PRICE_STEPS), quantity, side="right"))
        price = parts.price.copy()
        price[part] *= 1.0 + 0.01 * PRICE_SPREAD_PERCENT
        dearer = replace(problem, parts=replace(parts, price=price))
        change = float(bill(dearer, designs).total[0]) - base
        name = parts.names[part]
        held = catalogue_row(problem.catalogue, parts.families[part], name)
        number = Number(
            held.family, name, PRICE_COLUMNS[step], float(parts.price[part, step]), PRICE_SPREAD_PERCENT,
            PRICE_MARK + source_text(problem.catalogue, held),
        )  # fmt: skip
        out.append(record(number, 0.0, change, change))
    stack = problem.catalogue.families["stacks"][problem.stacks.names[int(designs.board("stack")[0])]]
    value = float(problem.stacks.price_per_cm2[int(designs.board("stack")[0])])
    change = 0.01 * PRICE_SPREAD_PERCENT * float(bill(problem, designs).board[0])
    source = PRICE_MARK + source_text(problem.catalogue, stack)
    number = Number("stacks", stack.name, "price_per_cm2", value, PRICE_SPREAD_PERCENT, source)
    return [*out, record(number, 0.0, change, change)]


def record(number: Number, energy_kwh: float, cost: float, lifetime: float) -> dict[str, Any]:
    """Return one number's leverage as plain data."""
    return {
        "part": number.name,
        "number": number.column,
        "value": number.value,
        "spread_percent": number.spread_percent,
        "energy_change_kwh": energy_kwh,
        "cost_change": cost,
        "lifetime_change": lifetime,
        "source": number.source,
    }


def annual_kwh(problem: Problem, rows: IntArray) -> FloatArray:
    """Return the energy decided designs lose a year by direct physics, (P,) kWh; no limit is checked."""
    states = problem.states
    out = np.empty(len(rows))
    for start in range(0, len(rows), BATCH):
        part = slice(start, start + BATCH)
        hardware = unpack(problem, Designs(problem.layout, rows[part]), states)
        solution = solve(problem, states, hardware, DirectStages(problem, states), exact=True)
        out[part] = (solution.loss_w * states.hours).sum(axis=1) * 1e-3
        out[part] += transition_kwh(problem, states, hardware)
    return out


def loss_numbers(problem: Problem, row: IntArray) -> Iterator[Number]:
    """Yield every loss number of every catalogue row a design uses; what is zero cannot be off by a share."""
    catalogue = problem.catalogue
    for family, name in used_rows(problem, row):
        part = catalogue.families[family][name]
        source = source_text(catalogue, part)
        if name in catalogue.measured:  # its loss is what was measured, of no number of its row
            continue
        for column in LOSS_COLUMNS[family]:
            value = float(getattr(part, column))
            if value != 0.0 and part.spread_percent > 0:
                yield Number(family, name, column, value, part.spread_percent, source)


def used_rows(problem: Problem, row: IntArray) -> list[tuple[str, str]]:
    """Return (family, row name) of every catalogue row whose numbers a design's losses are made of."""
    designs = Designs(problem.layout, row[None])
    families = problem.catalogue.families
    used: list[tuple[str, str]] = []
    for stage in np.unique(designs.rail("stage")[0]):
        name = problem.stages.names[stage]
        family = next(f for f in STAGE_FAMILIES if name in families.get(f, {}))
        used.append((family, name))
        if family == "buck_stages":
            used.append(("inductors", cast(BuckStage, families[family][name]).inductor))
    used += [("capacitors", problem.capacitors.names[k]) for k in np.unique(designs.rail("bank")[0])]
    feed = designs.rail("feed")[0]
    for bus, converter in enumerate(designs.bus("converter")[0] - 1):
        if converter >= 0 and (feed == bus + 1).any():
            used.append(("bus_converters", problem.converters.names[converter]))
    for family, names, column in (
        ("supervisors", problem.supervisors.names, "supervisor"),
        ("bias_supplies", problem.biases.names, "bias"),
    ):
        chosen = int(designs.board(column)[0]) - 1
        if chosen >= 0:
            used.append((family, names[chosen]))
    weight = problem.stacks.copper_oz[int(designs.board("stack")[0])]
    used += [
        ("copper_foils", name)
        for name, foil in families["copper_foils"].items()
        if cast(CopperFoil, foil).copper_oz == weight
    ]
    used.append(("input_paths", problem.path.name))
    return list(dict.fromkeys(used))


def catalogue_row(catalogue: Catalogue, family: str, number: str) -> Part:
    """Return a catalogue row bought under a part number; of the variants of one stage the first."""
    rows = catalogue.families[family]
    return rows[number] if number in rows else next(
        part for part in rows.values() if tables_of.part_number(part) == number
    )  # fmt: skip


def source_text(catalogue: Catalogue, part: Part) -> str:
    """Return where a row's numbers come from, in words."""
    source = catalogue.sources.get(part.source)
    return part.source if source is None else f"{source.title} ({source.kind}, {source.dated})"


def perturbed(problem: Problem, number: Number) -> Problem:
    """Return the problem with one catalogue number, of no stage, off by its spread.

    The parameter tables of its family are made again by the same functions that made them; the decision space
    and the prices stay, so that a row means the same design.
    """
    catalogue = replace(problem.catalogue, families=changed_families(problem.catalogue, number))
    return with_catalogue(problem, catalogue, number)


def changed_families(catalogue: Catalogue, number: Number) -> dict[str, dict[str, Part]]:
    """Return the catalogue's families with one number off by its spread."""
    rows = catalogue.families[number.family]
    part = rows[number.name].model_copy(update={number.column: number.raised})
    return {**catalogue.families, number.family: {**rows, number.name: part}}


def with_catalogue(problem: Problem, catalogue: Catalogue, number: Number) -> Problem:
    """Return the problem with the tables of one family made from another catalogue."""
    study, parts, family = problem.study, problem.parts, number.family
    if family == "bus_converters":
        return replace(problem, converters=tables_of.converter_table(study, catalogue, parts))
    if family == "capacitors":
        return replace(problem, capacitors=tables_of.capacitor_table(study, catalogue, parts))
    if family == "bias_supplies":
        return replace(problem, biases=tables_of.bias_table(study, catalogue, parts))
    if family == "input_paths":
        return replace(problem, path=tables_of.path_parameters(study, catalogue, parts))
    if family == "supervisors":
        # the table is in order of price, then power: made again it might be in another order
        power = problem.supervisors.power_w.copy()
        power[problem.supervisors.names.index(number.name)] *= number.raised / number.value
        return replace(problem, supervisors=replace(problem.supervisors, power_w=power))
    stacks = tables_of.stack_table(study, catalogue)
    sheet = np.asarray(sheet_resistance_ohm(stacks.thickness_m, copper_degc(study)))
    return replace(problem, stacks=stacks, sheet_ohm=sheet)
