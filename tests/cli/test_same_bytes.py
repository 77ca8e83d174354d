"""The same study and seed write the same bytes in processes of their own; another seed writes others."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from dataclasses import dataclass
from pathlib import Path

import pytest

STUDY = Path(__file__).resolve().parents[2] / "studies" / "telecom_six" / "study.toml"
EVALUATIONS = 240
SAME = ("front.csv", "archive.csv", "designs.json", "problem.json")


@dataclass(frozen=True)
class Solve:
    """One solve in a process of its own: its seed and where Python's hashes of text start."""

    name: str
    seed: int
    hash_seed: str


SOLVES = (Solve("one", 5, "1"), Solve("again", 5, "4242"), Solve("other_seed", 6, "1"))


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """Directory of the results, each written by a process with working directory and hash seed of its own."""
    folder = tmp_path_factory.mktemp("same_bytes")
    for solve in SOLVES:
        started_in = folder / f"started_{solve.name}"
        started_in.mkdir()
        words = ["solve", str(STUDY), "--evaluations", str(EVALUATIONS), "--seed", str(solve.seed), "--quiet"]
        done = subprocess.run(
            [sys.executable, "-m", "archopt", *words, "--out", str(folder / solve.name)],
            cwd=started_in, env={**os.environ, "PYTHONHASHSEED": solve.hash_seed},
            capture_output=True, text=True, check=False,
        )  # fmt: skip
        assert (done.returncode, done.stderr) == (0, ""), solve
    return folder


@pytest.mark.parametrize("name", SAME)
def test_the_same_seed_writes_the_same_bytes(place: Path, name: str) -> None:
    one, again = ((place / result / name).read_bytes() for result in ("one", "again"))
    assert len(one) > 1_000
    assert one == again


def test_another_seed_finds_another_archive(place: Path) -> None:
    one, other = ((place / result / "archive.csv").read_bytes() for result in ("one", "other_seed"))
    assert one != other
    assert one.splitlines()[0].split(b",")[:4] == other.splitlines()[0].split(b",")[:4]


def test_another_seed_solves_the_same_problem(place: Path) -> None:
    """What differs is what was found, not what was asked: states and bands have no luck in them."""
    one, other = (json.loads((place / result / "problem.json").read_bytes()) for result in ("one", "other_seed"))
    for key in ("study", "states", "bands", "copper", "assumed"):
        assert one[key] == other[key], key


def test_processes_hash_text_differently() -> None:
    """Guards the comparison itself: the two hash seeds order a set of text differently."""
    script = "print(list({f'rail_{k}' for k in range(40)}))"
    orders = {
        subprocess.run(
            [sys.executable, "-c", script], env={**os.environ, "PYTHONHASHSEED": solve.hash_seed},
            capture_output=True, text=True, check=True,
        ).stdout
        for solve in SOLVES[:2]
    }  # fmt: skip
    assert len(orders) == 2
