"""A solve that is killed goes on with ``--resume`` and writes the same bytes; what is in the way is said."""

from __future__ import annotations

import os
import signal
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from archopt.cli import main
from archopt.search import checkpoint
from archopt.search.driver import Search
from tests.search.small_study import FEW_CHOICES, TWO_RAILS

ROOT = Path(__file__).resolve().parents[2]
Run = Callable[..., tuple[int, str, str]]
SEARCH = """
[search]
evaluations = 128
population = 16
"""
SAME = ("front.csv", "archive.csv", "designs.json", "problem.json")

# Puts by at every generation and kills itself: in the middle of writing a state, or in the generation after it.
PROGRAM = """
import os, signal, sys
from archopt.search import checkpoint
from archopt.search.driver import Search
checkpoint.EVERY_S = checkpoint.LEAST_SHARE = 0.0
when, number, count = sys.argv[1], int(sys.argv[2]), 0
def counted(whole):
    def work(*words, **named):
        global count
        count += 1
        if count == number and when == "writing":
            raise SystemExit(os.kill(os.getpid(), signal.SIGKILL))
        done = whole(*words, **named)
        if count == number and when == "searching":
            os.kill(os.getpid(), signal.SIGKILL)
        return done
    return work
if when == "writing":
    checkpoint.os.fsync = counted(os.fsync)
else:
    Search.note = counted(Search.note)
from archopt.cli import main
main(sys.argv[3:])
"""


@pytest.fixture(scope="module")
def study(tmp_path_factory: pytest.TempPathFactory) -> Path:
    path = tmp_path_factory.mktemp("study") / "study.toml"
    path.write_text(TWO_RAILS + FEW_CHOICES + SEARCH, encoding="utf-8")
    return path


@pytest.fixture(scope="module")
def never(study: Path) -> Path:
    """The result of a run never stopped."""
    place = study.parent / "never"
    with pytest.raises(SystemExit) as left:
        main(["solve", str(study), "--quiet", "--out", str(place)])
    assert left.value.code == 0
    return place


def killed(when: str, number: int, *words: str) -> None:
    """Run a solve that kills itself; see that it did."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT)}
    done = subprocess.run(
        [sys.executable, "-c", PROGRAM, when, str(number), *words],
        cwd=ROOT, env=environment, capture_output=True, text=True, check=False,
    )  # fmt: skip
    assert done.returncode == -signal.SIGKILL, done.stderr


def test_killed_twice_and_interrupted_it_ends_with_the_same_bytes(
    study: Path, never: Path, run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    place = tmp_path / "killed"
    solve = ("solve", str(study), "--quiet", "--out", str(place))
    killed("searching", 5, *solve)
    first = checkpoint.read(place).reached["evaluations"]
    assert first > 0
    killed("writing", 3, *solve, "--resume")
    assert {entry.name for entry in place.iterdir()} == {checkpoint.NAME, checkpoint.PARTIAL}
    second = checkpoint.read(place).reached["evaluations"]
    assert second > first
    refused_unless_resumed(run, solve)

    with monkeypatch.context() as patch:
        patch.setattr(Search, "step", interrupting(Search.step))
        assert run(*solve, "--resume")[0] == 130
    assert {entry.name for entry in never.iterdir()} | {checkpoint.NAME} == {entry.name for entry in place.iterdir()}
    assert checkpoint.read(place).reached["evaluations"] > second
    assert "goes on where this run was stopped" in run("show", str(place))[1]
    refused_unless_resumed(run, solve)

    assert run(*solve, "--resume") == (0, f"{place}\n", "")
    for name in SAME:
        assert (place / name).read_bytes() == (never / name).read_bytes(), name
    assert {entry.name for entry in place.iterdir()} == {entry.name for entry in never.iterdir()}
    code, _, err = run(*solve, "--resume")
    assert code == 2
    assert "no unfinished run to go on with" in err


def interrupting(step: Callable[[Search], None]) -> Callable[[Search], None]:
    """Return a generation in which somebody presses the keys to interrupt."""

    def interrupted(search: Search) -> None:
        step(search)
        os.kill(os.getpid(), signal.SIGINT)

    return interrupted


def refused_unless_resumed(run: Run, solve: tuple[str, ...]) -> None:
    """See that nothing put by is lost by starting again, and that another run does not go on from it."""
    code, out, err = run(*solve)
    assert (code, out) == (2, "")
    assert "of 128 designs tried): go on with it (--resume), or start afresh (--replace)" in err
    code, out, err = run(*solve, "--resume", "--seed", "9")
    assert (code, out) == (2, "")
    assert "seed is 9, there it is 1" in err


def test_a_damaged_state_is_told_from_a_fault(study: Path, run: Run, tmp_path: Path) -> None:
    place = tmp_path / "damaged"
    place.mkdir()
    (place / checkpoint.NAME).write_bytes(b"something else")
    for words in ((), ("--resume",)):
        code, out, err = run("solve", str(study), "--out", str(place), *words)
        assert (code, out) == (2, "")
        assert "--replace" in err
        assert "Traceback" not in err
    code, _, err = run("solve", str(study), "--out", str(place), "--resume", "--replace")
    assert code == 2
    assert "not both" in err
