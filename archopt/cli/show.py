"""``archopt show``: a result again, or one design of it."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from archopt.cli.words import JsonOption, ResultArgument, print_json

if TYPE_CHECKING:
    from archopt.present.front import Front


def show_command(
    directory: ResultArgument,
    design: Annotated[
        str | None,
        typer.Argument(metavar="DESIGN", help="Name (D007), number, mark (knee) or incumbent."),
    ] = None,
    schedule: Annotated[
        Path | None,
        typer.Option(metavar="FILE", help="Write the design's voltage schedule as CSV instead of printing it."),
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Print a result again, or explain one design of it."""
    from archopt.present import files
    from archopt.present.adaptive_view import with_adaptive_limits
    from archopt.present.front import Design, Front
    from archopt.present.tables import console_for, put
    from archopt.present.terminal import print_front

    front = Front(files.read(directory, archive=design is None), directory)
    if schedule is not None:
        if design is None:
            raise typer.BadParameter("name the design whose schedule is wanted", param_hint="--schedule")
        write_schedule(front, design, schedule)
        return
    if design is None:
        if as_json:
            print_json(front.summary())
        else:
            print_front(console_for(), front.record, directory)
        return
    asked = front.design(design)
    chosen = Design(with_adaptive_limits(asked.data, asked.problem), asked.problem)
    if as_json:
        print_json(chosen.as_dict())
    else:
        put(console_for(), [chosen])


def write_schedule(front: Front, design: str, path: Path) -> None:
    """Write a design's voltage schedule as CSV and say so."""
    from archopt.present.schedule_file import write_rows
    from archopt.trade.schedule_rows import schedule_rows

    write_rows(schedule_rows(front.record.problem, front.design(design).data), path)
    typer.echo(f"wrote {path}")
