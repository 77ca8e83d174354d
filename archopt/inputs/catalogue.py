"""The catalogue of parts: CSV files in one folder a family, every row checked, all faults told at once."""

from __future__ import annotations

import hashlib
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from pydantic import BaseModel

from archopt.errors import InputError, Problem
from archopt.inputs.catalogue_checks import check_family, check_parts
from archopt.inputs.measured import named_table
from archopt.inputs.parts import FAMILIES, MAY_LACK, Part, Source
from archopt.inputs.problems import Notebook, nearest, validated
from archopt.inputs.resolved import Catalogue
from archopt.inputs.text_files import CsvRows, read_csv
from archopt.physics.measured import LossTable

SOURCES = "sources.csv"


def locate_catalogue() -> Path:
    """Return the folder of the catalogue: inside the package, else beside it in a source tree.

    Raises
    ------
    InputError : there is none; the installation is incomplete
    """
    package = Path(__file__).resolve().parents[1]
    inside = package / "catalog"
    if inside.is_dir():
        return inside
    beside = package.parent / "catalog"
    if beside.is_dir() and (package.parent / "pyproject.toml").is_file():
        return beside
    raise InputError([Problem(str(inside), "", "the catalogue of parts is missing; install archopt again")])


@dataclass
class _Reading:
    """What has been read so far: parts by family, where each came from, digest of all bytes."""

    families: dict[str, dict[str, Part]] = field(default_factory=lambda: {family: {} for family in FAMILIES})
    sources: dict[str, Source] = field(default_factory=dict)
    file_of: dict[str, str] = field(default_factory=dict)
    place_of: dict[str, tuple[str, int]] = field(default_factory=dict)
    measured: dict[str, LossTable] = field(default_factory=dict)
    digest: Any = field(default_factory=hashlib.sha256)
    complete: bool = True


def load_catalogue(root: Path | None, own: Path | None, own_shown: str, notebook: Notebook) -> Catalogue:
    """Return the catalogue, with the rows of the study's own folder overriding or added.

    Parameters
    ----------
    root : folder of the base catalogue, or None for the one that comes with archopt
    own, own_shown : the study's own folder (None when it names none) and its path as written

    Every fault of every row is noted; rows at fault are left out.
    """
    reading = _Reading()
    base = locate_catalogue() if root is None else root
    before = len(notebook.problems)
    _read_folder(base, str(base) if root is not None else "catalog", reading, notebook, override=False)
    if own is not None:
        if _is_folder(own):
            _read_folder(own, own_shown, reading, notebook, override=True)
        else:
            notebook.problem("catalogue", f"there is no folder {own_shown}")
            reading.complete = False
    reading.complete = reading.complete and len(notebook.problems) == before
    check_parts(reading.families, reading.sources, reading.place_of, notebook)
    content_hash = str(reading.digest.hexdigest())
    return Catalogue(reading.families, reading.sources, reading.file_of, content_hash, reading.measured)


def _read_folder(root: Path, shown: str, reading: _Reading, notebook: Notebook, override: bool) -> None:
    """Read every family of one catalogue folder; rows of a second folder may override those of the first."""
    if not _is_folder(root):
        notebook.problem("", "there is no such folder (the catalogue of parts)", shown)
        return
    _read_sources(root, shown, reading, notebook, required=not override)
    seen: set[str] = set()
    for entry in _entries(root, shown, notebook):
        if entry.name.startswith((".", "_")) or entry.name == SOURCES:
            continue
        family = entry.name if entry.is_dir() else entry.stem
        if not entry.is_dir() and entry.suffix != ".csv":
            continue
        if family not in FAMILIES:
            notebook.problem("", f"is no family of parts; {nearest(family, FAMILIES, 20)}", f"{shown}/{entry.name}")
            continue
        files = _entries(entry, shown, notebook) if entry.is_dir() else [entry]
        for file in (file for file in files if file.suffix == ".csv"):
            shown_file = f"{shown}/{file.relative_to(root).as_posix()}"
            _read_family(FAMILIES[family], file, shown_file, reading, seen, notebook)
    _read_tables(root, shown, seen, reading, notebook)


