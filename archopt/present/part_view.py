"""The parts browser: families, rows of a family, the columns of a family, and one part with its efficiency."""

from __future__ import annotations

import inspect
import math
from collections.abc import Callable, Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, get_args

import numpy as np
from pydantic.fields import FieldInfo
from rich.console import RenderableType
from rich.text import Text

from archopt.errors import InputError, Problem
from archopt.inputs.parts import FAMILIES, LinearRegulator, Part
from archopt.inputs.problems import nearest, shown, unit_of
from archopt.inputs.resolved import Catalogue
from archopt.present.amounts import NONE, fixed, number
from archopt.present.part_chart import Curve, chart_lines
from archopt.present.part_losses import row_loss_w
from archopt.present.part_table_view import kept_points, table_data, table_sections
from archopt.present.plain import Plain, plain
from archopt.present.tables import pairs, section, table

LOADS = (0.05, 0.1, 0.15, 0.2, 0.3, 0.4, 0.5, 0.6, 0.7, 0.8, 0.9, 1.0)
"""Share of rated current of the efficiency table."""
AMBIENT_DEGC = 40.0
"""Local air of the efficiency table."""
CURRENT_COLUMNS = ("phase_current_a", "max_current_a")
RATES = {"k_per_w": "K/W", "v_per_ms": "V/ms", "w_per_a": "W/A", "per_k": "1/K", "price_per_cm2": "currency/cm2"}
"""Endings of columns that are one quantity over another."""
IN_LISTS = {
    "buck_stages": ("input_min_v", "input_max_v", "output_min_v", "output_max_v", "phase_current_a", "max_phases",
                    "frequency_khz", "gate_supply", "inductor"),
    "inductors": ("inductance_nh", "winding_mohm", "saturation_a"),
    "bus_converters": ("kind", "isolated", "input_min_v", "input_max_v", "output_min_v", "output_max_v",
                       "max_current_a", "max_power_w", "max_parallel"),
    "single_stages": ("isolated", "input_min_v", "input_max_v", "output_min_v", "output_max_v", "phase_current_a",
                      "max_phases", "frequency_khz"),
    "linear_regulators": ("input_min_v", "input_max_v", "output_min_v", "output_max_v", "phase_current_a",
                          "dropout_mv"),
    "capacitors": ("kind", "capacitance_uf", "rated_v", "esr_mohm", "ripple_a"),
    "supervisors": ("control", "power_mw", "buses"),
    "bias_supplies": ("input_min_v", "input_max_v", "isolated", "output_v", "max_power_w", "efficiency"),
    "stacks": ("layers", "pairs", "copper_oz", "price_per_cm2"),
    "copper_foils": ("copper_oz", "nominal_um", "finished_um"),
    "input_paths": ("input_max_v", "resistance_mohm", "max_current_a"),
}  # fmt: skip


@dataclass(frozen=True)
class Answer:
    """What was asked of the catalogue: to be printed, or as plain data."""

    sections: Callable[[], Iterable[RenderableType]]
    data: Callable[[], Plain]


def browse(
    catalogue: Catalogue, family: str | None, name: str | None = None, *, columns: bool = False,
    input_v: float | None = None, output_v: float | None = None, current_a: float | None = None,
    own: Path | None = None,
) -> Answer:  # fmt: skip
    """Return the answer to one question of the browser.

    Parameters
    ----------
    catalogue : parts to look at
    family, name : nothing for the families, a family for its rows, a part's name (alone or after its family)
    columns : explain the family's columns instead
    input_v, output_v, current_a : rows that take, make and carry it; for one part where efficiency is shown
    own : folder of own parts, where a measured part's loss table may be kept

    Raises
    ------
    InputError : there is no such family, part or column, or a part does not work there
    """
    if family is None:
        counts = {key: len(catalogue.families[key]) for key in FAMILIES}
        return Answer(lambda: families_sections(catalogue), lambda: plain(counts))
    found, part_name = family_of(catalogue, family, name)
    if columns:
        return Answer(lambda: column_sections(found), lambda: plain(column_rows(found)))
    if part_name is not None:
        part = catalogue.families[found][part_name]
        efficiency(catalogue, part, input_v, output_v)  # refuses a voltage before anything is printed
        points = kept_points(own, part)
        measured = () if points is None else table_sections(catalogue, part, points)
        return Answer(
            lambda: (*part_sections(catalogue, part, input_v, output_v), *measured),
            lambda: {
                **part_data(catalogue, part, input_v, output_v),
                "measured_table": table_data(catalogue, part, points),
            },
        )
    rows = selected(catalogue, found, input_v, output_v, current_a)
    return Answer(lambda: family_sections(catalogue, found, rows), lambda: plain(rows))


