"""The front as a review reads it: energy against cost, then what droop margin costs, then what binds."""

from __future__ import annotations

from collections.abc import Iterable, Sequence

from rich.console import RenderableType
from rich.text import Text

from archopt.present.adaptive_view import adaptive_lines
from archopt.present.amounts import NONE, counted, fixed, number, of, place_word, real, signed
from archopt.present.explanation import slack_text
from archopt.present.power_tree import BUS_WORD, followed_v
from archopt.present.record import BUSES, Data, FrontRecord, choice_number
from archopt.present.tables import WordTable, section, table
from archopt.present.telling import COST_CLOSE, LOSS_CLOSE, MarginStep, Telling, margin_steps, telling

FEWEST_DROOP_VALUES = 5
WIDE = 150
DROOP = "droop, % of budget"
"""Heading of the worst rail's droop or release: a share of that rail's own budget, not of its voltage."""


def columns_of(designs: Sequence[Data]) -> tuple[list[float], list[float], list[float]]:
    """Energy loss (kWh a year), cost and exact worst droop (percent) of each design."""
    objectives = [design["objectives"] for design in designs]
    return (
        [float(row["energy_loss_kwh_per_year"]) for row in objectives],
        [float(row["cost_per_board"]) for row in objectives],
        [float(row["worst_droop_percent"]) for row in objectives],
    )


def lifetime(designs: Sequence[Data]) -> list[float]:
    """Lifetime cost of each design; the cost of the board where nothing else is known."""
    return [
        real((design.get("beside") or {}).get("lifetime_cost"), float(design["objectives"]["cost_per_board"]))
        for design in designs
    ]


def telling_of(designs: Sequence[Data], at_most: int = 12) -> Telling:
    """The designs of a front worth printing."""
    loss, cost, _ = columns_of(designs)
    return telling(loss, cost, [design.get("roles") or [] for design in designs], at_most)


def front_sections(record: FrontRecord, width: int) -> Iterable[RenderableType]:
    """The front of a record, for an output so many columns wide."""
    designs = record.designs
    if not designs:
        return
    chosen = telling_of(designs)
    of_front = [p for p, on_front in zip(chosen.index, chosen.on_front, strict=True) if on_front]
    beside = [p for p, on_front in zip(chosen.index, chosen.on_front, strict=True) if not on_front]
    yield from section(
        "Energy against cost, every rail's droop within its budget",
        front_table([designs[p] for p in of_front], record.currency, width),
        *merged_lines(designs, chosen),
    )
    if beside:
        yield from section(
            "Beside it: designs that give way in energy or cost for something else",
            front_table([designs[p] for p in beside], record.currency, width),
        )
    yield from section("What droop margin costs", *margin_body(designs, record.currency))
    flat = flat_band(designs)
    if flat:
        yield from section("How flat the optimum is", Text(flat))
    yield from section("Which limit binds", binding_table([designs[p] for p in chosen.index]))
    yield from adaptive_lines(designs)


def front_table(designs: Sequence[Data], currency: str, width: int) -> WordTable:
    """Designs as rows: objectives, bus and marks; more columns where there is room."""
    wide = width >= WIDE
    rows = []
    for design in designs:
        objectives, watts = design["objectives"], design.get("watts") or {}
        beside = design.get("beside") or {}
        row = [
            str(design["design"]), fixed(objectives["energy_loss_kwh_per_year"], 2),
            fixed(objectives["cost_per_board"], 2), fixed(objectives["worst_droop_percent"], 0),
        ]  # fmt: skip
        if wide:
            row += [fixed(beside.get("lifetime_cost"), 2)]
            row += [fixed(watts.get(load), 1) for load in ("30 %", "50 %", "100 %")]
        row += [str(design.get("topology") or NONE), bus_text(design)]
        if wide:
            row += [converter_text(design), str((design.get("choices") or {}).get("board.stack") or NONE)]
        row.append(", ".join(role_word(str(role), design) for role in design.get("roles") or []))
        rows.append(row)
    money = f", {currency}" if currency else ""
    headings = ["design", "kWh a year", f"cost{money}", DROOP]
    headings += [f"life cost{money}", "W at 30 %", "W at 50 %", "W at 100 %"] if wide else []
    words = ["topology", "bus V", *(["bus converter", "stack"] if wide else []), "marked as"]
    return table([*headings, *words], rows, left=["design", *words])


def role_word(role: str, design: Data) -> str:
    """A role as printed beside the topology: the best of its own is said shortly."""
    return "best of its kind" if role == f"best of {design.get('topology')}" else role


