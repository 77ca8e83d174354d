"""The names of the choices a person may pin or state as today's design, and the values they may take."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

from archopt.inputs.parts import Capacitor
from archopt.inputs.problems import Notebook, brief, nearest, shown
from archopt.inputs.resolved import Board, Catalogue, Rail

BANK_COUNTS = (1, 2, 3, 4, 6, 8, 10, 12, 16, 20, 24, 32)
STAGE_FAMILIES = ("buck_stages", "single_stages", "linear_regulators")
BUSES = ("bus_a", "bus_b")
RAIL_KEYS = ("feed", "stage", "phases", "fewest", "bank", "bank_count", "pairs")
BUS_KEYS = (
    "converter", "count", "fewest", "nominal_v", "control", "lower_v", "upper_v", "bulk",
    "bulk_count", "pairs", "damper", "damper_count",
)  # fmt: skip
BOARD_KEYS = ("stack", "bias", "bias_feed", "supervisor")


def flatten(raw: Mapping[str, Any], place: str, notebook: Notebook) -> dict[str, tuple[str, ...]]:
    """Return choice name -> values, from dotted names or nested tables; numbers as a person writes them."""
    flat: dict[str, tuple[str, ...]] = {}

    def add(name: str, value: Any) -> None:
        if isinstance(value, Mapping):
            for key, inner in value.items():
                add(f"{name}.{key}", inner)
            return
        values = value if isinstance(value, list) else [value]
        if not values:
            notebook.problem(f"{place}.{name}", "is an empty list")
        elif any(isinstance(item, bool) or not isinstance(item, (str, int, float)) for item in values):
            notebook.problem(f"{place}.{name}", f"needs a name or a number, found {brief(value)}")
        elif name in flat:
            notebook.problem(f"{place}.{name}", "is there twice")
        else:
            flat[name] = tuple(shown(item) for item in values)

    for key, value in raw.items():
        add(key, value)
    return flat


def lossy_capacitors(catalogue: Catalogue) -> list[str]:
    """Return the capacitors whose own resistance damps a bus."""
    rows = catalogue.families["capacitors"].items()
    return [name for name, row in rows if isinstance(row, Capacitor) and row.kind != "ceramic"]


class ChoiceChecker:
    """Checks choice names and values against the study's rails and the catalogue."""

    def __init__(
        self, rails: Sequence[Rail], rail_names: Sequence[str], catalogue: Catalogue, board: Board | None
    ) -> None:
        self._rails = {rail.name: rail for rail in rails}
        self._rail_names = tuple(rail_names)
        self._catalogue = catalogue
        self._board = board

    def check(self, name: str, values: Sequence[str], place: str, notebook: Notebook) -> bool:
        """Note what is wrong with one choice; return whether it can stand."""
        before = len(notebook.problems)
        owner, _, key = name.rpartition(".")
        owners = {
            **dict.fromkeys(self._rail_names, RAIL_KEYS),
            **dict.fromkeys(BUSES, BUS_KEYS),
            "board": BOARD_KEYS,
        }
        if not key or not owner:
            notebook.problem(f"{place}.{name}", f"is no choice; write {name or 'core'}.stage or the like")
            return False
        if owner not in owners:
            hint = nearest(owner, list(owners))
            notebook.problem(f"{place}.{name}", f"there is no rail or bus '{owner}'; {hint}")
            return False
        if key not in owners[owner]:
            notebook.problem(f"{place}.{name}", f"there is no choice '{key}'; {nearest(key, owners[owner], 20)}")
            return False
        rail = self._rails.get(owner)
        if rail is not None and rail.tap_of and key != "pairs":
            notebook.problem(f"{place}.{name}", f"'{owner}' taps {rail.tap_of}, which carries it; it has no {key}")
            return False
        if owner in self._rail_names and rail is None:
            return False
        for value in values:
            message = self._fault(owner, key, value)
            if message:
                notebook.problem(f"{place}.{name}", message)
        return len(notebook.problems) == before

    def _fault(self, owner: str, key: str, value: str) -> str:
        """Return what is wrong with a value, empty when nothing is."""
        names = self._names(owner, key)
        if names is not None:
            if value in names:
                return ""
            family = next((f for f, parts in self._catalogue.families.items() if value in parts), "")
            kind = f"'{value}' ({family}) is no {key} for {owner}" if family else f"there is no {key} '{value}'"
            return f"{kind}; {nearest(value, names)}"
        try:
            number = float(value)
        except ValueError:
            return f"needs a number, found {brief(value)}"
        if key in {"nominal_v", "lower_v", "upper_v"}:
            return "" if 0 < number <= 100 else f"{value} V is out of range; it must be above 0 and at most 100 V"
        if key in {"bank_count", "bulk_count", "damper_count"}:
            counts = ", ".join(str(count) for count in BANK_COUNTS)
            return "" if number in BANK_COUNTS else f"{value} is not one of {counts}"
        most = {"phases": 16, "count": 8, "pairs": self._board.max_pairs_per_net if self._board else 10}[key]
        whole = number == int(number) if abs(number) < 1e9 else False
        return "" if whole and 1 <= number <= most else f"{value} is no whole number from 1 to {most}"

    def _names(self, owner: str, key: str) -> list[str] | None:
        """Return the names a choice may take, None where it takes a number."""
        families = self._catalogue.families
        if key == "stage":
            return [name for family in STAGE_FAMILIES for name in families[family]]
        if key == "feed":
            rail = self._rails[owner]
            return ["input", *BUSES, *rail.parents]
        if key == "bank":
            return list(self._rails[owner].capacitors)
        if key == "stack":
            return list(self._board.stacks) if self._board else list(families["stacks"])
        plain: dict[str, list[str]] = {
            "fewest": ["one", "all"],
            "converter": ["none", *families["bus_converters"]],
            "control": ["fixed", "two_levels", "follow_load"],
            "bulk": list(families["capacitors"]),
            "damper": ["none", *lossy_capacitors(self._catalogue)],
            "bias": ["none", *families["bias_supplies"]],
            "bias_feed": ["input", "bus_a"],
            "supervisor": ["none", *families["supervisors"]],
        }
        return plain.get(key)
