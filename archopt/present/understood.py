"""What was understood of a study: supply, rails, load, money, and every value nobody stated."""

from __future__ import annotations

import math
from collections.abc import Iterable

from rich.console import RenderableType
from rich.table import Table
from rich.text import Text

from archopt.present.amounts import NONE, counted, fixed, money, number, of, real, with_unit
from archopt.present.assumed import assumed_table
from archopt.present.record import BUSES, CheckResult, Data
from archopt.present.state_tables import beside_the_year, by_load, jumps_table, load_states_table
from archopt.present.tables import WordTable, pairs, section, table


def understood(problem: Data) -> Table:
    """The study in a few lines: supply, rails, load, control, economics, parts."""
    study: Data = problem.get("study") or {}
    rows = [
        ("study", " - ".join(str(study[key]) for key in ("name", "title") if study.get(key)) or NONE),
        ("input", supply_text(study.get("supply") or {})),
        ("rails", rails_text(study)),
        ("load", load_text(problem)),
        ("bus control", bus_text(study)),
        ("money", money_text(study.get("economics") or {})),
        ("surroundings", air_text(study.get("supply") or {})),
        ("today's design", "given; it seeds the search" if study.get("incumbent") else "not given"),
        ("assumed", assumed_text(problem)),
    ]
    return pairs((word, value) for word, value in rows if value != NONE)


def supply_text(supply: Data) -> str:
    """The range of the input and the levels it spends its hours at."""
    if not supply:
        return NONE
    low, high = number(supply.get("low_v")), number(supply.get("high_v"))
    text = f"{low} V" if low == high else f"{low} to {high} V"
    levels = supply.get("levels") or []
    if levels:
        shares = (f"{number(row['voltage_v'])} V for {number(100 * row['share'], 3)} %" for row in levels)
        text += f"; {', '.join(shares)} of the hours"
    text += "; isolation required" if supply.get("isolation") else "; no isolation required"
    text += f"; through {supply['path']}" if supply.get("path") else ""
    if real(supply.get("filter_capacitance_uf"), 0.0) > 0:
        text += f" into {number(supply.get('filter_capacitance_uf'))} uF"
    if real(supply.get("filter_damper_uf"), 0.0) > 0:
        text += f", damped by {number(supply.get('filter_damper_uf'))} uF"
    return text


def rails_text(study: Data) -> str:
    """How many rails, their voltages, and growth and coincidence."""
    rails = study.get("rails") or []
    if not rails:
        return NONE
    volts = [real(rail.get("voltage_v")) for rail in rails]
    text = f"{counted(len(rails), 'rail')} from {number(min(volts))} to {number(max(volts))} V"
    taps = sum(1 for rail in rails if rail.get("tap_of"))
    text += f", {counted(taps, 'tap')}" if taps else ""
    growth = real(study.get("growth"))
    text += f"; coincidence {number(study.get('coincidence'))}"
    return text + (f"; growth {number(100 * (growth - 1), 3)} %" if math.isfinite(growth) else "")


def load_text(problem: Data) -> str:
    """States, their hours, and the mean and largest load."""
    states = [state for state in problem.get("states") or [] if real(state.get("hours"), 0.0) > 0]
    if not states:
        return NONE
    hours = sum(real(state["hours"]) for state in states)
    levels = len({state.get("input_v") for state in states})
    text = f"{counted(len(by_load(states)), 'load')} at {counted(levels, 'input voltage')},"
    text += f" covering {number(hours)} hours of the year"
    loads = [real(state.get("load_w")) for state in states]
    if all(math.isfinite(load) for load in loads):
        mean = sum(real(s["hours"]) * load for s, load in zip(states, loads, strict=True)) / hours
        text += f"; mean load {number(mean)} W, highest of a state {number(max(loads))} W"
    bands = problem.get("bands") or []
    return text + (f"; {counted(len(bands), 'band')} of load" if bands else "")


