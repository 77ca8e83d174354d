"""What must hold of the loss models on the whole legal domain: finite, not negative, continuous, monotone."""

from __future__ import annotations

from dataclasses import fields

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from archopt.physics import buck, bus_converter, linear
from archopt.physics.buck import BuckParameters
from archopt.physics.bus_converter import ConverterParameters
from archopt.physics.linear import LinearParameters
from archopt.physics.thermal import LARGEST_GAIN

FEW = settings(max_examples=60, deadline=None, derandomize=True)


def span(low: float, high: float) -> st.SearchStrategy[float]:
    return st.floats(low, high, allow_nan=False, allow_subnormal=False)


# What a catalogue row may hold, in SI
stages = st.builds(
    BuckParameters,
    frequency_hz=span(50e3, 5e6),
    inductance_h=span(20e-9, 50e-6),
    winding_ohm=span(1e-4, 0.1),
    core_w=span(0.0, 2.0),
    core_ripple_a=span(0.1, 50.0),
    core_exponent=span(1.5, 3.5),
    core_frequency_exponent=span(1.0, 3.0),
    high_side_ohm=span(2e-4, 0.2),
    low_side_ohm=span(2e-4, 0.2),
    switch_per_k=span(0.0, 0.02),
    winding_per_k=st.just(0.00393),
    rise_s=span(0.0, 500e-9),
    fall_s=span(0.0, 500e-9),
    dead_s=span(0.0, 500e-9),
    diode_v=span(0.0, 2.0),
    high_side_gate_c=span(0.0, 100e-9),
    low_side_gate_c=span(0.0, 200e-9),
    gate_v=span(3.0, 20.0),
    gate_from_input=st.sampled_from([0.0, 1.0]),
    gate_from_output=st.just(0.0),
    high_side_output_c=span(0.0, 100e-9),
    low_side_output_c=span(0.0, 200e-9),
    output_charge_v=span(1.0, 60.0),
    recovery_c=span(0.0, 200e-9),
    recovery_a=span(1.0, 100.0),
    input_capacitor_ohm=span(0.0, 0.05),
    quiescent_a=span(0.0, 0.05),
    emulation=st.sampled_from([0.0, 1.0]),
    fold_floor_hz=span(0.0, 1e6),
    thermal_k_per_w=span(0.5, 100.0),
    max_duty=span(0.5, 1.0),
    min_on_s=span(0.0, 1e-6),
    min_off_s=span(0.0, 1e-6),
)
converters = st.builds(
    ConverterParameters,
    fixed_w=span(0.0, 20.0),
    switching_w=span(0.0, 20.0),
    input_exponent=span(-1.0, 4.0),
    output_exponent=span(-1.0, 4.0),
    input_nominal_v=span(5.0, 450.0),
    output_nominal_v=span(0.6, 60.0),
    linear_w_per_a=span(0.0, 1.0),
    resistance_ohm=span(0.0, 0.1),
    resistance_per_k=span(0.0, 0.02),
    thermal_k_per_w=span(0.1, 50.0),
)
TYPICAL = BuckParameters(
    *(
        np.asarray(value)
        for value in (
            600e3, 0.3e-6, 0.6e-3, 0.2, 8.0, 2.4, 1.5, 5e-3, 2e-3, 0.004, 0.00393, 6e-9, 6e-9, 25e-9, 0.8, 8e-9,
            20e-9, 5.0, 1.0, 0.0, 10e-9, 20e-9, 12.0, 20e-9, 25.0, 2e-3, 5e-3, 0.0, 0.0, 12.0, 0.9, 50e-9, 100e-9,
        )
    )
)  # fmt: skip


def every_field(result: object) -> dict[str, np.ndarray]:
    """Every array a result holds; what only a measured part has is left out."""
    values = {field.name: getattr(result, field.name) for field in fields(result)}  # type: ignore[arg-type]
    return {name: np.asarray(value) for name, value in values.items() if value is not None}


