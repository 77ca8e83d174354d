"""What is printed beside a front: today's design, fixed buses, what lost, the numbers that matter."""

from __future__ import annotations

from collections.abc import Iterable

from rich.console import RenderableType
from rich.text import Text

from archopt.present.amounts import NONE, fixed, mechanism_word, money, number, place_word, real, signed, with_unit
from archopt.present.explanation import binding_text, payback
from archopt.present.overview import DROOP, bus_text
from archopt.present.record import Data, FrontRecord
from archopt.present.tables import HangingLines, section, table

SAME_BASELINE = (
    "of", "volts", "energy_loss_kwh_per_year", "cost_per_board", "worst_droop_percent", "feasible",
)  # fmt: skip
MOST_MECHANISMS = 6
MOST_LEVERAGE = 5
MOST_PRICES = 3


def question_sections(record: FrontRecord) -> Iterable[RenderableType]:
    """The sections that follow the front."""
    if record.incumbent is not None:
        yield from section("Today's design", *incumbent_body(record.incumbent, record.currency))
    if record.baselines:
        yield from section("The same hardware with another bus voltage", *baseline_body(record))
    if record.afresh:
        yield from section("Every choice made again for each bus", *afresh_body(record.afresh, record.currency))
    if record.losing:
        yield from section("Topologies that lost", *losing_body(record.losing, record.currency))
    if record.leverage:
        yield from section("Catalogue numbers with the most leverage on the knee", *leverage_body(record))


def incumbent_body(incumbent: Data, currency: str) -> Iterable[RenderableType]:
    """The objectives of today's design and the limits it does not meet."""
    objectives = incumbent["objectives"]
    yield Text(
        f"{fixed(objectives['energy_loss_kwh_per_year'], 2)} kWh a year,"
        f" {money(objectives['cost_per_board'], currency)},"
        f" droop {fixed(objectives['worst_droop_percent'], 0)} %"
        f" of its budget; {incumbent.get('topology') or 'topology unknown'}, bus {bus_text(incumbent)} V"
    )
    violated = incumbent.get("violated") or []
    if violated:
        yield Text("It does not meet:", style="red")
        for limit in violated:
            yield Text(f"- {binding_text(limit) if isinstance(limit, dict) else limit}")


def baseline_body(record: FrontRecord) -> Iterable[RenderableType]:
    """Fixed and adaptive buses on the same hardware, and the gain against the best feasible fixed bus."""
    rows = [
        [
            str(row.get("baseline", NONE)), str(row.get("of") or NONE), volts_text(row.get("volts")),
            fixed(row.get("energy_loss_kwh_per_year"), 2), fixed(row.get("cost_per_board"), 2),
            fixed(row.get("worst_droop_percent"), 0), "yes" if row.get("feasible") else "no",
            place_word(row.get("note")) if row.get("note") else "",
        ]
        for row in merged_baselines(record.baselines)
    ]  # fmt: skip
    words = ["bus", "hardware of", "bus V", "meets limits", "remark"]
    headings = ["bus", "hardware of", "bus V", "kWh a year", "cost", DROOP, "meets limits", "remark"]
    yield table(headings, rows, left=words)
    yield from gain_lines(record.gains, record.currency)


def merged_baselines(baselines: list[Data]) -> list[Data]:
    """The rows of one hardware that came out the same as one row, its names and remarks joined."""
    groups: dict[str, list[Data]] = {}
    for row in baselines:
        numbers = [row.get(key) for key in SAME_BASELINE]
        known = row.get("energy_loss_kwh_per_year") is not None
        groups.setdefault(str(numbers) if known else f"{row.get('baseline')} {numbers}", []).append(row)
    merged = []
    for rows in groups.values():
        notes = [str(row["note"]) for row in rows if row.get("note")]
        names = joined_names([str(row.get("baseline", NONE)) for row in rows])
        merged.append({**rows[0], "baseline": names, "note": "; ".join(dict.fromkeys(notes))})
    return merged


def joined_names(names: list[str]) -> str:
    """Names as one; what stands before their first comma is said once where all begin so."""
    heads = {name.partition(", ")[0] for name in names}
    if len(names) < 2 or len(heads) > 1 or not all(", " in name for name in names):
        return "; ".join(names)
    return f"{heads.pop()}, {'; '.join(name.partition(', ')[2] for name in names)}"


