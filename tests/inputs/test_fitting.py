"""Fitting measured points: a known part comes back, physical signs hold, and nothing is claimed beyond the points."""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pytest

sys.path.append(str(Path(__file__).parent))

from fitting_bench import SHARES, measure, worst_points

from archopt.errors import InputError
from archopt.inputs.fitting import choose, deal, efficiency_weight, fit_form, free_form, nonnegative
from archopt.inputs.fitting_part import FittedPart, fit_part
from archopt.inputs.measured import MeasuredPoints, level_means, settings
from archopt.inputs.measured_catalogue import read_catalogue
from archopt.inputs.parts import Part
from archopt.inputs.resolved import Catalogue
from archopt.present.part_losses import RowLosses

NOISE = 0.0005  # standard deviation of a measured efficiency: a twentieth of a point


@pytest.fixture(scope="module")
def catalogue() -> Catalogue:
    return read_catalogue()


def fit(points: MeasuredPoints, family: str, catalogue: Catalogue, like: str | None = None) -> FittedPart:
    return fit_part(points, family, "mine", catalogue, RowLosses(catalogue), np.random.default_rng(3), like)


def bus(catalogue: Catalogue) -> Part:
    return catalogue.families["bus_converters"]["trim_bus_150w"]


def bus_points(catalogue: Catalogue, noise: float = 0.0, seed: int = 1) -> MeasuredPoints:
    amperes = [12.5 * share for share in SHARES]
    return measure(catalogue, bus(catalogue), [36, 48, 60, 75], [9.6, 11, 12, 13.2], amperes, noise, seed)


def changed_stage(catalogue: Catalogue) -> Part:
    """A buck stage that differs from its row in everything a measurement tells."""
    row = catalogue.families["buck_stages"]["buck_15a_500k_bus_gate"]
    values = row.model_dump()
    factors = {"high_side_mohm": 1.3, "low_side_mohm": 1.3, "edge_rise_ns": 1.5, "edge_fall_ns": 1.5,
               "recovery_nc": 1.5, "quiescent_ma": 1.8, "high_side_gate_nc": 1.8, "low_side_gate_nc": 1.8,
               "high_side_output_nc": 0.7, "low_side_output_nc": 0.7}  # fmt: skip
    return row.model_copy(update={name: values[name] * factor for name, factor in factors.items()})


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_known_bus_converter_comes_back_from_noisy_points(catalogue: Catalogue, seed: int) -> None:
    points = bus_points(catalogue, NOISE, seed)
    fitted = fit(points, "bus_converters", catalogue, like="trim_bus_100w")
    assert worst_points(catalogue, bus(catalogue), fitted.part, points) <= 0.1
    assert 0.5 * 100 * NOISE <= fitted.rms_points <= 1.5 * 100 * NOISE


def test_three_readings_of_each_point_make_up_for_twice_the_noise(catalogue: Catalogue) -> None:
    """At a tenth of a point of noise the best a fit can do misses 0.1 points somewhere in one of four benches.

    Closed form (covariance of linear least squares with the true form on these 112 points, 20,000 draws): the worst
    of the points is within 0.1 in 74 of 100, within 0.18 in 99; with three readings of each within 0.1 in 99.
    """
    amperes = [12.5 * share for share in SHARES]
    for local_degc, most in (((25.0,), 0.18), ((25.0, 25.0, 25.0), 0.1)):
        volts = [36, 48, 60, 75], [9.6, 11, 12, 13.2]
        points = measure(catalogue, bus(catalogue), *volts, amperes, 2 * NOISE, 6, local_degc)
        fitted = fit(points, "bus_converters", catalogue, like="trim_bus_100w")
        assert worst_points(catalogue, bus(catalogue), fitted.part, points) <= most


@pytest.mark.parametrize("seed", [1, 2, 3])
def test_a_known_buck_stage_comes_back_from_noisy_points(catalogue: Catalogue, seed: int) -> None:
    known = changed_stage(catalogue)
    points = measure(catalogue, known, [6, 8, 10, 12, 14], [0.9, 1.8], [15 * x for x in SHARES], NOISE, seed)
    fitted = fit(points, "buck_stages", catalogue, like="buck_15a_500k_bus_gate")
    factors = dict(fitted.factors)
    assert factors["resistance"] == pytest.approx(1.3, rel=0.1)
    assert factors["own supply"] == pytest.approx(1.8, rel=0.1)
    assert fitted.part.model_dump()["high_side_mohm"] == pytest.approx(9.6 * factors["resistance"], rel=1e-4)
    assert worst_points(catalogue, known, fitted.part, points) <= 0.1


