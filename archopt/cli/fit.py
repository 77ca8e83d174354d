"""``archopt fit``: measured points to a catalogue row."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from archopt.cli.words import JsonOption, print_json


def fit_command(
    points: Annotated[Path, typer.Argument(metavar="POINTS", help="Measured points (CSV).", show_default=False)],
    family: Annotated[
        str, typer.Option(metavar="FAMILY", help="bus_converters, single_stages or buck_stages.", show_default=False)
    ],
    name: Annotated[str, typer.Option(metavar="NAME", help="Name of the new part.", show_default=False)],
    out: Annotated[
        Path, typer.Option(metavar="PART", help="CSV for its row, or a folder of own parts.", show_default=False)
    ],
    like: Annotated[
        str | None, typer.Option(metavar="PART", help="Part that gives what was not measured. [default: the nearest]")
    ] = None,
    input_v: Annotated[
        tuple[float, float] | None,
        typer.Option("--input-v", metavar="LOW HIGH", help="Input range of the row. [default: as measured]"),
    ] = None,
    output_v: Annotated[
        tuple[float, float] | None,
        typer.Option("--output-v", metavar="LOW HIGH", help="Output range of the row. [default: as measured]"),
    ] = None,
    units: Annotated[int, typer.Option(min=1, metavar="N", help="Units or phases that shared the current.")] = 1,
    table: Annotated[bool, typer.Option("--table", help="Keep the points as a loss table beside the row.")] = False,
    seed: Annotated[int, typer.Option(min=0, metavar="N", help="Seed of the points left out in turn.")] = 1,
    replace: Annotated[bool, typer.Option("--replace", help="Replace the part if it is there.")] = False,
    as_json: JsonOption = False,
) -> None:
    """Fit measured efficiency or loss to a catalogue row.

    POINTS has input_voltage_v, output_voltage_v, current_a, efficiency (0 to 1) or loss_w, and may have
    temperature_degc, the local air.
    """
    from archopt.present.fit_report import fit_sections
    from archopt.present.part_fitting import FitRequest, fit_to_files
    from archopt.present.tables import console_for, put

    asked = FitRequest(points, family, name, out, like, input_v, output_v, units, table, replace, seed)
    result = fit_to_files(asked)
    if as_json:
        print_json(result.as_dict())
    else:
        put(console_for(), fit_sections(result.fitted, result.written, result.places.root))
