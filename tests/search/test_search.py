"""The whole search: same bytes, pins, parents, what it says when nothing is feasible, and how it stops."""

from __future__ import annotations

import os
import subprocess
import sys
from pathlib import Path

import numpy as np
import pytest

from archopt.model.evaluator import Evaluator
from archopt.model.space import PARENT, Designs
from archopt.model.topology import has_moving_bus, topology_kinds
from archopt.search.driver import Progress, search
from archopt.search.record import has_parents
from tests.search.small_study import FEW_CHOICES, SMALL_CHILD, TWO_RAILS, compiled

ROOT = Path(__file__).resolve().parents[2]
PROGRAM = """
import hashlib, sys
from pathlib import Path
from archopt.search.driver import search
from tests.search.small_study import TWO_RAILS, compiled
evaluator = compiled(Path(sys.argv[1]), TWO_RAILS)
found = search(evaluator, evaluations=400, population=24, seed=int(sys.argv[2]), stagnation_generations=50)
digest = hashlib.sha256(found.rows.tobytes() + found.objectives.tobytes())
print(digest.hexdigest(), len(found.rows), found.evaluations)
"""


@pytest.fixture(scope="module")
def open_space(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    return compiled(tmp_path_factory.mktemp("open"), TWO_RAILS)


@pytest.fixture(scope="module")
def pinned(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    return compiled(tmp_path_factory.mktemp("pinned"), TWO_RAILS + FEW_CHOICES)


def start_apart(folder: Path, seed: int) -> subprocess.Popen[str]:
    """Start a search in a process of its own with hashing of strings seeded differently each time."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    environment.pop("PYTHONHASHSEED", None)
    command = [sys.executable, "-c", PROGRAM, str(folder), str(seed)]
    return subprocess.Popen(command, stdout=subprocess.PIPE, text=True, cwd=ROOT, env=environment)


def test_same_seed_gives_the_same_archive_in_two_processes(tmp_path: Path) -> None:
    folders = [tmp_path / name for name in ("first", "second", "other")]
    for folder in folders:
        folder.mkdir()
    running = [start_apart(folder, seed) for folder, seed in zip(folders, (5, 5, 6), strict=True)]
    first, second, other = (process.communicate()[0] for process in running)
    assert [process.returncode for process in running] == [0, 0, 0]
    assert first == second
    assert first != other


def test_pins_hold_in_every_design_kept(pinned: Evaluator) -> None:
    found = search(pinned, evaluations=600, population=24, seed=1, stagnation_generations=50)
    space, layout = pinned.problem.space, pinned.problem.layout
    assert len(found.rows) > 3
    # limits and supervisors that a schedule leaves without effect are snapped to what is used
    settled = {layout.bus(name).start + b for name in ("lower_v", "upper_v", "nominal_v") for b in range(2)}
    for column, values in enumerate(space.allowed):
        if column in settled or space.names[column].startswith("bus_b."):
            continue
        assert np.isin(found.rows[:, column], values).all(), space.names[column]
    designs = Designs(layout, found.rows)
    assert (designs.bus("lower_v")[:, 0] >= space.allowed[layout.bus("lower_v").start][0]).all()
    assert (designs.bus("upper_v")[:, 0] <= space.allowed[layout.bus("upper_v").start][-1]).all()


def test_parents_are_tried_where_a_study_allows_them(tmp_path: Path) -> None:
    evaluator = compiled(tmp_path, TWO_RAILS + SMALL_CHILD)
    seen: list[int] = []
    plain = evaluator.evaluate

    def watched(rows: np.ndarray, *, exact: bool = False):  # type: ignore[no-untyped-def]
        found = plain(rows, exact=exact)
        fed = has_parents(evaluator.problem, found.rows)
        seen.append(int((found.violation[fed] <= 0.0).sum()))
        return found

    evaluator.evaluate = watched  # type: ignore[method-assign]
    found = search(evaluator, evaluations=1500, population=40, seed=2, stagnation_generations=50)
    assert sum(seen) > 20
    feed = Designs(evaluator.problem.layout, found.rows).rail("feed")
    assert set(np.unique(feed[:, :2])) <= {0, 1, 2}
    assert (feed[:, 2] <= PARENT + 1).all()


def test_the_archive_is_what_deciding_and_evaluating_again_gives(open_space: Evaluator) -> None:
    found = search(open_space, evaluations=500, population=24, seed=4, stagnation_generations=50)
    again = open_space.decide(found.rows)
    assert np.array_equal(again, found.rows)
    fresh = open_space.evaluate(found.rows)
    assert (fresh.violation <= 0.0).all()
    assert np.allclose(fresh.objectives, found.objectives, rtol=1e-9)


def test_fixed_designs_are_a_front_of_their_own(open_space: Evaluator) -> None:
    found = search(open_space, evaluations=800, population=24, seed=4, stagnation_generations=50)
    assert len(found.fixed_rows)
    assert not has_moving_bus(topology_kinds(open_space.problem, found.fixed_rows)).any()
    # a fixed design is never better than the whole archive
    for point in found.fixed_objectives:
        assert (found.objectives <= point + 1e-9).all(axis=1).any()


def test_an_impossible_study_names_the_limit_and_by_how_much(tmp_path: Path) -> None:
    impossible = TWO_RAILS.replace("[economics]", "[limits]\narea_cap_cm2 = 0.5\n\n[economics]")
    evaluator = compiled(tmp_path, impossible)
    found = search(evaluator, evaluations=300, population=24, seed=1, stagnation_generations=50)
    assert len(found.rows) == 0
    assert found.feasible == 0
    assert found.excess["area cap"] > 1.0
    assert found.least_row is not None
    assert found.least_violation >= found.excess["area cap"] - 1e-9
    assert all(best.violation > 0.0 for best in found.kinds.values())


def test_an_interrupt_keeps_what_was_found(open_space: Evaluator) -> None:
    def interrupt(progress: Progress) -> None:
        if progress.generation == 6:
            raise KeyboardInterrupt

    found = search(
        open_space, evaluations=10_000, population=24, seed=1, stagnation_generations=50, progress=interrupt
    )
    assert found.ended == "interrupted"
    assert found.generations == 6
    assert len(found.rows)


def test_stop_ends_the_search(open_space: Evaluator) -> None:
    found = search(
        open_space, evaluations=10_000, population=24, seed=1, stagnation_generations=50, stop=lambda: True
    )
    assert found.ended == "stopped"
    assert found.generations == 1


def test_a_given_design_is_never_lost(open_space: Evaluator) -> None:
    start = search(open_space, evaluations=800, population=24, seed=9, stagnation_generations=50)
    given = start.rows[:1]
    found = search(
        open_space, evaluations=24, population=24, seed=1, stagnation_generations=50, seeds_rows=given
    )
    assert (found.objectives <= start.objectives[0] + 1e-9).all(axis=1).any()
