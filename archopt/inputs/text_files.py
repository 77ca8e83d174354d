"""Reading the text of TOML and CSV files, with every fault put as a problem and never as a traceback."""

from __future__ import annotations

import csv
import io
import re
import tomllib
import types
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Annotated, Any, get_args, get_origin

from pydantic import BaseModel

from archopt.inputs.problems import Notebook

YES_NO = {"true": True, "yes": True, "1": True, "false": False, "no": False, "0": False}


def read_text(path: Path, shown_path: str, what: str, notebook: Notebook) -> str | None:
    """Return the text of a file (a byte order mark is taken off), or None after noting why not."""
    try:
        return path.read_bytes().decode("utf-8-sig")
    except FileNotFoundError:
        notebook.problem("", f"no such file ({what})", shown_path)
    except IsADirectoryError:
        notebook.problem("", f"is a folder where {what} should be", shown_path)
    except UnicodeDecodeError as error:
        notebook.problem(f"byte {error.start}", "is not UTF-8 text; save it as UTF-8", shown_path)
    except (OSError, ValueError) as error:
        reason = getattr(error, "strerror", None) or str(error)
        notebook.problem("", f"cannot be read: {reason}", shown_path)
    return None


def read_toml(path: Path, shown_path: str, notebook: Notebook, what: str = "the study") -> dict[str, Any] | None:
    """Return the content of a TOML file, or None after noting what is wrong and on which line."""
    text = read_text(path, shown_path, what, notebook)
    if text is None:
        return None
    try:
        return tomllib.loads(text)
    except tomllib.TOMLDecodeError as error:
        found = re.search(r"\(at line (\d+), column (\d+)\)", str(error))
        place = f"line {found[1]}, column {found[2]}" if found else f"line {text.count(chr(10)) + 1}"
        message = re.sub(r"\s*\(at [^)]*\)", "", str(error))
        line = text.splitlines()[int(found[1]) - 1].strip() if found and text.splitlines() else ""
        notebook.problem(
            place, f"is not TOML: {message[:1].lower()}{message[1:]}{f': {line}' if line else ''}", shown_path
        )
    except RecursionError:
        notebook.problem("", f"is not {what}: nested too deeply", shown_path)
    return None


@dataclass(frozen=True)
class CsvRows:
    """A CSV file: its header and its rows as (line in the file, cells), blank and ``#`` lines left out."""

    shown_path: str
    header: tuple[str, ...]
    rows: tuple[tuple[int, tuple[str, ...]], ...]


def read_csv(path: Path, shown_path: str, what: str, notebook: Notebook) -> CsvRows | None:
    """Return header and rows, or None after noting why not. Rows of a wrong length are noted and left out."""
    text = read_text(path, shown_path, what, notebook)
    if text is None:
        return None
    header: tuple[str, ...] | None = None
    rows: list[tuple[int, tuple[str, ...]]] = []
    wrong: list[tuple[int, int]] = []
    reader = csv.reader(io.StringIO(text, newline=""))
    try:
        for cells in reader:
            row = tuple(cell.strip() for cell in cells)
            if not any(row) or row[0].startswith("#"):
                continue
            if header is None:
                header = row
            elif len(row) != len(header):
                wrong.append((reader.line_num, len(row)))
            else:
                rows.append((reader.line_num, row))
    except csv.Error as error:
        notebook.problem(f"row {reader.line_num}", f"is not CSV: {error}", shown_path)
        return None
    if header is None:
        notebook.problem("", f"is empty where {what} should be, first row the column names", shown_path)
        return None
    for mark, named in ((";", "';'"), ("\t", "tabs")):
        if len(header) == 1 and mark in header[0]:
            notebook.problem("row 1", f"columns are separated by {named}; separate them by ','", shown_path)
            return None
    for line, count in wrong[:10]:
        notebook.problem(f"row {line}", f"has {count} cells where the header has {len(header)}", shown_path)
    if len(wrong) > 10:
        notebook.problem("", f"{len(wrong) - 10} more rows have a wrong number of cells", shown_path)
    for column in sorted({name for name in header if name and header.count(name) > 1}):
        notebook.problem("row 1", f"column {column} is there twice", shown_path)
    return CsvRows(shown_path, header, tuple(rows))


def cell_values(model: type[BaseModel], cells: Mapping[str, str]) -> dict[str, Any]:
    """Return cells turned into what the model's fields hold; empty cells are left out, ``;`` separates lists.

    A cell that does not turn is returned as its text, for the model to refuse.
    """
    values: dict[str, Any] = {}
    for column, cell in cells.items():
        if cell == "":
            continue
        field = model.model_fields.get(column)
        kinds = _plain_types(field.annotation) if field else set()
        values[column] = _turned(cell, kinds)
    return values


def _turned(cell: str, kinds: set[Any]) -> Any:
    """Return one cell as one of the kinds, or as its text."""
    if tuple in kinds:
        return [item.strip() for item in cell.split(";") if item.strip()]
    if bool in kinds:
        return YES_NO.get(cell.lower(), cell)
    for kind in (int, float):
        if kind in kinds:
            try:
                return kind(cell)
            except ValueError:
                continue
    return cell


def _plain_types(annotation: Any) -> set[Any]:
    """Return the plain types an annotation allows: float, int, bool, str, tuple."""
    origin = get_origin(annotation)
    if origin is Annotated:
        return _plain_types(get_args(annotation)[0])
    if origin is tuple:
        return {tuple}
    if origin is types.UnionType or str(origin) == "typing.Union":
        return set().union(*(_plain_types(item) for item in get_args(annotation)))
    return {annotation}
