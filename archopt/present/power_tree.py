"""The power tree of one design as indented text: the input, its buses, and the rails on each."""

from __future__ import annotations

from collections.abc import Iterable

from archopt.present.amounts import NONE, counted, number, of, times, with_unit
from archopt.present.record import BUSES, Data, choice_number

BUS_WORD = {"bus_a": "bus A", "bus_b": "bus B"}
CONTROL_WORD = {"fixed": "fixed", "two_levels": "two levels", "follow_load": "follows the load"}
FOLLOWS = 1.1  # a bus that is set stays closer to its voltage than this ratio, in whatever state


def tree_lines(design: Data, study: Data) -> list[str]:
    """The power tree, one part of the board a line, two blanks a level.

    Parameters
    ----------
    design : one explained design
    study : the resolved study as plain data; rails lose their volts and amperes without it
    """
    choices: Data = design.get("choices") or {}
    rails = {str(rail.get("name")): rail for rail in study.get("rails") or []}
    feeds = {
        choice.removesuffix(".feed"): str(feed)
        for choice, feed in choices.items()
        if choice.endswith(".feed") and not choice.startswith("board.")
    }
    feeds |= {name: str(rail["tap_of"]) for name, rail in rails.items() if rail.get("tap_of")}
    lines = [input_line(study)]
    lines += fed_from("input", 1, choices, feeds, rails)
    for bus in BUSES:
        if str(choices.get(f"{bus}.converter", "none")) != "none":
            lines.append(f"  {bus_line(bus, choices, followed_v(design, bus))}")
            lines += fed_from(bus, 2, choices, feeds, rails)
    lines += board_lines(choices)
    return lines


def input_line(study: Data) -> str:
    """The board's supply and the path behind its connector."""
    supply = study.get("supply") or {}
    text = "input"
    if of(supply, "low_v") is not None:
        text += f" {number(supply['low_v'])} to {number(supply['high_v'])} V"
    if of(supply, "path"):
        text += f", through {supply['path']}"
    return text


def fed_from(feed: str, level: int, choices: Data, feeds: dict[str, str], rails: dict[str, Data]) -> Iterable[str]:
    """Lines of the rails on one feed and, below each, of the rails and taps fed from it."""
    for name in [name for name, source in feeds.items() if source == feed]:
        yield "  " * level + rail_line(name, choices, rails.get(name))
        others = {other: source for other, source in feeds.items() if other != name}
        yield from fed_from(name, level + 1, choices, others, rails)


def followed_v(design: Data, bus: str) -> tuple[float, float] | None:
    """Lowest and highest voltage over all states of a bus that follows the input; None where it is set."""
    control = str((design.get("choices") or {}).get(f"{bus}.control", "fixed"))
    if "fixed ratio" not in str(design.get("topology")) or control != "fixed":
        return None
    volts = [float(state["volts"][bus]) for state in design.get("states") or [] if bus in (state.get("volts") or {})]
    return (min(volts), max(volts)) if volts and max(volts) > FOLLOWS * min(volts) else None


def bus_line(bus: str, choices: Data, followed: tuple[float, float] | None = None) -> str:
    """One bus: its converters, its voltage (or the span in which it follows the input), its capacitors and copper."""
    control = str(choices.get(f"{bus}.control", "fixed"))
    text = f"{BUS_WORD[bus]}: {times(choices.get(f'{bus}.count'), choices.get(f'{bus}.converter'))}"
    text += fewest(choices, bus, "count")
    if followed is not None:
        text += f"; {number(followed[0], 3)} to {number(followed[1], 3)} V, follows the input"
    else:
        text += f"; {with_unit(choice_number(choices.get(f'{bus}.nominal_v')), 'V')} nominal"
        text += f", {CONTROL_WORD.get(control, control)}"
    if control != "fixed":
        word = "between" if control == "follow_load" else "of"
        lower, upper = (choice_number(choices.get(f"{bus}.{end}_v")) for end in ("lower", "upper"))
        text += f" {word} {number(lower)} and {number(upper)} V"
    text += capacitors(choices, f"{bus}.bulk")
    if str(choices.get(f"{bus}.damper", "none")) != "none":
        text += f", damped by {times(choices.get(f'{bus}.damper_count'), choices.get(f'{bus}.damper'))}"
    return text + copper(choices, bus)


def rail_line(name: str, choices: Data, rail: Data | None) -> str:
    """One rail: what it needs, its stage, its capacitors and its copper."""
    text = name
    if rail is not None:
        text += f" {with_unit(rail.get('voltage_v'), 'V')} {with_unit(rail.get('max_current_a'), 'A')}"
        if rail.get("tap_of"):
            return f"{text}: tap of {rail['tap_of']}"
    phases = choices.get(f"{name}.phases")
    text += f": {times(phases, choices.get(f'{name}.stage', NONE))}{fewest(choices, name, 'phases')}"
    return text + capacitors(choices, f"{name}.bank") + copper(choices, name)


def fewest(choices: Data, owner: str, count: str) -> str:
    """Whether units are switched off at light load; said only where there is more than one."""
    if str(choices.get(f"{owner}.{count}", 1)) == "1" or f"{owner}.fewest" not in choices:
        return ""
    return " (down to one at light load)" if choices[f"{owner}.fewest"] == "one" else " (all always running)"


def capacitors(choices: Data, place: str) -> str:
    """The bank of a rail or the bulk of a bus."""
    bank = choices.get(place)
    return "" if bank in (None, "none") else f"; {times(choices.get(f'{place}_count'), bank)}"


def copper(choices: Data, owner: str) -> str:
    """How many layer pairs carry a net."""
    layers = choices.get(f"{owner}.pairs")
    if layers is None or not str(layers).isdigit():
        return ""
    return f"; copper on {counted(int(layers), 'pair')}"


def board_lines(choices: Data) -> Iterable[str]:
    """The stack, the bias supply and the supervisor, where there is one."""
    if choices.get("board.stack") is not None:
        yield f"  stack: {choices['board.stack']}"
    if str(choices.get("board.bias", "none")) != "none":
        feed = str(choices.get("board.bias_feed", "input"))
        yield f"  gate bias: {choices['board.bias']}, from {BUS_WORD.get(feed, feed)}"
    if str(choices.get("board.supervisor", "none")) != "none":
        yield f"  supervisor: {choices['board.supervisor']}"
