"""Operating states in few lines: one load at several input voltages is one line."""

from __future__ import annotations

import re
from collections.abc import Iterable, Sequence

from archopt.present.amounts import NONE, counted, fixed, number, of, real
from archopt.present.record import BUSES, Data
from archopt.present.tables import WordTable, table

HOURS_OF_A_YEAR = 8760.0
WITHOUT_HOURS = {
    "energy": ("of no hours", "of no hours"),
    "worst mix": ("worst mix of a band", "worst mixes of a band"),
    "after jump": ("after a jump", "after a jump"),
    "rated at nominal": ("fallen back to the nominal bus", "fallen back to the nominal bus"),
    "shown load": ("load shown for its watts", "loads shown for their watts"),
}
"""Kinds of states without hours, one and many."""

AT_INPUT = re.compile(r" at [0-9.]+ V$")


def by_load(states: Iterable[Data]) -> list[tuple[str, list[Data]]]:
    """States grouped by load: those with hours whose names differ in the input voltage alone, in order."""
    groups: dict[str, list[Data]] = {}
    for state in states:
        name = str(state.get("state", NONE))
        groups.setdefault(AT_INPUT.sub("", name) if state.get("hours") else name, []).append(state)
    return list(groups.items())


def weighted(states: Sequence[Data], key: str) -> float:
    """Mean of a number over the hours of the states; over the states where they have none."""
    hours = [real(state.get("hours"), 0.0) for state in states]
    whole = sum(hours)
    if whole <= 0:
        return sum(real(state.get(key)) for state in states) / len(states)
    return sum(h * real(state.get(key)) for h, state in zip(hours, states, strict=True)) / whole


def beside_the_year(states: Iterable[Data]) -> str:
    """How many states without hours are looked at beside the year, by what they are; empty where none."""
    kinds: dict[str, int] = {}
    for state in states:
        if not state.get("hours"):
            kind = str(state.get("kind") or "other")
            kinds[kind] = kinds.get(kind, 0) + 1
    return ", ".join(counted(count, *WITHOUT_HOURS.get(kind, (kind, kind))) for kind, count in kinds.items())


def jumps_table(jumps: Iterable[Data], states: Iterable[Data]) -> WordTable:
    """The jumps a study lists: from which load to which, and whether the bus is told and raised before."""
    load_w = {name: weighted(members, "load_w") for name, members in by_load(states)}
    rows = [
        [
            str(jump.get("before")), str(jump.get("after")), fixed(load_w.get(str(jump.get("before"))), 1),
            fixed(load_w.get(str(jump.get("after"))), 1), "announced" if jump.get("announced") else "unannounced",
        ]
        for jump in jumps
    ]  # fmt: skip
    words = ["from", "to", "the bus is told"]
    return table(["from", "to", "load W", "load after W", "the bus is told"], rows, left=words)


def load_states_table(states: Iterable[Data]) -> WordTable:
    """The load as it will be solved: states of the year, then those looked at for limits and printed watts."""
    rows = []
    for name, members in by_load(states):
        hours = sum(real(state.get("hours"), 0.0) for state in members)
        rows.append([
            name, fixed(hours, 0), fixed(100 * hours / HOURS_OF_A_YEAR, 1), _inputs(members),
            fixed(weighted(members, "load_w"), 1),
        ])  # fmt: skip
    return table(["state", "hours", "% of a year", "input V", "load W"], rows, left=["state"])


def design_states_table(states: Iterable[Data]) -> WordTable:
    """What one design does in each state: bus voltages, load, loss, efficiency; means over the hours."""
    rows = []
    for name, members in by_load(states):
        load, drawn = weighted(members, "load_w"), weighted(members, "input_w")
        rows.append([
            name, fixed(sum(real(state.get("hours"), 0.0) for state in members), 0), _inputs(members),
            _volts(members), fixed(load, 1), fixed(weighted(members, "loss_w"), 2),
            fixed(100.0 * load / drawn, 1) if drawn > 0 else NONE,
        ])  # fmt: skip
    headings = ["state", "hours", "input V", "bus V", "load W", "loss W", "efficiency %"]
    return table(headings, rows, left=["state"])


def _inputs(states: Sequence[Data]) -> str:
    return ", ".join(dict.fromkeys(number(state.get("input_v")) for state in states))


def _volts(states: Sequence[Data]) -> str:
    """Voltage of each bus; its lowest and highest where the input moves it."""
    texts = []
    for bus in BUSES:
        volts = [real(of(state.get("volts"), bus)) for state in states if of(state.get("volts"), bus) is not None]
        if volts:
            low, high = fixed(min(volts), 2), fixed(max(volts), 2)
            texts.append(low if low == high else f"{low} to {high}")
    return ", ".join(texts) or NONE
