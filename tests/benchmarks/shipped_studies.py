"""Solve the shipped studies with their own budgets: time, memory, what is published, how the objectives relate.

Run from the repository as ``python -m tests.benchmarks.shipped_studies``; ``--evaluations 800`` tries the command.
Each study is solved in a process of its own, so that its peak memory is its own.
"""

from __future__ import annotations

import argparse
import multiprocessing
import resource
import sys
import time
from collections.abc import Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from pathlib import Path

import numpy as np
from scipy.stats import spearmanr

from archopt import workflow

FOLDER = Path(__file__).resolve().parents[2] / "studies"
STUDIES = ("telecom_six", "industrial_ten", "compute_sixteen")
OBJECTIVES = ("energy_loss_kwh_per_year", "cost_per_board", "worst_droop_percent")
PAIRS = (("energy, cost", 0, 1), ("energy, droop", 0, 2), ("cost, droop", 1, 2))
BYTES_PER_UNIT = 1 if sys.platform == "darwin" else 1024  # of ru_maxrss


@dataclass(frozen=True)
class Measured:
    """What one solve took and gave.

    correlations : Spearman's rank correlation of each pair of objectives over the published designs, nan where
        one of them has a single value
    """

    study: str
    seconds: float
    peak_mb: float
    evaluations: int
    ended: str
    published: int
    archive: int
    recomputed: int
    dropped: int
    dropped_in_time: int
    droop_values: int
    correlations: tuple[float, ...]
    timings_s: dict[str, float]


def measure(study: str, evaluations: int | None, seed: int | None) -> Measured:
    """Solve one shipped study and measure."""
    began = time.perf_counter()
    loaded = workflow.load(FOLDER / study / "study.toml")
    record = workflow.solve(loaded, seed=seed, evaluations=evaluations).record
    seconds = time.perf_counter() - began
    points = np.array([[design["objectives"][name] for name in OBJECTIVES] for design in record.designs])
    counts = record.run["counts"]
    return Measured(
        study=study,
        seconds=seconds,
        peak_mb=resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * BYTES_PER_UNIT / 1e6,
        evaluations=counts["evaluations"],
        ended=str(record.run["stop_reason"]),
        published=len(points),
        archive=counts["archive"],
        recomputed=counts["recomputed"],
        dropped=counts["dropped_by_direct_physics"],
        dropped_in_time=counts["dropped_in_time"],
        droop_values=len(np.unique(points[:, 2])),
        correlations=tuple(rank_correlation(points[:, a], points[:, b]) for _, a, b in PAIRS),
        timings_s=dict(record.run["timings_s"]),
    )


def rank_correlation(one: np.ndarray, other: np.ndarray) -> float:
    """Return Spearman's rank correlation, nan where there is nothing to rank."""
    if np.ptp(one) == 0.0 or np.ptp(other) == 0.0:
        return float("nan")
    return float(spearmanr(one, other).statistic)


def table(measured: Sequence[Measured]) -> list[str]:
    """Return one line a study, and where its time went."""
    pairs = "".join(f"{name:>15}" for name, _, _ in PAIRS)
    lines = [
        f"{'study':16}{'wall s':>8}{'peak MB':>9}{'evaluations':>13}{'published':>11}{'archive':>9}"
        f"{'recomputed':>12}{'dropped':>9}{'in time':>9}{'droop values':>14}{pairs}"
    ]
    for row in measured:
        ranks = "".join(f"{value:15.2f}" for value in row.correlations)
        lines.append(
            f"{row.study:16}{row.seconds:8.1f}{row.peak_mb:9.0f}{row.evaluations:13}{row.published:11}{row.archive:9}"
            f"{row.recomputed:12}{row.dropped:9}{row.dropped_in_time:9}{row.droop_values:14}{ranks}"
        )
    for row in measured:
        steps = ", ".join(f"{step} {seconds:.1f} s" for step, seconds in row.timings_s.items())
        lines.append(f"{row.study}: {steps}; ended: {row.ended}")
    return [
        *lines,
        "recomputed, dropped, in time: designs taken to direct physics, those that then missed a limit, and those that",
        "missed one when integrated in time;",
        "the last columns are Spearman's rank correlations over the published designs",
    ]


def main() -> None:
    """Measure and print."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("--evaluations", type=int, help="designs tried; without it each study's own budget")
    asked.add_argument("--seed", type=int, help="seed of the search; without it each study's own")
    asked.add_argument("--studies", default=",".join(STUDIES), help="names, separated by commas")
    given = asked.parse_args()
    measured = []
    fresh = multiprocessing.get_context("spawn")
    with ProcessPoolExecutor(max_workers=1, mp_context=fresh, max_tasks_per_child=1) as pool:
        for study in given.studies.split(","):
            measured.append(pool.submit(measure, study, given.evaluations, given.seed).result())
            print(f"{study}: {measured[-1].seconds:.0f} s", file=sys.stderr, flush=True)
    print("\n".join(table(measured)))


if __name__ == "__main__":
    main()
