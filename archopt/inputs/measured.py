"""Measured points of one converter or stage: read from a CSV, every fault told at once with its row and column."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from pathlib import Path

import numpy as np

from archopt.errors import InputError, Problem
from archopt.inputs.parts import BusConverter, Part
from archopt.inputs.problems import Notebook, brief, nearest
from archopt.inputs.text_files import CsvRows, read_csv
from archopt.physics.arrays import FloatArray, IntArray
from archopt.physics.measured import EDGE_WIDTH, LossTable, beyond_table, table_loss_w

NEEDED = ("input_voltage_v", "output_voltage_v", "current_a")
RESULTS = ("efficiency", "loss_w")
OPTIONAL = ("temperature_degc",)
UNIT = {"input_voltage_v": "V", "output_voltage_v": "V", "current_a": "A", "loss_w": "W", "temperature_degc": "degC"}
#: Local air at the bench where the points do not say (degC).
BENCH_DEGC = 25.0
#: Bounds that catch a wrong magnitude.
MOST_V, MOST_A, MOST_W, LEAST_EFFICIENCY = 1000.0, 10000.0, 100000.0, 0.01
#: Spread of local air (K) within which points make one table.
TABLE_AIR_K = 10.0
#: Settings closer than this are one level: a bench supply does not return to the same millivolt.
LEVEL_WIDTH = 0.03


@dataclass(frozen=True)
class MeasuredPoints:
    """Points of one unit (one phase of a buck stage); every array has shape (points,).

    lines are the rows of the file; input_v, output_v, current_a, loss_w (W) and temperature_degc, the local air.
    temperature_stated is False where the file has no temperatures and those of :data:`BENCH_DEGC` were taken.
    """

    file: str
    lines: tuple[int, ...]
    input_v: FloatArray
    output_v: FloatArray
    current_a: FloatArray
    loss_w: FloatArray
    temperature_degc: FloatArray
    temperature_stated: bool = True

    def __len__(self) -> int:
        return len(self.lines)

    @property
    def output_w(self) -> FloatArray:
        """Output power (W) of each point."""
        return self.output_v * self.current_a

    def efficiency(self, loss_w: FloatArray) -> FloatArray:
        """Efficiency (0 to 1) of each point, did it lose ``loss_w``."""
        total: FloatArray = self.output_w / (self.output_w + loss_w)
        return total


def level_numbers(values: FloatArray, width: float = LEVEL_WIDTH) -> IntArray:
    """Return to which level each value (points,) belongs, counted from the lowest.

    A new level starts where a value is more than ``width`` (relative) above the one before it in order.
    """
    order = np.argsort(values, kind="stable")
    ordered = values[order]
    starts = np.concatenate(([False], ordered[1:] - ordered[:-1] > width * np.abs(ordered[1:])))
    numbers: IntArray = np.empty(len(values), dtype=np.int_)
    numbers[order] = np.cumsum(starts)
    return numbers


def level_means(values: FloatArray, width: float = LEVEL_WIDTH) -> FloatArray:
    """Return the mean value of each level, rising."""
    numbers = level_numbers(values, width)
    return np.array([values[numbers == level].mean() for level in range(int(numbers.max()) + 1)])


def settings(points: MeasuredPoints) -> IntArray:
    """Return the number of the setting each point belongs to: repeats of one setting share a number."""
    numbers = np.stack([level_numbers(v) for v in (points.input_v, points.output_v, points.current_a)], axis=1)
    return np.unique(numbers, axis=0, return_inverse=True)[1].reshape(-1).astype(np.int_)


def read_points(path: str | Path, units: int = 1, shown: str = "") -> MeasuredPoints:
    """Return the measured points of a CSV file, per unit.

    Parameters
    ----------
    path : CSV with input_voltage_v, output_voltage_v, current_a, either efficiency (0 to 1) or loss_w, and
        optionally temperature_degc, the local air (25 degC where the column is not there)
    units : how many units or phases shared the current when it was measured; current and loss are divided by it
    shown : the path as problems name it; as given where empty

    Raises
    ------
    InputError : with every fault of the file
    """
    notebook = Notebook(shown or str(path))
    table = read_csv(Path(path), notebook.file, "measured points", notebook)
    if table is None:
        raise InputError(notebook.problems)
    _check_header(table.header, notebook)
    if notebook.problems:
        raise InputError(notebook.problems)
    if not table.rows:
        notebook.problem("", "has no points below its header")
    numbers = [_numbers(table, line, cells, notebook) for line, cells in table.rows]
    for (line, _), values in zip(table.rows, numbers, strict=True):
        _check_point(line, values, notebook)
    if notebook.problems:
        raise InputError(notebook.problems)
    column = {name: np.array([values[name] for values in numbers]) for name in table.header}
    current = column["current_a"]
    if "loss_w" in column:
        loss = column["loss_w"]
    else:
        loss = column["output_voltage_v"] * current * (1.0 / column["efficiency"] - 1.0)
    stated = "temperature_degc" in column
    return MeasuredPoints(
        file=notebook.file,
        lines=tuple(line for line, _ in table.rows),
        input_v=column["input_voltage_v"],
        output_v=column["output_voltage_v"],
        current_a=current / units,
        loss_w=loss / units,
        temperature_degc=column["temperature_degc"] if stated else np.full(len(current), BENCH_DEGC),
        temperature_stated=stated,
    )


def _check_header(header: Sequence[str], notebook: Notebook) -> None:
    """Note columns that are missing, unknown, or say the same twice."""
    known = (*NEEDED, *RESULTS, *OPTIONAL)
    for name in dict.fromkeys(header):
        if name not in known:
            notebook.problem(f"row 1, column {name or '(no name)'}", f"unknown; {nearest(name, known)}")
    missing = [name for name in NEEDED if name not in header]
    if missing:
        notebook.problem("row 1", f"column {', '.join(missing)} missing")
    if not any(name in header for name in RESULTS):
        notebook.problem("row 1", "column efficiency (0 to 1) or loss_w missing")
    if all(name in header for name in RESULTS):
        notebook.problem("row 1", "has both efficiency and loss_w; keep the one that was measured")


def _numbers(table: CsvRows, line: int, cells: Sequence[str], notebook: Notebook) -> dict[str, float]:
    """Return the numbers of one row; a cell that holds none is noted and left out."""
    values: dict[str, float] = {}
    for column, cell in zip(table.header, cells, strict=True):
        unit = UNIT.get(column, "")
        place = f"row {line}, column {column}"
        try:
            value = float(cell)
        except ValueError:
            found = "an empty cell" if cell == "" else brief(cell)
            notebook.problem(place, f"needs a number{f' in {unit}' if unit else ''}, found {found}")
            continue
        if math.isfinite(value):
            values[column] = value
        else:
            notebook.problem(place, f"{brief(cell)} is not a finite number")
    return values


def _check_point(line: int, values: dict[str, float], notebook: Notebook) -> None:
    """Note what no measured point can be."""

    def note(column: str, message: str) -> None:
        notebook.problem(f"row {line}, column {column}", message)

    for column in ("input_voltage_v", "output_voltage_v"):
        if not 0 < values.get(column, 1.0) <= MOST_V:
            note(column, f"{values[column]:g} V is out of range; it must be above 0 and at most {MOST_V:g} V")
    current = values.get("current_a")
    if current is not None and not 0 <= current <= MOST_A:
        note("current_a", f"{current:g} A is out of range; it must be 0 to {MOST_A:g} A")
    efficiency = values.get("efficiency")
    if efficiency is not None:
        if efficiency > 1:
            meant = f"; if {efficiency:g} % was meant, write {efficiency / 100:g}" if efficiency <= 100 else ""
            note("efficiency", f"{efficiency:g} is above 1{meant}")
        elif efficiency == 1:
            note("efficiency", "is 1, no loss at all; nothing can be fitted to it")
        elif efficiency < LEAST_EFFICIENCY:
            need = f"it must be at least {LEAST_EFFICIENCY:g} (no load: give loss_w instead)"
            note("efficiency", f"{efficiency:g} is out of range; {need}")
        if current == 0:
            note("current_a", "is 0 A, where efficiency says nothing; give loss_w instead of efficiency")
    loss = values.get("loss_w")
    if loss is not None and not 0 < loss <= MOST_W:
        note("loss_w", f"{loss:g} W is out of range; a loss is above 0 and at most {MOST_W:g} W")
    temperature = values.get("temperature_degc")
    if temperature is not None and not -60 <= temperature <= 150:
        note("temperature_degc", f"{temperature:g} degC is out of range; it must be -60 to 150, the local air")


def loss_table(points: MeasuredPoints, output_follows: bool = False) -> LossTable:
    """Return the points as a table over input voltage, output voltage and current, repeats averaged.

    Parameters
    ----------
    output_follows : of a fixed ratio, whose output is what the input makes of it: a table over input and current

    Raises
    ------
    InputError : the points do not fill the grid (every missing setting is named), or the local air was not one
    """
    axes = (points.input_v, points.output_v, points.current_a)
    widths = (LEVEL_WIDTH, math.inf if output_follows else LEVEL_WIDTH, LEVEL_WIDTH)
    numbers = [level_numbers(values, width) for values, width in zip(axes, widths, strict=True)]
    means = [level_means(values, width) for values, width in zip(axes, widths, strict=True)]
    total = np.zeros([len(mean) for mean in means])
    count = np.zeros_like(total)
    np.add.at(total, tuple(numbers), points.loss_w)
    np.add.at(count, tuple(numbers), 1.0)
    notebook = Notebook(points.file)
    low, high = float(points.temperature_degc.min()), float(points.temperature_degc.max())
    if high - low > TABLE_AIR_K:
        message = f"runs from {low:g} to {high:g} degC; a table holds for one local air, within {TABLE_AIR_K:g} K"
        notebook.problem("column temperature_degc", message)
    missing = np.argwhere(count == 0)
    for at in missing[:20]:
        volts_in, volts_out, amperes = (mean[level] for mean, level in zip(means, at, strict=True))
        place = f"{volts_in:.4g} V in, {volts_out:.4g} V out, {amperes:.4g} A"
        notebook.problem("", f"no point at {place}; a table needs every combination of its levels")
    if len(missing) > 20:
        notebook.problem("", f"{len(missing) - 20} more combinations have no point")
    if notebook.problems:
        raise InputError(notebook.problems)
    local = float(points.temperature_degc.mean())
    return LossTable(means[0], means[1], means[2], total / count, local, output_follows)


def part_table(part: Part, points: MeasuredPoints) -> LossTable:
    """Return the loss table of a part's points.

    Raises
    ------
    InputError : no table comes of them, or the part's own ranges reach beyond it, where nothing was measured
    """
    fixed_ratio = isinstance(part, BusConverter) and part.kind == "fixed_ratio"
    table = loss_table(points, fixed_ratio)
    values = part.model_dump()
    current = "max_current_a" if "max_current_a" in values else "phase_current_a"
    notebook = Notebook(points.file)
    if not table.current_a[-1] > 0:
        raise InputError([Problem(points.file, "column current_a", "has no loaded point")])
    for low, high in (("input_min_v", "input_max_v"), ("output_min_v", "output_max_v"), (current, current)):
        which = {"input_max_v": 0, "output_max_v": 1, current: 2}[high]
        axis = (table.input_v, table.output_v, table.current_a)[which]
        for column in dict.fromkeys((low, high)):
            at = [axis[-1] for axis in (table.input_v, table.output_v, table.current_a)]
            at[which] = values[column]
            if beyond_table(table, *at)[which] > EDGE_WIDTH:
                message = f"{part.name} is stated to {column} {values[column]:g}, measured {axis[0]:g} to {axis[-1]:g}"
                notebook.problem("", f"{message}; a measured part is used only where it was measured")
    if notebook.problems:
        raise InputError(notebook.problems)
    return table


def named_table(
    part: Part, path: Path, shown: str, place: tuple[str, str], notebook: Notebook
) -> LossTable | None:
    """Return the loss table a catalogue row names, or None after noting every fault of it.

    Parameters
    ----------
    path, shown : the file of points, and its path as problems name it
    place : file and place of the row that names it
    """
    if not path.is_file():
        notebook.problem(place[1], f"there is no file {shown}", place[0])
        return None
    try:
        return part_table(part, read_points(path, shown=shown))
    except InputError as error:
        for problem in error.problems:
            notebook.problem(problem.place, problem.message, problem.file)
        return None


def table_left_out_points(table: LossTable) -> float:
    """Return the worst error, in points of efficiency, of inner levels predicted from their neighbours.

    What linear interpolation may miss between levels is less: the gap is twice as wide when one is left out. nan
    where no axis has three levels.
    """
    worst = [float("nan")]
    axes = (table.input_v, table.output_v, table.current_a)
    at = np.meshgrid(*axes, indexing="ij")
    for axis, levels in enumerate(axes):
        for level in range(1, len(levels) - 1):
            kept = [np.delete(values, level) if which == axis else values for which, values in enumerate(axes)]
            thinned = LossTable(kept[0], kept[1], kept[2], np.delete(table.loss_w, level, axis=axis))
            place = [np.take(values, level, axis=axis) for values in at]
            guessed, _ = table_loss_w(thinned, place[0], place[1], place[2])
            output_w, true = place[1] * place[2], np.take(table.loss_w, level, axis=axis)
            loaded = output_w > 0
            share = output_w[loaded] / (output_w[loaded] + guessed[loaded])
            error = np.abs(share - output_w[loaded] / (output_w[loaded] + true[loaded]))
            worst.append(100 * float(np.max(error, initial=0.0)))
    return float(np.nanmax(worst)) if len(worst) > 1 else float("nan")
