"""From a file of measured points to a row in a catalogue folder: read, fit, write."""

from __future__ import annotations

from dataclasses import dataclass, replace
from datetime import date
from pathlib import Path

import numpy as np

from archopt.errors import InputError, OutputError, Problem
from archopt.inputs.fitting_part import FittedPart, fit_part
from archopt.inputs.measured import MeasuredPoints, part_table, read_points, table_left_out_points
from archopt.inputs.measured_catalogue import read_catalogue
from archopt.inputs.measured_files import Places, check_name, places, write_part
from archopt.physics.measured import LossTable, table_loss_w
from archopt.present.part_losses import RowLosses
from archopt.present.plain import Plain, plain


@dataclass(frozen=True)
class FitRequest:
    """What is asked: points, family and name of the row, where it goes, and how.

    like is a row that gives what measurement cannot tell; input_v and output_v are ranges (V) the row is to be
    used in; units shared the measured current; table asks for the loss table beside the row; seed deals points
    into parts that are left out.
    """

    points: Path
    family: str
    name: str
    out: Path
    like: str | None = None
    input_v: tuple[float, float] | None = None
    output_v: tuple[float, float] | None = None
    units: int = 1
    table: bool = False
    replace: bool = False
    seed: int = 1


@dataclass(frozen=True)
class FitResult:
    """A fitted part, where it went and the files written."""

    fitted: FittedPart
    places: Places
    written: tuple[Path, ...]

    def as_dict(self) -> dict[str, Plain]:
        """Plain data of everything."""
        return {"fit": plain(self.fitted), "files": plain(self.written)}


def fit_to_files(request: FitRequest) -> FitResult:
    """Fit measured points and write the row with its source.

    Raises
    ------
    InputError : the points or what is asked of them, with every reason
    OutputError : a row of that name is there already, or a file cannot be written
    """
    points = read_points(request.points, request.units)
    check_name(request.name, str(request.points))
    place = places(request.out, request.family, request.name)
    own = place.root if place.root is not None and place.root.is_dir() else None
    catalogue = read_catalogue(own)
    holder = next((family for family, rows in catalogue.families.items() if request.name in rows), None)
    if holder is not None and holder != request.family:
        message = f"'{request.name}' is the name of a part of {holder}; names are unique over the catalogue"
        raise InputError([Problem(str(request.points), "--name", message)])
    if holder is not None and own is not None and not request.replace:
        file = catalogue.file_of[request.name]
        if file.startswith(str(own)):
            raise OutputError(f"{file} has '{request.name}' already; replace it by --replace or give another name")
    fitted = fit_part(
        points, request.family, request.name, catalogue, RowLosses(catalogue), np.random.default_rng(request.seed),
        request.like, request.input_v, request.output_v,
    )  # fmt: skip
    if holder is not None and not catalogue.file_of[request.name].startswith(str(own)):
        fitted = replace(fitted, cautions=(*fitted.cautions, f"takes the place of {request.name} of the catalogue"))
    table = part_table(fitted.part, points) if request.table else None
    if table is not None:
        named = place.table.relative_to(place.sources.parent).as_posix()
        fitted = replace(fitted, part=fitted.part.model_copy(update={"measured_points": named}))
        fitted = replace(fitted, cautions=(*fitted.cautions, table_words(points, table)))
    title = (
        f"Loss fitted to {len(points)} measured points of {request.points.name}, worst error "
        f"{fitted.worst_points:.2f} points of efficiency; what was not measured from {fitted.like}"
    )
    written = write_part(place, fitted.part, title, date.today(), table, request.replace)
    return FitResult(fitted, place, written)


def table_words(points: MeasuredPoints, table: LossTable) -> str:
    """How well the loss table, linear between its points, gives the points back, and who reads it."""
    loss, inside = table_loss_w(table, points.input_v, points.output_v, points.current_a)
    error = 100 * np.abs(points.efficiency(loss) - points.efficiency(points.loss_w))[points.output_w > 0]
    gap = table_left_out_points(table)
    between = "" if np.isnan(gap) else f", and inner levels from their neighbours within {gap:.2f}"
    return (
        f"the loss table gives {int(inside.sum())} of {len(points)} points back within {float(error.max()):.2f} "
        f"points of efficiency{between}; a search reads the table, never beyond it, and of the row what no table tells"
    )
