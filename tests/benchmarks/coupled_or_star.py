"""Whether it matters that bus planes couple their stages: the compute study searched with and without.

Run ``python -m tests.benchmarks.coupled_or_star [evaluations]``. Two searches from one seed: with the port matrix its
floorplan gives, and with a star that keeps every stage's own resistance to the source but shares one number among all
(the mean of the matrix beside its diagonal). Prints what each search chose, by role, and every chosen design in the
other model, and in a plane without any sharing; then what coupling costs in the evaluator.
"""

from __future__ import annotations

import sys
import time
from collections.abc import Sequence
from dataclasses import dataclass, replace
from pathlib import Path

import numpy as np
from scipy.stats import spearmanr

from archopt.inputs.load import load
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.model.limits import LIMITS
from archopt.model.problem import Problem
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.driver import search
from archopt.trade.money import lifetime_costs
from archopt.trade.roles import knee

STUDY = Path(__file__).resolve().parents[2] / "studies" / "compute_sixteen" / "study.toml"
EVALUATIONS, POPULATION, SEED = 8000, 200, 1
LEAST_OWN_SQUARES = 0.02
TIMED, BATCH = 40, 200


@dataclass(frozen=True)
class Chosen:
    """One design a search chose: for what, and its row."""

    role: str
    row: IntArray


def star_of(squares: FloatArray) -> FloatArray:
    """Return (R, R) squares with the diagonal of a matrix and one number beside it, its mean there."""
    count = len(squares)
    own = np.diag(squares)
    shared = float((squares.sum() - own.sum()) / (count * (count - 1)))
    shared = min(shared, float(own.min()) - LEAST_OWN_SQUARES)
    return np.full((count, count), shared) + np.diag(own - shared)


def with_squares(problem: Problem, squares: Sequence[FloatArray]) -> Problem:
    """Return the problem with other port matrices of its buses, all else the same."""
    return replace(problem, planes=replace(problem.planes, squares=np.stack(list(squares))))


def chosen_by(evaluator: Evaluator, evaluations: int) -> tuple[list[Chosen], IntArray, float]:
    """Return the designs a search chose by role, its whole archive, and its seconds."""
    began = time.perf_counter()
    row = incumbent_row(evaluator.problem)
    found = search(
        evaluator, evaluations=evaluations, population=POPULATION, seed=SEED, stagnation_generations=10**6,
        seeds_rows=None if row is None else row[None],
    )  # fmt: skip
    values, rows = found.objectives, found.rows
    life = lifetime_costs(evaluator.problem.study, values)
    places = {
        "knee": knee(values), "least lifetime cost": int(life.argmin()),
        "least loss": int(np.lexsort((values[:, 1], values[:, 0]))[0]),
        "least cost": int(np.lexsort((values[:, 0], values[:, 1]))[0]),
    }  # fmt: skip
    return [Chosen(role, rows[place]) for role, place in places.items()], rows, time.perf_counter() - began


def figures(evaluator: Evaluator, rows: IntArray) -> tuple[FloatArray, FloatArray, FloatArray, list[str]]:
    """Return loss (kWh a year), worst bus drop (% of bus), lifetime cost, and what is missed, by direct physics."""
    detail = evaluator.detail(rows, exact=True)
    values, slack = detail.evaluation.objectives, detail.evaluation.slack
    missed = [", ".join(limit.name for k, limit in enumerate(LIMITS) if slack[p, k] < 0.0) for p in range(len(rows))]
    drop = np.asarray(detail.ledger.worst["bus drop"].value)
    return values[:, 0], drop, lifetime_costs(evaluator.problem.study, values), missed


def place_in(values: FloatArray) -> IntArray:
    """Return each value's place from the least, from one."""
    return np.asarray(values.argsort(kind="stable").argsort(kind="stable") + 1)


def compare(models: dict[str, Evaluator], searched: str, chosen: Sequence[Chosen]) -> None:
    """Print the designs of one search in every model, with their places by lifetime cost there."""
    rows = np.stack([design.row for design in chosen])
    print(f"\nchosen by the search with {searched}")
    print(f"  {'role':22}{'model':12}{'kWh a year':>11}{'drop %':>8}{'life cost':>11}{'place':>6}  not met")
    found = {name: figures(model, rows) for name, model in models.items()}
    for p, design in enumerate(chosen):
        role = design.role
        for name, (loss, drop, life, missed) in found.items():
            place = place_in(life)[p]
            print(f"  {role:22}{name:12}{loss[p]:11.2f}{drop[p]:8.2f}{life[p]:11.2f}{place:6d}  {missed[p]}".rstrip())
            role = ""


def seconds_of(models: dict[str, Evaluator], rows: IntArray) -> dict[str, float]:
    """Return the least processor time of evaluating a batch by the tables in each model, s; taken in turn."""
    took = dict.fromkeys(models, np.inf)
    for _ in range(TIMED):
        for name, model in models.items():
            began = time.process_time()
            model.evaluate(rows)
            took[name] = min(took[name], time.process_time() - began)
    return took


def main(evaluations: int) -> None:
    """Print the tables."""
    loaded = load(STUDY)
    coupled = compile_study(loaded.study, loaded.catalogue)
    star = with_squares(coupled, [star_of(matrix) for matrix in coupled.bus_squares])
    alone = with_squares(coupled, [np.diag(np.diag(matrix)) for matrix in coupled.bus_squares])
    models = {
        name: Evaluator(problem) for name, problem in (("coupled", coupled), ("star", star), ("apart", alone))
    }
    archives = {}
    for name in ("coupled", "star"):
        chosen, archives[name], seconds = chosen_by(models[name], evaluations)
        print(f"{name}: {len(archives[name])} designs kept of {evaluations:,} evaluations in {seconds:.0f} s")
        compare(models, name, chosen)
    print()
    for name, rows in archives.items():
        loss = {model: models[model].evaluate(rows) for model in models}
        own, other = loss[name], loss["star" if name == "coupled" else "coupled"]
        rank = float(spearmanr(own.objectives[:, 0], other.objectives[:, 0]).statistic)
        share = float((other.violation <= 0.0).mean())
        more = other.objectives[:, 0] / own.objectives[:, 0] - 1.0
        span = f"{100 * more.min():+.2f} to {100 * more.max():+.2f} %"
        print(f"designs kept with {name}, in the other model: rank correlation of loss {rank:.5f},"
              f" loss differs by {span}, {100 * share:.0f} % meet every limit")  # fmt: skip
    batch = np.resize(archives["coupled"], (BATCH, archives["coupled"].shape[1]))
    took = seconds_of(models, batch)
    print(f"{BATCH} designs by the tables: " + ", ".join(f"{name} {1e3 * s:.1f} ms" for name, s in took.items())
          + f"; coupling costs {100 * (took['coupled'] / took['star'] - 1):+.0f} %")  # fmt: skip


if __name__ == "__main__":
    main(int(sys.argv[1]) if len(sys.argv) > 1 else EVALUATIONS)
