"""The catalogue that comes with archopt: complete, sourced, plausible, and no part a free lunch."""

from __future__ import annotations

from collections.abc import Iterator
from datetime import date
from typing import TypeVar, cast

import numpy as np
import pytest

from archopt.inputs.catalogue import load_catalogue
from archopt.inputs.parts import (
    FAMILIES,
    BuckStage,
    BusConverter,
    Capacitor,
    CopperFoil,
    Inductor,
    LinearRegulator,
    Part,
    SingleStage,
    Stack,
)
from archopt.inputs.problems import Notebook
from archopt.inputs.resolved import Catalogue
from archopt.physics import buck, bus_converter, linear

LOCAL_AIR_DEGC = 55.0  # 40 degC inlet and 15 K, the plain default of a study
JUNCTION_DEGC = 110.0  # common practice
DERATING = 0.8  # common practice
BIAS_EFFICIENCY = 0.9
SHARES = np.array([0.1, 0.3, 0.5, 1.0])

LEAST_COUNT = {
    "buck_stages": 60, "inductors": 30, "bus_converters": 24, "single_stages": 10, "linear_regulators": 12,
    "capacitors": 20, "supervisors": 4, "bias_supplies": 3, "stacks": 12, "copper_foils": 4, "input_paths": 4,
}  # fmt: skip

AnyPart = TypeVar("AnyPart", bound=Part)


def read() -> tuple[Catalogue, Notebook]:
    notebook = Notebook("study.toml")
    return load_catalogue(None, None, "", notebook), notebook


@pytest.fixture(scope="module")
def catalogue() -> Catalogue:
    return read()[0]


def family(catalogue: Catalogue, model: type[AnyPart]) -> list[AnyPart]:
    return [cast(AnyPart, part) for part in catalogue.families[model.family].values()]


def every_part(catalogue: Catalogue) -> Iterator[Part]:
    for parts in catalogue.families.values():
        yield from parts.values()


def phase(stage: BuckStage, catalogue: Catalogue) -> buck.BuckParameters:
    """Return one phase in SI."""
    coil = cast(Inductor, catalogue.families["inductors"][stage.inductor])
    frequency_ratio = stage.frequency_khz / coil.core_frequency_khz
    values = {
        "frequency_hz": stage.frequency_khz * 1e3,
        "inductance_h": coil.inductance_nh * 1e-9,
        "winding_ohm": coil.winding_mohm * 1e-3,
        "core_w": coil.core_loss_mw * 1e-3 * frequency_ratio**coil.core_frequency_exponent,
        "core_ripple_a": coil.core_ripple_a,
        "core_exponent": coil.core_ripple_exponent,
        "core_frequency_exponent": coil.core_frequency_exponent,
        "high_side_ohm": stage.high_side_mohm * 1e-3,
        "low_side_ohm": stage.low_side_mohm * 1e-3,
        "switch_per_k": stage.resistance_per_k,
        "winding_per_k": 0.00393,
        "rise_s": stage.edge_rise_ns * 1e-9,
        "fall_s": stage.edge_fall_ns * 1e-9,
        "dead_s": stage.dead_time_ns * 1e-9,
        "diode_v": stage.diode_v,
        "high_side_gate_c": stage.high_side_gate_nc * 1e-9,
        "low_side_gate_c": stage.low_side_gate_nc * 1e-9,
        "gate_v": stage.gate_v,
        "gate_from_input": 1.0 if stage.gate_supply == "input" else 0.0,
        "gate_from_output": 1.0 if stage.gate_supply == "output" else 0.0,
        "high_side_output_c": stage.high_side_output_nc * 1e-9,
        "low_side_output_c": stage.low_side_output_nc * 1e-9,
        "output_charge_v": stage.output_charge_at_v,
        "recovery_c": stage.recovery_nc * 1e-9,
        "recovery_a": stage.phase_current_a,
        "input_capacitor_ohm": stage.input_capacitor_mohm * 1e-3,
        "quiescent_a": stage.quiescent_ma * 1e-3,
        "emulation": 1.0 if stage.light_load == "emulation" else 0.0,
        "fold_floor_hz": stage.fold_floor_khz * 1e3,
        "thermal_k_per_w": stage.thermal_k_per_w,
        "max_duty": stage.max_duty,
        "min_on_s": stage.min_on_ns * 1e-9,
        "min_off_s": stage.min_off_ns * 1e-9,
    }
    return buck.BuckParameters(**{name: np.asarray(value) for name, value in values.items()})


