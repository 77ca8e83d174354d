"""``archopt parts``: browse the catalogue."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from archopt.cli.words import JsonOption, print_json


def parts_command(
    family: Annotated[str | None, typer.Argument(metavar="FAMILY", help="Family of parts, or a part.")] = None,
    name: Annotated[str | None, typer.Argument(metavar="NAME", help="Part to show.")] = None,
    study: Annotated[
        Path | None, typer.Option("--study", metavar="STUDY", help="Count in the study's own parts.")
    ] = None,
    columns: Annotated[bool, typer.Option("--columns", help="Explain the columns of the family.")] = False,
    input_v: Annotated[
        float | None, typer.Option("--input-v", min=0.0, metavar="V", help="Takes this input voltage.")
    ] = None,
    output_v: Annotated[
        float | None, typer.Option("--output-v", min=0.0, metavar="V", help="Makes this output.")
    ] = None,
    current_a: Annotated[
        float | None, typer.Option("--current-a", min=0.0, metavar="A", help="Rated for this.")
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Browse the catalogue: families, rows, one part.

    For one part the voltages choose where its efficiency is shown.
    """
    from archopt.inputs.measured_catalogue import read_catalogue, study_catalogue
    from archopt.present.part_view import browse
    from archopt.present.tables import console_for, put

    catalogue, own = (read_catalogue(), None) if study is None else study_catalogue(study)
    wanted = {"input_v": input_v, "output_v": output_v, "current_a": current_a}
    answer = browse(catalogue, family, name, columns=columns, own=own, **wanted)
    if as_json:
        print_json(answer.data())
    else:
        put(console_for(), answer.sections())