def family_of(catalogue: Catalogue, family: str, name: str | None) -> tuple[str, str | None]:
    """Return family and part name; a part's name alone, in the place of the family, is enough.

    Raises
    ------
    InputError : there is no such family or part
    """
    if family not in FAMILIES:
        holder = next((key for key, rows in catalogue.families.items() if family in rows), None)
        if holder is not None and name is None:
            return holder, family
        names = [*FAMILIES, *(part for rows in catalogue.families.values() for part in rows)]
        hint = nearest(family, names) if nearest(family, names).startswith("did") else nearest(family, FAMILIES, 20)
        raise InputError([Problem("parts", "", f"'{family}' is no family of parts; {hint}")])
    if name is not None and name not in catalogue.families[family]:
        message = f"'{name}' is not in {family}; {nearest(name, list(catalogue.families[family]))}"
        raise InputError([Problem("parts", "", message)])
    return family, name


def selected(
    catalogue: Catalogue, family: str, input_v: float | None, output_v: float | None, current_a: float | None
) -> list[Part]:
    """Return the rows of a family that take an input, make an output and carry a current a unit.

    Raises
    ------
    InputError : the family has no column for what is asked
    """
    columns = FAMILIES[family].model_fields
    problems, rows = [], list(catalogue.families[family].values())
    for option, value, low, high in (
        ("--input-v", input_v, "input_min_v", "input_max_v"),
        ("--output-v", output_v, "output_min_v", "output_max_v"),
    ):
        if value is None:
            continue
        if high not in columns:
            problems.append(Problem(option, "", f"{family} have no {high}; leave it out"))
            continue
        rows = [row for row in rows if getattr(row, low, 0.0) <= value <= getattr(row, high)]
    if current_a is not None:
        column = next((name for name in CURRENT_COLUMNS if name in columns), None)
        if column is None:
            problems.append(Problem("--current-a", "", f"{family} have no rated current; leave it out"))
        else:
            rows = [row for row in rows if getattr(row, column) >= current_a]
    if problems:
        raise InputError(problems)
    return rows


def families_sections(catalogue: Catalogue) -> Iterable[RenderableType]:
    """The families and how many rows each has."""
    rows = [
        (family, str(len(catalogue.families[family])), _first_line(model)) for family, model in FAMILIES.items()
    ]
    yield from section("Families of parts", table(("family", "parts", "what"), rows, left=("family", "what")))
    yield Text("archopt parts FAMILY lists one, FAMILY NAME shows a part, FAMILY --columns explains its columns.")


def family_sections(catalogue: Catalogue, family: str, rows: Sequence[Part]) -> Iterable[RenderableType]:
    """The rows of one family, its main columns."""
    columns = ("name", *IN_LISTS[family], "price_1k", "source")
    words = [column for column in columns if not _is_number(FAMILIES[family].model_fields[column])]
    cells = [tuple(_cell(getattr(row, column)) for column in columns) for row in rows]
    total = len(catalogue.families[family])
    title = f"{family}: {len(rows)}" + (f" of {total}" if len(rows) != total else "")
    yield from section(title, table(columns, cells, left=words) if rows else "no row meets this")


