"""``archopt copper``: what more or less copper of a design is worth."""

from __future__ import annotations

from typing import Annotated

import typer

from archopt.cli.words import DesignArgument, JsonOption, ResultArgument, print_json


def copper_command(
    directory: ResultArgument,
    design: DesignArgument,
    net: Annotated[str | None, typer.Option(metavar="NET", help="Only this net: bus_a, bus_b or a rail.")] = None,
    reoptimise: Annotated[
        bool, typer.Option("--reoptimise", help="Choose everything else again at every weight and pair.")
    ] = False,
    evaluations: Annotated[
        int, typer.Option(min=1, metavar="N", help="Designs evaluated a line with --reoptimise.")
    ] = 2000,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier CSV of this design.")] = False,
    as_json: JsonOption = False,
) -> None:
    """Ask what more or less copper of a design is worth.

    Sweeps weight and layer pairs: loss, cost, drop, heat, months to break even.

    Everything else stays as the design has it, or is chosen again. The points are written to copper_DESIGN.csv in DIR.
    """
    from archopt.present import files
    from archopt.present.copper_view import CopperRequest, ask_copper, copper_sections, write_copper
    from archopt.present.front import Front
    from archopt.present.tables import console_for, put

    front = Front(files.read(directory, archive=False), directory)
    answer, place = ask_copper(front, CopperRequest(directory, design, net, reoptimise, evaluations, replace))
    write_copper(answer, place)
    if as_json:
        print_json({**answer.as_dict(), "csv": str(place)})
        return
    put(console_for(), copper_sections(answer, front.record.currency))
    typer.echo(f"wrote {place}")