def unit(part: BusConverter | SingleStage) -> bus_converter.ConverterParameters:
    """Return one converter in SI."""
    values = (
        part.fixed_w, part.switching_w, part.input_exponent, part.output_exponent, part.input_nominal_v,
        part.output_nominal_v, part.linear_w_per_a, part.resistance_mohm * 1e-3, part.resistance_per_k,
        part.thermal_k_per_w,
    )  # fmt: skip
    return bus_converter.ConverterParameters(*(np.asarray(value) for value in values))


def usual_point(stage: BuckStage) -> tuple[float, float]:
    """Return the usual input and output voltage of a stage, V (common practice)."""
    if stage.input_max_v >= 36:
        return 24.0, 1.2 if stage.output_max_v < 3 else 5.0 if stage.output_max_v < 10 else 12.0
    return (8.0 if stage.input_max_v < 13 else 12.0), 1.0 if stage.output_max_v < 3 else 3.3


def test_every_row_can_be_read() -> None:
    catalogue, notebook = read()
    assert [str(problem) for problem in notebook.problems] == []
    assert set(catalogue.families) == set(FAMILIES)


@pytest.mark.parametrize(("name", "least"), LEAST_COUNT.items())
def test_every_family_offers_a_choice(catalogue: Catalogue, name: str, least: int) -> None:
    assert len(catalogue.families[name]) >= least


def test_buck_stages_are_variants_of_at_least_fourteen_parts(catalogue: Catalogue) -> None:
    frequencies: dict[str, set[float]] = {}
    for stage in family(catalogue, BuckStage):
        frequencies.setdefault(stage.part, set()).add(stage.frequency_khz)
    assert len(frequencies) >= 14
    assert all(len(of_part) >= 2 for of_part in frequencies.values())
    ratings = {stage.phase_current_a for stage in family(catalogue, BuckStage)}
    assert min(ratings) <= 3
    assert max(ratings) >= 50


def test_bus_converters_cover_the_kinds_and_supplies(catalogue: Catalogue) -> None:
    parts = family(catalogue, BusConverter)
    assert {part.kind for part in parts} == {"regulated", "fixed_ratio", "non_isolated"}
    assert {round(1 / part.ratio) for part in parts if part.kind == "fixed_ratio"} == {4, 5}
    for low_v, high_v in ((36.0, 75.0), (40.0, 60.0), (18.0, 32.0)):
        fit = [part for part in parts if part.input_min_v <= low_v and part.input_max_v >= high_v]
        assert len([part for part in fit if part.kind != "fixed_ratio"]) >= 5
        assert any(part.output_min_v <= 5.0 and part.output_max_v >= 13.0 for part in fit)
    assert any(part.output_nominal_v == pytest.approx(9.6) for part in parts if part.kind == "regulated")


def test_ordinary_modules_trim_by_the_usual_range(catalogue: Catalogue) -> None:
    """Common practice: +10 % and -20 % of the nominal voltage."""
    ordinary = [part for part in family(catalogue, BusConverter) if part.name.startswith("trim_")]
    assert len(ordinary) >= 6
    for part in ordinary:
        assert part.output_min_v == pytest.approx(0.8 * part.output_nominal_v, rel=0.01)
        assert part.output_max_v == pytest.approx(1.1 * part.output_nominal_v, rel=0.01)


def test_wide_adjustment_costs_money_and_loss(catalogue: Catalogue) -> None:
    parts = catalogue.families["bus_converters"]
    pairs = [(name.replace("wide_", "trim_"), name) for name in parts if name.startswith("wide_")]
    pairs = [(plain, wide) for plain, wide in pairs if plain in parts]
    assert len(pairs) >= 6
    for plain, wide in pairs:
        a, b = cast(BusConverter, parts[plain]), cast(BusConverter, parts[wide])
        assert b.price_1k > 1.1 * a.price_1k
        current_a = a.max_power_w / 12.0 * SHARES
        loss_a = bus_converter.losses(unit(a), 48.0, 12.0, current_a, LOCAL_AIR_DEGC).total_w
        loss_b = bus_converter.losses(unit(b), 48.0, 12.0, current_a, LOCAL_AIR_DEGC).total_w
        assert np.all(loss_b > loss_a)