def column_sections(family: str) -> Iterable[RenderableType]:
    """Every column of a family: unit, what a cell may hold, meaning."""
    rows = [(c["column"], c["unit"] or NONE, c["range"], c["meaning"] or NONE) for c in column_rows(family)]
    heads = ("column", "unit", "holds", "meaning")
    yield from section(f"Columns of {family}", Text(_first_line(FAMILIES[family])), table(heads, rows, left=heads))


def column_rows(family: str) -> list[dict[str, str]]:
    """Every column of a family from its schema: column, unit, range, meaning."""
    return [
        {"column": name, "unit": column_unit(name), "range": range_text(field), "meaning": field.description or ""}
        for name, field in FAMILIES[family].model_fields.items()
    ]


def column_unit(name: str) -> str:
    """Unit of a column: what its name ends in, or the words of a rate."""
    for ending, unit in RATES.items():
        if name.endswith(ending):
            return unit
    return "currency" if name.startswith("price_") else unit_of(name)


def range_text(field: FieldInfo) -> str:
    """What a cell may hold, from the bounds of the field."""
    allowed = get_args(field.annotation)
    if allowed and all(isinstance(item, str) for item in allowed):
        return " or ".join(allowed)
    if field.annotation is bool:
        return "true or false"
    if field.annotation is str:
        return "text"
    found: dict[str, float] = {}
    for item in field.metadata:
        for bound in ("gt", "ge", "lt", "le"):
            if hasattr(item, bound):
                found[bound] = getattr(item, bound)
    kind = "whole number" if field.annotation is int else "number"
    words = {"gt": "above", "ge": "at least", "lt": "below", "le": "at most"}
    return ", ".join([kind, *(f"{words[bound]} {value:g}" for bound, value in found.items())])


def part_sections(
    catalogue: Catalogue, part: Part, input_v: float | None = None, output_v: float | None = None
) -> Iterable[RenderableType]:
    """One part: its columns, its source, and for converters and stages efficiency over load and voltage."""
    source = catalogue.sources.get(part.source)
    head = [("family", part.family), ("from", catalogue.file_of.get(part.name, NONE))]
    if source is not None:
        head.append(("source", f"{source.title} ({source.kind}, {source.dated})"))
    yield from section(part.name, pairs(head))
    rows = [
        (row["column"], _cell(getattr(part, row["column"])), row["unit"] or NONE, row["meaning"] or NONE)
        for row in column_rows(part.family)
    ]
    heads = ("column", "value", "unit", "meaning")
    yield from section("Columns", table(heads, rows, left=("column", "unit", "meaning")))
    curves = efficiency(catalogue, part, input_v, output_v)
    if curves:
        yield from _efficiency_sections(part, curves)


def part_data(
    catalogue: Catalogue, part: Part, input_v: float | None = None, output_v: float | None = None
) -> dict[str, Plain]:
    """Plain data of what :func:`part_sections` shows."""
    source = catalogue.sources.get(part.source)
    columns = [{**row, "value": plain(getattr(part, row["column"]))} for row in column_rows(part.family)]
    curves = efficiency(catalogue, part, input_v, output_v)
    return {
        "name": part.name, "family": part.family, "file": catalogue.file_of.get(part.name),
        "source": plain(source), "columns": plain(columns), "efficiency": plain(curves),
    }  # fmt: skip


def efficiency(
    catalogue: Catalogue, part: Part, input_v: float | None = None, output_v: float | None = None,
    loads: Sequence[float] = LOADS,
) -> list[dict[str, Any]]:  # fmt: skip
    """Efficiency and loss over load at up to three input voltages; empty for parts that convert nothing.

    Each entry: input_v, output_v, current_a, efficiency, loss_w (lists over loads); of one unit or phase, local
    air 40 degC, the separate bias of a buck stage not counted; nan where a measured part was not measured.

    Raises
    ------
    InputError : a voltage is outside the part's range
    """
    values = part.model_dump()
    column = next((name for name in CURRENT_COLUMNS if name in values and "output_min_v" in values), None)
    if column is None:
        return []
    _check_inside(part, values, input_v, output_v)
    inputs = [input_v] if input_v is not None else _inputs(part, values, output_v)
    current = np.asarray(loads) * values[column]
    curves = []
    for volts in inputs:
        out = _output(part, values, volts, output_v)
        loss = row_loss_w(catalogue, part, volts, out, current, AMBIENT_DEGC)
        share = out * current / (out * current + loss)
        curves.append({"input_v": volts, "output_v": out, "current_a": current, "efficiency": share, "loss_w": loss})
    return curves


