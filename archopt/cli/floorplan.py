"""``archopt floorplan``: a study's floorplan and its solved copper."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer

from archopt.cli.words import StudyArgument


def floorplan_command(
    study: StudyArgument,
    net: Annotated[
        str | None, typer.Option(metavar="NET", help="Draw this net's drop: bus_a, bus_b or a rail.")
    ] = None,
    density: Annotated[bool, typer.Option("--density", help="Draw current density rather than drop.")] = False,
    bus_v: Annotated[
        float | None, typer.Option("--bus-v", min=1.0, metavar="V", help="Bus voltage. [default: the habitual one]")
    ] = None,
    out: Annotated[
        Path | None, typer.Option("--out", "-o", metavar="FILE", help="PNG, SVG or PDF. [default: NAME_floorplan.png]")
    ] = None,
    replace: Annotated[bool, typer.Option("--replace", help="Replace the picture if it is there.")] = False,
) -> None:
    """Draw a floorplan; for one net its drop or density.

    Prints what the solved copper of every net amounts to.
    """
    from archopt import workflow
    from archopt.present.floorplan_view import draw_floorplan, floorplan_sections, picture_place
    from archopt.present.tables import console_for, put

    loaded = workflow.load(study)
    place = picture_place(loaded.study, out, net, density=density, replace=replace)
    draw_floorplan(loaded.study, loaded.catalogue, place, net, density=density, bus_v=bus_v)
    put(console_for(), floorplan_sections(loaded.study))
    typer.echo(f"wrote {place}")
