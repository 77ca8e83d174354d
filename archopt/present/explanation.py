"""One design explained, stage by stage: what a reviewer asks of it, in the order it is asked."""

from __future__ import annotations

from collections.abc import Iterable

from rich.console import RenderableType
from rich.table import Table
from rich.text import Text

from archopt.present.adaptive_view import adaptive_sections, moves
from archopt.present.amounts import NONE, fixed, money, number, of, place_word, real, with_unit
from archopt.present.losses import loss_table, shown_states, worst_balance
from archopt.present.power_tree import BUS_WORD, tree_lines
from archopt.present.record import Data
from archopt.present.state_tables import design_states_table
from archopt.present.tables import HangingLines, WordTable, heading, indented, pairs, section, table

UNITLESS = ("ratio", "choices")


def explanation(design: Data, problem: Data) -> Iterable[RenderableType]:
    """The sections of one explained design.

    Parameters
    ----------
    design : one entry of ``designs.json``
    problem : ``problem.json``; rails and currency come from its study
    """
    study: Data = problem.get("study") or {}
    currency = str(of(study.get("economics"), "currency") or "")
    yield heading(title(design))
    yield indented(totals(design, currency))
    yield Text("")
    yield from section("Power tree", HangingLines(tree_lines(design, study)))
    if design.get("bands"):
        yield from section(
            schedule_title(thresholds=thresholds_matter(design)),
            schedule_table(design["bands"], thresholds=thresholds_matter(design)),
            *phases_body(design["bands"]),
        )
    yield from adaptive_sections(design)
    yield from section("Losses by part and mechanism", loss_table(design))
    states = design_states_table(shown_states(design))
    yield from section("States of the year, and the shown loads", states, balance_line(design))
    if design.get("heat"):
        yield from section("Heat in the hottest case", heat_table(design["heat"]))
    if design.get("tolerance"):
        yield from section("Tolerance of each rail, mV", tolerance_table(design["tolerance"]))
    yield from section("Limits, the worst place of each", *limits_body(design))
    yield from section(f"Cost of one board{f', {currency}' if currency else ''}", *cost_body(design))


def title(design: Data) -> str:
    """Name, roles and topology."""
    roles = ", ".join(str(role) for role in design.get("roles") or [])
    text = f"Design {design.get('design', '')}".rstrip()
    if roles:
        text += f" ({roles})"
    return f"{text}: {design['topology']}" if design.get("topology") else text


def totals(design: Data, currency: str) -> Table:
    """The objectives and what the year costs."""
    objectives, beside = design["objectives"], design.get("beside") or {}
    droop = f"{fixed(objectives['worst_droop_percent'], 0)} % of its budget"
    exact = objectives.get("worst_droop_exact_percent")
    if exact is not None:
        droop += f" (exactly {fixed(exact, 2)} %)"
    watts = ", ".join(f"{fixed(w, 2)} W {_at(load)}" for load, w in (design.get("watts") or {}).items())
    rows = [
        ("energy lost a year", with_unit(objectives["energy_loss_kwh_per_year"], "kWh", 5)),
        ("cost of one board", money(objectives["cost_per_board"], currency)),
        ("worst rail's droop or release", droop),
        ("lost at", watts or NONE),
        ("energy drawn a year", with_unit(beside.get("energy_input_kwh_per_year"), "kWh", 5)),
        ("energy bill a year", money(beside.get("energy_cost_per_year"), currency)),
        ("CO2 a year", with_unit(beside.get("co2_kg_per_year"), "kg")),
        ("cost over its life", money(beside.get("lifetime_cost"), currency)),
        ("pays back against today's design", payback(beside.get("payback_years"))),
        ("board area of parts", with_unit(beside.get("area_mm2"), "mm2", 5)),
        ("input current at low line", with_unit(design.get("input_current_low_line_a"), "A")),
        ("limit that binds", binding_text(design.get("binding"))),
    ]
    return pairs((word, value) for word, value in rows if value != NONE)


def payback(years: object) -> str:
    """Years until the saving has paid for the difference in cost."""
    if not isinstance(years, int | float):
        return NONE
    if 0 < years < 1:
        return f"after {number(12 * years, 2)} months"
    return "at once" if years <= 0 else f"after {number(years, 3)} years"


def slack_text(limit: object) -> str:
    """The slack of a limit in trade units, with a word for a limit that is not met."""
    slack = of(limit, "slack")
    unit = str(of(limit, "unit") or "")
    unit = "" if unit in UNITLESS else unit
    if not isinstance(slack, int | float):
        return NONE
    return f"over by {with_unit(-slack, unit, 3)}" if slack < 0 else f"{with_unit(slack, unit, 3)} left"


def binding_text(limit: object) -> str:
    """A limit, where and when it binds, and what is left of it."""
    if not isinstance(limit, dict) or not limit.get("limit"):
        return NONE
    text = str(limit["limit"])
    if limit.get("where"):
        text += f" at {place_word(limit['where'])}"
    if limit.get("state"):
        text += f", {limit['state']}"
    return f"{text}: {slack_text(limit)}"


def thresholds_matter(design: Data) -> bool:
    """Whether anything is set by band: a bus voltage, or how many of a bus's converters run."""
    bands = design.get("bands") or []
    counts = (len({of(band.get("converters"), bus) for band in bands}) for bus in BUS_WORD)
    return moves(design) or any(count > 1 for count in counts)


def schedule_title(*, thresholds: bool) -> str:
    """What the bands are for; a bus that is held has no thresholds."""
    if thresholds:
        return "Bus voltage by load (load is what the rails draw; thresholds are power at the board's input)"
    return "Bands of load (load is what the rails draw); the bus is held"