def _check_inside(part: Part, values: dict[str, Any], input_v: float | None, output_v: float | None) -> None:
    """Refuse a voltage the part is not stated for."""
    problems = []
    for words, value in (("input", input_v), ("output", output_v)):
        low, high = values[f"{words}_min_v"], values[f"{words}_max_v"]
        if value is not None and not low <= value <= high:
            message = f"{value:g} V is outside {low:g} to {high:g} V of {part.name}"
            problems.append(Problem(f"--{words}-v", "", message))
    if problems:
        raise InputError(problems)


def _inputs(part: Part, values: dict[str, Any], output_v: float | None) -> list[float]:
    """Lowest, usual and highest input voltage at which the part makes its output."""
    low, high = values["input_min_v"], values["input_max_v"]
    middle = values.get("input_nominal_v", float(f"{math.sqrt(low * high):.3g}"))
    if values.get("ratio"):
        return sorted({low, middle, high})
    out = _output(part, values, middle, output_v)
    drop = values["dropout_mv"] * 1e-3 if isinstance(part, LinearRegulator) else 0.0
    # a stage without transformer makes nothing above its largest duty; a tenth is left for the drops
    duty = values.get("max_duty", 1.0) if values.get("transformer_ratio", 1.0) == 1.0 else math.inf
    steps_down = part.family in {"buck_stages", "linear_regulators"}
    least = (out + drop) / duty * (1.1 if duty < 1.0 else 1.0) if steps_down else 0.0
    return sorted({float(f"{max(value, least):.4g}") for value in (low, middle, high) if least <= high})


def _output(part: Part, values: dict[str, Any], input_v: float, output_v: float | None) -> float:
    """Output voltage shown: the one asked for, that of the ratio, the nominal one, or the middle of the range."""
    if output_v is not None:
        return output_v
    if values.get("ratio"):
        return float(f"{input_v * values['ratio']:.4g}")
    middle = math.sqrt(values["output_min_v"] * values["output_max_v"])
    return float(values.get("output_nominal_v", float(f"{middle:.2g}")))


def _efficiency_sections(part: Part, curves: Sequence[dict[str, Any]]) -> Iterable[RenderableType]:
    """The drawn curves and the table of them."""
    names = [f"{number(c['input_v'])} V to {number(c['output_v'])} V" for c in curves]
    drawn = [
        Curve(name, list(c["current_a"]), list(100 * c["efficiency"])) for name, c in zip(names, curves, strict=True)
    ]
    unit = "phase" if "max_phases" in type(part).model_fields else "unit"
    lines = chart_lines(drawn, f"current of one {unit}, A", "efficiency, %")
    yield from section(f"Efficiency, one {unit}, local air {AMBIENT_DEGC:g} degC", Text("\n".join(lines), no_wrap=True))
    heads = ["load %", "current A"]
    for name in names:
        heads += [f"{name}: %", f"{name}: loss W"]
    rows = []
    for at, load in enumerate(LOADS):
        row = [fixed(100 * load, 0), number(float(curves[0]["current_a"][at]))]
        for c in curves:
            row += [fixed(float(100 * c["efficiency"][at]), 2), number(float(c["loss_w"][at]), 3)]
        rows.append(row)
    yield from section("Efficiency and loss", table(heads, rows))


def _cell(value: object) -> str:
    """One value of a row as a person would write it."""
    return shown(value)


def _first_line(model: type[Part]) -> str:
    """What a family is, in its model's words."""
    return (inspect.getdoc(model) or "").splitlines()[0]


def _is_number(field: FieldInfo) -> bool:
    """Whether a column holds numbers."""
    return field.annotation in {float, int} and field.annotation is not bool
