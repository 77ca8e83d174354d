"""Diode emulation with frequency folding: pulses, losses through the boundary, and the loop behind them."""

from __future__ import annotations

from dataclasses import fields, replace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from archopt.physics import buck
from archopt.physics.buck import BuckParameters, Point, operating_point, ripple_square_at, thermal_gain_at
from archopt.physics.buck_light_load import Pulses, crossover_share, pulses

STAGE = BuckParameters(
    **{
        name: np.asarray(value)
        for name, value in {
            "frequency_hz": 600e3, "inductance_h": 1e-6, "winding_ohm": 4e-3, "core_w": 0.05, "core_ripple_a": 3.0,
            "core_exponent": 2.3, "core_frequency_exponent": 1.4, "high_side_ohm": 20e-3, "low_side_ohm": 8e-3,
            "switch_per_k": 0.004, "winding_per_k": 0.00393, "rise_s": 4e-9, "fall_s": 5e-9, "dead_s": 22e-9,
            "diode_v": 0.75, "high_side_gate_c": 3e-9, "low_side_gate_c": 8e-9, "gate_v": 5.0,
            "gate_from_input": 1.0, "gate_from_output": 0.0, "high_side_output_c": 3e-9,
            "low_side_output_c": 7e-9, "output_charge_v": 12.0, "recovery_c": 4e-9, "recovery_a": 10.0,
            "input_capacitor_ohm": 2e-3, "quiescent_a": 1e-3, "emulation": 1.0, "fold_floor_hz": 60e3,
            "thermal_k_per_w": 20.0, "max_duty": 0.9, "min_on_s": 50e-9, "min_off_s": 110e-9,
        }.items()
    }
)  # fmt: skip
FORCED = replace(STAGE, emulation=np.asarray(0.0))


def boundary_a(stage: BuckParameters, input_v: float, output_v: float) -> float:
    """Return the load at which the valley touches zero."""
    current_a = 1.0
    for _ in range(60):
        current_a = 0.5 * float(buck.ripple_a(stage, input_v, output_v, current_a))
    return current_a


def test_pulses_carry_the_load() -> None:
    # closed form: charge of a pulse on the slopes of continuous conduction times pulses a second
    current_a = np.linspace(0.0, 1.5, 31)
    found = pulses(1.0, 60e3, 600e3, current_a, 3.0)
    assert isinstance(found, Pulses)
    swing_a, pulse_s = 3.0 * found.swing_share, found.swing_share / 600e3
    np.testing.assert_allclose(0.5 * swing_a * pulse_s * 600e3 * found.frequency_share, current_a, rtol=1e-12)
    assert found.frequency_share.min() == pytest.approx(0.1)
    # at three tenths of the boundary the pulses still have their full height
    assert pulses(1.0, 60e3, 600e3, 0.45, 3.0).frequency_share == pytest.approx(0.3)
    assert pulses(1.0, 60e3, 600e3, 0.45, 3.0).swing_share == pytest.approx(1.0)


def test_nothing_folds_in_forced_conduction() -> None:
    found = pulses(0.0, 60e3, 600e3, np.array([0.0, 0.1, 5.0]), 3.0)
    assert not found.stopped.any()
    assert (found.conducting_share == 1.0).all()


@settings(max_examples=60, deadline=None, derandomize=True)
@given(st.floats(5.0, 40.0), st.floats(0.6, 3.3), st.floats(0.0, 700e3))
def test_every_mechanism_is_continuous_through_the_boundary(input_v: float, output_v: float, floor_hz: float) -> None:
    stage = replace(STAGE, fold_floor_hz=np.asarray(floor_hz))
    around = boundary_a(stage, input_v, output_v) * (1.0 + np.array([-1e-7, 0.0, 1e-7]))
    result = buck.losses(stage, input_v, output_v, around, 40.0)
    total_w = float(result.total_w.max())
    for name in (*buck.MECHANISMS, "bias_w"):
        assert np.ptp(getattr(result, name)) <= 1e-5 * total_w, name
    assert np.ptp(result.ripple_a) <= 1e-5 * result.ripple_a.max()
    assert np.ptp(result.on_s) <= 1e-5 * result.on_s.max()


@pytest.mark.parametrize("floor_hz", [0.0, 60e3, 600e3])
def test_loss_is_continuous_and_rises_with_load(floor_hz: float) -> None:
    stage = replace(STAGE, fold_floor_hz=np.asarray(floor_hz))
    for input_v in (6.0, 12.0, 16.0):
        total_w = buck.losses(stage, input_v, 1.2, np.linspace(0.0, 8.0, 8001), 50.0).total_w
        steps = np.diff(total_w)
        assert (steps > 0.0).all()
        if floor_hz == 0.0:  # nothing of the pulse is left without load but the controller
            assert total_w[0] == pytest.approx(1e-3 * input_v, rel=1e-9)
            assert steps.max() < 2e-3 * total_w[-1]


