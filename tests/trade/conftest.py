"""Studies compiled once for the trade room's tests; no search is run."""

from __future__ import annotations

from functools import cache
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray

from archopt.inputs.load import load
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.problem import Problem

STUDIES = Path(__file__).resolve().parents[2] / "studies"


@cache
def compiled(name: str) -> tuple[Problem, NDArray[np.int64]]:
    """Return a shipped study compiled, and its incumbent's row without decisions."""
    loaded = load(STUDIES / name / "study.toml")
    problem = compile_study(loaded.study, loaded.catalogue)
    row = incumbent_row(problem)
    assert row is not None
    return problem, row


@pytest.fixture(scope="session")
def telecom() -> tuple[Problem, NDArray[np.int64]]:
    """The line card with its incumbent, which has one regulated bus that trims from 9.6 to 13.2 V."""
    return compiled("telecom_six")


@pytest.fixture(scope="session")
def wide(telecom: tuple[Problem, NDArray[np.int64]]) -> tuple[Problem, NDArray[np.int64]]:
    """The line card's incumbent with a bus converter that reaches from 5 V up."""
    problem, row = telecom
    return problem, problem.space.encode({"bus_a.converter": "wide_bus_200w"}, row)


@pytest.fixture(scope="session")
def industrial() -> tuple[Problem, NDArray[np.int64]]:
    """The machine controller with its incumbent: a stated jump of 35 %, a rail fed from another."""
    return compiled("industrial_ten")
