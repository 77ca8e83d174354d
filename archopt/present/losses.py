"""Where the watts of one design go: by part and mechanism, at each load and over the year."""

from __future__ import annotations

import math

from archopt.present.amounts import NONE, fixed, mechanism_word, place_word, real
from archopt.present.record import WATT_COLUMNS, Data
from archopt.present.tables import WordTable, table

LOADS = tuple(WATT_COLUMNS)


def state_at(design: Data, load: str) -> Data | None:
    """The state behind one of the printed watts (``30 %``, ``50 %``, ``100 %``, ``hottest``).

    By its name or kind; else the state without hours whose loss is the printed one.
    """
    states: list[Data] = design.get("states") or []
    for key in ("state", "kind"):
        for state in states:
            if str(state.get(key)) == load:
                return state
    for state in states:
        if str(state.get("state", "")).startswith(load):
            return state
    printed = real((design.get("watts") or {}).get(load))
    for state in states:
        if not state.get("hours") and math.isclose(real(state.get("loss_w")), printed, rel_tol=1e-9):
            return state
    return None


def year_kwh(design: Data) -> dict[tuple[str, str], float]:
    """Energy lost over the year by part and mechanism, kWh: hours of each state times its watts."""
    energy: dict[tuple[str, str], float] = {}
    for state in design.get("states") or []:
        hours = real(state.get("hours"), 0.0)
        for part, mechanisms in (state.get("losses") or {}).items():
            for mechanism, watts in mechanisms.items():
                key = (str(part), str(mechanism))
                energy[key] = energy.get(key, 0.0) + hours * real(watts, 0.0) / 1000.0
    return energy


def mechanism_kwh(design: Data) -> dict[str, float]:
    """Energy lost over the year by mechanism alone, kWh."""
    energy: dict[str, float] = {}
    for (_, mechanism), kwh in year_kwh(design).items():
        energy[mechanism] = energy.get(mechanism, 0.0) + kwh
    return energy


def loss_table(design: Data) -> WordTable:
    """Losses by part and mechanism: kWh a year, and watts at each load; parts in order of their energy.

    A part's own line is the sum of its mechanisms below it. What the year's total holds beyond the states,
    the charging of buses that change voltage, has a line of its own.
    """
    energy = year_kwh(design)
    at_load = {load: (state_at(design, load) or {}).get("losses") or {} for load in LOADS}
    parts = sorted({part for part, _ in energy}, key=lambda part: -_part_kwh(energy, part))
    rows: list[list[str]] = []
    for part in parts:
        mechanisms = sorted((m for p, m in energy if p == part), key=lambda m: (-energy[part, m], m))
        sums = [sum(real(w, 0.0) for w in at_load[load].get(part, {}).values()) for load in LOADS]
        label = place_word(part)
        label += f", {mechanism_word(mechanisms[0])}" if len(mechanisms) == 1 else ""
        shown = [fixed(w, 2) if at_load[load] else NONE for w, load in zip(sums, LOADS, strict=True)]
        rows.append([label, fixed(_part_kwh(energy, part), 2), *shown])
        if len(mechanisms) > 1:
            rows += [
                [f"  {mechanism_word(m)}", fixed(energy[part, m], 2)]
                + [fixed(real(at_load[load].get(part, {}).get(m)), 2) for load in LOADS]
                for m in mechanisms
                if energy[part, m] > 0 or any(real(at_load[load].get(part, {}).get(m), 0.0) for load in LOADS)
            ]
    stated = real((design.get("objectives") or {}).get("energy_loss_kwh_per_year"))
    beyond = stated - sum(energy.values())
    if math.isfinite(beyond) and abs(beyond) > 5e-3:
        rows.append(["changes of bus voltage", fixed(beyond, 2), *[NONE] * len(LOADS)])
    watts = design.get("watts") or {}
    rows.append(["all losses", fixed(stated, 2), *[fixed(watts.get(load), 2) for load in LOADS]])
    headings = ["part, mechanism", "kWh a year", *[f"W at {load}" for load in LOADS[:-1]], "W hottest"]
    return table(headings, rows, left=["part, mechanism"])


def state_table(design: Data) -> WordTable:
    """Every state: hours, input, bus voltages, load, loss, and how far powers are from balance."""
    rows = []
    for state in design.get("states") or []:
        volts = ", ".join(fixed(v, 2) for v in (state.get("volts") or {}).values() if v is not None)
        rows.append([
            str(state.get("state", NONE)), fixed(state.get("hours"), 0), fixed(state.get("input_v"), 1),
            volts or NONE, fixed(state.get("load_w"), 1), fixed(state.get("loss_w"), 2),
            _efficiency(state),
        ])  # fmt: skip
    return table(
        ["state", "hours", "input V", "bus V", "load W", "loss W", "efficiency %"], rows, left=["state"]
    )


def worst_balance(design: Data) -> float:
    """The largest relative gap between input power and load plus listed losses over all states."""
    return max((abs(real(s.get("balance"), 0.0)) for s in design.get("states") or []), default=0.0)


def _efficiency(state: Data) -> str:
    load, drawn = real(state.get("load_w")), real(state.get("input_w"))
    return fixed(100.0 * load / drawn, 1) if drawn > 0 else NONE


def _part_kwh(energy: dict[tuple[str, str], float], part: str) -> float:
    return sum(kwh for (owner, _), kwh in energy.items() if owner == part)