class TestBuck:
    @FEW
    @given(stages, span(0.5, 100.0), span(0.4, 60.0), span(0.0, 200.0), span(-40.0, 110.0))
    def test_finite_and_not_negative(
        self, stage: BuckParameters, input_v: float, output_v: float, current_a: float, ambient_degc: float
    ) -> None:
        result = buck.losses(stage, input_v, output_v, current_a, ambient_degc)
        for name, value in every_field(result).items():
            assert np.isfinite(value), name
            if name in buck.MECHANISMS or name in {"bias_w", "duty", "ripple_a", "on_s", "thermal_gain"}:
                assert value >= 0.0, name
        assert result.total_w >= 0.0
        assert result.temperature_degc >= ambient_degc

    @FEW
    @given(stages, span(3.0, 60.0), span(0.4, 5.0), span(0.0, 100.0))
    def test_total_is_the_sum_and_the_temperature_balances(
        self, stage: BuckParameters, input_v: float, output_v: float, current_a: float
    ) -> None:
        result = buck.losses(stage, input_v, output_v, current_a, 40.0)
        total = sum(float(getattr(result, name)) for name in buck.MECHANISMS)
        assert result.total_w == pytest.approx(total, rel=1e-12)
        if result.thermal_gain < LARGEST_GAIN:
            heat_w = (result.temperature_degc - 40.0) / stage.thermal_k_per_w
            assert result.total_w + result.bias_w == pytest.approx(float(heat_w), rel=1e-6, abs=1e-9)

    @FEW
    @given(stages, span(3.0, 40.0), span(0.4, 3.0))
    def test_continuous_through_zero_valley_current(
        self, stage: BuckParameters, input_v: float, output_v: float
    ) -> None:
        # a step of a billionth of the current where the valley touches zero moves no mechanism visibly
        current_a = 10.0
        for _ in range(50):
            current_a = 0.5 * float(buck.ripple_a(stage, input_v, output_v, current_a))
        around = current_a * (1.0 + np.array([-1e-9, 0.0, 1e-9]))
        result = buck.losses(stage, input_v, output_v, around, 40.0)
        total = float(result.total_w.max())
        for name in buck.MECHANISMS:
            assert np.ptp(getattr(result, name)) <= 1e-6 * total + 1e-12, name

    def test_continuous_in_input_voltage(self) -> None:
        # the best voltage must not jump: on a fine sweep no step is larger than a smooth curve would make
        input_v = np.linspace(4.0, 16.0, 20_001)
        for current_a in (0.0, 0.5, 1.5, 3.0, 20.0):
            total_w = buck.losses(TYPICAL, input_v, 1.0, current_a, 50.0).total_w
            assert np.abs(np.diff(total_w)).max() < 2e-3 * total_w.max()

    def test_taper_reaches_zero(self) -> None:
        # far enough below zero valley current neither output charge nor recovery is lost any more
        result = buck.losses(TYPICAL, np.array([8.0, 8.0]), 1.0, np.array([20.0, 0.0]), 50.0)
        assert result.output_charge_w[0] > 0.01
        assert result.recovery_w[0] > 0.01
        assert result.output_charge_w[1] == 0.0
        assert result.recovery_w[1] == 0.0
        assert result.overlap_w[1] < result.overlap_w[0]

    @FEW
    @given(stages, span(3.0, 40.0), span(0.4, 2.0))
    def test_duty_rises_with_current(self, stage: BuckParameters, input_v: float, output_v: float) -> None:
        asked = buck.duty(stage, input_v, output_v, np.linspace(0.0, 200.0, 81))
        assert (np.diff(asked) >= -1e-12).all()

    @FEW
    @given(span(4.0, 16.0), span(0.6, 2.5), span(-20.0, 80.0))
    def test_loss_rises_with_current(self, input_v: float, output_v: float, ambient_degc: float) -> None:
        result = buck.losses(TYPICAL, input_v, output_v, np.linspace(0.0, 30.0, 301), ambient_degc)
        assert (np.diff(result.total_w) > 0.0).all()

    @FEW
    @given(stages, span(3.0, 40.0), span(0.4, 2.0), span(0.0, 60.0))
    def test_rising_with_ambient(
        self, stage: BuckParameters, input_v: float, output_v: float, current_a: float
    ) -> None:
        total_w = buck.losses(stage, input_v, output_v, current_a, np.linspace(0.0, 100.0, 11)).total_w
        assert (np.diff(total_w) >= -1e-9).all()

    @FEW
    @given(stages, span(0.4, 2.0), span(0.0, 40.0))
    def test_duty_falls_and_ripple_rises_with_input(
        self, stage: BuckParameters, output_v: float, current_a: float
    ) -> None:
        input_v = np.linspace(10.0, 60.0, 51)
        assert (np.diff(buck.duty(stage, input_v, output_v, current_a)) <= 1e-12).all()
        assert (np.diff(buck.ripple_a(stage, input_v, output_v, current_a)) >= -1e-9).all()

    @FEW
    @given(span(-20.0, 20.0), span(1.0, 60.0))
    def test_hard_switched_share_is_a_share(self, valley_a: float, input_v: float) -> None:
        share = buck.hard_switched_share(TYPICAL, input_v, np.array([valley_a, valley_a + 0.1]))
        assert (share >= 0.0).all()
        assert (share <= 1.0).all()
        assert share[1] >= share[0]

    def test_runaway_is_reported_and_finite(self) -> None:
        hot = buck.losses(TYPICAL, 12.0, 1.0, np.array([20.0, 400.0]), 50.0)
        assert hot.thermal_gain[0] < 1.0 < hot.thermal_gain[1]
        assert np.isfinite(hot.total_w).all()


