"""Temperature fixed point and the effect of air speed."""

from __future__ import annotations

import numpy as np
import pytest

from archopt.physics import thermal


def test_fixed_point_is_where_iteration_ends() -> None:
    # closed form against plain iteration of temperature and loss, several gains at once
    k_per_w = np.array([2.0, 10.0, 30.0])
    loss, temperature, gain = thermal.fixed_point(1.0, 1.4, 25.0, 125.0, 60.0, k_per_w)
    iterated = np.full(3, 60.0)
    for _ in range(500):
        iterated = 60.0 + k_per_w * (1.0 + 0.004 * (iterated - 25.0))
    assert temperature == pytest.approx(iterated, rel=1e-9)
    assert loss == pytest.approx(1.0 + 0.004 * (iterated - 25.0), rel=1e-9)
    assert gain == pytest.approx(0.004 * k_per_w, rel=1e-9)


def test_runaway_has_a_size_and_finite_losses() -> None:
    loss, temperature, gain = thermal.fixed_point(1.0, 1.4, 25.0, 125.0, 60.0, np.array([200.0, 300.0, 1e6]))
    assert gain == pytest.approx(np.array([0.8, 1.2, 4000.0]), rel=1e-9)
    assert np.isfinite(loss).all()
    assert (np.diff(temperature) > 0.0).all()


@pytest.mark.parametrize(("air_m_s", "factor"), [(1.5, 1.0), (6.0, 0.5), (0.375, 2.0), (0.0, np.sqrt(7.5))])
def test_air_speed(air_m_s: float, factor: float) -> None:
    # laminar flat plate: heat transfer grows with the root of speed (textbook); still air counts as 0.2 m/s
    assert thermal.thermal_resistance_at(8.0, 1.5, air_m_s) == pytest.approx(8.0 * factor, rel=1e-9)
