"""What sets the lower and the upper adaptive limit of a design, in a table of bands and in a line."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

from rich.console import RenderableType

from archopt.errors import OutputError
from archopt.present.amounts import NONE, fixed, number, of, place_word, real, with_unit
from archopt.present.power_tree import BUS_WORD
from archopt.present.record import Data
from archopt.present.tables import HangingLines, section, table

SIDE_WORD = {"lower": "lower", "upper": "higher"}
END_WORD = {"lower": "lowest", "upper": "highest"}
LEAST_SAID_KWH = 0.001
"""A change of the year below this is not told by its size."""
UNITLESS = ("ratio", "choices")
FIRST_SAID = ("knee", "least lifetime cost")
"""Marks whose adaptive limits are said beside the front."""


def with_adaptive_limits(design: Data, problem: Data) -> Data:
    """A design with what sets its adaptive limits; computed from the result where the search has not said it.

    Where a result does not hold what computing takes, the reason stands in place of the answer.
    """
    if "adaptive_limits" in design or not moves(design):
        return design
    from archopt.trade.adaptive_limits import adaptive_limits  # noqa: PLC0415 - only where it is not said
    from archopt.trade.rebuilt import problem_of, row_of  # noqa: PLC0415

    try:
        rebuilt = problem_of(problem)
        return {**design, "adaptive_limits": adaptive_limits(rebuilt, row_of(rebuilt, design))}
    except OutputError as error:
        return {**design, "adaptive_limits": [], "adaptive_limits_missing": str(error)}


def moves(design: Data) -> bool:
    """Whether a bus of a design has more than one voltage."""
    choices = design.get("choices") or {}
    return any(
        str(choices.get(f"{bus}.converter", "none")) != "none"
        and str(choices.get(f"{bus}.control", "fixed")) != "fixed"
        for bus in BUS_WORD
    )


def adaptive_sections(design: Data) -> Iterable[RenderableType]:
    """For each moving bus of a design: what holds either limit, then every band one grid step lower and higher."""
    if design.get("adaptive_limits_missing"):
        yield from section("What sets the adaptive limits", f"not known: {design['adaptive_limits_missing']}")
    for bus in design.get("adaptive_limits") or []:
        word = BUS_WORD.get(str(bus.get("bus")), str(bus.get("bus")))
        yield from section(
            f"What sets the adaptive limits of {word} (one grid step at a time, all else held)",
            HangingLines(limit_line(bus, side) for side in SIDE_WORD),
            steps_table(bus),
        )


def limit_line(bus: Data, side: str) -> str:
    """Which limit, or what else, keeps one end of a bus's range where it is."""
    step = bus.get(side) or {}
    return f"{side} limit {fixed(step.get('from_volts'), 2)} V: {step_text(step, side, str(bus.get('control')))}"


def steps_table(bus: Data) -> RenderableType:
    """Every band, or level, with what one grid step lower and higher would meet."""
    control = str(bus.get("control"))
    rows = [
        [
            number(row.get("band")) if row.get("band") is not None else _level(row, bus),
            fixed(row.get("volts"), 2), fixed(row.get("hours"), 0),
            *(step_text(row.get(side), side, control) for side in SIDE_WORD),
        ]
        for row in bus.get("bands") or []
    ]  # fmt: skip
    first = "band" if control == "follow_load" else "level"
    words = [f"one step {word}" for word in SIDE_WORD.values()]
    left = words if first == "band" else [first, *words]
    return table([first, "bus V", "hours", *words], rows, left=left)


def step_text(step: object, side: str, control: str = "") -> str:
    """What one step meets: the limit with place and size, or what the year would be."""
    if not isinstance(step, dict) or not step.get("reason"):
        return NONE
    reason, change = str(step["reason"]), real(step.get("energy_change_kwh"), 0.0)
    if reason == "limit":
        more = int(real(step.get("more_limits"), 0.0))
        text = _limit_text(step.get("limit")) + (f", and {more} more" if more else "")
        return text + (f" (would save {number(-change, 2)} kWh a year)" if change < -LEAST_SAID_KWH else "")
    if reason in ("waste", "left") and abs(change) < LEAST_SAID_KWH:
        return f"no limit: within {number(LEAST_SAID_KWH)} kWh a year of this voltage"
    if reason == "waste":
        return f"no limit: it would waste {number(change, 2)} kWh a year more"
    if reason == "order":
        return f"no limit of its own: a {'lighter' if side == 'lower' else 'heavier'} band stands at this voltage"
    if reason == "grid end":
        return f"the {END_WORD[side]} bus voltage the study allows"
    if reason == "same year":
        return "no limit: the year stays as it is"
    return f"no limit: it would save {number(-change, 2)} kWh a year, which the search left"


def adaptive_lines(designs: Sequence[Data]) -> Iterable[RenderableType]:
    """One line a design marked as knee or as of least lifetime cost; another printed one where neither moves."""
    told = [design for design in designs if design.get("adaptive_limits")]
    marked = [design for design in told if set(FIRST_SAID) & set(design.get("roles") or [])]
    lines = [_one_line(design) for design in marked or told[:1]]
    if lines:
        yield from section("What sets the adaptive limits", HangingLines(lines))


def _one_line(design: Data) -> str:
    texts = []
    for bus in design["adaptive_limits"]:
        word = BUS_WORD.get(str(bus.get("bus")), str(bus.get("bus")))
        texts.append(f"{word} {'; '.join(limit_line(bus, side) for side in SIDE_WORD)}")
    marks = ", ".join(role for role in FIRST_SAID if role in (design.get("roles") or []))
    name = f"{design['design']} ({marks})" if marks else str(design["design"])
    return f"{name}: {'; '.join(texts)}"


def _limit_text(limit: Any) -> str:
    name, where, state = (str(of(limit, key) or "") for key in ("limit", "where", "state"))
    unit = "" if of(limit, "unit") in UNITLESS else str(of(limit, "unit") or "")
    text = name + (f" of {place_word(where)}" if where and where != "board" else "")
    text += f", {state}" if state else ""
    return f"{text}, {with_unit(-real(of(limit, 'slack')), unit, 2)} beyond"


def _level(row: Data, bus: Data) -> str:
    volts = [real(other.get("volts")) for other in bus.get("bands") or []]
    return "lower" if real(row.get("volts")) == min(volts) else "upper"
