"""Fitting loss terms to measured points: robust, nonnegative, as many terms as leaving points out supports."""

from __future__ import annotations

from collections.abc import Callable, Sequence
from dataclasses import dataclass, field
from itertools import product

import numpy as np
from scipy.optimize import minimize, nnls

from archopt.physics.arrays import FloatArray, IntArray

#: Residuals beyond so many standard deviations count linearly, not squared (Huber 1964).
HUBER = 2.0
#: Median absolute deviation to standard deviation of a normal distribution. Closed form.
MEDIAN_TO_DEVIATION = 1.4826
ROUNDS = 12
#: Up to so many settings each is left out in turn; beyond, the settings are dealt into ten parts.
LEAVE_ONE_OUT = 20
PARTS = 10
#: A form with fewer numbers is taken when its left-out error is no larger than this times the least one.
SIMPLER = 1.02
#: ... or when both errors are below any measurement (efficiency, 0 to 1).
NEGLIGIBLE = 1e-5
EXPONENT_RANGE = (-1.0, 4.0)
EXPONENT_STEP = 0.5
COARSE_EXPONENTS = tuple(float(value) for value in np.arange(-1.0, 4.01, EXPONENT_STEP))


@dataclass(frozen=True)
class Form:
    """One candidate: loss = offset + sum of coefficient x column, coefficients never negative.

    Parameters
    ----------
    name : what it is, in words
    terms : names of the columns
    columns : from the values of the free exponents to the columns (points, terms) in W
    exponents : names of the free exponents, searched in -1 to 4
    offset : loss (points,) in W that is taken as known
    """

    name: str
    terms: tuple[str, ...]
    columns: Callable[[tuple[float, ...]], FloatArray]
    exponents: tuple[str, ...] = ()
    offset: FloatArray | float = 0.0

    @property
    def numbers(self) -> int:
        """How many numbers are fitted."""
        return len(self.terms) + len(self.exponents)


@dataclass(frozen=True)
class Fit:
    """A fitted form: coefficient by term, exponent by name, loss (points,) in W, weight (points,) 0 to 1.

    left_out is the mean absolute error in efficiency (0 to 1) of points that were left out; tried lists
    (form, numbers fitted, left_out) of every candidate.
    """

    form: Form
    coefficient: dict[str, float]
    exponent: dict[str, float]
    loss_w: FloatArray
    robust_weight: FloatArray
    left_out: float = float("nan")
    tried: tuple[tuple[str, int, float], ...] = field(default=())


def efficiency_weight(output_w: FloatArray, loss_w: FloatArray) -> FloatArray:
    """Return what a watt of loss is worth in efficiency (1/W) at each point, (points,).

    Notes
    -----
    1 / input power: for efficiency above a half, within a factor of two of the derivative of efficiency. Near no
    load, where a point would drown all others, as if a twentieth of the largest output were drawn.
    """
    least = 0.05 * float(np.max(output_w))
    return 1.0 / np.maximum(output_w + loss_w, least + loss_w)


def nonnegative(columns: FloatArray, target: FloatArray, weight: FloatArray) -> tuple[FloatArray, FloatArray]:
    """Return coefficients (terms,) of the weighted robust nonnegative least squares, and robust weights (points,).

    Parameters
    ----------
    columns : (points, terms); target, weight : (points,)

    Notes
    -----
    Nonnegative least squares (Lawson and Hanson 1974) reweighted after Huber (1964), the deviation from the
    median of absolute residuals.
    """
    robust = np.ones(len(target))
    coefficient = _solve(columns, target, weight)
    for _ in range(ROUNDS):
        residual = np.abs((target - columns @ coefficient) * weight)
        bound = HUBER * max(MEDIAN_TO_DEVIATION * float(np.median(residual)), 1e-9)
        fresh = np.minimum(1.0, bound / np.maximum(residual, 1e-30))
        settled = bool(np.max(np.abs(fresh - robust)) < 1e-4)
        robust = fresh
        if settled:
            break
        coefficient = _solve(columns, target, weight * np.sqrt(robust))
    return coefficient, robust


def _solve(columns: FloatArray, target: FloatArray, weight: FloatArray) -> FloatArray:
    """Return the nonnegative coefficients (terms,), columns brought to one size first."""
    weighted = columns * weight[:, None]
    size = np.maximum(np.sqrt(np.einsum("pt,pt->t", weighted, weighted)), 1e-300)
    coefficient = nnls(weighted / size, target * weight, maxiter=50 * (columns.shape[1] + 1))[0]
    result: FloatArray = coefficient / size
    return result


def fit_form(form: Form, loss_w: FloatArray, weight: FloatArray) -> Fit:
    """Return one form fitted to all points; free exponents by a grid, then by simplex from its best.

    Parameters
    ----------
    loss_w : measured loss (points,) in W
    weight : worth of a watt at each point (points,)
    """
    target = loss_w - form.offset
    exponents = _grid_exponents(form, target, weight)
    if exponents:

        def misfit(values: FloatArray) -> float:
            return _misfit(form.columns(tuple(float(value) for value in values)), target, weight)

        start = np.array(exponents, dtype=np.float64)
        bounds = [EXPONENT_RANGE for _ in exponents]
        found = minimize(misfit, start, method="Nelder-Mead", bounds=bounds, tol=1e-3)
        exponents = tuple(float(np.round(value, 3)) for value in found.x)
    columns = form.columns(exponents)
    coefficient, robust = nonnegative(columns, target, weight)
    return Fit(
        form,
        dict(zip(form.terms, (float(value) for value in coefficient), strict=True)),
        dict(zip(form.exponents, exponents, strict=True)),
        form.offset + columns @ coefficient,
        robust,
    )


