"""Every value nobody stated, in as few lines as say it all: one line where many rails share a reason."""

from __future__ import annotations

from collections.abc import Iterable

from archopt.present.amounts import NONE
from archopt.present.record import Data
from archopt.present.tables import WordTable, table

SHORT_VALUE = 12


def assumed_table(assumed: list[Data], rails: list[str]) -> WordTable:
    """Where each value belongs in the study file, the value taken, and why.

    Parameters
    ----------
    assumed : rows of ``place``, ``value``, ``reason``
    rails : names of all rails, in order
    """
    headings = ["key in the study", "of", "value", "why"]
    return table(headings, assumed_rows(assumed, rails), left=headings)


def assumed_rows(assumed: list[Data], rails: list[str]) -> list[list[str]]:
    """Rows of key, rails it holds for, value and reason; rails that share key and reason share a row."""
    groups: dict[tuple[str, str], list[tuple[str, str]]] = {}
    for row in assumed:
        rail, key = _split(str(row.get("place", NONE)), rails)
        entry = (rail, str(row.get("value", NONE)))
        groups.setdefault((key, str(row.get("reason", NONE))), []).append(entry)
    rows: list[list[str]] = []
    for (key, reason), entries in groups.items():
        rows += [[key, of, value, reason] for of, value in _lines(entries, rails)]
    return rows


def _split(place: str, rails: list[str]) -> tuple[str, str]:
    """The rail and key of ``rails.core.step_a``; no rail and the place itself for any other."""
    head, _, rest = place.partition(".")
    if head == "rails":
        for rail in rails:
            if rest.startswith(f"{rail}."):
                return rail, f"rails: {rest.removeprefix(f'{rail}.')}"
    return "", place


def _lines(entries: list[tuple[str, str]], rails: list[str]) -> Iterable[tuple[str, str]]:
    """Rails and value of each line: one for all where values are equal or short, else one for each value."""
    entries = [(rail, "itself" if rail and value == rail else value) for rail, value in entries]
    values = list(dict.fromkeys(value for _, value in entries))
    if len(values) > 1 and all(rail and len(value) <= SHORT_VALUE for rail, value in entries):
        yield _who([rail for rail, _ in entries], rails), ", ".join(f"{rail} {v}" for rail, v in entries)
        return
    for value in values:
        yield _who([rail for rail, other in entries if other == value], rails), value


def _who(names: list[str], rails: list[str]) -> str:
    if not any(names):
        return ""
    if len(names) > 1 and set(names) == set(rails):
        return "all rails"
    return ", ".join(names)
