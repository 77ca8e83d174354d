"""The search against the truth on spaces of a million designs and more, gone through whole.

Run from the repository as ``python -m tests.benchmarks.enumerable``. Three studies together hold every kind of
choice. The exact front of each is kept under ``tests/benchmarks/reference`` with a fingerprint of what the model makes
of designs drawn from all over the space; where that no longer fits, the space is gone through again first. Then the
search runs with ten seeds and at most 2 % as many evaluations as there are designs; the worst is told. ``--fresh`` goes
through every space again, ``--study`` takes one of them, ``--seeds 3`` and ``--share 0.01`` try the command.
"""

from __future__ import annotations

import argparse
import hashlib
import json
import time
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from numpy.typing import NDArray

from archopt.inputs.load import load
from archopt.model.compiled import compile_study
from archopt.model.evaluator import Evaluator
from archopt.proof.bound import outer_bound
from archopt.proof.enumerate import Comparison, compare, enumerate_designs, possible_choices
from archopt.proof.representatives import Representatives, combinations, representatives
from archopt.search.archive import significant
from archopt.search.driver import search

HERE = Path(__file__).resolve().parent
REFERENCE = HERE / "reference"
STUDIES = ("enumerable_adaptive", "enumerable_feeds", "enumerable_copper")
POPULATION = 80
SLACK = 5  # populations of evaluations a search may go beyond its budget before it looks at it again
PROBED = 256


@dataclass(frozen=True)
class Truth:
    """What is known of a space: its fingerprint, counts and exact front (designs, 3)."""

    fingerprint: str
    combinations: int
    designs: int
    evaluated: int
    feasible: int
    seconds: float
    front: NDArray[np.float64]


def fingerprint(evaluator: Evaluator, laid: Representatives) -> str:
    """Return a hash of a space's size and of what the model makes of designs spread over it."""
    numbers = np.linspace(0, len(laid) - 1, PROBED).astype(np.int64)
    rows = np.concatenate([laid.rows(int(k), int(k) + 1) for k in numbers])
    found = evaluator.evaluate(evaluator.decide(rows))
    known = significant(np.column_stack([found.objectives, np.minimum(found.violation, 1e6)]), 6)
    return hashlib.sha256(f"{len(laid)}".encode() + np.ascontiguousarray(known).tobytes()).hexdigest()[:16]


def truth_of(name: str, evaluator: Evaluator, laid: Representatives, *, fresh: bool, workers: int) -> Truth:
    """Return the exact front, from the reference where it still fits, else by going through the space."""
    path = REFERENCE / f"{name}.json"
    mark = fingerprint(evaluator, laid)
    if path.exists() and not fresh:
        kept = json.loads(path.read_text(encoding="utf-8"))
        if kept["fingerprint"] == mark:
            return Truth(**{**kept, "front": np.array(kept["front"])})
    print(f"{name}: going through {len(laid):,} designs", flush=True)
    kept = representatives(evaluator.problem, possible_choices(evaluator))
    if kept is None:
        raise SystemExit(f"{name} is too large to be laid out")
    found = enumerate_designs(evaluator, kept, workers=workers)
    whole = combinations(evaluator.problem)
    truth = Truth(mark, whole, len(laid), found.evaluated, found.feasible, round(found.seconds, 1), found.objectives)
    kept = {**truth.__dict__, "front": [[float(value) for value in point] for point in found.objectives.tolist()]}
    REFERENCE.mkdir(exist_ok=True)
    path.write_text(json.dumps(kept, indent=1) + "\n", encoding="utf-8")
    return truth


def measured(evaluator: Evaluator, truth: Truth, seed: int, share: float) -> tuple[Comparison, int, float]:
    """Return how one search compares, the evaluations it took and its processor seconds."""
    began = time.process_time()
    budget = int(share * truth.designs) - SLACK * POPULATION
    found = search(evaluator, evaluations=budget, population=POPULATION, seed=seed, stagnation_generations=10**6)
    return compare(truth.front, found.objectives), found.evaluations, time.process_time() - began


def main() -> None:
    """Measure and print."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("--study", choices=STUDIES)
    asked.add_argument("--seeds", type=int, default=10)
    asked.add_argument("--share", type=float, default=0.02)
    asked.add_argument("--workers", type=int, default=2)
    asked.add_argument("--fresh", action="store_true")
    given = asked.parse_args()
    for name in STUDIES if given.study is None else (given.study,):
        loaded = load(HERE / name / "study.toml")
        evaluator = Evaluator(compile_study(loaded.study, loaded.catalogue))
        laid = representatives(evaluator.problem)
        if laid is None:
            raise SystemExit(f"{name} is too large to be laid out")
        truth = truth_of(name, evaluator, laid, fresh=given.fresh, workers=given.workers)
        print(
            f"{name}: {truth.combinations:.3g} combinations, {truth.designs:,} designs, {truth.evaluated:,}"
            f" evaluated"
            f" after ruling out, {truth.feasible:,} feasible, in {truth.seconds:.0f} s; exact front {len(truth.front)}"
        )
        bound = outer_bound(evaluator)
        gap = bound.gap(truth.front)
        print(
            f"  outer bound: the front holds {100 * bound.share(truth.front):.2f} % of its hypervolume, gap in energy"
            f" {100 * gap[0]:.2f} % median, {100 * gap[1]:.2f} % largest;"
            f" {int(bound.violated(truth.front).sum())} designs below it"
        )
        runs = []
        for seed in range(1, given.seeds + 1):
            runs.append(measured(evaluator, truth, seed, given.share))
            told, evaluations, seconds = runs[-1]
            print(
                f"  seed {seed:2d}: {evaluations:6d} evaluations ({100 * evaluations / truth.designs:.2f} %),"
                f" {seconds:5.1f} s, share {100 * told.share:.4f} %, missed {told.missed}, far {told.far}, worst"
                f" {told.worst:.2f} matches ({100 * told.worst_energy:.3f} % of energy,"
                f" {100 * told.worst_cost:.3f} % of cost, {told.worst_droop:.0f} % droop), behind by {told.behind:.2f}",
                flush=True,
            )
        print(
            f"  worst of {len(runs)}: share {100 * min(told.share for told, _, _ in runs):.4f} %, far"
            f" {max(told.far for told, _, _ in runs)}, {max(told.worst for told, _, _ in runs):.2f} matches, behind by"
            f" {max(told.behind for told, _, _ in runs):.2f}"
        )


if __name__ == "__main__":
    main()
