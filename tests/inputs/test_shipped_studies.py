"""The studies that come with archopt: they load without a problem and leave a choice everywhere."""

from __future__ import annotations

import math
from pathlib import Path
from typing import cast

import numpy as np
import pytest

from archopt.inputs.load import LoadedStudy, load
from archopt.inputs.parts import (
    BuckStage,
    BusConverter,
    Capacitor,
    Inductor,
    LinearRegulator,
    Part,
    SingleStage,
)
from archopt.inputs.resolved import Rail
from archopt.physics.capacitor import effective_capacitance_f
from archopt.physics.transient import buck_slew_a_per_s, rail_droop_v, release_v

Shipped = dict[str, LoadedStudy]

STUDIES = Path(__file__).resolve().parents[2] / "studies"
# name: rails, watts of all maxima, input range
SHIPPED = {
    "telecom_six": (6, 130.0, (36.0, 75.0)),
    "industrial_ten": (10, 113.0, (18.0, 32.0)),
    "compute_sixteen": (16, 690.0, (40.0, 60.0)),
}
NAMES = tuple(SHIPPED)
BUS_VOLTAGES = (7.0, 9.0, 12.0)
LARGEST_PROFILE_BYTES = 3_000_000


@pytest.fixture(scope="module")
def shipped() -> Shipped:
    return {name: load(STUDIES / name / "study.toml") for name in NAMES}


def own_rails(loaded: LoadedStudy) -> list[Rail]:
    return [rail for rail in loaded.study.rails if not rail.tap_of]


def rated_a(loaded: LoadedStudy, rail: Rail) -> float:
    """Return what the rail's stage must carry alone, with its taps and growth, A."""
    study = loaded.study
    taps = sum(other.max_current_a for other in study.rails if other.tap_of == rail.name)
    return (rail.max_current_a + taps) * study.growth


def rated_w(loaded: LoadedStudy) -> float:
    """Return the power of all rails at their coincident maximum, with growth, W."""
    return loaded.study.coincidence * sum(r.voltage_v * rated_a(loaded, r) for r in own_rails(loaded))


def feeds_v(loaded: LoadedStudy, rail: Rail, stage: Part) -> list[tuple[float, float]]:
    """Return the (lowest, highest) input voltages of the feeds a stage may hang on, V."""
    study = loaded.study
    supply = study.supply
    isolates = isinstance(stage, SingleStage) and stage.isolated
    direct = [(supply.low_v, supply.high_v)] if isolates or not supply.isolation else []
    if isinstance(stage, SingleStage):
        return direct
    voltage = {other.name: other.voltage_v for other in study.rails}
    parents = [(voltage[name], voltage[name]) for name in rail.parents]
    return direct + [(volts, volts) for volts in BUS_VOLTAGES] + parents


def makes(loaded: LoadedStudy, rail: Rail, stage: BuckStage | SingleStage | LinearRegulator) -> bool:
    """Return whether a stage can make a rail from one of its feeds: range, duty, on-time, current."""
    study = loaded.study
    if not stage.output_min_v <= rail.voltage_v <= stage.output_max_v:
        return False
    phases = 1 if isinstance(stage, LinearRegulator) else stage.max_phases
    if stage.phase_current_a * phases * study.derating.current < rated_a(loaded, rail):
        return False
    if rail.linear_only and not isinstance(stage, LinearRegulator):
        return False
    for low_v, high_v in feeds_v(loaded, rail, stage):
        if not stage.input_min_v <= low_v <= high_v <= stage.input_max_v:
            continue
        if isinstance(stage, LinearRegulator):
            fits = low_v - rail.voltage_v > 1e-3 * stage.dropout_mv
        elif isinstance(stage, SingleStage):
            fits = rail.voltage_v * stage.transformer_ratio / low_v < stage.max_duty
        else:
            on_ns = rail.voltage_v / high_v / stage.frequency_khz * 1e6
            least_ns = max(stage.min_on_ns, study.derating.min_on_ns)
            fits = 1.1 * rail.voltage_v / low_v < stage.max_duty and on_ns >= least_ns
        if fits:
            return True
    return False


def stages(loaded: LoadedStudy) -> list[BuckStage | SingleStage | LinearRegulator]:
    families = loaded.catalogue.families
    names = ("buck_stages", "single_stages", "linear_regulators")
    found = [part for name in names for part in families[name].values()]
    return cast("list[BuckStage | SingleStage | LinearRegulator]", found)