def _grid_exponents(form: Form, target: FloatArray, weight: FloatArray) -> tuple[float, ...]:
    """Return the exponents of the coarse grid that misfit least."""
    if not form.exponents:
        return ()
    candidates = list(product(COARSE_EXPONENTS, repeat=len(form.exponents)))
    misfits = [_misfit(form.columns(values), target, weight) for values in candidates]
    return candidates[int(np.argmin(misfits))]


def _misfit(columns: FloatArray, target: FloatArray, weight: FloatArray) -> float:
    """Sum of Huber losses of the weighted residuals after one nonnegative solution."""
    residual = np.abs((target - columns @ _solve(columns, target, weight)) * weight)
    bound = HUBER * max(MEDIAN_TO_DEVIATION * float(np.median(residual)), 1e-9)
    inner = np.minimum(residual, bound)
    return float(np.sum(inner * (residual - 0.5 * inner)))


def deal(setting: IntArray, random: np.random.Generator) -> list[FloatArray]:
    """Return the parts that are left out in turn, each a mask (points,); repeats of a setting stay together."""
    count = int(setting.max()) + 1
    if count <= LEAVE_ONE_OUT:
        part_of = np.arange(count)
    else:
        part_of = np.arange(count) % PARTS
        random.shuffle(part_of)
    return [part_of[setting] == part for part in range(int(part_of.max()) + 1)]


def left_out_error(form: Form, loss_w: FloatArray, weight: FloatArray, parts: Sequence[FloatArray]) -> float:
    """Return the mean absolute error in efficiency (0 to 1) of points predicted without them.

    Free exponents are searched anew without the points, on the coarse grid around those of all points.
    """
    target = loss_w - form.offset
    middle = _grid_exponents(form, target, weight)
    near = (-EXPONENT_STEP, 0.0, EXPONENT_STEP)
    candidates = [
        tuple(float(np.clip(m + s, *EXPONENT_RANGE)) for m, s in zip(middle, steps, strict=True))
        for steps in product(near, repeat=len(middle))
    ]
    errors = np.zeros(len(loss_w))
    for out in parts:
        kept = np.logical_not(out)
        exponents: tuple[float, ...] = ()
        if form.exponents:
            misfits = [_misfit(form.columns(values)[kept], target[kept], weight[kept]) for values in candidates]
            exponents = candidates[int(np.argmin(misfits))]
        columns = form.columns(exponents)
        coefficient, _ = nonnegative(columns[kept], target[kept], weight[kept])
        errors[out] = np.abs((target - columns @ coefficient) * weight)[out]
    return float(np.mean(errors))


def choose(
    forms: Sequence[Form], loss_w: FloatArray, weight: FloatArray, setting: IntArray, random: np.random.Generator
) -> Fit:
    """Return the fit of the form that predicts left-out points best; of nearly equal ones the simplest.

    Parameters
    ----------
    forms : candidates, at least one
    loss_w, weight : (points,); setting : number of each point's setting (points,)
    random : deals the settings into parts where there are many
    """
    parts = deal(setting, random)
    errors = [left_out_error(form, loss_w, weight, parts) for form in forms]
    enough = max(min(errors) * SIMPLER, NEGLIGIBLE)
    good = [at for at, error in enumerate(errors) if error <= enough]
    best = min(good, key=lambda at: (forms[at].numbers, errors[at]))
    fit = fit_form(forms[best], loss_w, weight)
    tried = tuple((form.name, form.numbers, error) for form, error in zip(forms, errors, strict=True))
    return Fit(fit.form, fit.coefficient, fit.exponent, fit.loss_w, fit.robust_weight, errors[best], tried)


def free_form(input_v: FloatArray, output_v: FloatArray, current_a: FloatArray, voltage: bool = True) -> Form:
    """Return constant, linear and square terms of current, each also with input and output voltage.

    More than a catalogue row holds: what it reaches tells whether the row's terms are the right ones. Without
    ``voltage`` the plain a + b I + c I^2.
    """
    size_i, size_o, size_a = (max(float(np.max(values)), 1e-30) for values in (input_v, output_v, current_a))
    volts, out, load = input_v / size_i, output_v / size_o, current_a / size_a
    loads = {"constant": np.ones_like(load), "linear": load, "square": load**2}
    factors = {"": np.ones_like(load)}
    if voltage:
        factors |= {" x input": volts, " x input^2": volts**2, " x output": out}
    columns = {f"{a}{b}": loads[a] * factors[b] for a in loads for b in factors}
    matrix = np.stack(list(columns.values()), axis=1)
    name = "current and voltages" if voltage else "current alone"
    return Form(name, tuple(columns), lambda _: matrix)