def bus_text(design: Data) -> str:
    """Voltage of each bus: nominal, and the limits it moves between."""
    choices = design.get("choices") or {}
    texts = []
    for bus in BUSES:
        if str(choices.get(f"{bus}.converter", "none")) == "none":
            continue
        followed = followed_v(design, bus)
        if followed is not None:
            texts.append(" to ".join(number(volts, 3) for volts in followed))
            continue
        nominal, lower, upper = (
            number(choice_number(choices.get(f"{bus}.{end}_v"))) for end in ("nominal", "lower", "upper")
        )
        moves = str(choices.get(f"{bus}.control", "fixed")) != "fixed" and lower != upper
        texts.append(f"{lower} to {upper}" if moves else nominal)
    return ", ".join(texts) or NONE


def converter_text(design: Data) -> str:
    """The converters of each bus."""
    choices = design.get("choices") or {}
    texts = []
    for bus in BUSES:
        name = str(choices.get(f"{bus}.converter", "none"))
        if name != "none":
            count = str(choices.get(f"{bus}.count", 1))
            texts.append(name if count == "1" else f"{count} x {name}")
    return ", ".join(texts) or NONE


def merged_lines(designs: Sequence[Data], chosen: Telling) -> Iterable[RenderableType]:
    """How many designs are not printed, and whose marks went to a neighbour."""
    names = [str(design["design"]) for design in designs]
    for kept, roles in sorted(chosen.merged_roles.items()):
        said = ", ".join(f"{role} ({names[position]})" for role, position in roles)
        yield Text(f"{names[kept]} also stands for: {said}")
    printed, count = len(chosen.index), len(designs)
    if printed < count:
        yield Text(
            f"{printed} of {counted(count, 'design')} printed; {counted(chosen.merged, 'other')} within"
            f" {number(100 * LOSS_CLOSE)} % of loss and {number(100 * COST_CLOSE)} % of cost of these."
        )


def margin_body(designs: Sequence[Data], currency: str) -> Iterable[RenderableType]:
    """The least lifetime cost at each cap on the worst droop, and what it costs beyond the loosest cap."""
    loss, cost, droop = columns_of(designs)
    whole = lifetime(designs)
    steps = margin_steps(droop, whole)
    first = next((step.index for step in steps if step.index is not None), None)
    rows = [_margin_row(step, designs, (loss, cost, droop, whole), first) for step in steps]
    money = f", {currency}" if currency else ""
    headings = [f"{DROOP}, at most", "design", "droop", "kWh a year", f"cost{money}", "kWh more", "cost more"]
    yield table([*headings, "life cost more"], rows, left=["design"])
    values = sorted({round(value, 6) for value in droop})
    if len(values) < FEWEST_DROOP_VALUES:
        shown = ", ".join(number(value) for value in values)
        yield Text(
            f"Droop does not discriminate here: the front holds {counted(len(values), 'value')} of it ({shown} %)."
        )


def flat_band(designs: Sequence[Data]) -> str:
    """The bus voltages of the designs within 1 % of the least loss; empty where none has a bus."""
    loss, _, _ = columns_of(designs)
    near = [design for design, kwh in zip(designs, loss, strict=True) if kwh <= 1.01 * min(loss)]
    volts: list[float] = []
    for design in near:
        choices = design.get("choices") or {}
        if str(choices.get("bus_a.converter", "none")) != "none" and followed_v(design, "bus_a") is None:
            volts.append(real(choice_number(choices.get("bus_a.nominal_v"))))
    if not volts or len(near) < 2:
        return ""
    return (
        f"{counted(len(near), 'design')} within 1 % of the least loss; nominal {BUS_WORD['bus_a']}"
        f" from {number(min(volts))} to {number(max(volts))} V."
    )


def binding_table(designs: Sequence[Data]) -> WordTable:
    """For each printed design the limit nearest to its bound, where, when, and its slack."""
    rows = []
    for design in designs:
        limit = design.get("binding")
        rows.append([
            str(design["design"]), str(of(limit, "limit") or NONE), place_word(of(limit, "where")),
            slack_text(limit), str(of(limit, "state") or NONE),
        ])  # fmt: skip
    words = ["design", "limit", "where", "slack", "when"]
    return table(words, rows, left=words)


def _margin_row(
    step: MarginStep, designs: Sequence[Data], columns: tuple[list[float], ...], first: int | None
) -> list[str]:
    if step.index is None or first is None:
        return [fixed(step.cap_percent, 0), "none", *[NONE] * 6]
    loss, cost, droop, whole = columns
    at = step.index
    return [
        fixed(step.cap_percent, 0), str(designs[at]["design"]), fixed(droop[at], 0), fixed(loss[at], 2),
        fixed(cost[at], 2), signed(loss[at] - loss[first], 2), signed(cost[at] - cost[first], 2),
        signed(whole[at] - whole[first], 2),
    ]  # fmt: skip
