"""Gathering parameters by index, and losses over whole grids of parts and operating points."""

from __future__ import annotations

from dataclasses import FrozenInstanceError, fields

import numpy as np
import pytest

from archopt.physics import buck, bus_converter, linear
from archopt.physics.bus_converter import ConverterLosses, ConverterParameters
from archopt.physics.linear import LinearLosses, LinearParameters
from archopt.physics.parameters import Gatherable

TWO_UNITS = ConverterParameters(
    fixed_w=np.array([1.0, 2.0]),
    switching_w=np.array([2.0, 3.0]),
    input_exponent=np.array([1.0, 2.0]),
    output_exponent=np.array([0.5, -1.0]),
    input_nominal_v=np.array([48.0, 48.0]),
    output_nominal_v=np.array([12.0, 10.0]),
    linear_w_per_a=np.array([0.05, 0.1]),
    resistance_ohm=np.array([2e-3, 5e-3]),
    resistance_per_k=np.array(0.004),
    thermal_k_per_w=np.array([4.0, 6.0]),
)


def test_take_gathers_every_field_and_keeps_plain_numbers() -> None:
    index = np.array([[1, 0, 1], [0, 0, 1]])
    taken = TWO_UNITS.take(index)
    assert isinstance(taken, ConverterParameters)
    assert isinstance(taken, Gatherable)
    for field in fields(ConverterParameters):
        given = getattr(TWO_UNITS, field.name)
        expected = given if given.ndim == 0 else given[index]
        assert np.array_equal(getattr(taken, field.name), expected), field.name


def test_parameters_cannot_be_changed() -> None:
    with pytest.raises(FrozenInstanceError):
        TWO_UNITS.fixed_w = np.zeros(2)  # type: ignore[misc]


def test_converter_by_hand() -> None:
    # closed form: second unit at 60 V, 8 V, 20 A without heating
    p = ConverterParameters(*(getattr(TWO_UNITS, f.name) for f in fields(TWO_UNITS)))
    cold = p.take(np.array([1]))
    result = bus_converter.losses(cold, 60.0, 8.0, 20.0, 40.0)
    assert isinstance(result, ConverterLosses)
    assert result.switching_w == pytest.approx(np.array([3.0 * (60 / 48) ** 2 * (8 / 10) ** -1]), rel=1e-12)
    assert result.linear_w == pytest.approx(np.array([2.0]), rel=1e-12)
    heated = 5e-3 * 400.0 * (1.0 + 0.004 * (result.temperature_degc - 25.0))
    assert result.resistive_w == pytest.approx(heated, rel=1e-12)
    assert result.temperature_degc == pytest.approx(40.0 + 6.0 * result.total_w, rel=1e-9)
    assert bus_converter.thermal_gain(cold, 20.0) == pytest.approx(np.array([6.0 * 0.004 * 5e-3 * 400.0]), rel=1e-12)
    np.testing.assert_allclose(bus_converter.thermal_gain(cold, 20.0), result.thermal_gain, rtol=1e-6)


def test_grid_equals_one_at_a_time() -> None:
    input_v, current_a = np.linspace(40.0, 60.0, 5), np.linspace(0.0, 30.0, 7)
    grid = bus_converter.losses(
        TWO_UNITS.take(np.arange(2)[:, None, None]), input_v[:, None], 10.0, current_a, 55.0
    )
    assert grid.total_w.shape == (2, 5, 7)
    for name in bus_converter.MECHANISMS:
        assert getattr(grid, name).shape == (2, 5, 7), name
    for unit in range(2):
        alone = TWO_UNITS.take(np.array(unit))
        for row, volts in enumerate(input_v):
            for column, amps in enumerate(current_a):
                one = bus_converter.losses(alone, float(volts), 10.0, float(amps), 55.0)
                assert grid.total_w[unit, row, column] == pytest.approx(float(one.total_w), rel=1e-12)


def test_buck_results_all_have_the_shape_of_the_operating_point() -> None:
    values = dict.fromkeys((field.name for field in fields(buck.BuckParameters)), 1e-3)
    values |= {"frequency_hz": 1e6, "inductance_h": 1e-6, "core_exponent": 2.0}
    values |= {"gate_from_input": 0.0, "gate_from_output": 0.0}
    stage = buck.BuckParameters(**{name: np.array([value, value]) for name, value in values.items()})
    grid = stage.take(np.arange(2)[:, None])
    result = buck.losses(grid, np.linspace(5.0, 12.0, 4), 1.0, 5.0, 50.0)
    for field in fields(result):
        assert getattr(result, field.name).shape == (2, 4), field.name


def test_linear_by_hand() -> None:
    # closed form: (3.3 - 2.5) V x 2 A + 5 mA x 3.3 V; dropout 300 mV at 3 A is 200 mV at 2 A
    p = LinearParameters(*(np.asarray(value) for value in (5e-3, 0.3, 3.0, 20.0)))
    result = linear.losses(p, 3.3, 2.5, 2.0, 50.0)
    assert isinstance(result, LinearLosses)
    assert result.total_w == pytest.approx(1.6 + 0.0165, rel=1e-12)
    assert result.temperature_degc == pytest.approx(50.0 + 20.0 * 1.6165, rel=1e-12)
    assert linear.headroom_v(p, 3.3, 2.5, 2.0) == pytest.approx(0.6, rel=1e-12)
    assert linear.headroom_v(p, 2.6, 2.5, 2.0) == pytest.approx(-0.1, rel=1e-9)
