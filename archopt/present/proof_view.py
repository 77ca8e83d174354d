"""The proof of a front on the terminal and in files: the exact front of a small space, or the bound of a large one."""

from __future__ import annotations

import csv
import io
import json
import math
from collections.abc import Sequence
from pathlib import Path

from rich.console import Console

from archopt.errors import OutputError
from archopt.model.problem import Problem
from archopt.physics.arrays import FloatArray, IntArray
from archopt.present.amounts import fixed, number
from archopt.present.plain import plain, significant
from archopt.present.record import Data
from archopt.present.tables import WordTable, put
from archopt.proof.answer import Proof, Room
from archopt.proof.enumerate import COST_MATCH, DROOP_MATCH_PERCENT, ENERGY_MATCH, Enumeration, nearest_units
from archopt.proof.representatives import LIMIT

EXACT, FOUND, BOUND, SUMMARY = "exact_front.csv", "found_front.csv", "bound.csv", "proof.json"
CSV_DIGITS = 9
OBJECTIVES = ("energy_loss_kwh_per_year", "cost_per_board", "worst_droop_percent")
MATCH = (
    f"{100 * ENERGY_MATCH:g} % of energy, {100 * COST_MATCH:g} % of cost and one droop step of"
    f" {DROOP_MATCH_PERCENT:g} %"
)


def duration(seconds: float) -> str:
    """Seconds as a person says them."""
    if not math.isfinite(seconds):
        return "-"
    if seconds < 120:
        return f"{max(seconds, 1):.0f} s"
    return f"{seconds / 60:.0f} min" if seconds < 7200 else f"{seconds / 3600:.1f} h"


def power_of_ten(count: int) -> str:
    """A count as a number, or as a power of ten where it is beyond imagination."""
    return number(count, 12) if count < 10**9 else f"10^{math.log10(count):.1f}"


def size_lines(room: Room, seconds: float) -> list[str]:
    """What is said before anything is gone through."""
    lines = [f"{power_of_ten(room.combinations)} combinations of the values on offer."]
    if room.designs is not None:
        lines = [f"{lines[0][:-1]}, {power_of_ten(room.designs)} of them different designs."]
    if room.possible is not None:
        lines.append(f"In {power_of_ten(room.possible)} of these every rail may meet its own limits.")
    if room.small:
        return [*lines, f"Going through these takes about {duration(seconds)}."]
    lines.append(f"That is more than the {number(LIMIT, 9)} that can be gone through; the front is bracketed instead.")
    if room.pins:
        lines.append(
            f"Pins to one value each that would bring it within reach: {', '.join(room.pins)}"
            f" ({power_of_ten(room.left)} combinations left)."
        )
    return lines


def progress_line(known: Enumeration) -> str:
    """How far the enumeration is."""
    share = known.covered / max(known.total, 1)
    left = known.seconds * (1.0 - share) / max(share, 1e-9)
    return f"{100 * share:.1f} % of the designs, front of {len(known.rows)}, about {duration(left)} left"


def summary(proof: Proof) -> Data:
    """The proof as plain data; numbers that do not apply are null."""
    room, known, found, bound = proof.room, proof.enumeration, proof.found, proof.bound
    return {
        "combinations": str(room.combinations),
        "designs": room.designs,
        "designs_possible": room.possible,
        "pins_that_would_help": list(room.pins),
        "enumeration": None if known is None else {
            "complete": known.complete, "covered": known.covered, "of": known.total, "ruled_out": known.hopeless,
            "same_as_others": known.folded, "evaluated": known.evaluated, "feasible": known.feasible,
            "exact_front": len(known.rows), "seconds": plain(known.seconds),
        },
        "search": None if found is None else {
            "evaluations": found.evaluations, "front": len(found.rows), "ended": found.ended,
        },
        "comparison": plain(proof.comparison),
        "bound": None if bound is None else {
            "points": len(bound.objectives), "seconds": plain(bound.seconds),
            "hypervolume_share_reached": plain(proof.reached),
            "energy_gap_median": plain(proof.gap[0]), "energy_gap_largest": plain(proof.gap[1]),
        },
    }  # fmt: skip


def print_proof(console: Console, proof: Proof, directory: Path) -> None:
    """Print what was found out."""
    known, found, told = proof.enumeration, proof.found, proof.comparison
    if known is not None:
        put(console, [counts_table(known)])
        share = known.covered / max(known.total, 1)
        if not known.complete:
            put(console, [
                f"Interrupted: {100 * share:.1f} % of the designs were gone through, a fair part of every kind.",
                f"The front of these has {len(known.rows)} designs; better ones may be among the others.",
            ])  # fmt: skip
        elif not len(known.rows):
            put(console, ["No design of the whole space meets every limit."])
    if told is not None and found is not None:
        put(console, [
            f"The exact front has {told.exact} designs. The search tried {number(found.evaluations, 9)} designs and"
            f" reached {fixed(100 * told.share, 3)} % of its hypervolume.",
            f"It found {told.exact - told.missed} of them to the digit; {told.exact - told.far} are matched within"
            f" {MATCH}.",
            f"The exact design it missed by most lies {fixed(100 * told.worst_energy, 2)} % in energy,"
            f" {fixed(100 * told.worst_cost, 2)} % in cost and {fixed(told.worst_droop, 0)} % of droop budget from the"
            " nearest design found.",
            f"Some design found is as good as any exact one but for {fixed(told.behind, 2)} times those {MATCH}.",
        ])  # fmt: skip
    if proof.bound is not None and found is not None:
        put(console, bound_lines(proof))
    put(console, [f"Written to {directory}."])


