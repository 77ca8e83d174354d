"""A buck stage whose every loss is off, so that a published example switches on exactly what it counts."""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import fields

import numpy as np
import pytest

from archopt.physics.buck import BuckParameters


@pytest.fixture
def bare_stage() -> Callable[..., BuckParameters]:
    def build(**given: float) -> BuckParameters:
        values = dict.fromkeys((field.name for field in fields(BuckParameters)), 0.0)
        values |= {
            "frequency_hz": 1e6,
            "inductance_h": 1.0,  # no ripple unless the example has one
            "core_ripple_a": 1.0,
            "core_exponent": 2.0,
            "output_charge_v": 1.0,
            "recovery_a": 1.0,
            "gate_from_input": 1.0,
            "max_duty": 1.0,
        }
        unknown = set(given) - set(values)
        assert not unknown, unknown
        values |= given
        return BuckParameters(**{name: np.asarray(value, dtype=np.float64) for name, value in values.items()})

    return build
