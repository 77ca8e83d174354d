"""A catalogue row fitted to measured points, with what it misses and where it may be used."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from archopt.errors import InputError
from archopt.inputs.catalogue_checks import check_family
from archopt.inputs.fitting import Fit, choose, efficiency_weight, fit_form, free_form
from archopt.inputs.fitting_forms import (
    BUCK_GROUPS,
    Candidates,
    PartLosses,
    buck_candidates,
    converter_candidates,
)  # fmt: skip
from archopt.inputs.fitting_range import (
    kept_columns,
    nearest_row,
    range_columns,
    reach,
    refuse_what_cannot_be_fitted,
    thin_places,
)  # fmt: skip
from archopt.inputs.measured import MeasuredPoints, settings
from archopt.inputs.parts import FAMILIES, BuckStage, Part
from archopt.inputs.problems import Notebook, nearest, validated
from archopt.inputs.resolved import Catalogue
from archopt.physics.arrays import FloatArray

FITTED_FAMILIES = ("bus_converters", "single_stages", "buck_stages")
DIGITS = 5
#: Rounds in which a buck row's duty, which its own resistances move, settles.
SETTLING = 5


@dataclass(frozen=True)
class Residual:
    """One point and what the row says of it; error_points is fitted less measured efficiency, nan at no load."""

    line: int
    input_v: float
    output_v: float
    current_a: float
    measured_w: float
    fitted_w: float
    measured_efficiency: float
    fitted_efficiency: float
    error_points: float
    weight: float


@dataclass(frozen=True)
class FittedPart:
    """A fitted row and everything to judge it by; errors are in points of efficiency.

    form is what the points supported, factors what the mechanisms of a buck stage were scaled by, tried every
    candidate with (name, numbers fitted, left-out error);
    free_worst_points and free_rms_points are those of a form with more freedom than the row has.
    """

    part: Part
    file: str
    like: str
    like_chosen: bool
    form: str
    factors: tuple[tuple[str, float], ...]
    tried: tuple[tuple[str, int, float], ...]
    left_out_points: float
    residuals: tuple[Residual, ...]
    worst_points: float
    rms_points: float
    rms_loss_percent: float
    free_worst_points: float
    free_rms_points: float
    measured_columns: tuple[str, ...]
    kept: tuple[tuple[str, str], ...]
    valid: tuple[tuple[str, float, float, str], ...]
    cautions: tuple[str, ...]


def fit_part(
    points: MeasuredPoints, family: str, name: str, catalogue: Catalogue, losses_of: PartLosses,
    random: np.random.Generator, like: str | None = None, input_range_v: tuple[float, float] | None = None,
    output_range_v: tuple[float, float] | None = None,
) -> FittedPart:  # fmt: skip
    """Return a row of a family fitted to measured points.

    Parameters
    ----------
    points : measured points of one unit
    family : bus_converters, single_stages or buck_stages
    name : name of the new row
    catalogue : where ``like`` is found
    losses_of : physics of a row
    random : deals points into parts that are left out in turn
    like : row that gives what measurement cannot tell; None takes the nearest of the family
    input_range_v, output_range_v : range (V) the row is to be used in; None takes that of the points

    Raises
    ------
    InputError : with every reason why no row can be fitted
    """
    notebook = Notebook(points.file)
    if family not in FITTED_FAMILIES:
        notebook.problem("--family", f"'{family}' cannot be fitted; {nearest(family, FITTED_FAMILIES)}")
        raise InputError(notebook.problems)
    rows = catalogue.families[family]
    if like is not None and like not in rows:
        notebook.problem("--like", f"'{like}' is not in {family}; {nearest(like, list(rows))}")
    elif like is None and not rows:
        notebook.problem("--like", f"there is no row of {family} to start from")
    refuse_what_cannot_be_fitted(points, family, input_range_v, output_range_v, notebook)
    if notebook.problems:
        raise InputError(notebook.problems)
    start = rows[like] if like is not None else nearest_row(rows, points)
    ranges = range_columns(start, points, input_range_v, output_range_v)
    base = start.model_copy(update={"name": name, "source": f"measured_{name}", "measured_points": "", **ranges})
    weight = efficiency_weight(points.output_w, points.loss_w)
    fit, candidates, columns = _fit(base, points, losses_of, weight, random, notebook)
    part = _checked(base, columns, notebook)
    factors = fit.coefficient.items() if isinstance(start, BuckStage) else ()
    residuals, rms_loss = _residuals(part, points, losses_of, fit.robust_weight)
    spread = {"spread_percent": min(max(float(np.ceil(rms_loss * 1e3) / 10), 0.1), 50.0)}
    part = _checked(part, {**spread, **({"part": name} if isinstance(part, BuckStage) else {})}, notebook)
    errors = np.array([item.error_points for item in residuals])
    free = fit_form(free_form(points.input_v, points.output_v, points.current_a), points.loss_w, weight)
    free_errors = 100 * (points.efficiency(free.loss_w) - points.efficiency(points.loss_w))
    worst, rms = float(np.nanmax(np.abs(errors))), float(np.sqrt(np.nanmean(errors**2)))
    free_rms = float(np.sqrt(np.nanmean(free_errors**2)))
    distinct = int(settings(points).max()) + 1
    cautions = [*thin_places(points), *candidates.untold, *_kept_groups(start, fit)]
    if distinct > len(free.coefficient) + 4 and rms > max(1.5 * free_rms, free_rms + 0.05):
        cautions.append(
            f"the row misses by {rms:.2f} points rms where a form free in current and voltage misses by "
            f"{free_rms:.2f}: the part loses otherwise than rows of {family} can say"
        )
    cautions += _light_weights(residuals)
    return FittedPart(
        part, points.file, start.name, like is None, fit.form.name, tuple(factors), fit.tried, 100 * fit.left_out,
        tuple(residuals),
        worst, rms, 100 * rms_loss, float(np.nanmax(np.abs(free_errors))), free_rms, tuple(columns),
        kept_columns(start, part, tuple(columns)), reach(part, points), tuple(cautions),
    )  # fmt: skip


def _fit(
    base: Part, points: MeasuredPoints, losses_of: PartLosses, weight: FloatArray, random: np.random.Generator,
    notebook: Notebook,
) -> tuple[Fit, Candidates, dict[str, Any]]:  # fmt: skip
    """Return the chosen fit, the candidates and the row's fitted columns."""
    setting = settings(points)
    distinct = int(setting.max()) + 1
    if not isinstance(base, BuckStage):
        candidates = converter_candidates(base, points, losses_of)
        forms = [form for form in candidates.forms if form.numbers < distinct]
        fit = choose(forms, points.loss_w, weight, setting, random)
        return fit, candidates, candidates.columns_of(fit)
    candidates = buck_candidates(base, points, losses_of)
    forms = [form for form in candidates.forms if form.numbers < distinct]
    over = [line for line, rest in zip(points.lines, _least_offset(forms, points) - points.loss_w, strict=True)
            if rest > 0]  # fmt: skip
    if 2 * len(over) > len(points):
        notebook.problem(
            f"row {over[0]}",
            f"inductor '{base.inductor}' and input capacitor alone lose more than was measured here and at "
            f"{len(over) - 1} other points; name a row with the right inductor by --like",
        )
        raise InputError(notebook.problems)
    fit = choose(forms, points.loss_w, weight, setting, random)
    chosen, row = fit.form.terms, base
    for _ in range(SETTLING):
        row = base.model_copy(update=candidates.columns_of(fit))
        settled = buck_candidates(row, points, losses_of)
        form = next((form for form in settled.forms if form.terms == chosen), None)
        if form is None:  # a group came to nothing and has left
            break
        again = fit_form(form, points.loss_w, weight)
        fit = Fit(fit.form, {name: fit.coefficient[name] * again.coefficient[name] for name in chosen}, {},
                  again.loss_w, again.robust_weight, fit.left_out, fit.tried)  # fmt: skip
    return fit, candidates, candidates.columns_of(fit)