def test_gate_supply_follows_the_size(catalogue: Catalogue) -> None:
    """Common practice: small stages derive their gate supply from input or output, from 25 A a phase few do."""
    stages = family(catalogue, BuckStage)
    small = [stage.gate_supply for stage in stages if stage.phase_current_a < 20]
    large = [stage.gate_supply for stage in stages if stage.phase_current_a >= 25]
    assert set(small) == {"input", "output"}
    assert small.count("input") > 4 * small.count("output")
    assert large.count("bias") > large.count("input") > 0
    assert all(stage.input_min_v >= 5.5 for stage in stages if stage.gate_supply == "input")


def test_light_load_columns_cost_something(catalogue: Catalogue) -> None:
    """A folding part is dearer and slower at light load than the same stage in forced conduction."""
    stages = catalogue.families["buck_stages"]
    folding = [stage for stage in family(catalogue, BuckStage) if stage.light_load == "emulation"]
    assert len(folding) >= 10
    for stage in folding:
        plain = cast(BuckStage, stages[stage.name.replace("_fold_", "_")])
        assert plain.light_load == "forced"
        assert stage.price_1k > plain.price_1k
        assert 0.0 < stage.fold_floor_khz < 0.2 * stage.frequency_khz
        assert stage.folded_crossover_share < 0.5
        input_v, output_v = usual_point(stage)
        light_a = np.array([0.01, 0.03]) * stage.phase_current_a
        ours, forced = (buck.losses(phase(s, catalogue), input_v, output_v, light_a, 50.0) for s in (stage, plain))
        assert np.all(ours.total_w < 0.7 * forced.total_w), stage.name


def test_every_way_of_shedding_is_offered(catalogue: Catalogue) -> None:
    for model in (BuckStage, SingleStage):
        parts = family(catalogue, model)
        assert {part.shedding for part in parts} == {"ideal", "threshold", "none"}
        assert all((part.shed_share < 1.0) == (part.shedding == "threshold") for part in parts)


def test_every_source_is_dated_and_used(catalogue: Catalogue) -> None:
    used = {part.source for part in every_part(catalogue)}
    assert used == set(catalogue.sources)
    for source in catalogue.sources.values():
        assert date(2026, 1, 1) <= date.fromisoformat(source.dated) <= date(2027, 12, 31)


def test_prices_are_steps_that_never_rise(catalogue: Catalogue) -> None:
    for part in every_part(catalogue):
        prices = [part.price_100, part.price_1k, part.price_10k, part.price_100k]
        assert prices == sorted(prices, reverse=True), part.name
        bought = not isinstance(part, (Stack, CopperFoil))
        assert (part.price_100k > 0) == bought, part.name


def test_variants_of_one_part_are_bought_at_one_price(catalogue: Catalogue) -> None:
    shared: dict[str, set[tuple[float, ...]]] = {}
    for stage in family(catalogue, BuckStage):
        prices = (stage.price_100, stage.price_1k, stage.price_10k, stage.price_100k)
        shared.setdefault(stage.part, set()).add((*prices, stage.area_mm2, stage.placements))
    assert all(len(prices) == 1 for prices in shared.values())


def test_faster_switches_cost_more_than_the_same_stage_with_slow_edges(catalogue: Catalogue) -> None:
    stages = catalogue.families["buck_stages"]
    assert stages["buck_40a_fast_550k_own_bias"].price_1k > 1.2 * stages["buck_40a_550k_own_bias"].price_1k


def test_losses_rise_with_frequency_within_a_part(catalogue: Catalogue) -> None:
    """Otherwise a faster loop and a smaller inductor would come for nothing."""
    loss: dict[tuple[str, float], list[tuple[float, float]]] = {}
    for stage in family(catalogue, BuckStage):
        input_v, output_v = usual_point(stage)
        current_a = 0.5 * stage.phase_current_a
        at = buck.losses(phase(stage, catalogue), input_v, output_v, current_a, LOCAL_AIR_DEGC)
        point = (stage.frequency_khz, float(at.total_w + at.bias_w))
        loss.setdefault((stage.part, output_v), []).append(point)
    compared = [sorted(points) for points in loss.values() if len(points) > 1]
    assert len(compared) >= 14
    for points in compared:
        watts = [watt for _, watt in points]
        assert watts == sorted(watts)