def bound_lines(proof: Proof) -> list[str]:
    """What the bound says of the search's front."""
    bound, found = proof.bound, proof.found
    if bound is None or found is None or not len(found.rows):
        return ["The search found no design that meets every limit; nothing is bracketed."]
    return [
        f"The search tried {number(found.evaluations, 9)} designs; its front has {len(found.rows)}.",
        f"No feasible design lies below the outer bound ({len(bound.objectives)} points, {duration(bound.seconds)}).",
        f"At its own cost and droop a design found loses {fixed(100 * proof.gap[0], 1)} % more energy than the bound in"
        f" the median, {fixed(100 * proof.gap[1], 1)} % where they are farthest apart: no design saves more.",
        f"The front holds {fixed(100 * proof.reached, 1)} % of the hypervolume the bound leaves: its share of the best"
        " front's lies between that and 100 %.",
    ]


def counts_table(known: Enumeration) -> WordTable:
    """What became of the designs gone through."""
    rows = [
        ("gone through", known.covered),
        ("broke a limit on sight", known.hopeless),
        ("turned out the same as another", known.folded),
        ("evaluated", known.evaluated),
        ("met every limit", known.feasible),
        ("exact front", len(known.rows)),
    ]
    return WordTable(("designs", "count"), [(name, number(count, 12)) for name, count in rows], left=("designs",))


def prepare(directory: Path, *, replace: bool) -> None:
    """Tell before a long run whether its files could be written.

    Raises
    ------
    OutputError : files of an earlier proof or of somebody else are there, or the place is no directory
    """
    if directory.exists() and not directory.is_dir():
        raise OutputError(f"{directory}: a file of that name is in the way")
    if not directory.exists():
        return
    there = {entry.name for entry in directory.iterdir()}
    strange = sorted(there - {EXACT, FOUND, BOUND, SUMMARY})
    if strange:
        raise OutputError(f"{directory}: holds {strange[0]}, which no proof wrote; choose another directory")
    if there and not replace:
        raise OutputError(f"{directory}: holds an earlier proof; say --replace or choose another directory")


def write_proof(problem: Problem, proof: Proof, directory: Path) -> None:
    """Write fronts, bound and summary into a directory.

    Raises
    ------
    OutputError : the directory cannot be written
    """
    files = {SUMMARY: json.dumps(plain(summary(proof)), indent=1, allow_nan=False) + "\n"}
    known, found, bound = proof.enumeration, proof.found, proof.bound
    if known is not None:
        compared = found is not None and len(found.rows)
        extra = nearest_units(known.objectives, found.objectives).tolist() if found is not None and compared else []
        files[EXACT] = designs_csv(problem, known.rows, known.objectives, "matches_from_the_search_away", extra)
    if found is not None:
        files[FOUND] = designs_csv(problem, found.rows, found.objectives)
    if bound is not None:
        files[BOUND] = text_of(OBJECTIVES, [[cell(value) for value in point] for point in bound.objectives.tolist()])
    try:
        directory.mkdir(parents=True, exist_ok=True)
        for name in (EXACT, FOUND, BOUND, SUMMARY):
            (directory / name).unlink(missing_ok=True)
        for name, text in files.items():
            (directory / name).write_text(text, encoding="utf-8", newline="")
    except OSError as error:
        raise OutputError(f"{directory}: cannot be written ({error.strerror})") from error


def designs_csv(
    problem: Problem, rows: IntArray, objectives: FloatArray, extra: str = "", values: Sequence[float] = ()
) -> str:
    """Designs with objectives and choices by name, by energy; one more column where there are values for it."""
    table = []
    for k, (row, point) in enumerate(zip(rows, objectives, strict=True)):
        more = [cell(values[k])] if len(values) else []
        table.append([*(cell(float(value)) for value in point), *more, *problem.space.describe(row).values()])
    heads = [*OBJECTIVES, *([extra] if len(values) else []), *problem.space.names]
    order = sorted(range(len(table)), key=lambda k: [float(text) for text in table[k][:3]])
    return text_of(heads, [table[k] for k in order])


def cell(value: float) -> str:
    """A number as the other CSV files write it."""
    return f"{significant(value, CSV_DIGITS):.{CSV_DIGITS}g}"


def text_of(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """A table as CSV text."""
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow(heads)
    writer.writerows(rows)
    return out.getvalue()
