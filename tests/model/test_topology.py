"""One name for a topology: by hand for every pattern, whichever bus is called bus A."""

from __future__ import annotations

from pathlib import Path

import numpy as np
import pytest

from archopt.inputs.load import load
from archopt.model.compiled import compile_study, first_row
from archopt.model.parameters import FIXED_RATIO, REGULATED
from archopt.model.space import BUS_A, BUS_B, FIXED, FOLLOW, INPUT, TWO_LEVELS, Designs
from archopt.model.topology import has_moving_bus, kind_words, topology, topology_kinds

STUDY = Path(__file__).resolve().parents[2] / "studies" / "compute_sixteen" / "study.toml"
RATIO = -1


@pytest.fixture(scope="module")
def problem():
    loaded = load(STUDY)
    return compile_study(loaded.study, loaded.catalogue)


def row_of(problem, feeds: tuple[int, ...], control: tuple[int, int]):
    """A row whose rails take the feeds in turn; RATIO as control puts a fixed-ratio converter there."""
    row = first_row(problem)
    designs = Designs(problem.layout, row[None])
    designs.rail("feed")[0] = np.resize(feeds, problem.layout.rails)
    for bus, how in enumerate(control):
        wanted = FIXED_RATIO if how == RATIO else REGULATED
        designs.bus("converter")[0, bus] = 1 + int(np.flatnonzero(problem.converters.kind == wanted)[0])
        designs.bus("control")[0, bus] = FIXED if how == RATIO else how
    return row


@pytest.mark.parametrize(
    ("feeds", "control", "words", "moving"),
    [
        ((INPUT,), (FOLLOW, FOLLOW), "direct", False),
        ((BUS_A,), (FOLLOW, FIXED), "one bus, follows load", True),
        ((BUS_B,), (FOLLOW, FIXED), "one bus, fixed", False),
        ((BUS_A, INPUT), (TWO_LEVELS, FIXED), "one bus and direct, two levels", True),
        ((BUS_A,), (RATIO, FOLLOW), "one bus, fixed ratio", False),
        ((BUS_A, BUS_B), (FIXED, FIXED), "two buses, fixed", False),
        ((BUS_A, BUS_B), (FOLLOW, FIXED), "two buses, fixed and follows load", True),
        ((BUS_A, BUS_B), (FIXED, FOLLOW), "two buses, fixed and follows load", True),
        ((BUS_A, BUS_B, INPUT), (RATIO, TWO_LEVELS), "two buses and direct, fixed ratio and two levels", True),
    ],
)
def test_every_pattern_has_one_name(problem, feeds, control, words: str, moving: bool) -> None:
    row = row_of(problem, feeds, control)
    assert topology(problem, row) == [words]
    kinds = topology_kinds(problem, row)
    assert kind_words(int(kinds[0])) == words
    assert has_moving_bus(kinds).tolist() == [moving]