def afresh_body(afresh: Data, currency: str) -> Iterable[RenderableType]:
    """The best board for each way to run the bus, and the gain against the best board for a fixed one."""
    rows = [
        [
            str(row.get("baseline", NONE)), str(row.get("topology") or NONE), volts_text(row.get("volts")),
            fixed(row.get("energy_loss_kwh_per_year"), 2), fixed(row.get("cost_per_board"), 2),
            fixed(row.get("worst_droop_percent"), 0), fixed(row.get("lifetime_cost"), 2),
            fixed(row.get("least_energy_kwh_per_year"), 2), place_word(row.get("note")) if row.get("note") else "",
        ]
        for row in merged_baselines(afresh.get("rows") or [])
    ]  # fmt: skip
    unit = f", {currency}" if currency else ""
    numbers = ["kWh a year", f"cost{unit}", DROOP, f"life cost{unit}", "least kWh a year"]
    words = ["bus", "topology", "bus V", "remark"]
    yield table([*words[:3], *numbers, "remark"], rows, left=words)
    yield Text("Each row is the board of least lifetime cost; beside it the least loss of any board for that bus.")
    for gain in merged_gains(afresh.get("gains") or []):
        yield Text(afresh_gain(gain, currency))
    for note in afresh.get("notes") or []:
        yield Text(str(note))


def merged_gains(gains: list[Data]) -> list[Data]:
    """The gains that came out the same as one, their names joined."""
    groups: dict[str, list[Data]] = {}
    for gain in gains:
        groups.setdefault(str([value for key, value in gain.items() if key != "of"]), []).append(gain)
    return [{**same[0], "of": joined_names([str(gain.get("of")) for gain in same])} for same in groups.values()]


def afresh_gain(gain: Data, currency: str) -> str:
    """What a moving bus gains against the best feasible fixed one, over the life and at equal cost."""
    less, energy, more = (real(gain.get(key)) for key in ("lifetime_cost_less", "energy_less_kwh", "cost_more"))
    text = (
        f"{gain.get('of')}: against the best fixed bus {money(abs(less), currency)}"
        f" {'less' if less >= 0 else 'more'} over the life"
        f" ({number(abs(energy), 3)} kWh a year {'less' if energy >= 0 else 'more'},"
        f" {money(abs(more), currency)} a board {'more' if more >= 0 else 'less'})"
    )
    reach = gain.get("energy_less_at_equal_cost_percent")
    if isinstance(reach, list) and len(reach) == 3:
        median, most = real(reach[1]), real(reach[2])
        word = "less" if median >= 0 else "more"
        text += f"; at equal cost {fixed(abs(median), 1)} % {word} energy lost in the median"
        text += f", {fixed(most, 1)} % less at most" if most > 0 else ""
    return f"{text}."


def volts_text(volts: object) -> str:
    """One voltage, or the lowest and highest of a list or of each bus."""
    if isinstance(volts, dict):
        return ", ".join(volts_text(value) for value in volts.values()) or NONE
    if isinstance(volts, list):
        numbers = [real(value) for value in volts if value is not None]
        if not numbers:
            return NONE
        low, high = min(numbers), max(numbers)
        return number(low) if low == high else f"{number(low)} to {number(high)}"
    return number(volts)


def gain_lines(gains: list[Data], currency: str) -> Iterable[Text]:
    """What following the load gains against the best feasible fixed bus, never against a habit."""
    for gain in gains:
        said = fixed_bus_text(gain)
        kwh = gain.get("gain_kwh_per_year")
        if kwh is not None:
            said.append(
                f"following the load {'saves' if kwh >= 0 else 'loses'} {number(abs(kwh), 3)} kWh a year"
                f" ({number(abs(real(gain.get('gain_percent'))), 2)} % of its loss,"
                f" {money(abs(real(gain.get('gain_money_per_year'))), currency)})"
            )
            said.append(supervisor_text(gain, currency))
        for key, word in (("all_unannounced", "unannounced"), ("announced", "announced")):
            other = gain.get(f"gain_{key}_kwh_per_year")
            if other is not None and fixed(other, 2) != fixed(kwh, 2):
                said.append(f"it would save {fixed(other, 2)} kWh were every jump {word}")
        if any(said):
            yield Text(f"{gain.get('of', 'design')}: {'; '.join(text for text in said if text)}.")