@pytest.mark.parametrize(
    ("name", "input_v", "percent"),
    [
        ("buck_40a_550k_bus_gate", 12.0, (77.6, 84.9, 86.4, 85.7)),
        ("buck_40a_550k_own_bias", 12.0, (81.3, 86.4, 87.3, 86.1)),
        ("buck_40a_fast_550k_own_bias", 12.0, (83.3, 88.6, 89.6, 88.3)),
        ("buck_40a_550k_bus_gate", 8.0, (83.5, 88.5, 89.1, 87.4)),
    ],
)
def test_large_stage_is_near_its_class(
    catalogue: Catalogue, name: str, input_v: float, percent: tuple[float, ...]
) -> None:
    """0.9 V, 40 A a phase, at 10, 30, 50, 100 %: orientation, own calculation from generic numbers."""
    stage = cast(BuckStage, catalogue.families["buck_stages"][name])
    current_a = 40.0 * SHARES
    at = buck.losses(phase(stage, catalogue), input_v, 0.9, current_a, LOCAL_AIR_DEGC)
    load_w = 0.9 * current_a
    efficiency = 100 * load_w / (load_w + at.total_w + at.bias_w / BIAS_EFFICIENCY)
    np.testing.assert_array_less(np.abs(efficiency - np.array(percent)), 1.5)


def test_bus_module_is_near_its_class(catalogue: Catalogue) -> None:
    """48 to 12 V, 300 W at 10, 30, 50 and 100 %: orientation, own calculation from generic numbers."""
    module = cast(BusConverter, catalogue.families["bus_converters"]["trim_bus_300w"])
    current_a = 25.0 * SHARES
    loss_w = bus_converter.losses(unit(module), 48.0, 12.0, current_a, LOCAL_AIR_DEGC).total_w
    efficiency = 100 * 12.0 * current_a / (12.0 * current_a + loss_w)
    np.testing.assert_array_less(np.abs(efficiency - np.array([87.6, 94.6, 95.7, 95.7])), 1.5)


def test_stages_stay_cool_at_their_derated_current(catalogue: Catalogue) -> None:
    for stage in family(catalogue, BuckStage):
        input_v, output_v = usual_point(stage)
        current_a = DERATING * stage.phase_current_a
        at = buck.losses(phase(stage, catalogue), input_v, output_v, current_a, LOCAL_AIR_DEGC)
        assert LOCAL_AIR_DEGC + 10 < float(at.temperature_degc) <= JUNCTION_DEGC, stage.name
        assert float(at.thermal_gain) < 0.5, stage.name


def test_converters_stay_cool_at_their_derated_current(catalogue: Catalogue) -> None:
    for part in [*family(catalogue, BusConverter), *family(catalogue, SingleStage)]:
        output_v = part.output_nominal_v
        if isinstance(part, BusConverter):
            current_a = DERATING * min(part.max_current_a, part.max_power_w / output_v)
        else:
            current_a = DERATING * part.phase_current_a
        at = bus_converter.losses(unit(part), part.input_nominal_v, output_v, current_a, LOCAL_AIR_DEGC)
        assert LOCAL_AIR_DEGC + 10 < float(at.temperature_degc) <= JUNCTION_DEGC, part.name


def test_linear_regulators_stay_cool_at_twice_their_dropout(catalogue: Catalogue) -> None:
    for part in family(catalogue, LinearRegulator):
        dropout_v, quiescent_a = part.dropout_mv * 1e-3, part.quiescent_ma * 1e-3
        values = (quiescent_a, dropout_v, part.phase_current_a, part.thermal_k_per_w)
        parameters = linear.LinearParameters(*(np.asarray(value) for value in values))
        output_v = 1.0
        input_v = output_v + 2 * dropout_v
        at = linear.losses(parameters, input_v, output_v, DERATING * part.phase_current_a, LOCAL_AIR_DEGC)
        assert LOCAL_AIR_DEGC < float(at.temperature_degc) <= JUNCTION_DEGC, part.name