def bus_text(study: Data) -> str:
    """What the buses may do; that there is none where no converter can make one."""
    if (study.get("choices") or {}).get("max_buses") == 0:
        return "no intermediate bus: the study allows none, or no bus converter offered takes this input"
    return control_text(study.get("control") or {})


def control_text(control: Data) -> str:
    """What the bus voltage may do and what it must survive."""
    if not control:
        return NONE
    words = {"fixed": "fixed", "two_levels": "two levels", "follow_load": "following the load"}
    kinds = ", ".join(words.get(str(kind), str(kind)) for kind in control.get("kinds") or [])
    text = f"{kinds}; {number(control.get('bus_min_v'))} to {number(control.get('bus_max_v'))} V"
    text += f" in steps of {number(control.get('grid_v'))} V"
    jumps = control.get("jumps") or []
    sudden = sum(not jump.get("announced") for jump in jumps)
    jump_text = f"an unannounced jump of {number(control.get('jump_percent'))} % of rated load"
    if jumps:
        jump_text = f"{sudden} unannounced and {len(jumps) - sudden} announced jumps between listed states"
    text += f"; survives {jump_text} within {number(control.get('response_ms'))} ms"
    if real(control.get("dwell_s"), 0.0) > 0:
        text += f"; steps down after {number(control.get('dwell_s'))} s of less load"
        text += " (hours held up are counted from a thousandth of the year on)"
    if real(control.get("deadband_v"), 0.0) > 0:
        text += f"; changes by {number(control.get('deadband_v'))} V or not at all"
    return text


def money_text(economics: Data) -> str:
    """Volume, energy price and life."""
    if not economics:
        return NONE
    currency = str(economics.get("currency") or "")
    return (
        f"{number(economics.get('boards_per_year'), 6)} boards a year; a new part number"
        f" {money(economics.get('new_part_cost'), currency, 0)};"
        f" energy {number(economics.get('energy_price_per_kwh'))} {currency} a kWh, cooling"
        f" x{number(economics.get('cooling_overhead'))}, upstream"
        f" {number(economics.get('upstream_efficiency'))}; {number(economics.get('life_years'))} years"
    )


def air_text(supply: Data) -> str:
    """Air at the inlet and at the parts."""
    if not supply:
        return NONE
    return (
        f"inlet {number(supply.get('inlet_degc'))} degC,"
        f" hottest {number(supply.get('hottest_inlet_degc'))} degC,"
        f" {number(supply.get('local_rise_k'))} K warmer at the parts,"
        f" air {number(supply.get('air_speed_m_s'))} m/s"
    )


def assumed_text(problem: Data) -> str:
    """How many values nobody stated, and where to read them."""
    count = len(problem.get("assumed") or [])
    return f"{counted(count, 'value')} nobody stated (archopt check lists them)" if count else "nothing"


def rails_table(rails: list[Data], squares: Data) -> WordTable:
    """Every rail as it will be solved; squares of its pour by rail, where a floorplan gives others than the study."""
    rows = [
        [
            str(rail.get("name", NONE)), number(rail.get("voltage_v")), number(rail.get("max_current_a")),
            number(rail.get("typical_current_a")), number(rail.get("tolerance_percent")),
            number(rail.get("step_a")), number(rail.get("slew_a_per_us")),
            number(1000 * real(rail.get("droop_budget_v"))),
            number(squares.get(str(rail.get("name")), rail.get("squares"))),
            "sensed at the load" if rail.get("remote_sense") else "", _feeds(rail),
        ]
        for rail in rails
    ]  # fmt: skip
    words = ["rail", "sense", "fed from"]
    columns = ["rail", "V", "max A", "typical A", "+- %", "step A", "A/us", "droop mV", "squares", *words[1:]]
    return table(columns, rows, left=words)


