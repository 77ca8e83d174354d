"""Where a fitted row may be used, what is refused, and where the points are thin."""

from __future__ import annotations

import math
from collections.abc import Mapping
from itertools import pairwise
from typing import Any

import numpy as np

from archopt.inputs.measured import MeasuredPoints, level_means, settings
from archopt.inputs.parts import BuckStage, BusConverter, Part
from archopt.inputs.problems import Notebook, shown
from archopt.physics.arrays import FloatArray

#: A range may go beyond the points by so much (relative): the ends of a range are seldom hit exactly.
RANGE_WIDTH = 0.05
#: Numbers of the simplest form (a constant and one term of current) and one point more.
LEAST_POINTS = 4
#: Gap between neighbouring loads (of the largest) that counts as thin, and the lowest load wanted.
THIN_GAP = 0.35
THIN_LOAD = 0.15


def current_column(part: Part) -> str:
    """Name of the column that holds the rated current of one unit."""
    return "max_current_a" if isinstance(part, BusConverter) else "phase_current_a"


def refuse_what_cannot_be_fitted(
    points: MeasuredPoints, family: str, input_range_v: tuple[float, float] | None,
    output_range_v: tuple[float, float] | None, notebook: Notebook,
) -> None:  # fmt: skip
    """Note every reason why the points support no row, or not in the range asked for."""
    distinct = int(settings(points).max()) + 1
    if distinct < LEAST_POINTS:
        found = f"{distinct} different {'point' if distinct == 1 else 'points'}"
        message = f"has {found}; at least {LEAST_POINTS} are needed, one more than terms"
        notebook.problem("", message)
    if len(level_means(points.current_a)) < 2:
        notebook.problem("column current_a", "has one current; loss over load cannot be told from it")
    if not np.any(points.output_w > 0):
        notebook.problem("column current_a", "has no loaded point")
    if family == "buck_stages":
        for line, low, high in zip(points.lines, points.output_v, points.input_v, strict=True):
            if low >= high:
                notebook.problem(
                    f"row {line}, column output_voltage_v",
                    f"{low:g} V is not below the input {high:g} V; a buck stage cannot be fitted to it",
                )
    for words, asked, values in (("input", input_range_v, points.input_v), ("output", output_range_v, points.output_v)):
        if asked is not None:
            _refuse_range(words, asked, values, notebook)


def _refuse_range(words: str, asked: tuple[float, float], values: FloatArray, notebook: Notebook) -> None:
    """Note a range that the points do not cover."""
    low, high, least, most = *asked, float(values.min()), float(values.max())
    place = f"--{words}-v"
    if not 0 < low <= high or not math.isfinite(high):
        notebook.problem(place, f"{low:g} to {high:g} V is no range; write the lower voltage first, above 0")
    elif low < least * (1 - RANGE_WIDTH) or high > most * (1 + RANGE_WIDTH):
        what = f"{least:.4g} to {most:.4g} V were measured"
        if len(level_means(values)) == 1:
            what = f"one {words} voltage, {np.mean(values):.4g} V, was measured, which says nothing of others"
        notebook.problem(place, f"{low:g} to {high:g} V is asked for, but {what}; loss is not extrapolated")


def range_columns(
    like: Part, points: MeasuredPoints, input_range_v: tuple[float, float] | None,
    output_range_v: tuple[float, float] | None,
) -> dict[str, Any]:  # fmt: skip
    """Return the row's range and rating columns: what was measured or asked for within it, never more."""
    values = like.model_dump()
    columns: dict[str, Any] = {}
    sides = (("input", input_range_v, points.input_v), ("output", output_range_v, points.output_v))
    for words, asked, measured in sides:
        low, high = asked if asked is not None else (_rounded(measured.min()), _rounded(measured.max()))
        columns |= {f"{words}_min_v": low, f"{words}_max_v": high}
        if f"{words}_nominal_v" in values:
            nominal = values[f"{words}_nominal_v"]
            columns[f"{words}_nominal_v"] = nominal if low <= nominal <= high else _rounded(np.median(measured))
            columns[f"{words}_nominal_v"] = min(max(columns[f"{words}_nominal_v"], low), high)
    current = _rounded(points.current_a.max())
    columns[current_column(like)] = current
    if isinstance(like, BuckStage):  # the charge is stated at the rated current, in proportion to it
        columns["recovery_nc"] = like.recovery_nc * current / like.phase_current_a
    if isinstance(like, BusConverter):
        columns["max_power_w"] = _rounded(points.output_w.max())
        overload = like.overload_a * min(current / like.max_current_a, 1.0)
        columns["overload_a"] = max(_rounded(overload), current)
    return columns