@pytest.mark.parametrize("seed", [1, 2])
def test_a_known_single_stage_comes_back_from_noisy_points(catalogue: Catalogue, seed: int) -> None:
    known = catalogue.families["single_stages"]["direct_48v_to_core_40a"]
    points = measure(catalogue, known, [40, 48, 54, 60], [0.8, 0.9, 1.1], [40 * x for x in SHARES], NOISE, seed)
    fitted = fit(points, "single_stages", catalogue)
    assert worst_points(catalogue, known, fitted.part, points) <= 0.1


def test_without_noise_the_columns_themselves_come_back(catalogue: Catalogue) -> None:
    known = bus(catalogue)
    points = measure(catalogue, known, [36, 48, 60, 75], [9.6, 11, 12, 13.2], [12.5 * x for x in SHARES],
                     local_degc=(25.0, 60.0))  # fmt: skip
    fitted = fit(points, "bus_converters", catalogue, like="trim_bus_150w")
    before, after = known.model_dump(), fitted.part.model_dump()
    for column in fitted.measured_columns:
        assert after[column] == pytest.approx(before[column], rel=0.03), column
    assert worst_points(catalogue, known, fitted.part, points) <= 0.003


def test_one_gross_mistake_is_named_and_does_not_pull(catalogue: Catalogue) -> None:
    points = bus_points(catalogue, NOISE)
    loss = points.loss_w.copy()
    loss[17] *= 2.5
    spoilt = MeasuredPoints(points.file, points.lines, points.input_v, points.output_v, points.current_a, loss,
                            points.temperature_degc)  # fmt: skip
    fitted = fit(spoilt, "bus_converters", catalogue, like="trim_bus_150w")
    assert worst_points(catalogue, bus(catalogue), fitted.part, points) <= 0.1
    assert any("less than half" in words and str(points.lines[17]) in words for words in fitted.cautions)


def test_signs_stay_physical_where_plain_least_squares_go_negative() -> None:
    load = np.linspace(1.0, 10.0, 12)
    columns = np.stack([np.ones_like(load), load, load**2], axis=1)
    target = 1.0 - 0.2 * load + 0.1 * load**2
    assert np.linalg.lstsq(columns, target, rcond=None)[0].min() < 0
    coefficient, _ = nonnegative(columns, target, np.ones_like(load))
    assert coefficient.min() >= 0
    assert coefficient[1] == 0


def test_terms_the_points_do_not_support_are_left_out(catalogue: Catalogue) -> None:
    known = bus(catalogue).model_copy(update={"switching_w": 0.0, "linear_w_per_a": 0.0, "fixed_w": 2.0})
    points = measure(catalogue, known, [36, 48, 60, 75], [9.6, 11, 12, 13.2], [12.5 * x for x in SHARES], NOISE)
    fitted = fit(points, "bus_converters", catalogue, like="trim_bus_150w")
    assert fitted.form == "fixed, resistive"
    assert len(fitted.tried) == 21


def test_the_row_claims_no_more_than_was_measured(catalogue: Catalogue) -> None:
    points = measure(catalogue, bus(catalogue), [48.0], [12.0], [1.0, 3.0, 6.0, 9.0, 10.0])
    fitted = fit(points, "bus_converters", catalogue, like="trim_bus_150w")
    part = fitted.part.model_dump()
    assert (part["input_min_v"], part["input_max_v"], part["output_min_v"], part["output_max_v"]) == (48, 48, 12, 12)
    assert part["max_current_a"] == 10
    assert part["max_power_w"] == 120
    assert part["overload_a"] == pytest.approx(17 * 10 / 12.5, rel=1e-12)
    assert {"price_1k", "crossover_khz", "thermal_k_per_w"} <= {name for name, _ in fitted.kept}
    assert any("one input voltage" in words for words in fitted.cautions)
    assert any("one output voltage" in words for words in fitted.cautions)


def test_thin_points_are_named(catalogue: Catalogue) -> None:
    points = measure(catalogue, bus(catalogue), [40, 60], [12.0], [4.0, 5.0, 10.0, 12.0])
    cautions = " / ".join(fit(points, "bus_converters", catalogue).cautions)
    assert "two input voltages, 40 and 60 V" in cautions
    assert "no point below 4 A (33 %" in cautions
    assert "no point between 5 and 10 A" in cautions


