"""Kill searches at random moments, go on with each, and compare what they end with to one never killed.

Run as ``python -m tests.benchmarks.fifty_kills``; ``--kills``, ``--seed`` and ``--workers`` may be given. A run is
killed (SIGKILL) after a random part of the time a whole one takes, its start and the writing of its result
included, and gone on with until it is killed again or ends; then the next one begins. States are put by after
every generation, so that most kills have one to go on from and some hit the writing of one.
"""

from __future__ import annotations

import argparse
import hashlib
import os
import random
import shutil
import subprocess
import sys
import tempfile
import time
from collections import Counter
from pathlib import Path

from tests.search.small_study import FEW_CHOICES, TWO_RAILS

ROOT = Path(__file__).resolve().parents[2]
SAME = ("front.csv", "archive.csv", "designs.json", "problem.json")
SEARCH = """
[search]
evaluations = 800
population = 24
"""
# What is put by every five seconds is put by at every generation here.
PROGRAM = """
import sys
from archopt.search import checkpoint
checkpoint.EVERY_S = checkpoint.LEAST_SHARE = 0.0
from archopt.cli import main
main(sys.argv[1:])
"""


def start(study: Path, place: Path, *words: str) -> subprocess.Popen[bytes]:
    """Start a solve in a process of its own, with hashes of text of its own."""
    environment = {**os.environ, "PYTHONPATH": str(ROOT), "OMP_NUM_THREADS": "1"}
    environment.pop("PYTHONHASHSEED", None)
    command = [sys.executable, "-c", PROGRAM, "solve", str(study), "--quiet", "-o", str(place), *words]
    return subprocess.Popen(command, cwd=ROOT, env=environment, stdout=subprocess.PIPE, stderr=subprocess.PIPE)


def digest(place: Path) -> str:
    """Return one digest of the files a study and a seed decide."""
    found = hashlib.sha256()
    for name in SAME:
        found.update((place / name).read_bytes())
    return found.hexdigest()


def where(place: Path) -> str:
    """Return what a killed run left behind."""
    if (place / "run.json").is_file():
        return "result written"
    names = {entry.name for entry in place.iterdir()} if place.is_dir() else set()
    if "unfinished.partial" in names:
        return "in the middle of putting by"
    return "a state to go on from" if names else "nothing yet"


def main() -> None:
    """Kill, go on, compare and print."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("--kills", type=int, default=50)
    asked.add_argument("--seed", type=int, default=1)
    asked.add_argument("--workers", type=int, default=1)
    given = asked.parse_args()
    chance = random.Random(given.seed)
    words = ("--workers", str(given.workers))
    with tempfile.TemporaryDirectory() as folder:
        study = Path(folder) / "study.toml"
        study.write_text(TWO_RAILS + FEW_CHOICES + SEARCH, encoding="utf-8")
        began = time.monotonic()
        never = Path(folder) / "never"
        _, errors = start(study, never, *words).communicate()
        whole_s = time.monotonic() - began
        if not never.is_dir():
            sys.exit(errors.decode())
        expected = digest(never)
        print(f"never killed: {whole_s:.1f} s, {expected[:16]}", flush=True)
        left: Counter[str] = Counter()
        kills, ended, alike = 0, 0, 0
        place = Path(folder) / "killed"
        while kills < given.kills or place.exists():
            last = kills >= given.kills
            running = start(study, place, *words, "--resume")
            try:
                _, errors = running.communicate(timeout=None if last else chance.uniform(0.05, 1.0) * whole_s)
            except subprocess.TimeoutExpired:
                running.kill()
                running.communicate()
                kills += 1
                left[where(place)] += 1
                if "result written" not in where(place):
                    continue
            else:
                if running.returncode != 0:
                    sys.exit(f"ended with {running.returncode}: {errors.decode()}")
            ended += 1
            alike += digest(place) == expected
            print(f"{kills} kills, run {ended}: {'alike' if digest(place) == expected else 'DIFFERENT'}", flush=True)
            shutil.rmtree(place)
        print(f"{kills} kills, {ended} runs ended, {alike} alike. Left behind: {dict(left)}")
        if alike != ended:
            sys.exit(1)


if __name__ == "__main__":
    main()
