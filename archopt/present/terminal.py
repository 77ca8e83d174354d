"""What ``solve``, ``check`` and ``show`` print; the console is passed in, or text is asked for."""

from __future__ import annotations

import math
from collections.abc import Iterable
from pathlib import Path

from rich.console import Console, RenderableType

from archopt.present.amounts import NONE, counted, fixed, number, of, real
from archopt.present.overview import front_sections
from archopt.present.questions import question_sections
from archopt.present.record import CheckResult, Data, FrontRecord
from archopt.present.tables import pairs, put, section
from archopt.present.understood import bullets, cautions_section, check_sections, understood


def print_front(console: Console, record: FrontRecord, directory: Path | None = None) -> None:
    """Print a result: the study, the front, what binds, what it was compared with, and what is not in it.

    Parameters
    ----------
    console : where to print; its width decides how many columns the tables have
    record : the result
    directory : where its files are, when they are written
    """
    put(console, record_sections(record, console.width, directory))


def print_check(console: Console, result: CheckResult, *, everything: bool = False) -> None:
    """Print how a study was understood; ``everything``: the states looked at beside the year too."""
    put(console, check_sections(result, everything=everything))


def record_sections(record: FrontRecord, width: int, directory: Path | None = None) -> Iterable[RenderableType]:
    """All that is printed of a result, for an output so many columns wide."""
    yield from section("Understood", understood(record.problem))
    yield from section("Search", pairs(search_rows(record)))
    yield from front_sections(record, width)
    yield from question_sections(record)
    if record.notes:
        yield from section("Remarks", bullets(record.notes))
    yield from cautions_section(record.cautions)
    if record.not_modelled:
        yield from section("Not modelled", bullets(record.not_modelled))
    if directory is not None:
        yield from section("Files", pairs(file_rows(directory)))


def search_rows(record: FrontRecord) -> Iterable[tuple[str, str]]:
    """How long and how far was searched, and why it stopped."""
    run: Data = record.run
    counts = run.get("counts") or {}
    tried = number(counts.get("evaluations"), 9)
    if counts.get("evaluations") is not None:
        text = f"{tried} designs tried"
        if counts.get("feasible") is not None:
            text += f", {number(counts['feasible'], 9)} met every limit"
        if counts.get("generations") is not None:
            text += f", {number(counts['generations'], 9)} generations"
        seconds = real(counts.get("seconds"))
        yield "effort", text + (f", {fixed(seconds, 1)} s" if math.isfinite(seconds) else "")
    if run.get("seed") is not None:
        yield "seed", str(run["seed"])
    stop = str(run.get("stop_reason") or NONE)
    if run.get("interrupted"):
        stop = f"interrupted; what was found until then is kept{'' if stop in (NONE, 'interrupted') else f' ({stop})'}"
    if stop != NONE:
        yield "stopped", stop
    kept = f"{counted(len(record.designs), 'design')} published"
    if record.archive:
        kept += f" of {number(len(record.archive), 9)} kept"
    if record.merged:
        kept += f"; {number(record.merged, 9)} too close to one of them to list"
    yield "front", kept
    dropped = of(counts, "dropped_by_direct_physics")
    if dropped:
        yield "recomputed", f"{number(dropped, 9)} left out after direct physics"


def file_rows(directory: Path) -> Iterable[tuple[str, str]]:
    """Where the files are and what to do next."""
    yield str(directory / "front.csv"), "the front, one design a row"
    yield str(directory / "archive.csv"), "every design the search kept"
    yield str(directory / "designs.json"), "each design explained"
    yield f"archopt show {directory} D001", "explains one of them here"
