"""Measure the search on a study: share of a reference front's hypervolume over evaluations and time.

Run as ``python -m tests.benchmarks.measure_search telecom_six --evaluations 20000 --seeds 1,2``. The reference
is the union of the runs measured and of a longer one with a seed of its own; its hash is printed.
"""

from __future__ import annotations

import argparse
import hashlib
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from moocore import is_nondominated
from numpy.typing import NDArray

from archopt.inputs.load import load
from archopt.model.compiled import incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.model.problem import compile_problem
from archopt.model.states import reduce_load
from archopt.search.driver import Search
from archopt.search.indicator import share
from tests.benchmarks import twelve_rails

FOLDER = Path(__file__).resolve().parents[2] / "studies"
REFERENCE_SEED = 1009


@dataclass
class Track:
    """The archive of one run at each mark: evaluations, processor seconds and objectives."""

    seed: int
    marks: list[tuple[int, float, NDArray[np.float64]]]

    @property
    def last(self) -> NDArray[np.float64]:
        return self.marks[-1][2]


def evaluator_of(study: str) -> Evaluator:
    """Compile a shipped study."""
    loaded = load(FOLDER / study / "study.toml")
    return Evaluator(compile_problem(loaded.study, loaded.catalogue, reduce_load(loaded.study)))


def studied(name: str) -> Evaluator:
    """Return the evaluator of a shipped study, of the twelve rails, or of the same without any coupling."""
    if name == "twelve_rails":
        return twelve_rails.evaluator()
    return Evaluator(twelve_rails.separable()) if name == "separable" else evaluator_of(name)


def track(evaluator: Evaluator, seed: int, evaluations: int, marks: int) -> Track:
    """Search from today's design and note the archive at evenly spaced evaluations."""
    today = incumbent_row(evaluator.problem)
    began = time.process_time()
    run = Search(evaluator, population=80, seed=seed, seeds_rows=None if today is None else today[None])
    noted: list[tuple[int, float, NDArray[np.float64]]] = []
    while run.record.evaluations < evaluations:
        run.step()
        if run.record.evaluations >= evaluations * (len(noted) + 1) / marks:
            spent = time.process_time() - began
            noted.append((run.record.evaluations, spent, run.record.archive.objectives.copy()))
    return Track(seed, noted)


def reference_of(fronts: list[NDArray[np.float64]]) -> NDArray[np.float64]:
    """Return the nondominated union of fronts, sorted."""
    every = np.unique(np.concatenate(fronts), axis=0)
    return every[is_nondominated(every)]


def main() -> None:
    """Measure and print."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("study")
    asked.add_argument("--evaluations", type=int, default=20_000)
    asked.add_argument("--reference", type=int, default=60_000)
    asked.add_argument("--seeds", default="1,2")
    asked.add_argument("--marks", type=int, default=8)
    given = asked.parse_args()
    evaluator = studied(given.study)
    runs = [
        track(evaluator, int(seed), given.evaluations, given.marks) for seed in given.seeds.split(",")
    ]
    longer = track(evaluator, REFERENCE_SEED, given.reference, 1)
    reference = reference_of([each.last for each in (*runs, longer)])
    digest = hashlib.sha256(np.ascontiguousarray(np.round(reference, 6)).tobytes()).hexdigest()[:16]
    print(f"{given.study}: reference of {len(reference)} designs, {digest}")
    for run in (*runs, longer):
        shares = "  ".join(
            f"{count}: {share(front, reference):.4f} ({spent:.0f} s)" for count, spent, front in run.marks
        )
        print(f"seed {run.seed}  {shares}")


if __name__ == "__main__":
    main()
