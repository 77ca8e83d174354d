"""``archopt solve``: search a study; print and write the front."""

from __future__ import annotations

import re
import sys
from collections.abc import Iterator
from contextlib import contextmanager
from enum import StrEnum
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from archopt.cli.leaving import INTERRUPTED
from archopt.cli.stopping import StopRequest
from archopt.cli.words import JsonOption, StudyArgument, print_json
from archopt.errors import InfeasibleError, OutputError

if TYPE_CHECKING:
    from archopt.present.front import Front

RUNS = Path("runs")


class Baselines(StrEnum):
    """What a bus that follows the load is compared with."""

    hardware = "hardware"
    full = "full"


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
    seconds: Annotated[
        float | None,
        typer.Option(
            min=1.0, metavar="S", help="End the search after S seconds; the same seed then need not find the same."
        ),
    ] = None,
    replicates: Annotated[
        int, typer.Option(min=1, max=100, metavar="N", help="Search N times, one seed after another, and merge.")
    ] = 1,
    baselines: Annotated[
        Baselines,
        typer.Option(
            help="What a moving bus is compared with: the same hardware held at other voltages, or also boards"
            " searched afresh for each way to run the bus, which takes five to six times as long.",
        ),
    ] = Baselines.hardware,
    workers: Annotated[
        int | None,
        typer.Option(min=1, max=64, metavar="N", help="Processes to search with. [default: the processors, 4 at most]"),
    ] = None,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress, no tables; only the files.")] = False,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier result in DIR.")] = False,
    resume: Annotated[
        bool, typer.Option("--resume", help="Go on with the unfinished run in DIR, given the same options as it was.")
    ] = False,
    as_json: JsonOption = False,
) -> None:
    """Search all choices at once; print and write the front.

    A run is put by in DIR every few seconds; one that was interrupted or killed can be gone on with.
    """
    from archopt import workflow
    from archopt.present.front import Front
    from archopt.present.progress import SearchProgress
    from archopt.present.tables import console_for
    from archopt.present.terminal import print_front
    from archopt.search.workers import default_workers

    if baselines is Baselines.full and seconds is not None:
        raise typer.BadParameter("searches to compare need the same budget: give --evaluations, not --seconds")
    loaded = workflow.load(study)
    place = default_place(loaded.study.name) if out is None else out
    check_place(place, replace=replace, resume=resume)
    stop = StopRequest(seconds)
    planned = evaluations if evaluations is not None else loaded.study.search.evaluations
    progress = SearchProgress(
        console_for(sys.stderr), evaluations=replicates * planned, seconds=seconds, quiet=quiet
    )
    with stop.on_interrupt(), progress, put_by_only_while_unfinished(place, stop):
        front = workflow.solve(
            loaded, seed=seed, evaluations=evaluations, replicates=replicates, workers=workers or default_workers(),
            progress=progress, stop=stop,
            keep_in=place, resume=resume, afresh=baselines is Baselines.full,
        )  # fmt: skip
    place = write_or_aside(front, place, replace=replace, unfinished=not front.record.run.get("same_bytes", True))
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


def check_place(place: Path, *, replace: bool, resume: bool) -> None:
    """Tell before a long search whether its result could be written, and whether there is a run to go on with.

    Raises
    ------
    OutputError : the place holds what must not be replaced; says what to do
    """
    from archopt.present import files
    from archopt.search import checkpoint

    if replace and resume:
        raise typer.BadParameter("go on with the unfinished run or replace it, not both", param_hint="--resume")
    files.check_target(place, replace=replace, go_on=resume)
    if resume and checkpoint.is_there(place):
        checkpoint.read(place)  # one that is damaged is told at once
    elif resume:
        print(f"{place} holds no unfinished run; starting at the beginning.", file=sys.stderr)


@contextmanager
def put_by_only_while_unfinished(place: Path, stop: StopRequest) -> Iterator[None]:
    """Let what was put by go when a search ran to its end and no design met every limit."""
    try:
        yield
    except InfeasibleError:
        from archopt.search import checkpoint

        if not stop():
            checkpoint.forget(place)
        raise


def write_or_aside(front: Front, place: Path, *, replace: bool, unfinished: bool) -> Path:
    """Write a result; if its place was taken while the search ran, write beside it rather than lose it.

    ``unfinished``: keep beside it what the run needs to go on.
    """
    from archopt.present import files

    try:
        return files.write(front.record, place, replace=replace, go_on=True, unfinished=unfinished)
    except OutputError as error:
        beside = files.free_sibling(place)
        print(f"{error}\nWriting the result to {beside} instead.", file=sys.stderr)
        return files.write(front.record, beside)
