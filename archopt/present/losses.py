"""Where the watts of one design go: by part and mechanism, at each load and over the year."""

from __future__ import annotations

import math
from collections.abc import Iterable

from archopt.present.amounts import NONE, fixed, mechanism_word, place_word, real
from archopt.present.record import WATT_COLUMNS, Data
from archopt.present.tables import WordTable, table

LOADS = tuple(WATT_COLUMNS)
SMALL_SHARE = 0.002
"""Mechanisms below this share of the year's loss are summed within their part."""


def state_at(design: Data, load: str) -> Data | None:
    """The state behind one of the printed watts (``30 %``, ``50 %``, ``100 %``, ``hottest``).

    By its name or kind; else the state without hours whose loss is the printed one.
    """
    states: list[Data] = design.get("states") or []
    for key in ("state", "kind"):
        for state in states:
            if str(state.get(key)) in (load, f"{load} load"):
                return state
    printed = real((design.get("watts") or {}).get(load))
    for state in states:
        if not state.get("hours") and math.isclose(real(state.get("loss_w")), printed, rel_tol=1e-9):
            return state
    return None


def year_kwh(design: Data) -> dict[tuple[str, str], float]:
    """Energy lost over the year by part and mechanism, kWh.

    As the design states it (``year_kwh``: part, mechanism), else hours of each state times its watts.
    """
    energy: dict[tuple[str, str], float] = {}
    if design.get("year_kwh"):
        for part, mechanisms in design["year_kwh"].items():
            for mechanism, kwh in mechanisms.items():
                energy[str(part), str(mechanism)] = real(kwh, 0.0)
        return energy
    for state in design.get("states") or []:
        hours = real(state.get("hours"), 0.0)
        for part, mechanisms in (state.get("losses") or {}).items():
            for mechanism, watts in mechanisms.items():
                term = (str(part), str(mechanism))
                energy[term] = energy.get(term, 0.0) + hours * real(watts, 0.0) / 1000.0
    return energy


def loss_table(design: Data) -> WordTable:
    """Losses by part and mechanism: kWh a year, and watts at each load; parts in order of their energy.

    A part's own line is the sum of its mechanisms below it; small ones share a line. What the year's total
    holds beyond the states, the charging of buses that change voltage, has a line of its own.
    """
    energy = year_kwh(design)
    at_load = [(state_at(design, load) or {}).get("losses") for load in LOADS]
    parts = sorted({part for part, _ in energy}, key=lambda part: -_part_kwh(energy, part))
    least = SMALL_SHARE * sum(energy.values())
    rows: list[list[str]] = []
    for part in parts:
        names = [mechanism for owner, mechanism in energy if owner == part]
        terms = {m: [energy[part, m], *(_watts(losses, part, m) for losses in at_load)] for m in names}
        large = sorted((m for m in terms if terms[m][0] >= least), key=lambda m: (-terms[m][0], m))
        small = [m for m in terms if m not in large and any(terms[m])]
        if len(small) == 1:
            large, small = [*large, *small], []
        whole = [math.fsum(column) for column in zip(*terms.values(), strict=True)]
        if len(large) == 1 and not small:
            rows.append([f"{place_word(part)}, {mechanism_word(large[0])}", *_cells(whole)])
            continue
        rows.append([place_word(part), *_cells(whole)])
        if not large:
            continue
        rows += [[f"  {mechanism_word(m)}", *_cells(terms[m])] for m in large]
        if small:
            rest = [math.fsum(column) for column in zip(*(terms[m] for m in small), strict=True)]
            rows.append([f"  {len(small)} smaller ones", *_cells(rest)])
    stated = real((design.get("objectives") or {}).get("energy_loss_kwh_per_year"))
    beyond = stated - sum(energy.values())
    if math.isfinite(beyond) and abs(beyond) > 5e-3:
        rows.append(["changes of bus voltage", fixed(beyond, 2), *[NONE] * len(LOADS)])
    watts = design.get("watts") or {}
    rows.append(["all losses", fixed(stated, 2), *[fixed(watts.get(load), 2) for load in LOADS]])
    headings = ["part, mechanism", "kWh a year", *[f"W at {load}" for load in LOADS[:-1]], "W hottest"]
    return table(headings, rows, left=["part, mechanism"])


def shown_states(design: Data) -> list[Data]:
    """The states with hours and those of the printed loads."""
    shown = [state_at(design, load) for load in LOADS]
    return [
        state for state in design.get("states") or []
        if state.get("hours") or any(state is other for other in shown)
    ]  # fmt: skip


def worst_balance(design: Data) -> float:
    """The largest relative gap between input power and load plus listed losses over all states."""
    return max((abs(real(s.get("balance"), 0.0)) for s in design.get("states") or []), default=0.0)


def _watts(losses: object, part: str, mechanism: str) -> float:
    """Watts of a mechanism in a state; nan where there is no such state."""
    if not isinstance(losses, dict):
        return math.nan
    return real((losses.get(part) or {}).get(mechanism), 0.0)


def _cells(values: Iterable[float]) -> list[str]:
    return [fixed(value, 2) for value in values]


def _part_kwh(energy: dict[tuple[str, str], float], part: str) -> float:
    return sum(kwh for (owner, _), kwh in energy.items() if owner == part)
