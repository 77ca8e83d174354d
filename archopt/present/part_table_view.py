"""A measured part's loss table beside its row: how far the row is from what was measured, level by level."""

from __future__ import annotations

from collections.abc import Iterable
from pathlib import Path

import numpy as np
from rich.console import RenderableType

from archopt.inputs.measured import MeasuredPoints, read_points
from archopt.inputs.measured_files import table_file
from archopt.inputs.parts import Part
from archopt.inputs.resolved import Catalogue
from archopt.physics.arrays import FloatArray
from archopt.present.amounts import fixed, number, signed
from archopt.present.part_losses import RowLosses
from archopt.present.plain import Plain, plain
from archopt.present.tables import section, table


def kept_points(folder: Path | None, part: Part) -> MeasuredPoints | None:
    """Return the loss table kept for a part in a folder of own parts, None where there is none.

    Raises
    ------
    InputError : the file has faults
    """
    if folder is None or not table_file(folder, part.name).is_file():
        return None
    return read_points(table_file(folder, part.name))


def row_errors(catalogue: Catalogue, part: Part, points: MeasuredPoints) -> FloatArray:
    """Return efficiency by the row less that of the table, in points of efficiency, nan at no load; (points,)."""
    found = RowLosses(catalogue)(part, points.input_v, points.output_v, points.current_a, points.temperature_degc)
    loss = sum(found.values(), np.zeros(len(points)))
    loaded = points.output_w > 0
    error = np.full(len(points), np.nan)
    error[loaded] = 100 * (points.efficiency(loss) - points.efficiency(points.loss_w))[loaded]
    return error


def table_sections(catalogue: Catalogue, part: Part, points: MeasuredPoints) -> Iterable[RenderableType]:
    """The error of the row at every point of the table: one line a voltage pair, one column a current."""
    error = row_errors(catalogue, part, points)
    volts = sorted(set(zip(points.input_v.tolist(), points.output_v.tolist(), strict=True)))
    loads = sorted(set(points.current_a.tolist()))
    at = {
        (volts_in, out, load): value
        for volts_in, out, load, value in zip(
            points.input_v.tolist(), points.output_v.tolist(), points.current_a.tolist(), error.tolist(), strict=True
        )
    }
    rows = [
        (number(volts_in), number(out), *(signed(at.get((volts_in, out, load)), 2) for load in loads))
        for volts_in, out in volts
    ]
    worst, rms = float(np.nanmax(np.abs(error))), float(np.sqrt(np.nanmean(error**2)))
    reads = "the table, never beyond it" if part.name in catalogue.measured else "the row, not the table"
    words = f"worst {fixed(worst, 2)}, rms {fixed(rms, 2)}; a search reads {reads}"
    heads = ("input V", "output V", *(f"{number(load)} A" for load in loads))
    yield from section("Row less measured table, points of efficiency", words, table(heads, rows))


def table_data(catalogue: Catalogue, part: Part, points: MeasuredPoints | None) -> Plain:
    """Plain data of the table and the row's error, null where there is none."""
    if points is None:
        return None
    return plain(
        {
            "file": points.file, "input_v": points.input_v, "output_v": points.output_v,
            "current_a": points.current_a, "loss_w": points.loss_w, "error_points": row_errors(catalogue, part, points),
        }
    )  # fmt: skip