def deviation_percent(
    loaded: LoadedStudy, rail: Rail, stage: BuckStage, phases: int, bank: Capacitor, count: int, at_v: float
) -> float:
    """Return the larger of droop and release with all phases running, % of the rail's budget."""
    study = loaded.study
    coil = cast(Inductor, loaded.catalogue.families["inductors"][stage.inductor])
    inductance_h = coil.inductance_nh * 1e-9
    capacitance_f = count * effective_capacitance_f(
        bank.capacitance_uf * 1e-6, rail.voltage_v, bank.half_capacitance_v, bank.tolerance_percent / 100,
        study.derating.capacitance_end_of_life,
    )  # fmt: skip
    esr_ohm = bank.esr_mohm * 1e-3 * study.derating.esr_end_of_life / count
    loop = (2e3 * math.pi * stage.crossover_khz, stage.delay_ns * 1e-9, capacitance_f, esr_ohm)
    load_slew = rail.slew_a_per_us * 1e6
    slew = buck_slew_a_per_s(phases, stage.max_duty, at_v, rail.voltage_v, inductance_h)
    step_a = rail.step_a * study.growth
    droop = rail_droop_v(step_a, slew, *loop, load_slew)
    release = release_v(step_a, phases, rail.voltage_v, inductance_h, *loop, load_slew)
    return 100 * max(float(droop), float(release)) / rail.droop_budget_v


@pytest.mark.parametrize("name", NAMES)
def test_study_loads_as_described(shipped: Shipped, name: str) -> None:
    rails, watts, (low_v, high_v) = SHIPPED[name]
    study = shipped[name].study
    assert len(study.rails) == rails
    assert sum(rail.voltage_v * rail.max_current_a for rail in study.rails) == pytest.approx(watts, rel=0.02)
    assert (study.supply.low_v, study.supply.high_v) == (low_v, high_v)
    assert study.incumbent is not None
    assert study.incumbent["bus_a.control"] == "fixed"
    assert float(study.incumbent["bus_a.nominal_v"]) == pytest.approx(study.control.habitual_v)


def test_telecom_study_is_in_the_class_of_its_module(shipped: Shipped) -> None:
    loaded = shipped["telecom_six"]
    study = loaded.study
    assert max(rail.voltage_v for rail in study.rails) <= 3.3
    module = cast(BusConverter, loaded.catalogue.families["bus_converters"]["wide_bus_150w"])
    usable_w = module.max_power_w * study.derating.current
    assert 0.8 < rated_w(loaded) / usable_w < 0.92  # the rest is lost in the stages


def test_industrial_study_has_a_tap_a_parent_and_a_rail_off(shipped: Shipped) -> None:
    study = shipped["industrial_ten"].study
    assert [rail.tap_of for rail in study.rails if rail.tap_of] == ["io_3v3"]
    quiet = next(rail for rail in study.rails if rail.linear_only)
    assert (quiet.voltage_v, quiet.parents) == (1.1, ("logic_1v8",))
    off = study.load.off
    assert off.any(axis=1).tolist() == [True, False, False, False, False]
    assert study.rails[int(np.argmax(off[0]))].name == "field_12v"
    assert study.load.hours.sum() == pytest.approx(8400.0)


def test_compute_load_is_a_year_of_quarter_hours(shipped: Shipped) -> None:
    loaded = shipped["compute_sixteen"]
    study, load_table = loaded.study, loaded.study.load
    assert load_table.series
    assert load_table.current_a.shape == (35_040, 16)
    assert load_table.hours.sum() == pytest.approx(8760.0)
    assert (STUDIES / "compute_sixteen" / "load.csv").stat().st_size < LARGEST_PROFILE_BYTES
    volts = np.array([rail.voltage_v for rail in study.rails])
    watts = load_table.current_a @ volts
    most_w = study.coincidence * float(volts @ [rail.max_current_a for rail in study.rails])
    assert 0.3 < watts.mean() / most_w < 0.5  # boards live at 30 to 50 % of full load: common practice
    assert 0.8 < watts.max() / most_w < 1.0
    by_hour = watts.reshape(365, 24, 4).mean(axis=(0, 2))
    assert by_hour[10:17].min() > 1.3 * by_hour[0:5].max()
    by_day = watts[: 364 * 96].reshape(52, 7, 96).mean(axis=(0, 2))
    assert by_day[:5].min() > 1.05 * by_day[5:].max()
    cores = [k for k, rail in enumerate(study.rails) if rail.max_current_a >= 150]
    assert len(cores) == 2
    assert (load_table.current_a[:, cores] @ volts[cores]).mean() > 0.35 * watts.mean()


