"""The fast tables against direct physics over many random designs."""

from __future__ import annotations

from functools import cache
from typing import NamedTuple

import numpy as np
import pytest
from numpy.typing import NDArray

from archopt.model.limits import INDEX, LIMITS
from equivalence.shipped import STUDIES, decided, evaluator_of


class Figures(NamedTuple):
    """Objectives (P, 3), normalised slack (P, limits) and violation (P,) of the designs."""

    objectives: NDArray[np.float64]
    slack: NDArray[np.float64]
    violation: NDArray[np.float64]


COUNT = 300
SEED = 11
LOSS = 1e-3
VERDICT = 2e-3
BATCH = 50  # designs at once: what stays in the processor's cache


@cache
def both(name: str) -> tuple[Figures, Figures]:
    """Return what direct physics and the tables say of the designs."""
    evaluator, rows = evaluator_of(name), decided(name, COUNT, SEED)
    out = []
    for exact in (True, False):
        parts = [evaluator.evaluate(rows[k : k + BATCH], exact=exact) for k in range(0, COUNT, BATCH)]
        objectives, slack, violation = (
            np.concatenate([getattr(part, field) for part in parts])
            for field in ("objectives", "slack", "violation")
        )
        out.append(Figures(objectives, slack, violation))
    return out[0], out[1]


def within_reach(slack: NDArray[np.float64]) -> NDArray[np.float64]:
    """Return which designs run their stages where the tables reach: a table ends a little outside a stage's range."""
    fits = slack[:, INDEX["choices that fit together"]] >= 0.0
    steady = slack[:, INDEX["stage input range"]] >= -1.0
    return fits & steady & (slack[:, INDEX["jump survival: stage input"]] >= -8.0)


@pytest.mark.parametrize("name", STUDIES)
def test_loss_is_within_a_thousandth(name: str) -> None:
    exact, fast = both(name)
    reach = within_reach(exact.slack)
    assert reach.sum() >= COUNT // 4
    error = np.abs(fast.objectives[reach, 0] / exact.objectives[reach, 0] - 1.0)
    assert error.max() <= LOSS, f"worst {error.max():.2e}"
    np.testing.assert_array_equal(fast.objectives[:, 1], exact.objectives[:, 1])


@pytest.mark.parametrize("name", STUDIES)
def test_no_verdict_differs_beyond_the_edge(name: str) -> None:
    exact, fast = both(name)
    differs = (exact.slack >= 0.0) != (fast.slack >= 0.0)
    size = np.where(differs, np.maximum(np.abs(exact.slack), np.abs(fast.slack)), 0.0)
    size = size[within_reach(exact.slack)]
    worst = size.max(axis=0)
    assert worst.max() <= VERDICT, LIMITS[int(worst.argmax())].name


@pytest.mark.parametrize("name", STUDIES)
def test_no_design_is_feasible_one_way_only(name: str) -> None:
    """Beyond the tables' reach too: what cannot be built must not look as if it could."""
    exact, fast = both(name)
    differs = (exact.violation <= 0.0) != (fast.violation <= 0.0)
    assert np.maximum(exact.violation, fast.violation)[differs].max(initial=0.0) <= VERDICT
    assert (exact.violation <= 0.0).any()
