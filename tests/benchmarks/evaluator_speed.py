"""How fast designs are evaluated, what bounds it, how it grows with rails and states, and what memory it takes.

Run from the repository as ``python -m tests.benchmarks.evaluator_speed``; ``--quick`` leaves out the large studies.
Times are processor time of one thread, the best of several runs: other work on the machine still shows, in its caches.
So the time of one product of two arrays over designs, states and rails is measured beside: evaluation in such passes
over the data hardly depends on the machine and not on what else it does.
"""

from __future__ import annotations

import argparse
import multiprocessing
import resource
import sys
import time
from collections.abc import Callable, Sequence
from concurrent.futures import ProcessPoolExecutor
from dataclasses import dataclass
from functools import partial
from pathlib import Path

import numpy as np

from archopt.inputs.load import load
from archopt.model.board import solve
from archopt.model.bus_checks import check_buses
from archopt.model.bus_stability import check_impedance
from archopt.model.checks import check_board, check_copper
from archopt.model.compiled import compile_study
from archopt.model.cost import bill
from archopt.model.evaluator import Evaluator, transition_kwh
from archopt.model.explain import explain_many
from archopt.model.hardware import unpack
from archopt.model.limits import Ledger
from archopt.model.parameters import IntArray
from archopt.model.rail_checks import check_jump, check_rails
from archopt.model.situation import Situation, rail_droop
from archopt.model.space import Designs
from archopt.search.driver import Search

from . import twelve_rails

FOLDER = Path(__file__).resolve().parents[2] / "studies"
SHIPPED = ("telecom_six", "industrial_ten", "compute_sixteen")
BATCH = 256
BATCHES = (1, 16, 64, 80, 128, 256, 512)
DIRECT_ALONE, DIRECT_TOGETHER = 6, 24
GROWN_RAILS, GROWN_STATES = (6, 12, 24, 60), (24, 72, 200, 400)
LARGE = (60, 200)
BYTES_PER_UNIT = 1 if sys.platform == "darwin" else 1024  # of ru_maxrss
ROUNDS = 12


@dataclass(frozen=True)
class Speed:
    """Processor time a design, us, of one study at one batch size; pass_us: one product over designs, states, rails."""

    study: str
    rails: int
    states: int
    volts: int
    evaluate_us: float
    decide_us: float
    pass_us: float
    build_s: float = 0.0
    tables_mb: float = 0.0
    peak_mb: float = 0.0

    @property
    def passes(self) -> float:
        """Evaluation in products over all of the data."""
        return self.evaluate_us / self.pass_us


def best_us(what: Callable[[], object], designs: int, rounds: int = ROUNDS) -> float:
    """Return the least processor time a design, us."""
    least = float("inf")
    for _ in range(rounds):
        began = time.thread_time()
        what()
        least = min(least, time.thread_time() - began)
    return least / designs * 1e6


def pass_us(evaluator: Evaluator, count: int) -> float:
    """Return the time a design of one product of two arrays over designs, rails and states, us."""
    shape = (count, evaluator.problem.layout.rails, len(evaluator.states.hours))
    one, other = np.full(shape, 1.5), np.full(shape, 2.5)
    return best_us(lambda: one * other, count)


def searched(evaluator: Evaluator, count: int) -> IntArray:
    """Return designs as a search evaluates them, over again where there are fewer."""
    seen: list[IntArray] = []

    class Watched(Search):
        """A search that tells which designs it notes."""

        def note(self, found, source):  # type: ignore[no-untyped-def]
            seen.append(found.rows)
            super().note(found, source)

    run = Watched(evaluator, population=80, seed=1)
    for _ in range(6):
        run.step()
    rows = np.concatenate(seen)[-count:]
    return rows[np.arange(count) % len(rows)]


