"""A study file read table by table, so that a fault in one table does not hide those of another."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

from archopt.inputs.problems import Notebook, brief, nearest, validated
from archopt.inputs.study import (
    TABLES,
    BoardTable,
    ChoicesTable,
    ControlTable,
    DeratingTable,
    EconomicsTable,
    InputTable,
    JumpRow,
    LevelRow,
    LimitsTable,
    SearchTable,
    Study,
)
from archopt.inputs.study_load import LoadTable, RailRow, StateRow
from archopt.inputs.text_files import cell_values, read_csv


@dataclass
class Draft:
    """The tables of a study as far as they could be read.

    supply and board are None when a value they cannot do without is wrong. ``rail_names`` holds every name
    that was written, those of rails with faults among them, so that faults are not told twice.
    """

    file: str
    folder: Path
    content: dict[str, Any]
    name: str
    title: str
    catalogue: str | None
    supply: InputTable | None
    board: BoardTable | None
    load: LoadTable
    control: ControlTable
    limits: LimitsTable
    derating: DeratingTable
    choices: ChoicesTable
    economics: EconomicsTable
    search: SearchTable
    incumbent: dict[str, Any] | None
    floorplan: str | None = None
    rails: list[RailRow] = field(default_factory=list)
    rail_names: list[str] = field(default_factory=list)
    rail_place: dict[str, tuple[str, str]] = field(default_factory=dict)

    def place(self, rail: str, key: str = "") -> tuple[str, str]:
        """Return place and file of a rail's key, as the person wrote them."""
        file, start = self.rail_place.get(rail, (self.file, f"rails.{rail}"))
        if start.startswith("row "):
            return (f"{start}, column {key}" if key else start), file
        return (f"{start}.{key}" if key else start), file


def read_draft(content: dict[str, Any], path: Path, notebook: Notebook) -> Draft:
    """Return the study's tables, each checked by itself.

    Parameters
    ----------
    content : the TOML file's content
    path : the study file; other files are found from its folder
    """
    _check_top(content, notebook)
    tables: dict[str, Any] = {name: _table(name, content, notebook) for name in TABLES}
    name = _text(content, "name", notebook) or path.stem
    draft = Draft(
        file=notebook.file,
        folder=path.parent,
        content=dict(content),
        name=name,
        title=_text(content, "title", notebook) or name,
        catalogue=_text(content, "catalogue", notebook),
        supply=tables["input"],
        board=tables["board"],
        load=tables["load"] or LoadTable(),
        control=tables["control"] or ControlTable(),
        limits=tables["limits"] or LimitsTable(),
        derating=tables["derating"] or DeratingTable(),
        choices=tables["choices"] or ChoicesTable(),
        economics=tables["economics"] or EconomicsTable(),
        search=tables["search"] or SearchTable(),
        incumbent=_mapping(content, "incumbent", notebook),
        floorplan=_text(content, "floorplan", notebook),
    )
    _read_rails(draft, content.get("rails"), notebook)
    return draft


def content_hash(content: Mapping[str, Any], *files: bytes) -> str:
    """Return the digest of a study: its content and the bytes of the files it names."""
    digest = hashlib.sha256(json.dumps(content, sort_keys=True, default=str).encode())
    for data in files:
        digest.update(data)
    return digest.hexdigest()


def _check_top(content: Mapping[str, Any], notebook: Notebook) -> None:
    """Note unknown top-level keys and tables."""
    for key in content:
        if key not in Study.model_fields:
            notebook.problem(key, f"unknown; {nearest(key, list(Study.model_fields), 20)}")


def _text(content: Mapping[str, Any], key: str, notebook: Notebook) -> str | None:
    """Return a top-level text."""
    value = content.get(key)
    if value is None or (isinstance(value, str) and value.strip()):
        return value
    notebook.problem(key, f"needs text in quotes, found {brief(value)}")
    return None


def _mapping(content: Mapping[str, Any], key: str, notebook: Notebook) -> dict[str, Any] | None:
    """Return a top-level table as it is."""
    value = content.get(key)
    if value is None or isinstance(value, dict):
        return value
    notebook.problem(key, f"needs a table [{key}], found {brief(value)}")
    return None