def fixed_bus_text(gain: Data) -> list[str]:
    """The best fixed voltage of each bus and the band that loses at most 1 % more; or that there is none."""
    best, flat = gain.get("best_fixed_v"), gain.get("flat_band_v") or {}
    if not best:
        return [str(gain["note"])] if gain.get("note") else ["no fixed bus voltage meets every limit"]
    texts = []
    for bus, volts in best.items():
        band = volts_text(flat.get(bus)) if flat.get(bus) else NONE
        texts.append(
            f"best fixed {place_word(bus)} {with_unit(volts, 'V')}"
            + (f" ({band} V within 1 % of its loss)" if band != NONE else "")
        )
    return texts


def supervisor_text(gain: Data, currency: str) -> str:
    """What the supervisor costs and when it has paid for itself."""
    cost, years = gain.get("supervisor_cost"), gain.get("supervisor_payback_years")
    if not isinstance(cost, int | float) or cost <= 0:
        return ""
    back = "never pays back" if years is None else f"pays back {payback(years)}"
    return f"setting the bus costs {money(cost, currency)} a board and {back}"


def losing_body(losing: list[Data], currency: str) -> Iterable[RenderableType]:
    """The best of each topology that does not win; for the nearest one the difference by mechanism."""
    ordered = sorted(losing, key=lambda row: real(row.get("behind_by"), 1e300))
    rows = [
        [
            str(row.get("topology", NONE)), _name_of(row),
            fixed(row.get("lifetime_cost"), 2), signed(row.get("behind_by"), 2),
            signed(row.get("energy_more_kwh"), 2), signed(row.get("cost_more"), 2), limit_text(row.get("limit")),
        ]
        for row in ordered
    ]  # fmt: skip
    words = ["topology", "best design", "limit it cannot meet"]
    unit = f", {currency}" if currency else ""
    headings = ["topology", "best design", f"life cost{unit}", "behind by", "kWh more", "cost more"]
    yield table([*headings, "limit it cannot meet"], rows, left=words)
    nearest = ordered[0]
    terms = nearest.get("difference_by_mechanism") or {}
    if terms:
        largest = sorted(terms.items(), key=lambda term: -abs(real(term[1], 0.0)))
        said = ", ".join(f"{mechanism_word(word)} {signed(value, 2)}" for word, value in largest[:MOST_MECHANISMS])
        rest = ""
        if len(largest) > MOST_MECHANISMS:
            left = largest[MOST_MECHANISMS:]
            rest = f", {signed(sum(real(value, 0.0) for _, value in left), 2)} in {len(left)} more"
        yield Text(f"Nearest, {nearest.get('topology')}, against the winner, kWh a year: {said}{rest}.")


def limit_text(limit: object) -> str:
    """A limit given whole or as words."""
    return binding_text(limit) if isinstance(limit, dict) else str(limit or NONE)


def leverage_body(record: FrontRecord) -> Iterable[RenderableType]:
    """The numbers whose spread moves the knee most, nothing chosen anew: those of losses, then prices."""
    ordered = sorted(record.leverage, key=lambda row: -abs(_weight(row)))
    losses = [row for row in ordered if not _is_price(row)]
    prices = [row for row in ordered if _is_price(row)]
    shown = [*losses[:MOST_LEVERAGE], *prices[:MOST_PRICES]]
    sources = list(dict.fromkeys(str(row.get("source") or NONE) for row in shown))
    rows = [
        [
            str(row.get("part", NONE)), str(row.get("column") or row.get("number") or NONE),
            number(row.get("value")), f"+-{number(row.get('spread_percent'))} %",
            signed(row.get("energy_change_kwh"), 2), signed(row.get("cost_change"), 2),
            signed(row.get("lifetime_change"), 2), str(sources.index(str(row.get("source") or NONE)) + 1),
        ]
        for row in shown
    ]  # fmt: skip
    headings = ["part", "number", "value", "spread", "kWh a year", "cost", "life cost", "source"]
    yield table(headings, rows, left=["part", "number"])
    yield HangingLines(f"source {k + 1}: {source}" for k, source in enumerate(sources))


def _name_of(row: Data) -> str:
    """The name of a published design; the best of a topology need not be on the front."""
    design = row.get("best_design")
    name = str(design.get("design") or NONE) if isinstance(design, dict) else str(design or NONE)
    return "not on the front" if name.startswith("best of ") else name


def _is_price(row: Data) -> bool:
    return str(row.get("column") or row.get("number")).startswith("price")


def _weight(row: Data) -> float:
    """What a change of one number comes to over the life; its energy where that is not known."""
    return real(row.get("lifetime_change"), real(row.get("energy_change_kwh"), 0.0))