def speed(study: str, evaluator: Evaluator, rows: IntArray) -> Speed:
    """Measure evaluation and decision of one batch."""
    count = len(rows)
    return Speed(
        study=study,
        rails=evaluator.problem.layout.rails,
        states=len(evaluator.states.hours),
        volts=len(evaluator.problem.grid_v),
        evaluate_us=best_us(lambda: evaluator.evaluate(rows), count),
        decide_us=best_us(lambda: evaluator.decide(rows), count, ROUNDS // 2),
        pass_us=pass_us(evaluator, count),
    )


def direct_us(evaluator: Evaluator, rows: IntArray, at_once: int) -> float:
    """Return the processor time a design of direct physics, explained, some designs at once, us."""

    def explained() -> None:
        for start in range(0, len(rows), at_once):
            explain_many(evaluator, rows[start : start + at_once])

    return best_us(explained, len(rows), 2)


def parts(evaluator: Evaluator, rows: IntArray) -> dict[str, float]:
    """Return the time a design of each part of an evaluation, us."""
    problem, states, count = evaluator.problem, evaluator.states, len(rows)
    designs = Designs(problem.layout, rows)
    hardware = unpack(problem, designs, states)
    solution = solve(problem, states, hardware, evaluator.table_stages, exact=False)
    situation = Situation(problem, states, designs, hardware, solution, bill(problem, designs))
    droop = rail_droop(situation)
    ledger = Ledger(count, bare=True)
    reader = evaluator.table_stages.of(hardware)
    reader(solution.stage_v, solution.current_a)

    def looked_up() -> object:
        return evaluator.table_stages.of(hardware)(solution.stage_v, solution.current_a)

    of = {
        "unpack the rows": lambda: unpack(problem, designs, states),
        "solve the board": lambda: solve(problem, states, hardware, evaluator.table_stages, exact=False),
        "  of it: gather the tables": looked_up,
        "  of it: follow the cubic, once": lambda: reader(solution.stage_v, solution.current_a),
        "droop and release": lambda: rail_droop(situation),
        "check rails": lambda: check_rails(situation, droop, ledger),
        "check the jump": lambda: check_jump(situation, ledger),
        "check buses": lambda: check_buses(situation, ledger),
        "check impedance": lambda: check_impedance(situation, ledger),
        "check copper": lambda: check_copper(situation, ledger),
        "check the board": lambda: check_board(situation, ledger),
        "cost": lambda: bill(problem, designs),
        "transitions": lambda: transition_kwh(problem, states, hardware),
    }
    return {name: best_us(what, count) for name, what in of.items()}


def grown(rails: int, states: int) -> Speed:
    """Measure one size of study in this process: time to build, tables, speed, peak memory."""
    began = time.process_time()
    evaluator = twelve_rails.evaluator(rails, states)
    built = time.process_time() - began
    rows = twelve_rails.drawn(evaluator, 64)
    found = speed(f"{rails} rails", evaluator, rows)
    return Speed(**{**vars(found), "build_s": built, "tables_mb": table_mb(evaluator), "peak_mb": peak_mb()})


def with_search(rails: int, states: int) -> Speed:
    """Measure the peak memory of one size with two generations of a search."""
    evaluator = twelve_rails.evaluator(rails, states)
    run = Search(evaluator, population=80, seed=1)
    for _ in range(2):
        run.step()
    size = (rails, len(evaluator.states.hours), len(evaluator.problem.grid_v))
    return Speed("with a search", *size, 0.0, 0.0, 1.0, 0.0, table_mb(evaluator), peak_mb())


def table_mb(evaluator: Evaluator) -> float:
    """Return the memory of loss and option tables, MB."""
    rows = evaluator.options.rows
    return (evaluator.tables.bytes + sum(int(values.nbytes) for values in vars(rows).values())) / 1e6


def peak_mb() -> float:
    """Return the peak memory of this process, MB."""
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * BYTES_PER_UNIT / 1e6


def apart(what: Callable[[int, int], Speed], size: tuple[int, int]) -> Speed:
    """Measure in a process of its own, so that its peak memory is its own."""
    with ProcessPoolExecutor(max_workers=1, mp_context=multiprocessing.get_context("spawn")) as pool:
        return pool.submit(what, *size).result()


def speed_lines(found: Sequence[Speed]) -> list[str]:
    """Return one line a study."""
    lines = [
        f"{'study':16}{'rails':>6}{'states':>7}{'volts':>6}{'evaluate/s':>12}{'decide/s':>10}"
        f"{'passes':>8}{'build s':>9}{'tables MB':>11}{'peak MB':>9}"
    ]
    for row in found:
        measured = "" if not row.evaluate_us else f"{1e6 / row.evaluate_us:12.0f}{1e6 / row.decide_us:10.0f}"
        passes = f"{row.passes:8.0f}" if row.evaluate_us else ""
        lines.append(
            f"{row.study:16}{row.rails:6}{row.states:7}{row.volts:6}{measured:>22}{passes:>8}"
            f"{row.build_s:9.1f}{row.tables_mb:11.0f}{row.peak_mb:9.0f}"
        )
    return lines


def ratio_lines(evaluator: Evaluator, rows: IntArray, evaluate_us: float) -> list[str]:
    """Return how much faster an evaluation is than direct physics with its explanation."""
    alone = direct_us(evaluator, rows[:DIRECT_ALONE], 1)
    together = direct_us(evaluator, rows[:DIRECT_TOGETHER], DIRECT_TOGETHER)
    return [
        f"direct physics with explanation, one design at a time: {1e6 / alone:.1f} designs/s, "
        f"{alone / evaluate_us:.0f} times slower",
        f"direct physics with explanation, {DIRECT_TOGETHER} at once: {1e6 / together:.1f} designs/s, "
        f"{together / evaluate_us:.0f} times slower",
    ]


def part_lines(found: dict[str, float], whole_us: float, one_pass_us: float) -> list[str]:
    """Return the share of every part, and what one part takes in passes over the data."""
    return [
        f"{'part of an evaluation':34}{'us':>8}{'share %':>9}{'passes':>8}",
        *(f"{name:34}{us:8.1f}{100 * us / whole_us:9.1f}{us / one_pass_us:8.1f}" for name, us in found.items()),
        f"{'whole':34}{whole_us:8.1f}{100.0:9.1f}{whole_us / one_pass_us:8.1f}",
    ]


def main() -> None:
    """Measure and print."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("--quick", action="store_true", help="the twelve rails alone")
    given = asked.parse_args()
    evaluator = twelve_rails.evaluator()
    rows = searched(evaluator, BATCH)
    standard = speed("twelve_rails", evaluator, rows)
    random = speed("  drawn at random", evaluator, twelve_rails.drawn(evaluator, BATCH))
    print("\n".join(speed_lines([standard, random])))
    print("\n".join(ratio_lines(evaluator, rows, standard.evaluate_us)), flush=True)
    print("\n".join(part_lines(parts(evaluator, rows), standard.evaluate_us, standard.pass_us)))
    for count in BATCHES:
        some = rows[np.arange(count) % BATCH]
        print(f"batch of {count:4}: {1e6 / best_us(partial(evaluator.evaluate, some), count):8.0f} designs/s")
    if given.quick:
        return
    for name in SHIPPED:
        loaded = load(FOLDER / name / "study.toml")
        shipped = Evaluator(compile_study(loaded.study, loaded.catalogue))
        print(speed_lines([speed(name, shipped, searched(shipped, BATCH))])[1], flush=True)
    sizes = [(rails, twelve_rails.STATES) for rails in GROWN_RAILS]
    sizes += [(twelve_rails.RAILS, states) for states in GROWN_STATES if states != twelve_rails.STATES]
    print("growth, designs drawn at random, 64 at once")
    for size in sizes:
        print(speed_lines([apart(grown, size)])[1], flush=True)
    print(speed_lines([apart(with_search, LARGE)])[1])


if __name__ == "__main__":
    main()