def _table(name: str, content: Mapping[str, Any], notebook: Notebook) -> Any:
    """Return one table of the study, None when it cannot stand."""
    raw = content.get(name)
    if raw is None:
        if name in {"input", "board"}:
            notebook.problem(name, f"the table [{name}] is missing")
        return None
    if not isinstance(raw, dict):
        notebook.problem(name, f"needs a table [{name}], found {brief(raw)}")
        return None
    raw = dict(raw)
    if name == "control" and isinstance(raw.get("jumps"), list):
        raw["jumps"] = _rows(raw["jumps"], "control.jumps", JumpRow, notebook)
    if name == "input" and isinstance(raw.get("levels"), list):
        raw["levels"] = _rows(raw["levels"], "input.levels", LevelRow, notebook)
    if name == "load" and isinstance(raw.get("states"), list):
        raw["states"] = _rows(raw["states"], "load.states", StateRow, notebook)
    return validated(TABLES[name], raw, lambda key: (notebook.file, f"{name}.{key}"), notebook)


def _rows(raw: list[Any], place: str, model: type[Any], notebook: Notebook) -> list[Any]:
    """Return the rows of a list of tables that can stand; rows are named by their name, else their number."""
    rows: list[Any] = []
    for number, item in enumerate(raw, start=1):
        if not isinstance(item, dict):
            notebook.problem(f"{place}[{number}]", f"needs a table, found {brief(item)}")
            continue
        label = item.get("name")
        here = f"{place}.{label}" if isinstance(label, str) and label else f"{place}[{number}]"
        row = validated(model, item, lambda key, here=here: (notebook.file, f"{here}.{key}"), notebook)  # type: ignore[misc]
        if row is not None:
            rows.append(row)
    return rows


def _read_rails(draft: Draft, raw: Any, notebook: Notebook) -> None:
    """Read the rails, from tables or from the CSV they are in."""
    if raw is None:
        notebook.problem("rails", 'missing; write [[rails]] tables or rails = "rails.csv"')
        return
    if isinstance(raw, str):
        _read_rails_csv(draft, raw, notebook)
    elif isinstance(raw, list):
        for number, item in enumerate(raw, start=1):
            if not isinstance(item, dict):
                notebook.problem(f"rails[{number}]", f"needs a table, found {brief(item)}")
                continue
            name = item.get("name")
            start = f"rails.{name}" if isinstance(name, str) and name else f"rails[{number}]"
            _add_rail(draft, item, draft.file, start, notebook)
    else:
        notebook.problem("rails", f"needs [[rails]] tables or the name of a CSV file, found {brief(raw)}")
        return
    if not draft.rail_names and not notebook.problems:
        notebook.problem("rails", "there is no rail")


def _read_rails_csv(draft: Draft, shown_path: str, notebook: Notebook) -> None:
    """Read the rails CSV; its rows replace the file's name in the study's content."""
    table = read_csv(draft.folder / shown_path, shown_path, "the rails", notebook)
    if table is None:
        return
    rows: list[dict[str, Any]] = []
    columns = list(RailRow.model_fields)
    known = [column for column in table.header if column in columns]
    for column in dict.fromkeys(table.header):
        if column not in columns:
            hint = nearest(column, columns, 40)
            notebook.problem(f"row 1, column {column or '(no name)'}", f"unknown; {hint}", shown_path)
    for line, cells in table.rows:
        values = {key: cell for key, cell in zip(table.header, cells, strict=True) if key in known}
        row = cell_values(RailRow, values)
        rows.append(row)
        _add_rail(draft, row, shown_path, f"row {line}", notebook)
    if not table.rows:
        notebook.problem("", "has no rail", shown_path)
    draft.content["rails"] = rows


def _add_rail(draft: Draft, raw: Mapping[str, Any], file: str, start: str, notebook: Notebook) -> None:
    """Check one rail and add it; a name met before is noted."""
    joint = ", column " if start.startswith("row ") else "."
    rail = validated(RailRow, raw, lambda key: (file, f"{start}{joint}{key}"), notebook)
    name = raw.get("name")
    if not isinstance(name, str) or not name:
        return
    if name in draft.rail_names:
        notebook.problem(f"{start}{joint}name", f"there are two rails '{name}'; names are unique", file)
        return
    draft.rail_names.append(name)
    draft.rail_place[name] = (file, start)
    if rail is not None:
        draft.rails.append(rail)