def _least_offset(forms: Sequence[Any], points: MeasuredPoints) -> FloatArray:
    """Return the loss (points,) that no candidate can scale."""
    offsets = np.stack([np.broadcast_to(form.offset, len(points)) for form in forms])
    least: FloatArray = offsets.min(axis=0)
    return least


def _checked(part: Part, columns: dict[str, Any], notebook: Notebook) -> Part:
    """Return the row with columns changed and rounded, checked like a row of the catalogue.

    Raises
    ------
    InputError : a column is out of the range of the family
    """
    rounded = {key: float(f"{value:.{DIGITS}g}") if isinstance(value, float) else value
               for key, value in columns.items()}  # fmt: skip
    values = {**part.model_dump(), **rounded}
    found = validated(FAMILIES[part.family], values, lambda key: (notebook.file, f"fitted column {key}"), notebook)
    if found is not None:
        check_family(found, notebook.file, 0, notebook)
    if found is None or notebook.problems:
        raise InputError(notebook.problems)
    return found


def _residuals(
    part: Part, points: MeasuredPoints, losses_of: PartLosses, robust: FloatArray
) -> tuple[list[Residual], float]:
    """Return every point against the row as it is written, and the rms of relative loss error."""
    found = losses_of(part, points.input_v, points.output_v, points.current_a, points.temperature_degc)
    fitted = sum(found.values(), np.zeros(len(points)))
    before, after = points.efficiency(points.loss_w), points.efficiency(fitted)
    loaded = points.output_w > 0
    error = np.where(loaded, 100 * (after - before), np.nan)
    rows = [
        Residual(line, *(float(value) for value in values))
        for line, *values in zip(
            points.lines, points.input_v, points.output_v, points.current_a, points.loss_w, fitted, before, after,
            error, robust, strict=True,
        )
    ]  # fmt: skip
    relative = (fitted - points.loss_w) / points.loss_w
    return rows, float(np.sqrt(np.mean(relative**2)))


def _kept_groups(like: Part, fit: Fit) -> list[str]:
    """Name the mechanisms of a buck stage that the points gave no reason to change."""
    if not isinstance(like, BuckStage):
        return []
    kept = [name for name in BUCK_GROUPS if name not in fit.form.terms]
    words = f"the points tell nothing of them that {like.name} does not"
    return [f"kept as they are: {', '.join(kept)}; {words}"] if kept else []


def _light_weights(residuals: Sequence[Residual]) -> list[str]:
    """Name points that counted less than half because they stand apart."""
    apart = [item for item in residuals if item.weight < 0.5]
    if not apart:
        return []
    rows = ", ".join(str(item.line) for item in apart[:8]) + (" ..." if len(apart) > 8 else "")
    word = "point counts" if len(apart) == 1 else "points count"
    return [f"{len(apart)} {word} less than half because far from the rest (row {rows})"]