def _is_folder(path: Path) -> bool:
    """Return whether there is such a folder; a name no file system takes is none."""
    try:
        return path.is_dir()
    except OSError:
        return False


def _entries(root: Path, shown: str, notebook: Notebook) -> list[Path]:
    """Return what is in a folder, sorted; a folder that may not be listed is noted."""
    try:
        return sorted(root.iterdir())
    except OSError as error:
        notebook.problem("", f"cannot be listed: {error.strerror}", shown)
        return []


def _read_rows(path: Path, shown: str, model: type[BaseModel], reading: _Reading, notebook: Notebook) -> CsvRows | None:
    """Return the rows of one CSV after checking its header against the model's fields."""
    table = read_csv(path, shown, f"rows of {model.__name__}", notebook)
    if table is None:
        return None
    reading.digest.update(path.name.encode() + path.read_bytes())
    columns = list(model.model_fields)
    for column in dict.fromkeys(table.header):
        if column not in columns:
            hint = nearest(column, columns, 40)
            notebook.problem(f"row 1, column {column or '(no name)'}", f"unknown; {hint}", shown)
    missing = [column for column in columns if column not in table.header and column not in MAY_LACK]
    if missing:
        notebook.problem("row 1", f"column {', '.join(missing)} missing", shown)
    if missing or any(column not in columns for column in table.header):
        return None
    return table


def _read_sources(root: Path, shown: str, reading: _Reading, notebook: Notebook, required: bool) -> None:
    """Read sources.csv of one catalogue folder."""
    path = root / SOURCES
    if not path.exists() and not required:
        return
    shown_file = f"{shown}/{SOURCES}"
    table = _read_rows(path, shown_file, Source, reading, notebook)
    for line, cells in table.rows if table else ():
        values = dict(zip(table.header, cells, strict=True)) if table else {}
        source = validated(Source, values, _row_place(shown_file, line), notebook)
        if source is not None:
            reading.sources[source.key] = source


def _read_family(
    model: type[Part], path: Path, shown: str, reading: _Reading, seen: set[str], notebook: Notebook
) -> None:
    """Read one CSV of a family into the catalogue; ``seen`` holds the names met in this folder."""
    table = _read_rows(path, shown, model, reading, notebook)
    for line, cells in table.rows if table else ():
        values = {key: cell for key, cell in zip(table.header, cells, strict=True) if cell != ""} if table else {}
        before = len(notebook.problems)
        part = validated(model, values, _row_place(shown, line), notebook)
        name = values.get("name", "")
        if name in seen:
            earlier, earlier_line = reading.place_of.get(name, (shown, line))
            message = f"'{name}' is there already ({earlier}, row {earlier_line}); names are unique"
            notebook.problem(f"row {line}, column name", message, shown)
            continue
        seen.add(name)
        if part is None or len(notebook.problems) > before:
            reading.place_of[name] = (shown, line)
            continue
        holder = next((family for family, parts in reading.families.items() if name in parts), model.family)
        if holder != model.family:
            message = f"'{name}' is the name of a part of {holder}; names are unique over the catalogue"
            notebook.problem(f"row {line}, column name", message, shown)
            continue
        reading.families[model.family][name] = part
        reading.file_of[name] = shown
        reading.place_of[name] = (shown, line)
        check_family(part, shown, line, notebook)


def _read_tables(root: Path, shown: str, names: set[str], reading: _Reading, notebook: Notebook) -> None:
    """Read the measured points that the rows of one catalogue folder name; a row that overrides loses the other's."""
    for rows in reading.families.values():
        for part in (rows[name] for name in rows if name in names):
            reading.measured.pop(part.name, None)
            named = str(getattr(part, "measured_points", ""))
            if not named:
                continue
            file, line = reading.place_of[part.name]
            path = root / named
            table = named_table(part, path, f"{shown}/{named}", (file, f"row {line}, column measured_points"), notebook)
            if table is not None:
                reading.measured[part.name] = table
                reading.digest.update(path.name.encode() + path.read_bytes())


def _row_place(shown: str, line: int) -> Any:
    """Return the locator of one CSV row."""
    return lambda column: (shown, f"row {line}, column {column}")
