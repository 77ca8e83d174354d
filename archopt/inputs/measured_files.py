"""Writing a fitted row and its source into a catalogue folder; nothing is overwritten unasked."""

from __future__ import annotations

import csv
import io
import os
import re
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import date
from pathlib import Path
from typing import Any

import numpy as np

from archopt.errors import InputError, OutputError, Problem
from archopt.inputs.catalogue import SOURCES
from archopt.inputs.parts import FAMILIES, MAY_LACK, Part, Source
from archopt.inputs.problems import Notebook
from archopt.inputs.text_files import read_csv
from archopt.physics.measured import LossTable

NAME = re.compile(r"[A-Za-z0-9][\w.+-]*")
#: Folder of loss tables in a catalogue folder; the catalogue's reader leaves names that begin with _ alone.
TABLES = "_measured"
TABLE_COLUMNS = ("input_voltage_v", "output_voltage_v", "current_a", "loss_w", "temperature_degc")


@dataclass(frozen=True)
class Places:
    """Where a fitted part goes: the row's file, sources.csv, the loss table, and whether a study can load it.

    root is the catalogue folder when the row's file lies in one (its name or its folder's is the family's).
    """

    row: Path
    sources: Path
    table: Path
    root: Path | None


def places(out: Path, family: str, name: str) -> Places:
    """Return where a part goes.

    Parameters
    ----------
    out : a CSV file, or the folder of a catalogue, in which FAMILY/NAME.csv is taken
    """
    row = out if out.suffix == ".csv" and not out.is_dir() else out / family / f"{name}.csv"
    if row.parent.name == family:
        root: Path | None = row.parent.parent
    elif row.stem == family:
        root = row.parent
    else:
        root = None
    beside = row.parent if root is None else root
    return Places(row, beside / SOURCES, table_file(beside, name), root)


def table_file(folder: Path, name: str) -> Path:
    """Return where a folder of own parts keeps the loss table of a part."""
    return folder / TABLES / f"{name}.points.csv"


def check_name(name: str, where: str) -> None:
    """Refuse a name that a study or a file could not carry.

    Raises
    ------
    InputError : the name
    """
    if not NAME.fullmatch(name):
        allowed = "use letters, digits, '_', '.', '+' and '-', a letter or digit first"
        message = f"'{name}' cannot be a part's name; {allowed}"
        raise InputError([Problem(where, "--name", message)])


def write_part(
    place: Places, part: Part, title: str, measured_on: date, table: LossTable | None = None, replace: bool = False,
) -> tuple[Path, ...]:  # fmt: skip
    """Write the row, its source and, when given, its loss table; return the paths written.

    Rows of other parts in the same files stay as they are.

    Parameters
    ----------
    place : where it goes
    part : the row; its source key gets a row of kind "measured"
    title, measured_on : of the source row
    table : loss table to keep beside the row
    replace : replace a row of the same name, source or table that is there

    Raises
    ------
    OutputError : something of that name is there, or a file cannot be written
    """
    source = Source(key=part.source, kind="measured", dated=measured_on.isoformat(), title=title)
    texts = {
        place.row: _with_row(place.row, list(FAMILIES[part.family].model_fields), part.model_dump(), "name", replace),
        place.sources: _with_row(place.sources, list(Source.model_fields), source.model_dump(), "key", replace),
    }
    if table is not None:
        if place.table.exists() and not replace:
            raise OutputError(f"{place.table} is there already; replace it by --replace")
        texts[place.table] = table_text(table)
    for path, text in texts.items():
        try:
            path.parent.mkdir(parents=True, exist_ok=True)
            fresh = path.with_name(f".{path.name}.new")
            fresh.write_text(text, encoding="utf-8", newline="")
            os.replace(fresh, path)
        except (OSError, ValueError) as error:
            raise OutputError(f"{path}: cannot be written: {getattr(error, 'strerror', None) or error}") from error
    return tuple(texts)


def _with_row(path: Path, columns: list[str], values: Mapping[str, Any], key: str, replace: bool) -> str:
    """Return the text of a CSV file with one more row, or with the row of the same key replaced."""
    fresh = _line([_cell(values[column]) for column in columns])
    if not path.exists():
        return _line(columns) + fresh
    notebook = Notebook(str(path))
    table = read_csv(path, str(path), "rows", notebook)
    if table is None or notebook.problems:
        raise OutputError("\n".join(str(problem) for problem in notebook.problems))
    lacking = [column for column in columns if column not in table.header and column in MAY_LACK]
    if {*table.header, *lacking} != set(columns):
        raise OutputError(f"{path} is there already with other columns; name another file")
    at = table.header.index(key)
    name = str(values[key])
    if any(cells[at] == name for _, cells in table.rows) and not replace:
        raise OutputError(f"{path} has '{name}' already; replace it by --replace or give another name")
    kept = [cells for _, cells in table.rows if cells[at] != name]
    ordered = [_cell(values[column]) for column in table.header]
    lacking = [column for column in lacking if values[column] != ""]
    if lacking:  # every row gets the column, empty but in the new one
        blank = [""] * len(lacking)
        rows = "".join(_line([*cells, *blank]) for cells in kept)
        return _line([*table.header, *lacking]) + rows + _line([*ordered, *(_cell(values[c]) for c in lacking)])
    if len(kept) == len(table.rows):  # nothing to take out: the file stays as it is, comments too
        text = path.read_bytes().decode("utf-8-sig")
        return text + ("" if text.endswith("\n") else "\n") + _line(ordered)
    return _line(table.header) + "".join(_line(cells) for cells in kept) + _line(ordered)


def _line(cells: Any) -> str:
    """Return one line of CSV."""
    buffer = io.StringIO()
    csv.writer(buffer, lineterminator="\n").writerow(cells)
    return buffer.getvalue()


def _cell(value: object) -> str:
    """Return a value as a catalogue cell holds it."""
    if isinstance(value, bool):
        return "true" if value else "false"
    return f"{value:.10g}" if isinstance(value, float) else str(value)


def table_text(table: LossTable) -> str:
    """Return a loss table as CSV, one line a point, in the columns of measured points."""
    lines = [_line(TABLE_COLUMNS)]
    for at, loss in np.ndenumerate(table.loss_w):
        axes = (table.input_v[at[0]], table.output_v[at[1]], table.current_a[at[2]])
        lines.append(_line([f"{value:.6g}" for value in (*axes, loss, table.local_degc)]))
    return "".join(lines)
