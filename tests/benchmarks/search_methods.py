"""What each part of the search is worth: shares of hypervolume with it and without, over evaluations and time.

Run as ``python -m tests.benchmarks.search_methods twelve_rails --evaluations 4000 --seeds 1,2``. The reference is the
union of all the runs, so shares compare the methods among themselves; ``--only`` names some of them.
"""

from __future__ import annotations

import argparse
from collections.abc import Callable
from contextlib import AbstractContextManager, nullcontext
from functools import partial
from typing import Any
from unittest.mock import patch

import numpy as np

from archopt.model.evaluator import Evaluator
from archopt.search import driver
from archopt.search.indicator import share
from tests.benchmarks.measure_search import Track, reference_of, studied, track

NEVER = 10**9


def with_values(**values: Any) -> Callable[[], AbstractContextManager[Any]]:
    """Return a context in which the driver's shares are others."""
    return lambda: patch.multiple(driver, **values)


METHODS: dict[str, Callable[[], AbstractContextManager[Any]]] = {
    "as shipped": nullcontext,
    "no fold": with_values(FOLD_EVERY=NEVER),
    "fold every generation": with_values(FOLD_EVERY=1),
    "fold every 6": with_values(FOLD_EVERY=6),
    "fold around 4": with_values(FOLDED=4),
    "no local": with_values(LOCAL_SHARE=0.0),
    "local as much as completion": with_values(LOCAL_SHARE=1.0),
    "no consolidation": with_values(CONSOLIDATE_EVERY=NEVER),
    "consolidation every 8": with_values(CONSOLIDATE_EVERY=8),
    "no fan": with_values(FAN_SHARE=0.0),
    "fan 0.5": with_values(FAN_SHARE=0.5),
    "by hypervolume": with_values(Engine=partial(driver.Engine, method="hypervolume")),
}


def run(evaluator: Evaluator, name: str, seed: int, evaluations: int, marks: int) -> Track:
    """Search with one of the methods."""
    with METHODS[name]():
        return track(evaluator, seed, evaluations, marks)


def main() -> None:
    """Measure and print."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("study")
    asked.add_argument("--evaluations", type=int, default=4_000)
    asked.add_argument("--seeds", default="1,2")
    asked.add_argument("--marks", type=int, default=2)
    asked.add_argument("--only", default=",".join(METHODS))
    given = asked.parse_args()
    evaluator = studied(given.study)
    seeds = [int(seed) for seed in given.seeds.split(",")]
    names = given.only.split(",")
    runs = {
        name: [run(evaluator, name, seed, given.evaluations, given.marks) for seed in seeds] for name in names
    }
    reference = reference_of([each.last for tracks in runs.values() for each in tracks])
    print(f"{given.study}: reference of {len(reference)} designs, union of the runs")
    for name, tracks in runs.items():
        cells = [
            "  ".join(f"{share(front, reference):.4f}" for _, _, front in each.marks)
            + f" ({each.marks[-1][1]:.0f} s, {len(each.last)})"
            for each in tracks
        ]
        mean = np.mean([share(each.last, reference) for each in tracks])
        print(f"{name:28s} {mean:.4f}   {'   '.join(cells)}", flush=True)


if __name__ == "__main__":
    main()