def space_rows(space: Data) -> Iterable[tuple[str, str]]:
    """Size of the space and what is on offer."""
    if space.get("choices") is not None:
        yield "choices", number(space["choices"], 6)
    if space.get("designs_log10") is not None:
        yield "designs", f"about 10^{fixed(space['designs_log10'], 0)}"
    for row in space.get("parts") or []:
        yield str(row.get("family", "")).replace("_", " "), f"{number(row.get('offered'), 6)} offered"


def power_rows(power: Data) -> Iterable[tuple[str, str]]:
    """The sum of the rails' maxima beside what they draw at one time."""
    words = {
        "sum_of_maxima_w": "sum of the rails' maxima", "coincident_w": "most drawn at one time",
        "rated_w": "that with growth: the rated load", "mean_w": "mean over the hours",
    }  # fmt: skip
    for key, word in words.items():
        if power.get(key) is not None:
            yield word, with_unit(power[key], "W")


def states_body(states: list[Data], *, everything: bool) -> Iterable[RenderableType]:
    """The states of the year, and the others counted, or listed too where everything is wanted."""
    beside = beside_the_year(states)
    yield load_states_table(states if everything else [state for state in states if state.get("hours")])
    if beside and not everything:
        yield Text(f"Looked at beside the year: {beside} (--all lists them).")


def check_sections(result: CheckResult, *, everything: bool = False) -> Iterable[RenderableType]:
    """All that ``check`` prints; with ``everything`` the states without hours too."""
    problem = result.problem
    study: Data = problem.get("study") or {}
    yield from section("Understood", understood(problem))
    if study.get("rails"):
        copper: Data = problem.get("copper") or {}
        yield from section("Rails", rails_table(study["rails"], copper.get("pour_squares_one_way") or {}))
    if problem.get("states"):
        yield from section("States", *states_body(problem["states"], everything=everything))
    jumps = (study.get("control") or {}).get("jumps") or []
    if jumps:
        yield from section("Jumps", jumps_table(jumps, problem.get("states") or []))
    if result.power:
        yield from section("Load power", pairs(power_rows(result.power)))
    assumed = problem.get("assumed") or []
    names = [str(rail.get("name")) for rail in study.get("rails") or []]
    yield from section(
        "Assumed, because the study does not say", assumed_table(assumed, names) if assumed else "nothing"
    )
    if result.space:
        yield from section("Space to search", pairs(space_rows(result.space)))
        options = result.space.get("options") or []
        if options:
            headings = ["choice", "how many", "values each"]
            rows = option_rows(options)
            yield from section("Values of each choice", table(headings, rows, left=["choice"]))
    yield from cautions_section(result.cautions)


def option_rows(options: list[Data]) -> list[list[str]]:
    """Choices with their number of values; those of all rails, or buses, in one row, fewest to most."""
    groups: dict[str, list[int]] = {}
    for row in options:
        owner, _, field = str(row.get("choice", NONE)).partition(".")
        group = "buses" if owner in BUSES else "board" if owner == "board" else "rails"
        name = f"{group}: {field}" if field else owner
        groups.setdefault(name, []).append(int(real(row.get("values"), 0.0)))
    return [
        [
            name.replace("_", " "), number(len(counts), 6),
            number(counts[0], 6) if len(set(counts)) == 1 else f"{min(counts):,} to {max(counts):,}",
        ]
        for name, counts in groups.items()
    ]  # fmt: skip


def cautions_section(cautions: list[str]) -> Iterable[RenderableType]:
    """Sentences to read before trusting a number."""
    if cautions:
        yield from section("Cautions", bullets(cautions))


def bullets(sentences: Iterable[str]) -> Text:
    """Sentences, one a line."""
    return Text("\n".join(f"- {sentence}" for sentence in sentences))


def _feeds(rail: Data) -> str:
    if rail.get("tap_of"):
        return f"tap of {rail['tap_of']}"
    parents = of(rail, "parents")
    names = [str(name) for name in parents] if isinstance(parents, list) else []
    return "or ".join(["bus or input ", *(f"{name} " for name in names)]).strip() if names else "bus or input"
