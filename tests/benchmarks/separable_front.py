"""The exact front of a board whose rails do not couple: rails evaluated one by one, then folded without boxes.

Run as ``python -m tests.benchmarks.separable_front --evaluations 6000 --seeds 1,2``: share of the exact front of the
twelve separable rails that a search reaches, without polish and with it. ``--few`` leaves few choices a rail: all of
them take hours to add up.
"""

from __future__ import annotations

import argparse
import itertools
import time
from typing import Any

import numpy as np
from moocore import is_nondominated
from numpy.typing import NDArray

from archopt.model.evaluator import FREE_DROOP_PERCENT, Evaluator
from archopt.search.driver import crew_for, search
from archopt.search.fold import fold, lower_front
from archopt.search.indicator import share
from archopt.search.polish import polished
from tests.benchmarks import twelve_rails

BATCH = 256
MONEY = 1e-6  # costs are whole multiples of it
RAIL_CHOICES = ("stage", "phases", "fewest", "bank", "bank_count", "pairs")
LOW_BANKS, HIGH_BANKS = ["polymer_560u_2v5_can", "polymer_820u_2v5_can"], ["polymer_150u_10v", "polymer_470u_16v_can"]
LOW_BANK_V = 1.9
Floats = NDArray[np.float64]


def few_pins(rails: int) -> dict[str, Any]:
    """Return pins that leave every rail few enough choices to evaluate them all."""
    pins: dict[str, Any] = {}
    for row in twelve_rails.rail_rows(rails):
        name, low = row["name"], row["voltage_v"] < LOW_BANK_V
        pins |= {f"{name}.bank": LOW_BANKS if low else HIGH_BANKS, f"{name}.bank_count": [4, 8, 16, 32]}
        pins |= {f"{name}.pairs": 4, f"{name}.fewest": "one", f"{name}.phases": [1, 2, 3, 4]}
    return pins


def rail_points(evaluator: Evaluator, base: NDArray[np.int64], r: int) -> Floats:
    """Return what every choice of one rail does to a board, (n, 3): energy and cost on top of the board's, droop.

    The board's other rails droop at most as much as is free, so that the droop seen is this rail's.
    """
    space, layout = evaluator.problem.space, evaluator.problem.layout
    columns = [layout.rail(name).start + r for name in RAIL_CHOICES]
    choices = np.array(list(itertools.product(*(space.allowed[column] for column in columns))))
    feed = base[layout.rail("feed").start + r]
    choices = choices[evaluator.problem.feed_ok[r, choices[:, 0], feed]]
    rows = np.repeat(base[None], len(choices), axis=0)
    rows[:, columns] = choices
    at = evaluator.evaluate(base[None]).objectives[0]
    found = []
    for start in range(0, len(rows), BATCH):
        seen = evaluator.evaluate(np.unique(evaluator.decide(rows[start : start + BATCH]), axis=0))
        found.append(seen.objectives[seen.feasible])
    points = np.concatenate(found)
    points[:, :2] -= at[:2]
    return np.unique(points, axis=0)


def exact_front(evaluator: Evaluator, base: NDArray[np.int64]) -> Floats:
    """Return the front of all boards by adding up the rails, one droop step after another, (n, 3).

    Raises
    ------
    ValueError : a base whose droop is more than what is free
    """
    at = evaluator.evaluate(base[None])
    if at.violation[0] > 0.0 or at.objectives[0, 2] > FREE_DROOP_PERCENT:
        raise ValueError("the board to start from must be feasible and droop no more than is free")
    rails = [rail_points(evaluator, base, r) for r in range(evaluator.problem.layout.rails)]
    caps = np.unique(np.concatenate([points[:, 2] for points in rails]))
    found = []
    for points in rails:
        points[:, 1] = np.rint(points[:, 1] / MONEY)  # whole numbers add up without a last bit that makes two of one
    for cap in caps:
        within = [points[points[:, 2] <= cap + 1e-9] for points in rails]
        fronts = [points[lower_front(points[:, 0], points[:, 1])] for points in within]
        total, _ = fold([(front[:, 0], front[:, 1]) for front in fronts], None)
        total[:, 1] *= MONEY
        found.append(np.column_stack([total + at.objectives[0, :2], np.full(len(total), cap)]))
    every = np.concatenate(found)
    return every[is_nondominated(every)]


def calm_board(evaluator: Evaluator, seed: int = 3) -> NDArray[np.int64]:
    """Return a feasible board with the least droop, found by a short search."""
    found = search(evaluator, evaluations=400, population=40, seed=seed, stagnation_generations=50)
    return found.rows[np.lexsort((found.objectives[:, 0], found.objectives[:, 2]))[0]]


def main() -> None:
    """Measure and print."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("--rails", type=int, default=twelve_rails.RAILS)
    asked.add_argument("--few", action="store_true", help="a few banks and counts only")
    asked.add_argument("--evaluations", type=int, default=6_000)
    asked.add_argument("--seeds", default="1,2")
    given = asked.parse_args()
    evaluator = Evaluator(twelve_rails.separable(given.rails, pins=few_pins(given.rails) if given.few else None))
    began = time.process_time()
    exact = exact_front(evaluator, calm_board(evaluator))
    print(f"exact front of {len(exact)} boards, {time.process_time() - began:.0f} s", flush=True)
    for seed in (int(seed) for seed in given.seeds.split(",")):
        began = time.process_time()
        found = search(
            evaluator, evaluations=given.evaluations, population=80, seed=seed, stagnation_generations=10**6
        )
        searched = time.process_time() - began
        with crew_for(evaluator, 80) as crew:
            better = polished(crew, found, budget=8 * given.evaluations, most=400)
        print(
            f"seed {seed}: {share(found.objectives, exact):.5f} searched ({searched:.0f} s),"
            f" {share(better.found.objectives, exact):.5f} polished ({time.process_time() - began:.0f} s in all)",
            flush=True,
        )


if __name__ == "__main__":
    main()
