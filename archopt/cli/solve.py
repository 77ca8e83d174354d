"""``archopt solve``: search a study; print and write the front."""

from __future__ import annotations

import re
import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from archopt.cli.leaving import INTERRUPTED
from archopt.cli.stopping import StopRequest
from archopt.cli.words import JsonOption, StudyArgument, print_json
from archopt.errors import OutputError

if TYPE_CHECKING:
    from archopt.present.front import Front

RUNS = Path("runs")


def solve_command(
    study: StudyArgument,
    out: Annotated[
        Path | None,
        typer.Option("--out", "-o", metavar="DIR", help="Where the result goes. [default: runs/NAME]"),
    ] = None,
    seed: Annotated[
        int | None, typer.Option(min=0, metavar="N", help="Seed of the search. [default: the study's]")
    ] = None,
    evaluations: Annotated[
        int | None, typer.Option(min=1, metavar="N", help="Designs to try. [default: the study's]")
    ] = None,
    seconds: Annotated[float | None, typer.Option(min=1.0, metavar="S", help="End the search after S seconds.")] = None,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress, no tables; only the files.")] = False,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier result in DIR.")] = False,
    as_json: JsonOption = False,
) -> None:
    """Search all choices at once; print and write the front."""
    from archopt import workflow
    from archopt.present import files
    from archopt.present.front import Front
    from archopt.present.progress import SearchProgress
    from archopt.present.tables import console_for
    from archopt.present.terminal import print_front

    loaded = workflow.load(study)
    place = default_place(loaded.study.name) if out is None else out
    files.check_target(place, replace=replace)
    stop = StopRequest(seconds)
    planned = evaluations if evaluations is not None else loaded.study.search.evaluations
    progress = SearchProgress(console_for(sys.stderr), evaluations=planned, seconds=seconds, quiet=quiet)
    with stop.on_interrupt(), progress:
        front = workflow.solve(loaded, seed=seed, evaluations=evaluations, progress=progress, stop=stop)
    place = write_or_aside(front, place, replace=replace)
    if as_json:
        print_json({**Front(front.record, place).summary(), "directory": str(place)})
    elif quiet:
        typer.echo(str(place))
    else:
        print_front(console_for(), front.record, place)
    if front.record.run.get("interrupted"):
        raise typer.Exit(INTERRUPTED)


def default_place(name: str) -> Path:
    """``runs/NAME``, the name made fit for a directory: a study may be called anything."""
    return RUNS / (re.sub(r"[^\w.+-]+", "-", name).strip("-.") or "study")


def write_or_aside(front: Front, place: Path, *, replace: bool) -> Path:
    """Write a result; if its place was taken while the search ran, write beside it rather than lose it."""
    from archopt.present import files

    try:
        return files.write(front.record, place, replace=replace)
    except OutputError as error:
        beside = files.free_sibling(place)
        print(f"{error}\nWriting the result to {beside} instead.", file=sys.stderr)
        return files.write(front.record, beside)
