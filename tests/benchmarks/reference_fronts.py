"""Stored reference fronts: how they are made, read, refused when stale, and measured against.

``python -m tests.benchmarks.reference_fronts NAME --make`` makes ``reference/NAME.csv``: the union of four searches
with different methods and seeds, polished together. ``--measure 1,2,3,4,5`` searches and polishes with those seeds
and prints the share of the reference's hypervolume each reaches, and their spread. NAME is ``twelve_rails`` or a
shipped study. A front whose problem or file has changed since is refused: by its hash, and by a few of its designs,
which must evaluate to what is written.
"""

from __future__ import annotations

import argparse
import hashlib
import time
from dataclasses import replace
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from archopt.model.evaluator import Evaluator
from archopt.model.problem import Problem
from archopt.search.archive import Archive
from archopt.search.driver import Search, crew_for
from archopt.search.indicator import share
from archopt.search.outcome import SearchResult, result_of
from archopt.search.polish import polished
from tests.benchmarks.measure_search import studied
from tests.benchmarks.search_methods import METHODS

FOLDER = Path(__file__).parent / "reference"
RUNS = (("as shipped", 101), ("no local", 102), ("no consolidation", 103), ("by hypervolume", 104))
SAMPLED = 60  # one design in so many is written with its choices
POLISH_SHARE = 8
AGREEMENT = 1e-6
Floats = NDArray[np.float64]


class StaleError(ValueError):
    """A stored reference front is not of this problem, or was changed."""


def problem_digest(problem: Problem) -> str:
    """Return a hash of what a problem is made of: study, catalogue and space, not the code that computes with them."""
    digest = hashlib.sha256(f"{problem.study.study_hash} {problem.catalogue.content_hash}\n".encode())
    for name, values in zip(problem.space.names, problem.space.allowed, strict=True):
        digest.update(f"{name} {values.tolist()}\n".encode())
    return digest.hexdigest()


def written(problem: Problem, rows: NDArray[np.int64], objectives: Floats) -> str:
    """Return a reference front as text: its hash, then a design a line, one in a few with its choices."""
    width = problem.layout.choices
    lines = ["energy_loss_kwh_per_year,cost_per_board,worst_droop_percent,choices"]
    for k, (row, point) in enumerate(zip(rows, objectives, strict=True)):
        choices = " ".join(str(value) for value in row[:width]) if k % SAMPLED == 0 else ""
        lines.append(",".join([*(f"{value:.9g}" for value in point), choices]))
    body = "\n".join(lines) + "\n"
    return f"# {file_digest(problem_digest(problem), body)}\n{body}"


def file_digest(problem: str, body: str) -> str:
    """Return the hash of a front's text with that of its problem."""
    return hashlib.sha256(f"{problem}\n{body}".encode()).hexdigest()


def read(text: str, problem: Problem) -> tuple[Floats, NDArray[np.int64], Floats]:
    """Return the objectives of a stored front, and the choices and objectives of its sampled designs.

    Raises
    ------
    StaleError : the hash is not that of this problem and text
    """
    first, body = text.split("\n", 1)
    if first != f"# {file_digest(problem_digest(problem), body)}":
        raise StaleError("the stored front is of another problem, or was changed: make it anew")
    cells = [line.split(",") for line in body.splitlines()[1:]]
    objectives = np.array([[float(value) for value in line[:3]] for line in cells])
    sampled = [k for k, line in enumerate(cells) if line[3]]
    choices = np.array([[int(value) for value in cells[k][3].split()] for k in sampled], dtype=np.int64)
    return objectives, choices, objectives[sampled]


def reference(name: str, evaluator: Evaluator) -> Floats:
    """Return the stored front of a study, checked.

    Raises
    ------
    StaleError : it is not of this problem, or this code computes other numbers for its designs
    """
    problem = evaluator.problem
    objectives, choices, expected = read((FOLDER / f"{name}.csv").read_text(encoding="ascii"), problem)
    rows = np.zeros((len(choices), problem.layout.width), dtype=np.int64)
    rows[:, : choices.shape[1]] = choices
    seen = evaluator.evaluate(evaluator.decide(rows)).objectives
    if not np.allclose(seen, expected, rtol=AGREEMENT):
        raise StaleError("designs of the stored front evaluate to other numbers now: make it anew")
    return objectives


def one_run(evaluator: Evaluator, method: str, seed: int, evaluations: int) -> SearchResult:
    """Search with one of the methods until the evaluations are spent."""
    began = time.process_time()
    with METHODS[method]():
        run = Search(evaluator, population=80, seed=seed)
        while run.record.evaluations < evaluations:
            run.step()
        run.finish()
    return result_of(run.record, run.generation, np.zeros(0), time.process_time() - began, "budget spent")


def made(evaluator: Evaluator, evaluations: int) -> Archive:
    """Return the union of the searches, polished."""
    archive = Archive(evaluator.problem.layout.width)
    for method, seed in RUNS:
        found = one_run(evaluator, method, seed, evaluations)
        archive.add(found.rows, found.objectives)
        print(f"{method}, seed {seed}: {len(found.rows)} designs, {found.seconds:.0f} s", flush=True)
    together = replace(found, rows=archive.rows, objectives=archive.objectives)
    with crew_for(evaluator, 80) as crew:
        better = polished(crew, together, budget=POLISH_SHARE * evaluations, most=400)
    print(better.statement.sentence())
    archive.add(better.found.rows, better.found.objectives)
    return archive


def measured(evaluator: Evaluator, name: str, seeds: list[int], evaluations: int) -> None:
    """Print what searches with some seeds reach of the stored front, before polish and after."""
    stored = reference(name, evaluator)
    shares = []
    for seed in seeds:
        began = time.process_time()
        found = one_run(evaluator, "as shipped", seed, evaluations)
        with crew_for(evaluator, 80) as crew:
            better = polished(crew, found, budget=POLISH_SHARE * evaluations, most=400)
        shares.append(share(better.found.objectives, stored))
        print(
            f"seed {seed}: {share(found.objectives, stored):.4f} searched ({found.seconds:.0f} s),"
            f" {shares[-1]:.4f} polished ({time.process_time() - began:.0f} s in all)",
            flush=True,
        )
    print(f"{name}: mean {np.mean(shares):.4f}, spread {max(shares) - min(shares):.4f}")


def main() -> None:
    """Make or measure."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("name")
    asked.add_argument("--make", action="store_true")
    asked.add_argument("--measure", default="")
    asked.add_argument("--evaluations", type=int, default=8_000)
    given = asked.parse_args()
    evaluator = studied(given.name)
    if given.make:
        archive = made(evaluator, given.evaluations)
        text = written(evaluator.problem, archive.rows, archive.objectives)
        (FOLDER / f"{given.name}.csv").write_text(text, encoding="ascii")
    front = reference(given.name, evaluator)
    print(f"{given.name}: {len(front)} designs")
    if given.measure:
        measured(evaluator, given.name, [int(seed) for seed in given.measure.split(",")], given.evaluations)


if __name__ == "__main__":
    main()
