"""The tables the measuring commands print say what their cases hold."""

from __future__ import annotations

import math
from collections import Counter

import numpy as np
import pytest

from tests.benchmarks.shipped_studies import STUDIES, rank_correlation
from tests.benchmarks.topology_sweep import FOLDER, RANGES, Case, table


def test_the_sweep_counts_fronts_and_what_absent_topologies_lose() -> None:
    first = Case("one", 1.0, "", Counter({"direct": 3}), ("direct", 200.0), {"one bus": 20.0, "two buses": None})
    second = Case("two", 1.0, "", Counter({"direct": 1, "one bus": 4}), ("one bus", 50.0), {"direct": 1.0})
    unsolved = Case("three", 1.0, "")
    lines = table([first, second, unsolved], [1.0])
    assert lines[0].startswith("2 of 3 cases solved")
    rows = {name: line.removeprefix(name).split() for line in lines[2:5] for name in ("direct", "one bus", "two buses")
            if line.startswith(name)}  # fmt: skip
    assert list(rows) == ["direct", "one bus", "two buses"]
    assert rows["direct"] == ["2", "of", "2", "50%", "1", "0", "-", "-", "0"]
    assert rows["one bus"] == ["1", "of", "2", "50%", "1", "1", "10", "(10", "to", "10)", "20", "(20", "to", "20)", "0"]
    assert rows["two buses"] == ["0", "of", "2", "0%", "0", "0", "-", "-", "1"]


def test_rank_correlation_ranks() -> None:
    values = np.array([1.0, 2.0, 5.0, 9.0])
    assert rank_correlation(values, -(values**3)) == pytest.approx(-1.0, rel=1e-12)  # closed form: reversed order
    assert math.isnan(rank_correlation(values, np.ones(4)))


def test_every_shipped_study_is_measured() -> None:
    shipped = {path.name for path in FOLDER.iterdir() if path.is_dir()}
    assert set(STUDIES) == set(RANGES) == shipped
