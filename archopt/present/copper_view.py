"""The copper question in the terminal and as CSV: nets, sweeps with their curve, where the next step stops paying."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path

from rich.console import RenderableType

from archopt.errors import OutputError
from archopt.present.amounts import NONE, fixed, number, with_unit
from archopt.present.files import csv_bytes
from archopt.present.front import Front
from archopt.present.part_chart import Curve, chart_lines
from archopt.present.record import Data
from archopt.present.tables import HangingLines, section, table
from archopt.trade.copper import WEIGHT, CopperAnswer, CopperPoint, copper_question, last_worth
from archopt.trade.copper_again import EVALUATIONS
from archopt.trade.rebuilt import problem_of, row_of

CHART_WIDTH, CHART_HEIGHT = 56, 10
HERE = "<- this design"


@dataclass(frozen=True)
class CopperRequest:
    """What a person asks of the copper of one design of a result."""

    directory: Path
    design: str
    net: str | None = None
    reoptimise: bool = False
    evaluations: int = EVALUATIONS
    replace: bool = False


def ask_copper(front: Front, asked: CopperRequest) -> tuple[CopperAnswer, Path]:
    """Return the answer for a design of a front, and where its CSV goes.

    Raises
    ------
    OutputError : there is no such design or net, the files do not hold what is needed, or the CSV is there already
    """
    design = front.design(asked.design)
    place = asked.directory / csv_name(design.name)
    if place.exists() and not asked.replace:
        raise OutputError(f"{place} is there already; move it away or replace it (--replace)")
    problem = problem_of(front.record.problem)
    row = row_of(problem, design.data)
    answer = copper_question(
        problem, row, design=design.name, net=asked.net, reoptimise=asked.reoptimise, evaluations=asked.evaluations
    )
    return answer, place


def csv_name(design: str) -> str:
    """The name of the CSV beside a result."""
    return f"copper_{design}.csv"


def write_copper(answer: CopperAnswer, place: Path) -> None:
    """Write every point of every sweep as CSV.

    Raises
    ------
    OutputError : the file cannot be written
    """
    try:
        place.write_bytes(csv_bytes([point_row(point) for point in answer.points]))
    except OSError as error:
        raise OutputError(f"{place}: cannot be written: {error.strerror or error}") from error


def point_row(point: CopperPoint) -> Data:
    """One point as a row of the CSV."""
    return {
        "sweep": point.sweep,
        "copper_oz" if point.sweep == WEIGHT else "pairs": point.amount,
        "stack": point.stack,
        "this_design": point.here,
        "loss_kwh_per_year": point.loss_kwh,
        "copper_loss_kwh_per_year": point.copper_kwh,
        "cost_per_board": point.cost,
        "worst_drop_percent": point.drop_percent,
        "worst_rise_k": point.rise_k,
        "break_even_months": point.months,
        "limits_missed": "; ".join(point.missed),
    }


def copper_sections(answer: CopperAnswer, currency: str) -> Iterable[RenderableType]:
    """Everything ``copper`` prints."""
    rows = [
        (
            net.net, str(net.pairs), number(net.squares, 3), number(net.area_cm2, 3), fixed(net.loss_kwh, 2),
            fixed(net.drop_mv, 1), fixed(net.drop_percent, 2), fixed(net.rise_k, 1),
            fixed(net.copper_degc, 1), net.place,
        )
        for net in answer.nets
    ]  # fmt: skip
    heads = ("net", "pairs", "squares", "cm2 a pair", "kWh a year", "drop mV", "drop %", "rise K", "degC", "hottest at")
    yield from section(f"Copper of {answer.design}", table(heads, rows, left=("net", "hottest at")))
    for sweep, points in answer.sweeps().items():
        if sweep == WEIGHT:
            yield from weight_section(answer, points, currency)
    others = {sweep: points for sweep, points in answer.sweeps().items() if sweep != WEIGHT}
    if len(others) == 1:
        yield from net_section(answer, *next(iter(others.items())), currency)
    elif others:
        yield from next_pair_section(answer, others, currency)
    yield from section("How to read this", HangingLines(notes(answer)))


def weight_section(answer: CopperAnswer, points: Sequence[CopperPoint], currency: str) -> Iterable[RenderableType]:
    """The sweep of copper weight with its curve."""
    title = "Copper weight" + (", everything else chosen again" if answer.reoptimised else ", everything else as it is")
    bodies: list[RenderableType] = [points_table(points, "oz", currency)]
    if len(points) > 1:
        curve = Curve("all losses", [p.amount for p in points], [p.loss_kwh for p in points])
        lines = chart_lines([curve], "copper weight, oz", "loss, kWh a year", CHART_WIDTH, CHART_HEIGHT)
        bodies.append("\n".join(lines))
    bodies.append(verdict(points, answer.life_months, "oz", "ounce"))
    if answer.cheaper_stack:
        saved = with_unit(answer.cheaper_by, currency)
        bodies.append(f"{answer.cheaper_stack} of the same weight holds this design too and costs {saved} less")
    yield from section(title, *bodies)


def net_section(
    answer: CopperAnswer, net: str, points: Sequence[CopperPoint], currency: str
) -> Iterable[RenderableType]:
    """The sweep of the pairs of one net with its curve."""
    bodies: list[RenderableType] = [points_table(points, "pairs", currency)]
    if len(points) > 1:
        curve = Curve("loss in all copper", [p.amount for p in points], [p.copper_kwh for p in points])
        bodies.append("\n".join(chart_lines([curve], "pairs", "kWh a year", CHART_WIDTH, CHART_HEIGHT)))
    bodies.append(verdict(points, answer.life_months, "pairs", "pair"))
    yield from section(f"Pairs of {net}", *bodies)


def next_pair_section(
    answer: CopperAnswer, sweeps: dict[str, list[CopperPoint]], currency: str
) -> Iterable[RenderableType]:
    """What one more pair of each net does, most saved first; the whole sweeps are in the CSV."""
    rows: list[tuple[float, tuple[str, ...]]] = []
    for net, points in sweeps.items():
        at = next((k for k, point in enumerate(points) if point.here), None)
        if at is None:
            continue
        here, after = points[at], points[at + 1] if at + 1 < len(points) else None
        if after is None:
            rows.append((-1.0, (net, number(here.amount), NONE, NONE, NONE, NONE, "no more on offer", "")))
            continue
        saved = here.loss_kwh - after.loss_kwh
        months = "never" if after.months is None else fixed(after.months, 1)
        stack = "" if after.stack == here.stack else after.stack
        cells = (
            net, number(here.amount), fixed(saved, 2), fixed(after.cost - here.cost, 2), months,
            fixed(after.drop_percent, 2), stack, ", ".join(after.missed),
        )  # fmt: skip
        rows.append((saved, cells))
    rows.sort(key=lambda row: -row[0])
    heads = (
        "net", "pairs", "next saves kWh a year", f"costs {currency}".strip(), "months", "drop then %", "needs stack",
        "limits not met",
    )  # fmt: skip
    left = ("net", "needs stack", "limits not met")
    yield from section("One more pair of each net", table(heads, [cells for _, cells in rows], left=left))


WORDS = ("stack", "limits not met", "")


def point_heads(unit: str, currency: str) -> tuple[str, ...]:
    """Headings of a table of points."""
    return (
        unit, "stack", "kWh a year", "of it copper", f"cost {currency}".strip(), "drop %", "rise K", "months",
        "limits not met", "",
    )  # fmt: skip


def point_cells(points: Sequence[CopperPoint], currency: str) -> list[tuple[str, ...]]:
    """Cells of a table of points."""
    return [
        (
            number(point.amount), point.stack, fixed(point.loss_kwh, 2), fixed(point.copper_kwh, 2),
            fixed(point.cost, 2), fixed(point.drop_percent, 2), fixed(point.rise_k, 1),
            NONE if k == 0 else "never" if point.months is None else fixed(point.months, 1),
            ", ".join(point.missed), HERE if point.here else "",
        )
        for k, point in enumerate(points)
    ]  # fmt: skip


def points_table(points: Sequence[CopperPoint], unit: str, currency: str) -> RenderableType:
    """A table of the points of one sweep."""
    return table(point_heads(unit, currency), point_cells(points, currency), left=WORDS)


def verdict(points: Sequence[CopperPoint], life_months: float, unit: str, step: str) -> str:
    """Where the next step stops paying, in words."""
    if len(points) < 2:
        return f"only {number(points[0].amount)} {unit} is on offer"
    best = last_worth(points, life_months)
    if best is None:
        return "no point meets every limit"
    after = points.index(best) + 1
    if after == len(points):
        known = {name for point in points if point.here for name in point.missed}
        first = next(point for point in points if set(point.missed) <= known)
        start = "" if first is points[0] else f" from {number(first.amount)} {unit}, the least that meets every limit,"
        comma = "," if start else ""
        return f"every {step} on offer{comma}{start} pays within the board's life of {number(life_months)} months"
    onward = points[after]
    why = (
        "saves nothing" if onward.months is None
        else f"misses {', '.join(onward.missed)}" if onward.months <= life_months
        else f"takes {number(onward.months, 3)} months, the board lives {number(life_months)}"
    )  # fmt: skip
    return f"stops paying at {number(best.amount)} {unit}: the next {step} {why}"


def notes(answer: CopperAnswer) -> list[str]:
    """What the figures are."""
    said = [
        "months: until the step from the line above has paid for itself in energy; 0 where it costs nothing.",
        "Every line is direct physics; drop and rise are the worst in use: lowest bus, highest load, grown.",
        "rise: of the most crowded place, IPC-2221 form for a layer inside the board; planes nearby make it less. The "
        "whole net is taken as warm as that place in every state, so its loss is rather over- than understated.",
    ]
    if answer.reoptimised:
        said.append(
            "At every line all but the swept copper was chosen again among the parts of this result: least lifetime "
            f"cost with a droop no worse than the design's own; {answer.seconds:.0f} s."
        )
        said.append("The line of the design itself may be better than the design: it was chosen again too.")
    else:
        said.append("Bus voltages, phases and everything else stay as the design has them.")
        said.append("A design that no longer fits its stack moves to the cheapest of the same weight that holds it.")
    return said
