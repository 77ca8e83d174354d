"""Worker processes: the same answers for any number of them, and none left behind."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
import time
from collections.abc import Iterator
from pathlib import Path
from typing import Any

import numpy as np
import pytest

from archopt.model.evaluator import Evaluator
from archopt.search import workers
from archopt.search.driver import search
from archopt.search.jobs import Arrays, Desk, completed, decided, evaluated, evaluation_of
from archopt.search.outcome import state_of
from archopt.search.workers import Crew
from tests.search.small_study import FEW_CHOICES, TWO_RAILS, compiled

ROOT = Path(__file__).resolve().parents[2]
SIZE = 16


@pytest.fixture(scope="module")
def evaluator(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    return compiled(tmp_path_factory.mktemp("few"), TWO_RAILS + FEW_CHOICES)


@pytest.fixture(scope="module")
def crew(evaluator: Evaluator) -> Iterator[Crew]:
    with Crew(Desk.of(evaluator, SIZE), 2) as two:
        two.start(wait=True)
        yield two


@pytest.fixture(autouse=True)
def jobs_of_this_file(monkeypatch: pytest.MonkeyPatch) -> None:
    """Let workers import the jobs defined here, by whichever name this file was imported."""
    monkeypatch.setenv("PYTHONPATH", os.pathsep.join([str(ROOT), str(ROOT / "tests")]))


class BareDesk(Desk):
    """A desk with nothing on it, for jobs that need nothing."""

    def __init__(self) -> None:
        object.__setattr__(self, "size", SIZE)

    def prepare(self) -> None:
        pass


def genomes_of(desk: Desk, count: int) -> np.ndarray:
    rng = np.random.default_rng(7)
    low, high = (np.array([getattr(gene, end) for gene in desk.genome.genes]) for end in ("low", "high"))
    return np.asarray(np.rint(low + rng.random((count, len(low))) * (high - low)))


def same(one: Arrays, other: Arrays) -> None:
    assert len(one) == len(other)
    for a, b in zip(one, other, strict=True):
        assert (a.dtype, a.shape, a.tobytes()) == (b.dtype, b.shape, b.tobytes())


def test_answers_are_the_same_bits_in_another_process(crew: Crew) -> None:
    genomes = genomes_of(crew.desk, 4 * SIZE)
    chunks = [(genomes[k : k + SIZE],) for k in range(0, len(genomes), SIZE)]
    before = crew.counts.there
    found = crew.map(completed, chunks)
    assert crew.counts.there > before
    for chunk, answer in zip(chunks, found, strict=True):
        same(answer, completed(crew.desk, *chunk))
    rows = evaluation_of(found[0]).rows
    for job in (evaluated, decided):
        same(crew.map(job, [(rows[:5],)] * 4)[-1], job(crew.desk, rows[:5]))


def test_a_search_ends_alike_with_one_and_two_processes(evaluator: Evaluator, crew: Crew) -> None:
    settings: dict[str, Any] = {"evaluations": 240, "population": SIZE, "seed": 3, "stagnation_generations": 50}
    alone = state_of(search(evaluator, **settings))
    before = crew.counts.there
    together = state_of(search(evaluator, **settings, crew=crew))
    assert crew.counts.there > before + 3
    for name, values in alone.items():
        if name != "seconds":
            assert values.tobytes() == together[name].tobytes(), name


def refuses(desk: Desk, rows: np.ndarray) -> Arrays:
    raise ZeroDivisionError(f"{len(rows)} rows")


def dies_elsewhere(desk: Desk, here: np.ndarray) -> Arrays:
    if os.getpid() != int(here[0]):
        os._exit(9)
    time.sleep(0.05)
    return (here,)


def test_an_error_is_raised_as_it_is(crew: Crew) -> None:
    with pytest.raises(ZeroDivisionError, match="3 rows"):
        crew.map(refuses, [(np.zeros(3),)] * 4)


def test_a_lost_worker_costs_nothing_but_time() -> None:
    here = np.array([os.getpid()])
    with Crew(BareDesk(), 2) as crew:
        crew.start(wait=True)
        assert crew.counts.lost == 0
        for _ in range(20):
            for answer in crew.map(dies_elsewhere, [(here,)] * 8):
                same(answer, (here,))
            if crew.counts.lost:
                break
        assert crew.counts.lost == 1


def test_no_worker_is_started_for_a_short_search() -> None:
    with Crew(BareDesk(), 3, start_after_s=1000.0) as crew:
        crew.map(size_of, [(np.zeros(1),)] * 2)
        assert (crew.counts.here, crew.counts.there, crew.counts.lost) == (2, 0, 0)


def test_where_files_cannot_be_passed_on_the_desk_goes_by_the_pipe(monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(workers, "PASSES_FILES", False)
    with Crew(BareDesk(), 2) as crew:
        crew.start(wait=True)
        for answer in crew.map(size_of, [(np.zeros(1),)] * 6):
            assert answer[0].tolist() == [SIZE]
        assert (crew.counts.lost, crew.counts.there > 0) == (0, True)


def size_of(desk: Desk, seconds: np.ndarray) -> Arrays:
    time.sleep(0.05)
    return (np.array([desk.size]),)


def test_without_an_interpreter_the_search_goes_on_alone(
    monkeypatch: pytest.MonkeyPatch, tmp_path: Path
) -> None:
    monkeypatch.setattr(sys, "executable", str(tmp_path / "none"))
    with Crew(BareDesk(), 3, start_after_s=0.0) as crew:
        assert len(crew.map(size_of, [(np.zeros(1),)] * 2)) == 2
        assert (crew.counts.here, crew.counts.lost) == (2, 2)


def test_a_few_workers_by_default(monkeypatch: pytest.MonkeyPatch) -> None:
    for cores, expected in ((1, 1), (2, 2), (64, 4)):
        monkeypatch.setattr(workers, "usable_cores", lambda cores=cores: cores)
        assert workers.default_workers() == expected


PARENT = """
from archopt.search.workers import Crew
from tests.search.test_workers import BareDesk, sleeps
crew = Crew(BareDesk(), 2)
crew.start(wait=True)
print(*crew.processes(), flush=True)
crew.map(sleeps, [(60.0,)] * 2)
"""


def sleeps(desk: Desk, seconds: float) -> Arrays:
    time.sleep(seconds)
    return ()


def alive(process: int) -> bool:
    try:
        return Path(f"/proc/{process}/stat").read_text().rpartition(")")[2].split()[0] != "Z"
    except OSError:
        return False


def test_workers_end_with_the_process_that_started_them() -> None:
    """Killed in the middle of their job; the terminal's interrupts go to another group of processes than theirs."""
    with subprocess.Popen(
        [sys.executable, "-c", PARENT], cwd=ROOT, stdout=subprocess.PIPE, text=True, start_new_session=True
    ) as parent:
        assert parent.stdout is not None
        other = int(parent.stdout.readline())
        time.sleep(0.3)
        assert alive(other)
        assert os.getpgid(other) != os.getpgid(parent.pid)
        parent.send_signal(signal.SIGKILL)
        parent.communicate()
    ends = time.monotonic() + 20.0
    while alive(other) and time.monotonic() < ends:
        time.sleep(0.05)
    assert not alive(other)