@pytest.mark.parametrize("name", NAMES)
def test_every_rail_has_stages_and_capacitors_to_choose_from(shipped: Shipped, name: str) -> None:
    loaded = shipped[name]
    for rail in own_rails(loaded):
        legal = [stage.name for stage in stages(loaded) if makes(loaded, rail, stage)]
        assert len(legal) >= 6, (rail.name, legal)
        assert len(rail.capacitors) >= 3, rail.name


@pytest.mark.parametrize("name", NAMES)
def test_every_bus_has_converters_to_choose_from(shipped: Shipped, name: str) -> None:
    """Wide adjustment, ordinary trim and another kind; enough power with units in parallel."""
    loaded = shipped[name]
    supply = loaded.study.supply
    parts = [cast(BusConverter, part) for part in loaded.catalogue.families["bus_converters"].values()]
    fit = [
        part
        for part in parts
        if part.input_min_v <= supply.low_v and part.input_max_v >= supply.high_v
        and (part.isolated or not supply.isolation)
    ]  # fmt: skip
    needed_w = rated_w(loaded) / 0.85
    derated = loaded.study.derating.current
    strong = [part for part in fit if part.max_power_w * part.max_parallel * derated > needed_w]
    assert any(part.output_min_v <= 5 for part in strong)
    assert any(9 < part.output_min_v <= 9.6 and part.kind == "regulated" for part in strong)
    assert len({part.kind for part in fit}) >= 2


@pytest.mark.parametrize("name", NAMES)
def test_every_rail_can_hold_its_step_at_a_low_and_a_high_bus(shipped: Shipped, name: str) -> None:
    """Else the droop of the rail would not be a question of choice; 32 pieces is the largest bank."""
    loaded = shipped[name]
    capacitors = loaded.catalogue.families["capacitors"]
    for rail in own_rails(loaded):
        if rail.linear_only or rail.voltage_v > 6:
            continue
        for input_v in (8.0, 12.0):
            best = min(
                deviation_percent(
                    loaded, rail, stage, stage.max_phases, cast(Capacitor, capacitors[bank]), 32, input_v
                )
                for stage in stages(loaded)
                if isinstance(stage, BuckStage) and makes(loaded, rail, stage) and stage.input_max_v < 20
                for bank in rail.capacitors
                if 32 * cast(Capacitor, capacitors[bank]).capacitance_uf <= stage.loop_max_uf
            )
            assert best < 60, (rail.name, input_v, best)


@pytest.mark.parametrize("name", NAMES)
def test_incumbent_keeps_its_rails_within_their_budgets(shipped: Shipped, name: str) -> None:
    """Today's design is plausible: legal stages, enough phases, droop of a fifth to all of its budget."""
    loaded = shipped[name]
    design = loaded.study.incumbent
    assert design is not None
    by_name = {stage.name: stage for stage in stages(loaded)}
    for rail in own_rails(loaded):
        stage = by_name[design[f"{rail.name}.stage"]]
        phases = int(design[f"{rail.name}.phases"])
        assert makes(loaded, rail, stage), rail.name
        carried_a = stage.phase_current_a * phases * loaded.study.derating.current
        assert carried_a >= rated_a(loaded, rail), rail.name
        if isinstance(stage, BuckStage):
            capacitors = loaded.catalogue.families["capacitors"]
            bank = cast(Capacitor, capacitors[design[f"{rail.name}.bank"]])
            count = int(design[f"{rail.name}.bank_count"])
            assert stage.loop_min_uf <= 0.64 * count * bank.capacitance_uf, rail.name
            assert count * bank.capacitance_uf <= stage.loop_max_uf, rail.name
            percent = deviation_percent(loaded, rail, stage, phases, bank, count, 11.4)
            assert 20 < percent <= 100, (rail.name, percent)
