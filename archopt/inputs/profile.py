"""The load profile: a time series in a CSV file.

Columns are ``hours``, then either one ``utilisation`` or ``<rail>_a`` for each rail, and perhaps ``input_v``
and ``inlet_degc``. An empty cell of a rail means that the rail is off, which is not the same as 0 A.
"""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from archopt.inputs.problems import Notebook, brief, nearest
from archopt.inputs.resolved import FloatArray
from archopt.inputs.text_files import CsvRows, read_csv

REPORTED = 10
PLAIN_COLUMNS = ("hours", "utilisation", "input_v", "inlet_degc")


@dataclass(frozen=True)
class ProfileLimits:
    """What the cells of a profile may hold, as (lowest, highest).

    rail_max_a : largest current of each rail, by name
    coincident_a : each rail's coincident maximum, which ``utilisation`` multiplies
    """

    rail_max_a: dict[str, float]
    coincident_a: dict[str, float]
    input_v: tuple[float, float] = (4.0, 450.0)
    inlet_degc: tuple[float, float] = (-40.0, 95.0)


@dataclass(frozen=True)
class Profile:
    """Moments of the load as read: hours (M,), current_a (M, R), off (M, R), input_v (M,), inlet_degc (M,).

    input_v and inlet_degc hold nan where the file says nothing; line (M,) is the row in the file.
    """

    hours: FloatArray
    current_a: FloatArray
    off: NDArray[np.bool_]
    input_v: FloatArray
    inlet_degc: FloatArray
    line: NDArray[np.int64]


@dataclass
class _Faults:
    """Faults of one file: the first ten are told, the rest counted."""

    shown_path: str
    notebook: Notebook
    count: int = field(default=0)

    def add(self, line: int, column: str, message: str) -> None:
        self.count += 1
        if self.count <= REPORTED:
            self.notebook.problem(f"row {line}, column {column}", message, self.shown_path)

    def close(self) -> None:
        if self.count > REPORTED:
            self.notebook.problem("", f"{self.count - REPORTED} more cells are wrong in this file", self.shown_path)


def read_profile(
    path: Path, shown_path: str, rails: Sequence[str], known: Sequence[str], limits: ProfileLimits,
    notebook: Notebook,
) -> Profile | None:  # fmt: skip
    """Return the moments of a profile, or None after noting what is wrong.

    Parameters
    ----------
    path, shown_path : the file, and its path as the person wrote it
    rails : names of the R rails, in study order
    known : names a column may carry, those of rails with faults of their own among them
    limits : what the cells may hold
    """
    before = len(notebook.problems)
    table = read_csv(path, shown_path, "the load profile", notebook)
    if table is None:
        return None
    _check_header(table, known, notebook)
    if not table.rows and len(notebook.problems) == before:
        notebook.problem("", "has no rows", shown_path)
    if len(notebook.problems) > before and "hours" not in table.header:
        return None
    faults = _Faults(shown_path, notebook)
    profile = _moments(table, rails, limits, faults)
    faults.close()
    return profile if len(notebook.problems) == before else None


def _check_header(table: CsvRows, known: Sequence[str], notebook: Notebook) -> None:
    """Note unknown, missing and contradictory columns."""
    columns = [f"{name}_a" for name in known]
    for column in dict.fromkeys(table.header):
        if column not in PLAIN_COLUMNS and column not in columns:
            hint = nearest(column, [*columns, *PLAIN_COLUMNS], many=40)
            notebook.problem(f"row 1, column {column or '(no name)'}", f"is no rail; {hint}", table.shown_path)
    if "hours" not in table.header:
        notebook.problem("row 1", "column hours is missing", table.shown_path)
    stated = [column for column in columns if column in table.header]
    if "utilisation" in table.header:
        if stated:
            message = f"utilisation and {stated[0]} are both there; keep utilisation or the rails' currents"
            notebook.problem("row 1", message, table.shown_path)
    else:
        missing = [column for column in columns if column not in table.header]
        if missing:
            message = f"column {', '.join(missing)} missing; every rail needs one, or one utilisation for all"
            notebook.problem("row 1", message, table.shown_path)


def _moments(table: CsvRows, rails: Sequence[str], limits: ProfileLimits, faults: _Faults) -> Profile:
    """Return the cells as arrays; cells at fault are noted and hold nan."""
    count = len(table.rows)
    line = np.array([number for number, _ in table.rows], dtype=np.int64)
    nothing = np.full(count, math.nan)

    def column(name: str, low: float, high: float, what: str, may_be_empty: bool = True) -> FloatArray:
        if name not in table.header:
            return nothing.copy()
        at = table.header.index(name)
        return _numbers(table, at, name, (low, high), what, may_be_empty, faults)

    hours = column("hours", 0.0, 8784.0, "hours are 0 to 8784", may_be_empty=False)
    input_v = column("input_v", *limits.input_v, "outside the study's input range {low:g} to {high:g} V")
    inlet_degc = column("inlet_degc", *limits.inlet_degc, "outside {low:g} to {high:g} degC")
    current_a = np.zeros((count, len(rails)))
    if "utilisation" in table.header:
        share = column("utilisation", 0.0, 1.0, "utilisation is 0 to 1 (0.4 for 40 %)", may_be_empty=False)
        current_a = share[:, None] * np.array([limits.coincident_a[name] for name in rails])[None, :]
    else:
        for index, name in enumerate(rails):
            what = f"above the {{high:g}} A that {name} draws at most"
            current_a[:, index] = column(f"{name}_a", 0.0, limits.rail_max_a[name], what)
    off = np.isnan(current_a)
    return Profile(hours, np.where(off, 0.0, current_a), off, input_v, inlet_degc, line)


def _all_plain(cells: list[str], low: float, high: float) -> FloatArray | None:
    """Return a column (M,) whose cells are all numbers in range, else None: most columns, read at once."""
    try:
        values = np.array([float(cell) for cell in cells])
    except ValueError:
        return None
    return values if bool(np.all((values >= low) & (values <= high))) else None


def _numbers(
    table: CsvRows,
    at: int,
    name: str,
    bounds: tuple[float, float],
    what: str,
    may_be_empty: bool,
    faults: _Faults,
) -> FloatArray:
    """Return one column (M,) as numbers, nan where the cell is empty or at fault."""
    low, high = bounds
    plain = _all_plain([cells[at] for _, cells in table.rows], low, high)
    if plain is not None:
        return plain
    values = np.full(len(table.rows), math.nan)
    for index, (line, cells) in enumerate(table.rows):
        cell = cells[at]
        if cell == "":
            if not may_be_empty:
                faults.add(line, name, "is empty; it needs a number")
            continue
        try:
            value = float(cell)
        except ValueError:
            faults.add(line, name, f"needs a number, found {brief(cell)}")
            continue
        if not math.isfinite(value):
            faults.add(line, name, f"{cell} is not a finite number")
        elif value < 0 <= low:
            faults.add(line, name, f"{value:g} is negative")
        elif not low <= value <= high * (1 + 1e-9):
            faults.add(line, name, f"{value:g} is {what.format(low=low, high=high)}" if "outside" in what
                       or "above" in what else f"{value:g}: {what}")  # fmt: skip
        else:
            values[index] = value
    return values