def test_a_range_beyond_the_points_is_refused(catalogue: Catalogue) -> None:
    points = measure(catalogue, bus(catalogue), [48.0], [11, 12, 13], [1.0, 3.0, 6.0, 9.0])
    with pytest.raises(InputError) as refused:
        fit_part(points, "bus_converters", "mine", catalogue, RowLosses(catalogue), np.random.default_rng(1),
                 "trim_bus_150w", (36.0, 75.0), (9.0, 13.0))  # fmt: skip
    said = [str(problem) for problem in refused.value.problems]
    assert len(said) == 2
    assert "one input voltage, 48 V, was measured, which says nothing of others" in said[0]
    assert "11 to 13 V were measured" in said[1]


def test_what_cannot_be_fitted_is_refused_with_every_reason(catalogue: Catalogue) -> None:
    points = measure(catalogue, bus(catalogue), [36, 48, 75], [12.0], [5.0])
    with pytest.raises(InputError) as refused:
        fit(points, "bus_converters", catalogue, like="trim_bus_150")
    said = " / ".join(str(problem) for problem in refused.value.problems)
    assert "did you mean 'trim_bus_100w'" in said or "did you mean 'trim_bus_150w'" in said
    assert "3 different points; at least 4" in said
    assert "one current" in said
    with pytest.raises(InputError, match="cannot be fitted"):
        fit(points, "capacitors", catalogue)


def test_a_buck_row_with_the_wrong_inductor_is_refused(catalogue: Catalogue) -> None:
    stage = catalogue.families["buck_stages"]["buck_15a_500k_bus_gate"]
    points = measure(catalogue, stage, [8, 12], [0.9, 1.8], [2.0, 6.0, 12.0])
    small = MeasuredPoints(points.file, points.lines, points.input_v, points.output_v, points.current_a,
                           0.05 * points.loss_w, points.temperature_degc)  # fmt: skip
    with pytest.raises(InputError, match="inductor 'coil_470n_15a'"):
        fit(small, "buck_stages", catalogue, like=stage.name)


def test_an_output_above_the_input_is_no_buck_stage(catalogue: Catalogue) -> None:
    points = measure(catalogue, bus(catalogue), [8.0], [9.6, 12], [2.0, 6.0, 12.0])
    with pytest.raises(InputError, match="not below the input"):
        fit(points, "buck_stages", catalogue)


def test_a_part_that_loses_otherwise_is_told(catalogue: Catalogue) -> None:
    """Loss with voltage times current, which a bus converter's row cannot say."""
    points = bus_points(catalogue)
    loss = 1.0 + 0.002 * points.input_v * points.current_a + 0.01 * points.current_a**2
    other = MeasuredPoints(points.file, points.lines, points.input_v, points.output_v, points.current_a, loss,
                           points.temperature_degc)  # fmt: skip
    fitted = fit(other, "bus_converters", catalogue, like="trim_bus_150w")
    assert any("loses otherwise" in words for words in fitted.cautions)
    assert not any("loses otherwise" in words for words in fit(points, "bus_converters", catalogue).cautions)


def test_repeats_of_a_setting_are_left_out_together(catalogue: Catalogue) -> None:
    points = bus_points(catalogue)
    setting = np.repeat(settings(points), 3)
    parts = deal(setting, np.random.default_rng(1))
    assert len(parts) == 10
    np.testing.assert_array_equal(np.sum(parts, axis=0), 1)
    for part in parts:
        assert not set(setting[part]) & set(setting[~part])
    few = deal(np.arange(7).repeat(2), np.random.default_rng(1))
    assert len(few) == 7


def test_the_same_points_and_seed_give_the_same_row(catalogue: Catalogue) -> None:
    points = bus_points(catalogue, NOISE)
    assert fit(points, "bus_converters", catalogue).part == fit(points, "bus_converters", catalogue).part


def test_levels_are_what_a_bench_returns_to() -> None:
    np.testing.assert_allclose(level_means(np.array([48.1, 36.0, 47.9, 36.2])), [36.1, 48.0], rtol=1e-12)


def test_choose_prefers_the_simpler_of_equal_forms() -> None:
    load = np.linspace(0.5, 10.0, 30)
    volts = np.tile([40.0, 50.0, 60.0], 10)
    loss = 1.0 + 0.05 * load + 0.02 * load**2
    forms = [free_form(volts, np.full(30, 12.0), load, voltage) for voltage in (True, False)]
    weight = efficiency_weight(12.0 * load, loss)
    chosen = choose(forms, loss, weight, np.arange(30), np.random.default_rng(1))
    assert chosen.form.name == "current alone"
    np.testing.assert_allclose(fit_form(forms[1], loss, weight).loss_w, loss, rtol=1e-9)