def test_inductors_do_not_saturate_and_ripple_as_usual(catalogue: Catalogue) -> None:
    """Ripple of 20 to 45 % of the rated current at the usual input and output (common practice)."""
    for stage in family(catalogue, BuckStage):
        coil = cast(Inductor, catalogue.families["inductors"][stage.inductor])
        parameters, rated_a = phase(stage, catalogue), stage.phase_current_a
        usual_a = float(buck.ripple_a(parameters, *usual_point(stage), rated_a))
        assert 0.19 <= usual_a / rated_a <= 0.45, stage.name
        most_v = min(stage.output_max_v, 0.5 * stage.input_max_v)
        most_a = rated_a + float(buck.ripple_a(parameters, stage.input_max_v, most_v, rated_a)) / 2
        assert most_a < coil.saturation_a, stage.name


def test_loops_are_a_usual_share_of_the_frequency(catalogue: Catalogue) -> None:
    """Bandwidth an eighth to a tenth of the frequency, dead time half to one period (common practice)."""
    for stage in family(catalogue, BuckStage):
        assert 7.9 <= stage.frequency_khz / stage.crossover_khz <= 10.1, stage.name
        assert 0.45 <= stage.delay_ns * stage.frequency_khz * 1e-6 <= 1.0, stage.name
        assert 1 <= stage.wakeup_us <= 3
        assert stage.loop_max_uf >= 50 * stage.loop_min_uf


def test_isolated_single_stages_reach_their_output_from_the_lowest_input(catalogue: Catalogue) -> None:
    """Closed form: duty is output times turns over input."""
    stages = family(catalogue, SingleStage)
    assert len([part for part in stages if part.isolated]) >= 2
    for part in stages:
        duty = part.output_max_v * part.transformer_ratio / part.input_min_v
        assert duty < part.max_duty, part.name


def test_bulk_and_output_capacitors_cover_every_voltage(catalogue: Catalogue) -> None:
    for voltage_v in (0.7, 0.9, 1.2, 1.8, 2.5, 3.3, 5.0, 9.6, 12.0, 13.2):
        fit = [part for part in family(catalogue, Capacitor) if DERATING * part.rated_v >= voltage_v - 1e-9]
        assert len([part for part in fit if part.kind == "ceramic"]) >= 2
        assert len([part for part in fit if part.kind != "ceramic"]) >= 3


def test_ceramic_capacitors_lose_capacitance_under_bias(catalogue: Catalogue) -> None:
    """Common practice: half or more is lost below the rated voltage; polymer does not mind."""
    for part in family(catalogue, Capacitor):
        if part.kind == "ceramic":
            assert 0.3 * part.rated_v < part.half_capacitance_v < part.rated_v, part.name
        else:
            assert part.half_capacitance_v > 20 * part.rated_v, part.name


def test_finished_copper_is_the_published_minimum(catalogue: Catalogue) -> None:
    """IPC-6012 minima of inner layers as quoted by board makers; 3 oz from memory."""
    finished = {foil.copper_oz: foil.finished_um for foil in family(catalogue, CopperFoil)}
    assert finished == pytest.approx({0.5: 11.4, 1.0: 24.9, 2.0: 55.7, 3.0: 86.6}, rel=1e-6)


def test_boards_cost_more_with_layers_and_copper(catalogue: Catalogue) -> None:
    stacks = family(catalogue, Stack)
    assert {stack.pairs for stack in stacks} == {1, 2, 3, 4, 5, 6}
    assert min(stack.layers for stack in stacks) == 6
    assert max(stack.layers for stack in stacks) == 20
    for a in stacks:
        for b in stacks:
            more = b.layers >= a.layers and b.pairs >= a.pairs and b.copper_oz >= a.copper_oz
            if more and (a.layers, a.pairs, a.copper_oz) != (b.layers, b.pairs, b.copper_oz):
                assert b.price_per_cm2 > a.price_per_cm2, (a.name, b.name)


def test_spreads_are_stated(catalogue: Catalogue) -> None:
    assert all(2 <= part.spread_percent <= 10 for part in every_part(catalogue))
