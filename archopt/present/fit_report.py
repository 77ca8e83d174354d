"""What ``fit`` prints: the row, what it misses, where points are thin and where it may not be used."""

from __future__ import annotations

import math
from collections.abc import Iterable, Sequence
from pathlib import Path

from rich.console import RenderableType

from archopt.inputs.fitting_part import FittedPart, Residual
from archopt.present.amounts import NONE, counted, fixed, number, signed
from archopt.present.part_view import column_unit
from archopt.present.tables import HangingLines, pairs, section, table
from archopt.present.understood import bullets

LISTED = 40
"""Points listed; of more, those that are missed most."""
FORMS = 5


def fit_sections(
    fitted: FittedPart, written: Sequence[Path] = (), loads_from: Path | None = None
) -> Iterable[RenderableType]:
    """Everything printed of a fitted part.

    Parameters
    ----------
    fitted : the fit
    written : files that were written
    loads_from : catalogue folder a study can load the part from, None when the file does not lie in one
    """
    part = fitted.part
    yield from section(f"Fitted {part.name} ({part.family})", pairs(_summary(fitted)))
    values = part.model_dump()
    rows = [(name, number(values[name], 5), column_unit(name) or NONE) for name in fitted.measured_columns]
    yield from section("Measured columns", table(("column", "value", "unit"), rows, left=("column", "unit")))
    yield from section(_residual_title(fitted), _residual_table(fitted.residuals))
    valid = [(what, f"{_span(low, high)} {unit}") for what, low, high, unit in fitted.valid]
    yield from section("May be used", pairs(valid))
    if fitted.cautions:
        yield from section("Cautions", bullets(fitted.cautions))
    words = "the nearest in the catalogue; name another by --like" if fitted.like_chosen else "as asked"
    kept = ", ".join(f"{name} {value}" for name, value in fitted.kept)
    yield from section(f"Not measured, taken from {fitted.like} ({words})", HangingLines([kept]))
    if written:
        yield from section("Files", HangingLines(_files(written, loads_from, part.family)))


def _summary(fitted: FittedPart) -> Iterable[tuple[str, str]]:
    """What the fit is and how good."""
    yield "points", f"{len(fitted.residuals)} of {fitted.file}"
    if fitted.factors:
        scaled = ", ".join(f"{name} x {number(factor, 3)}" for name, factor in fitted.factors)
        yield "scaled", f"{scaled}, of {fitted.like}"
    else:
        yield "terms", fitted.form
    yield "worst error", f"{fixed(fitted.worst_points, 2)} points of efficiency"
    of_loss = f"{fixed(fitted.rms_loss_percent, 1)} % of loss"
    yield "rms error", f"{fixed(fitted.rms_points, 2)} points of efficiency, {of_loss}"
    yield "points left out", f"{fixed(fitted.left_out_points, 2)} points mean error where the fit had not seen them"
    free = f"{fixed(fitted.free_worst_points, 2)} worst, {fixed(fitted.free_rms_points, 2)} rms"
    yield "with more terms", f"{free} (constant, linear and square of current, each with voltages)"
    best = sorted(fitted.tried, key=lambda item: (item[2], item[1]))[:FORMS]
    tried = "; ".join(f"{name} ({numbers}): {fixed(100 * error, 3)}" for name, numbers, error in best)
    count = counted(len(fitted.tried), "form")
    yield f"{count} tried", f"left-out error in points, numbers fitted in brackets: {tried}"


def _residual_title(fitted: FittedPart) -> str:
    """Heading of the residual table."""
    count = len(fitted.residuals)
    return "Points" if count <= LISTED else f"Points, the {LISTED} missed most of {count}"


def _residual_table(residuals: Sequence[Residual]) -> RenderableType:
    """Every point against the row."""
    shown = list(residuals)
    if len(shown) > LISTED:
        worst = sorted(shown, key=lambda item: -abs(item.error_points) if math.isfinite(item.error_points) else 0.0)
        shown = sorted(worst[:LISTED], key=lambda item: item.line)
    volts = ("row", "input V", "output V", "current A")
    columns = (*volts, "measured W", "fitted W", "measured %", "fitted %", "error points")
    rows = [
        (
            str(item.line), number(item.input_v), number(item.output_v), number(item.current_a),
            number(item.measured_w), number(item.fitted_w), fixed(100 * item.measured_efficiency, 2),
            fixed(100 * item.fitted_efficiency, 2), signed(item.error_points, 2),
        )
        for item in shown
    ]  # fmt: skip
    return table(columns, rows)


def _span(low: float, high: float) -> str:
    """A range, or the one value it has."""
    return number(low) if low == high else f"{number(low)} to {number(high)}"


def _files(written: Sequence[Path], loads_from: Path | None, family: str) -> Iterable[str]:
    """What was written and how a study takes it."""
    for path in written:
        yield f"wrote {path}"
    if loads_from is None:
        yield f"a study loads the row from a folder named {family} in its own catalogue folder, sources.csv above it"
    else:
        yield f'a study beside this folder loads it by catalogue = "{loads_from.name}"'