class TestBusConverter:
    @FEW
    @given(converters, span(1.0, 450.0), span(0.5, 100.0), span(0.0, 200.0), span(-40.0, 110.0))
    def test_finite_and_not_negative(
        self,
        unit: ConverterParameters,
        input_v: float,
        output_v: float,
        current_a: float,
        ambient_degc: float,
    ) -> None:
        result = bus_converter.losses(unit, input_v, output_v, current_a, ambient_degc)
        for name, value in every_field(result).items():
            assert np.isfinite(value), name
            if name in bus_converter.MECHANISMS:
                assert value >= 0.0, name
        assert result.temperature_degc >= ambient_degc

    @FEW
    @given(converters, span(20.0, 80.0), span(5.0, 14.0))
    def test_rising_with_current(self, unit: ConverterParameters, input_v: float, output_v: float) -> None:
        result = bus_converter.losses(unit, input_v, output_v, np.linspace(0.0, 60.0, 61), 50.0)
        assert (np.diff(result.total_w) >= -1e-9).all()


@FEW
@given(
    st.builds(
        LinearParameters,
        quiescent_a=span(0.0, 0.05), dropout_v=span(0.0, 1.0), rated_a=span(0.1, 10.0),
        thermal_k_per_w=span(1.0, 100.0),
    ),
    span(0.5, 100.0), span(0.5, 60.0), span(0.0, 10.0),
)  # fmt: skip
def test_linear_regulator(p: LinearParameters, input_v: float, output_v: float, current_a: float) -> None:
    result = linear.losses(p, input_v, output_v, current_a, 40.0)
    assert result.pass_element_w >= 0.0
    assert result.quiescent_w >= 0.0
    # what goes in comes out: input power is useful power and losses, wherever it regulates
    if input_v >= output_v:
        in_w = input_v * (current_a + p.quiescent_a)
        assert in_w - output_v * current_a == pytest.approx(float(result.total_w), rel=1e-9, abs=1e-9)
    assert linear.headroom_v(p, input_v, output_v, current_a) <= input_v - output_v
