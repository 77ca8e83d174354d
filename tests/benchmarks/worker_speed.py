"""Measure what worker processes are worth: wall and processor time of one search with one process and with more.

Run as ``python -m tests.benchmarks.worker_speed telecom_six --evaluations 5000 --workers 1,2,3``. On a machine that
does other things too the wall says little; the processor time of the busiest process, beside that of one process
alone, says what an idle machine would gain. Memory is each worker's own and its part of what all share (Linux).
"""

from __future__ import annotations

import argparse
import hashlib
import os
import resource
import time
from pathlib import Path

import numpy as np

from archopt.search.driver import crew_for, search
from archopt.search.outcome import SearchResult
from archopt.search.workers import Crew
from tests.benchmarks.measure_search import evaluator_of

POPULATION = 80


def digest(found: SearchResult) -> str:
    """Return what was found in a few letters."""
    return hashlib.sha256(np.ascontiguousarray(found.rows).tobytes() + found.objectives.tobytes()).hexdigest()[:12]


def memory_mb(process: int) -> float:
    """Return the memory of a process with its share of what others use too, 0 where it is not told."""
    try:
        lines = Path(f"/proc/{process}/smaps_rollup").read_text(encoding="ascii").splitlines()
    except OSError:
        return 0.0
    return sum(float(line.split()[1]) for line in lines if line.startswith("Pss:")) / 1024.0


def children_s() -> float:
    """Return the processor time of the processes that have ended."""
    used = resource.getrusage(resource.RUSAGE_CHILDREN)
    return used.ru_utime + used.ru_stime


def start(crew: Crew) -> float:
    """Start a crew; return the seconds until it was ready."""
    began = time.monotonic()
    crew.start(wait=True)
    return time.monotonic() - began


def main() -> None:
    """Measure and print."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("study")
    asked.add_argument("--evaluations", type=int, default=5000)
    asked.add_argument("--workers", default="1,2")
    given = asked.parse_args()
    evaluator = evaluator_of(given.study)
    print("workers   wall s   here s  others s  busiest/alone  jobs here/there  start s  worker MB  this MB  digest")
    alone_s = 0.0
    for count in (int(word) for word in given.workers.split(",")):
        crew = crew_for(evaluator, POPULATION, count)
        here, there, wall = time.process_time(), children_s(), time.monotonic()
        start_s = start(crew) if count > 1 else 0.0
        found = search(
            evaluator, evaluations=given.evaluations, population=POPULATION, seed=1, stagnation_generations=10**6,
            crew=crew,
        )  # fmt: skip
        wall_s = time.monotonic() - wall
        memory = [memory_mb(process) for process in crew.processes()]
        crew.close()
        here_s, there_s = time.process_time() - here, children_s() - there
        alone_s = here_s if count == 1 else alone_s
        busiest = max(here_s, there_s / max(count - 1, 1))
        print(
            f"{count:7d} {wall_s:8.1f} {here_s:8.1f} {there_s:9.1f} {busiest / max(alone_s, 1e-9):14.2f}"
            f" {crew.counts.here:8d}/{crew.counts.there:<7d} {start_s:7.1f} {max(memory, default=0.0):10.0f}"
            f" {memory_mb(os.getpid()):8.0f}  {digest(found)}",
            flush=True,
        )


if __name__ == "__main__":
    main()
