"""A table of measured losses: exact where the loss is linear, and nothing beyond its ends."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from scipy.interpolate import RegularGridInterpolator

from archopt.physics.measured import LossTable, beyond_table, table_loss_w

INPUT_V, OUTPUT_V, CURRENT_A = np.array([36.0, 48.0, 75.0]), np.array([9.6, 12.0]), np.array([0.0, 2.0, 5.0, 10.0])


@pytest.fixture
def table() -> LossTable:
    volts, out, load = np.meshgrid(INPUT_V, OUTPUT_V, CURRENT_A, indexing="ij")
    return LossTable(INPUT_V, OUTPUT_V, CURRENT_A, 1.0 + 0.02 * volts + 0.01 * volts * out + 0.3 * load * out)


def test_exact_for_products_of_linear_functions(table: LossTable) -> None:
    # closed form: trilinear interpolation keeps every product of functions linear in one axis each
    random = np.random.default_rng(7)
    volts, out, load = (random.uniform(axis[0], axis[-1], 50) for axis in (INPUT_V, OUTPUT_V, CURRENT_A))
    loss, inside = table_loss_w(table, volts, out, load)
    assert inside.all()
    np.testing.assert_allclose(loss, 1.0 + 0.02 * volts + 0.01 * volts * out + 0.3 * load * out, rtol=1e-12)


def test_equals_scipy_inside() -> None:
    random = np.random.default_rng(8)
    values = random.uniform(1.0, 5.0, (3, 2, 4))
    point = [random.uniform(axis[0], axis[-1], (6, 5)) for axis in (INPUT_V, OUTPUT_V, CURRENT_A)]
    loss, _ = table_loss_w(LossTable(INPUT_V, OUTPUT_V, CURRENT_A, values), *point)
    independent = RegularGridInterpolator((INPUT_V, OUTPUT_V, CURRENT_A), values)(np.stack(point, axis=-1))
    np.testing.assert_allclose(loss, independent, rtol=1e-12)


def test_outside_is_marked_and_held(table: LossTable) -> None:
    loss, inside = table_loss_w(table, [20.0, 48.0, 48.0, 48.0, 75.5], 12.0, [5.0, 5.0, 12.0, 10.0, 10.05])
    assert inside.tolist() == [False, True, False, True, True]
    held, _ = table_loss_w(table, [36.0, 48.0, 48.0, 48.0, 75.0], 12.0, [5.0, 5.0, 10.0, 10.0, 10.0])
    np.testing.assert_allclose(loss, held, rtol=1e-12)


def test_how_far_beyond_the_table_is_a_share_of_its_end(table: LossTable) -> None:
    # closed form: 75 V is the highest input, 9.6 V the lowest output, 10 A the highest current, 0 A no end at all
    beyond = beyond_table(table, [90.0, 48.0, 48.0], [12.0, 8.0, 12.0], [5.0, 5.0, 0.0])
    assert beyond[0, 0] == pytest.approx(90.0 / 75.0 - 1.0, rel=1e-12)
    assert beyond[1, 1] == pytest.approx(1.0 - 8.0 / 9.6, rel=1e-12)
    assert beyond[2, 2] == pytest.approx(-1.0, rel=1e-12)
    assert (beyond[2] <= 0.0).all()
    followed = replace(table, output_follows=True)
    assert beyond_table(followed, 48.0, 100.0, 5.0)[1] == pytest.approx(-1.0, rel=1e-12)


def test_one_level_on_an_axis() -> None:
    table = LossTable(np.array([48.0]), np.array([12.0]), np.array([1.0, 3.0]), np.array([[[2.0, 4.0]]]))
    loss, inside = table_loss_w(table, [48.1, 54.0], 12.0, 2.0)
    np.testing.assert_allclose(loss, [3.0, 3.0], rtol=1e-12)
    assert inside.tolist() == [True, False]