def _rounded(value: Any) -> float:
    """Return a measured end as it is written."""
    return float(f"{float(value):.4g}")


def nearest_row(rows: Mapping[str, Part], points: MeasuredPoints) -> Part:
    """Return the row nearest in rated current and voltages (in the ratio of each), the first of equal ones."""

    def distance(part: Part) -> float:
        values = part.model_dump()
        total = abs(math.log(values[current_column(part)] / points.current_a.max()))
        for words, measured in (("input", points.input_v), ("output", points.output_v)):
            low, high = values[f"{words}_min_v"], values[f"{words}_max_v"]
            middle = float(np.median(measured))
            total += 3.0 * abs(math.log(min(max(middle, low), high) / middle)) + 0.3 * abs(
                math.log(math.sqrt(low * high) / middle)
            )
        return total

    return min(rows.values(), key=distance)


def reach(part: Part, points: MeasuredPoints) -> tuple[tuple[str, float, float, str], ...]:
    """Return (what, lowest, highest, unit) of where the row may be used."""
    values = part.model_dump()
    loaded = points.current_a[points.current_a > 0]
    lowest = 0.0 if np.any(points.current_a == 0) else float(loaded.min())
    return (
        ("input voltage", values["input_min_v"], values["input_max_v"], "V"),
        ("output voltage", values["output_min_v"], values["output_max_v"], "V"),
        ("current of one unit", lowest, values[current_column(part)], "A"),
        ("local air", float(points.temperature_degc.min()), float(points.temperature_degc.max()), "degC"),
    )


def kept_columns(like: Part, part: Part, measured: tuple[str, ...]) -> tuple[tuple[str, str], ...]:
    """Return (column, value) of what the row has from ``like`` because nothing measured tells it."""
    before, after = like.model_dump(), part.model_dump()
    own = {*measured, "name", "source", "part", "spread_percent"}
    ranges = {key for key in after if key.startswith(("input_m", "output_m")) and key.endswith("_v")}
    told = own | ranges | {current_column(part), "max_power_w", "input_nominal_v", "output_nominal_v"}
    scaled = {"overload_a", "recovery_nc"}  # stated at the rated current and kept in proportion to it
    return tuple(
        (key, shown(value) + ("" if before[key] == value else " (in proportion to the rated current)"))
        for key, value in after.items()
        if key not in told and (before[key] == value or key in scaled)
    )


def thin_places(points: MeasuredPoints) -> list[str]:
    """Name where the points are thin."""
    found = []
    for words, values in (("input", points.input_v), ("output", points.output_v)):
        levels = level_means(values)
        if len(levels) == 2:
            found.append(f"two {words} voltages, {levels[0]:.4g} and {levels[1]:.4g} V: what lies between is assumed")
    top = float(points.current_a.max())
    loads = np.unique(points.current_a)
    lowest = float(loads[0])
    if lowest > THIN_LOAD * top:
        share = 100 * lowest / top
        found.append(f"no point below {lowest:.4g} A ({share:.0f} % of the highest): light load is assumed")
    for before, after in pairwise(loads):
        if after - before > THIN_GAP * top:
            found.append(f"no point between {before:.4g} and {after:.4g} A")
    if not points.temperature_stated:
        found.append(f"no temperature_degc: local air of {points.temperature_degc[0]:g} degC assumed at the bench")
    return found