def test_above_the_boundary_nothing_changes() -> None:
    current_a = boundary_a(STAGE, 12.0, 1.2) * np.array([1.0 + 1e-9, 1.5, 4.0])
    ours, forced = (buck.losses(stage, 12.0, 1.2, current_a, 50.0) for stage in (STAGE, FORCED))
    for field in fields(ours):
        np.testing.assert_allclose(getattr(ours, field.name), getattr(forced, field.name), rtol=1e-12)


def test_emulation_loses_less_at_a_tenth_of_the_boundary() -> None:
    current_a = 0.1 * boundary_a(STAGE, 12.0, 1.2)
    ours, forced = (buck.losses(stage, 12.0, 1.2, current_a, 50.0) for stage in (STAGE, FORCED))
    assert ours.total_w < 0.5 * forced.total_w
    # no reversed valley: conduction and gate go with the number of pulses
    assert ours.gate_w == pytest.approx(0.1 * float(forced.gate_w), rel=2e-2)
    assert ours.recovery_w == 0.0


def test_the_input_is_not_charged_twice_without_folding() -> None:
    # closed form: at a tenth of the boundary unfolded pulses are root ten lower, and squares a tenth of a root
    unfolded = replace(STAGE, fold_floor_hz=STAGE.frequency_hz)
    edge_a = boundary_a(STAGE, 12.0, 1.2)
    light = buck.losses(unfolded, 12.0, 1.2, 0.1 * edge_a, 50.0)
    assert light.ripple_a == pytest.approx(2.0 * edge_a * np.sqrt(0.1), rel=2e-2)
    square = buck.ripple_square_a2(unfolded, 12.0, 1.2, 0.1 * edge_a)
    swing, share = float(light.ripple_a), float(np.sqrt(0.1))
    assert square == pytest.approx(swing**2 * share / 3.0 - (0.1 * edge_a) ** 2, rel=2e-2)


def test_core_loss_of_folded_pulses_goes_with_their_number() -> None:
    edge_a = boundary_a(STAGE, 12.0, 1.2)
    at_edge = buck.losses(STAGE, 12.0, 1.2, edge_a * (1 + 1e-9), 50.0)
    half = buck.losses(STAGE, 12.0, 1.2, 0.5 * edge_a, 50.0)
    assert half.core_w == pytest.approx(0.5 * float(at_edge.core_w), rel=2e-2)


def test_output_ripple_is_a_twelfth_in_continuous_conduction() -> None:
    # closed form: a triangle of height r has the mean square r^2 / 12
    ripple = float(buck.ripple_a(STAGE, 12.0, 1.2, 6.0))
    assert buck.ripple_square_a2(STAGE, 12.0, 1.2, 6.0) == pytest.approx(ripple**2 / 12.0, rel=1e-12)
    point: Point = operating_point(STAGE, 12.0, 1.2, 6.0)
    assert point.ripple_a == pytest.approx(ripple, rel=1e-12)
    assert ripple_square_at(point) == pytest.approx(ripple**2 / 12.0, rel=1e-12)


def test_thermal_gain_is_that_of_the_losses() -> None:
    current_a = np.array([0.1, 0.9, 6.0, 60.0])
    expected = buck.losses(STAGE, 12.0, 1.2, current_a, 50.0).thermal_gain
    np.testing.assert_allclose(buck.thermal_gain(STAGE, 12.0, 1.2, current_a), expected, rtol=1e-6)
    at = operating_point(STAGE, 12.0, 1.2, current_a)
    np.testing.assert_allclose(thermal_gain_at(STAGE, at), expected, rtol=1e-6)
    assert expected[-1] > 1.0


def test_gate_from_the_output_is_charge_at_the_output_voltage() -> None:
    stage = replace(FORCED, gate_from_input=np.asarray(0.0), gate_from_output=np.asarray(1.0))
    result = buck.losses(stage, 12.0, 5.0, 6.0, 50.0)
    assert result.gate_w == pytest.approx(11e-9 * 5.0 * 600e3, rel=1e-12)
    assert result.bias_w == 0.0


def test_loop_bandwidth_falls_to_its_share() -> None:
    np.testing.assert_allclose(crossover_share(0.2, np.array([0.0, 0.5, 1.0, 3.0])), [0.2, 0.6, 1.0, 1.0])


def test_permitted_current_falls_with_ambient_and_rises_with_air() -> None:
    # the junction limit is the derating over ambient: there is no second curve
    load_a = np.linspace(0.0, 30.0, 3001)

    def most_a(ambient_degc: float, k_per_w: float) -> float:
        stage = replace(STAGE, thermal_k_per_w=np.asarray(k_per_w))
        return float(load_a[buck.losses(stage, 12.0, 1.2, load_a, ambient_degc).temperature_degc <= 110.0].max())

    permitted = [most_a(ambient, 20.0) for ambient in (40.0, 55.0, 70.0, 85.0)]
    assert (np.diff(permitted) < 0.0).all()
    assert most_a(55.0, 20.0 / np.sqrt(2.0)) > permitted[1]  # twice the air
