"""A study with some values changed, checked again: what trade studies are made of."""

from __future__ import annotations

import copy
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from archopt.errors import InputError
from archopt.inputs.load import LoadedStudy, loaded_from
from archopt.inputs.problems import Notebook, nearest


def overlay(loaded: LoadedStudy, changes: Mapping[str, object]) -> LoadedStudy:
    """Return the study with values changed by their place in the study file, checked as if written so.

    Parameters
    ----------
    loaded : the study to start from; it is left as it is
    changes : place -> value, e.g. ``economics.energy_price_per_kwh`` -> 0.3, ``rails.core.max_current_a``
        -> 80, ``load.states.idle.hours`` -> 2000; ``rails.*.key`` changes every rail. None takes a stated
        value away.

    Raises
    ------
    InputError : a place is not there, or the changed study has problems
    """
    content: dict[str, Any] = copy.deepcopy(loaded.study.stated)
    notebook = Notebook(loaded.study.file)
    for place, value in changes.items():
        _change(content, place, _plain(value), notebook)
    if notebook.problems:
        raise InputError(notebook.problems)
    return loaded_from(content, Path(loaded.study.file), loaded.catalogue_root, notebook)


def _plain(value: object) -> object:
    """Return a value as TOML would hold it."""
    if isinstance(value, (tuple, list)):
        return [_plain(item) for item in value]
    item = getattr(value, "item", None)
    return item() if callable(item) else value


def _change(content: dict[str, Any], place: str, value: object, notebook: Notebook) -> None:
    """Set one value in the content; a place that cannot be reached is noted."""
    keys = place.split(".")
    if keys[:2] == ["choices", "pin"] and len(keys) > 2:
        keys = ["choices", "pin", ".".join(keys[2:])]
    elif keys[0] == "incumbent" and len(keys) > 1:
        keys = ["incumbent", ".".join(keys[1:])]
        content["incumbent"] = _flat(content.get("incumbent", {}))
    if keys[:2] == ["choices", "pin"] and isinstance(content.get("choices"), dict):
        content["choices"]["pin"] = _flat(content["choices"].get("pin", {}))
    holders: list[Any] = [content]
    for depth, key in enumerate(keys[:-1]):
        held = [_step(holder, key, keys[: depth + 1], notebook) for holder in holders]
        holders = [item for items in held for item in items]
    for holder in holders:
        if not isinstance(holder, dict):
            notebook.problem(place, "is no place in the study")
        elif value is None:
            holder.pop(keys[-1], None)
        else:
            holder[keys[-1]] = value


def _step(holder: Any, key: str, path: list[str], notebook: Notebook) -> list[Any]:
    """Return what lies under a key: a table, a named row, or with ``*`` every row."""
    if isinstance(holder, dict):
        return [holder.setdefault(key, {})]
    if isinstance(holder, list):
        if key == "*":
            return list(holder)
        names = [str(item.get("name")) for item in holder if isinstance(item, dict)]
        rows = [item for item in holder if isinstance(item, dict) and str(item.get("name")) == key]
        if not rows:
            notebook.problem(".".join(path), f"there is no '{key}'; {nearest(key, names)}")
        return rows
    notebook.problem(".".join(path), "is no place in the study")
    return []


def _flat(table: object, start: str = "") -> dict[str, Any]:
    """Return nested choice tables as one table of dotted names."""
    flat: dict[str, Any] = {}
    for key, value in table.items() if isinstance(table, dict) else ():
        if isinstance(value, dict):
            flat.update(_flat(value, f"{start}{key}."))
        else:
            flat[f"{start}{key}"] = value
    return flat