def schedule_table(bands: list[Data], *, thresholds: bool = True) -> WordTable:
    """Bus voltage and running converters in each band of load; ``thresholds`` where something is set by them."""
    buses = [bus for bus in BUS_WORD if any(of(band.get("volts"), bus) is not None for band in bands)]
    rows = []
    for band in bands:
        row = [
            number(band.get("band")), fixed(band.get("load_from_w"), 0), fixed(band.get("load_to_w"), 0),
        ]  # fmt: skip
        if thresholds:
            row += [fixed(band.get("raise_above_input_w"), 0), fixed(band.get("fall_below_input_w"), 0)]
        for bus in buses:
            row += [fixed(of(band.get("volts"), bus), 2), number(of(band.get("converters"), bus))]
        rows.append(row)
    headings = ["band", "load from W", "load to W"]
    headings += ["raise above input W", "fall below input W"] if thresholds else []
    for bus in buses:
        headings += [f"{BUS_WORD[bus]} V", "converters"]
    return table(headings, rows)


def phases_body(bands: list[Data]) -> Iterable[RenderableType]:
    """Running phases of the rails that switch some off at light load, one column a band."""
    running = [band.get("phases") or {} for band in bands]
    rails = list(dict.fromkeys(rail for phases in running for rail in phases))
    shedding = [rail for rail in rails if len({phases.get(rail) for phases in running}) > 1]
    if shedding:
        rows = [[rail, *(number(phases.get(rail)) for phases in running)] for rail in shedding]
        yield Text("")
        headings = ["phases running", *(f"band {number(band.get('band'))}" for band in bands)]
        yield table(headings, rows, left=["phases running"])


def heat_table(heat: list[Data]) -> WordTable:
    """Loss and temperature of each part against its limit, hottest margin first."""
    rows = []
    for row in sorted(heat, key=_kelvin_left):
        left = _kelvin_left(row)
        rows.append([
            place_word(row.get("part")), fixed(row.get("loss_w"), 2), fixed(row.get("temperature_degc"), 1),
            fixed(row.get("limit_degc"), 0), fixed(left, 1),
        ])  # fmt: skip
    return table(["part", "loss W", "degC", "limit degC", "left K"], rows, left=["part"])


def tolerance_table(rows: list[Data]) -> WordTable:
    """How each rail's tolerance is spent."""
    words = {
        "tolerance_mv": "tolerance +-", "set_point_mv": "set point", "ripple_mv": "ripple",
        "ripple_allowed_mv": "of", "drop_mv": "drop", "budget_mv": "budget", "droop_mv": "droop",
        "release_mv": "release", "left_mv": "left",
    }  # fmt: skip
    cells = [[str(row.get("rail", NONE)), *(fixed(row.get(key), 1) for key in words)] for row in rows]
    return table(["rail", *words.values()], cells, left=["rail"])


def limits_body(design: Data) -> Iterable[RenderableType]:
    """The limits that are not met, if any, and every limit with its slack, the nearest first."""
    limits = [
        row for row in design.get("limits") or []
        if row.get("unit") != "choices" or real(row.get("slack"), 0.0) < 0  # says nothing once it is met
    ]  # fmt: skip
    limits.sort(key=lambda row: real(row.get("normalised"), 1e9))
    broken = [row for row in limits if real(row.get("slack"), 0.0) < 0]
    if broken:
        yield Text(f"Not met: {'; '.join(binding_text(row) for row in broken)}", style="red")
    rows = [
        [
            str(row.get("limit", NONE)), place_word(row.get("where")), number(row.get("value")),
            number(row.get("bound")), number(row.get("slack"), 3), str(row.get("unit") or ""),
            str(row.get("state") or NONE),
        ]
        for row in limits
    ]  # fmt: skip
    words = ["limit", "where", "unit", "when"]
    yield table(["limit", "where", "value", "bound", "slack", "unit", "when"], rows, left=words)


def cost_body(design: Data) -> Iterable[RenderableType]:
    """The parts with what they are for, and the sums that make the cost of a board."""
    parts = design.get("parts") or []
    if parts:
        rows = [
            [
                str(row.get("part", NONE)), str(row.get("family", "")).replace("_", " "), _used_for(row),
                number(row.get("quantity")), fixed(row.get("unit_price"), 3), fixed(row.get("total"), 2),
            ]
            for row in sorted(parts, key=lambda row: -real(row.get("total"), 0.0))
        ]  # fmt: skip
        words = ["part", "kind", "used for"]
        yield table(["part", "kind", "used for", "pieces", "each", "total"], rows, left=words)
        yield Text("")
    cost = design.get("cost") or {}
    sums = [[str(word), fixed(value, 2)] for word, value in cost.items()]
    sums.append(["one board in all", fixed(design["objectives"]["cost_per_board"], 2)])
    yield table(["sum", "cost"], sums, left=["sum"])


def balance_line(design: Data) -> Text:
    """How exactly input power equals load plus listed losses."""
    return Text(f"Input power equals load plus listed losses within {worst_balance(design):.0e} of itself.")


def _used_for(row: Data) -> str:
    used = row.get("used_for")
    return ", ".join(place_word(entry) for entry in used) if isinstance(used, list) else place_word(used)


def _kelvin_left(row: Data) -> float:
    return real(row.get("limit_degc")) - real(row.get("temperature_degc"))


def _at(load: str) -> str:
    return "in the hottest case" if load == "hottest" else f"at {load}"
