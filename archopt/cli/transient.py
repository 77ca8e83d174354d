"""``archopt transient``: a rail, a bus or a jump of a design in time."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from archopt.cli.words import DesignArgument, JsonOption, ResultArgument, print_json


def transient_command(
    directory: ResultArgument,
    design: DesignArgument,
    rail: Annotated[str | None, typer.Option(metavar="RAIL", help="Look at one rail's step and release.")] = None,
    bus: Annotated[str | None, typer.Option(metavar="BUS", help="Look at bus_a or bus_b at its largest step.")] = None,
    before: Annotated[str | None, typer.Option("--from", metavar="STATE", help="State the load comes from.")] = None,
    after: Annotated[str | None, typer.Option("--to", metavar="STATE", help="State the load goes to.")] = None,
    png: Annotated[Path | None, typer.Option(metavar="FILE", help="Draw the waveforms into a picture too.")] = None,
    as_json: JsonOption = False,
) -> None:
    """Integrate a rail, a bus or a jump of a design in time.

    Prints the worst point against its closed form and limit.

    Without --rail or --bus everything on the bus jumps, from the band with the least room.
    """
    from archopt.present import files
    from archopt.present.front import Front
    from archopt.present.tables import console_for, put
    from archopt.present.waveform_view import view_sections, wave_view, write_png

    front = Front(files.read(directory, archive=False), directory)
    view = wave_view(front.record.problem, front.design(design).data, rail, bus, before, after)
    if png is not None:
        write_png(view, png)
    if as_json:
        print_json(view.as_dict())
        return
    put(console_for(), view_sections(view))
    if png is not None:
        typer.echo(f"wrote {png}")
