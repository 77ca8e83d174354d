"""Catalogue rows of the study as SI arrays, one struct of arrays a family, filtered to what the study allows."""

from __future__ import annotations

import math
from dataclasses import dataclass, fields, replace
from typing import Any, cast

import numpy as np
from numpy.typing import NDArray

from archopt.inputs.parts import (
    BiasSupply,
    BuckStage,
    BusConverter,
    Capacitor,
    CopperFoil,
    Inductor,
    InputPath,
    Part,
    SingleStage,
    Stack,
    Supervisor,
)
from archopt.inputs.resolved import Catalogue, ResolvedStudy
from archopt.model.converter_loss import Tables, measured_tables
from archopt.model.part_rows import (
    allowed,
    array,
    buck_parameters,
    converter_parameters,
    folded_share,
    shedding_of,
    stage_input_min_v,
)
from archopt.physics.buck import BuckParameters
from archopt.physics.bus_converter import ConverterParameters
from archopt.physics.linear import LinearParameters
from archopt.physics.parameters import Gatherable
from archopt.physics.thermal import thermal_resistance_at

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]
BoolArray = NDArray[np.bool_]

BUCK, SINGLE, LINEAR = 0, 1, 2
REGULATED, FIXED_RATIO, NON_ISOLATED = 0, 1, 2
PRICE_STEPS = (1_000.0, 10_000.0, 100_000.0)


@dataclass(frozen=True)
class PartTable:
    """Everything bought, one row a part number: prices (N, 4) by step, area, placements."""

    names: tuple[str, ...]
    families: tuple[str, ...]
    price: FloatArray
    area_mm2: FloatArray
    placements: FloatArray
    preferred: BoolArray

    def index(self, name: str) -> int:
        """Return the row of a part number."""
        return self.names.index(name)


@dataclass(frozen=True)
class StageTable:
    """Every rail stage offered: buck phases, single stages from the input, linear regulators (N rows).

    measured: loss tables of one phase, None where a row's own terms say what it loses.
    """

    names: tuple[str, ...]
    kind: IntArray
    buck: BuckParameters
    single: ConverterParameters
    linear: LinearParameters
    input_min_v: FloatArray
    input_max_v: FloatArray
    output_min_v: FloatArray
    output_max_v: FloatArray
    phase_limit_a: FloatArray  # derated
    max_phases: IntArray
    isolated: BoolArray
    bias_fed: BoolArray
    bandwidth_rad_s: FloatArray
    folded_share: FloatArray  # of the bandwidth, left without load
    delay_s: FloatArray
    wakeup_s: FloatArray
    shedding: IntArray
    shed_at_a: FloatArray  # load of a phase from which another one runs; inf without thresholds
    loop_min_f: FloatArray
    loop_max_f: FloatArray
    inductance_h: FloatArray  # nan where nothing limits the slew (linear)
    turns: FloatArray
    max_duty: FloatArray
    min_on_s: FloatArray
    min_off_s: FloatArray
    frequency_hz: FloatArray
    thermal_k_per_w: FloatArray
    input_capacitance_f: FloatArray
    part: IntArray
    second_part: IntArray  # inductor, -1 where none

    def take(self, index: IntArray | tuple[Any, ...]) -> StageTable:
        """Return rows of any shape, every number gathered at once; slices reshape what was gathered, without a copy.

        Names and measured tables stay those of the whole table.
        """
        gathered: dict[str, Any] = {}
        for item in fields(self):
            value = getattr(self, item.name)
            if isinstance(value, np.ndarray):
                gathered[item.name] = value[index]
            elif isinstance(value, Gatherable):
                gathered[item.name] = value.take(index)
        return replace(self, **gathered)
    measured: Tables


@dataclass(frozen=True)
class ConverterTable:
    """Bus converters (N rows); measured: loss tables of one unit, None where a row's own terms say what it loses."""

    names: tuple[str, ...]
    kind: IntArray
    loss: ConverterParameters
    output_min_v: FloatArray
    output_max_v: FloatArray
    ratio: FloatArray
    limit_a: FloatArray  # derated
    limit_w: FloatArray  # derated
    overload_a: FloatArray
    overload_s: FloatArray
    thermal_k_per_w: FloatArray
    setting_grid_v: FloatArray
    accuracy: FloatArray
    slew_v_per_s: FloatArray
    bandwidth_rad_s: FloatArray
    delay_s: FloatArray
    output_ohm: FloatArray
    startup_max_f: FloatArray
    wakeup_s: FloatArray
    max_parallel: IntArray
    part: IntArray
    measured: Tables


@dataclass(frozen=True)
class CapacitorTable:
    """Capacitors of output and bulk banks (N rows)."""

    names: tuple[str, ...]
    capacitance_f: FloatArray
    rated_v: FloatArray
    esr_ohm: FloatArray
    half_v: FloatArray
    tolerance: FloatArray
    ripple_a: FloatArray
    part: IntArray
    lossy: BoolArray  # of a kind whose own resistance damps


@dataclass(frozen=True)
class SupervisorTable:
    """Supervisors (N rows); ``level`` 1 two levels, 2 follows the load."""

    names: tuple[str, ...]
    level: IntArray
    power_w: FloatArray
    buses: IntArray
    part: IntArray


@dataclass(frozen=True)
class BiasTable:
    """Bias supplies (N rows)."""

    names: tuple[str, ...]
    input_min_v: FloatArray
    input_max_v: FloatArray
    isolated: BoolArray
    max_power_w: FloatArray
    no_load_w: FloatArray
    efficiency: FloatArray
    part: IntArray


@dataclass(frozen=True)
class StackTable:
    """Board stacks (N rows); thickness is the finished one of a power layer."""

    names: tuple[str, ...]
    layers: IntArray
    pairs: IntArray
    copper_oz: FloatArray
    thickness_m: FloatArray
    price_per_cm2: FloatArray


@dataclass(frozen=True)
class PathParameters:
    """The one input path of the study."""

    name: str
    resistance_ohm: float
    inductance_h: float
    limit_a: float
    power_w: float
    part: int


def part_table(study: ResolvedStudy, catalogue: Catalogue) -> PartTable:
    """Return every part number that can be bought; variants of one stage share a number."""
    names: dict[str, Part] = {}
    for family in (
        "buck_stages",
        "inductors",
        "single_stages",
        "linear_regulators",
        "bus_converters",
        "capacitors",
        "supervisors",
        "bias_supplies",
        "input_paths",
    ):
        for row in catalogue.families.get(family, {}).values():
            names.setdefault(part_number(row), row)
    rows = list(names.values())
    preferred = set(study.choices.preferred_parts)
    return PartTable(
        names=tuple(names),
        families=tuple(row.family for row in rows),
        price=np.stack([array(rows, step) for step in ("price_100", "price_1k", "price_10k", "price_100k")], axis=1),
        area_mm2=array(rows, "area_mm2"),
        placements=array(rows, "placements"),
        preferred=np.array([number in preferred or row.name in preferred for number, row in names.items()], dtype=bool),
    )


def part_number(row: Part) -> str:
    """Return the part number a row is bought under."""
    return row.part if isinstance(row, BuckStage) else row.name


def stage_table(study: ResolvedStudy, catalogue: Catalogue, parts: PartTable) -> StageTable:
    """Return all allowed rail stages in one table."""
    rows: list[Part] = [
        *allowed(study, catalogue, "buck_stages"),
        *allowed(study, catalogue, "single_stages"),
        *allowed(study, catalogue, "linear_regulators"),
    ]
    kind = np.array(
        [BUCK if isinstance(r, BuckStage) else SINGLE if isinstance(r, SingleStage) else LINEAR for r in rows],
        dtype=np.int64,
    )
    inductors = [
        cast(Inductor, catalogue.families["inductors"][r.inductor]) if isinstance(r, BuckStage) else None for r in rows
    ]
    rated_a = array(rows, "phase_current_a") * study.derating.current
    saturation_a = np.array([i.saturation_a if i else np.inf for i in inductors])
    thermal = np.asarray(
        thermal_resistance_at(array(rows, "thermal_k_per_w"), array(rows, "air_speed_m_s"), study.supply.air_speed_m_s)
    )
    shedding, shed_at_a = shedding_of(rows)
    return StageTable(
        names=tuple(r.name for r in rows),
        kind=kind,
        buck=buck_parameters(study, catalogue, rows),
        single=converter_parameters(study, rows),
        linear=LinearParameters(
            quiescent_a=np.nan_to_num(array(rows, "quiescent_ma", 1e-3)),
            dropout_v=np.nan_to_num(array(rows, "dropout_mv", 1e-3)),
            rated_a=array(rows, "phase_current_a"),
            thermal_k_per_w=thermal,
        ),
        input_min_v=np.array([stage_input_min_v(row) for row in rows]),
        input_max_v=array(rows, "input_max_v"),
        output_min_v=array(rows, "output_min_v"),
        output_max_v=array(rows, "output_max_v"),
        phase_limit_a=np.minimum(rated_a, saturation_a * study.derating.current / 1.2),
        max_phases=np.array([getattr(r, "max_phases", 1) for r in rows], dtype=np.int64),
        isolated=np.array([bool(getattr(r, "isolated", False)) for r in rows], dtype=bool),
        bias_fed=np.array([getattr(r, "gate_supply", "input") == "bias" for r in rows], dtype=bool),
        bandwidth_rad_s=array(rows, "crossover_khz", 2e3 * math.pi),
        folded_share=np.array([folded_share(row) for row in rows]),
        delay_s=array(rows, "delay_ns", 1e-9),
        wakeup_s=np.nan_to_num(array(rows, "wakeup_us", 1e-6)),
        shedding=shedding,
        shed_at_a=shed_at_a,
        loop_min_f=array(rows, "loop_min_uf", 1e-6),
        loop_max_f=array(rows, "loop_max_uf", 1e-6),
        inductance_h=np.array(
            [
                i.inductance_nh * 1e-9 if i else getattr(r, "inductance_nh", math.nan) * 1e-9
                for i, r in zip(inductors, rows, strict=True)
            ]
        ),
        turns=np.nan_to_num(array(rows, "transformer_ratio"), nan=1.0),
        max_duty=np.nan_to_num(array(rows, "max_duty"), nan=1.0),
        min_on_s=np.where(
            kind == BUCK,
            np.maximum(np.nan_to_num(array(rows, "min_on_ns")), study.derating.min_on_ns) * 1e-9,
            0.0,
        ),
        min_off_s=np.nan_to_num(array(rows, "min_off_ns", 1e-9)),
        frequency_hz=np.nan_to_num(array(rows, "frequency_khz", 1e3), nan=1e3),
        thermal_k_per_w=thermal,
        input_capacitance_f=np.nan_to_num(array(rows, "input_capacitance_uf", 1e-6)),
        part=np.array([parts.index(part_number(r)) for r in rows], dtype=np.int64),
        second_part=np.array([parts.index(i.name) if i else -1 for i in inductors], dtype=np.int64),
        measured=measured_tables(catalogue, rows),
    )


def bus_converters_offered(study: ResolvedStudy, catalogue: Catalogue) -> list[BusConverter]:
    """Return the rows that the study allows and that take its whole input range and its isolation."""
    return [
        row
        for row in cast("list[BusConverter]", allowed(study, catalogue, "bus_converters"))
        if row.input_min_v <= study.supply.low_v
        and row.input_max_v >= study.supply.high_v
        and (row.isolated or not study.supply.isolation)
    ]


def converter_table(study: ResolvedStudy, catalogue: Catalogue, parts: PartTable) -> ConverterTable:
    """Return the bus converters that take the study's whole input range and its isolation.

    Where there is none the first of the catalogue stands in, so that arrays have a shape; no bus is then offered.
    """
    rows = bus_converters_offered(study, catalogue)
    rows = rows or cast("list[BusConverter]", list(catalogue.families["bus_converters"].values()))[:1]
    plain: list[Part] = list(rows)
    measured = measured_tables(catalogue, rows)
    most_a = np.array([np.inf if table is None else table.current_a[-1] for table in measured])
    kinds = {"regulated": REGULATED, "fixed_ratio": FIXED_RATIO, "non_isolated": NON_ISOLATED}
    return ConverterTable(
        names=tuple(row.name for row in rows),
        kind=np.array([kinds[row.kind] for row in rows], dtype=np.int64),
        loss=converter_parameters(study, plain),
        output_min_v=array(plain, "output_min_v"),
        output_max_v=array(plain, "output_max_v"),
        ratio=array(plain, "ratio"),
        limit_a=array(plain, "max_current_a", study.derating.current),
        limit_w=array(plain, "max_power_w", study.derating.current),
        overload_a=np.minimum(array(plain, "overload_a"), most_a),  # no more than was measured
        overload_s=array(plain, "overload_ms", 1e-3),
        thermal_k_per_w=np.asarray(
            thermal_resistance_at(
                array(plain, "thermal_k_per_w"), array(plain, "air_speed_m_s"), study.supply.air_speed_m_s
            )
        ),
        setting_grid_v=array(plain, "setting_grid_v"),
        accuracy=array(plain, "accuracy_percent", 0.01),
        slew_v_per_s=array(plain, "slew_v_per_ms", 1e3),
        bandwidth_rad_s=array(plain, "crossover_khz", 2e3 * math.pi),
        delay_s=array(plain, "delay_us", 1e-6),
        output_ohm=array(plain, "output_mohm", 1e-3),
        startup_max_f=array(plain, "startup_max_uf", 1e-6),
        wakeup_s=array(plain, "wakeup_ms", 1e-3),
        max_parallel=np.array([row.max_parallel for row in rows], dtype=np.int64),
        part=np.array([parts.index(row.name) for row in rows], dtype=np.int64),
        measured=measured,
    )


def capacitor_table(study: ResolvedStudy, catalogue: Catalogue, parts: PartTable) -> CapacitorTable:
    """Return the capacitors the study allows."""
    rows = allowed(study, catalogue, "capacitors")
    return CapacitorTable(
        names=tuple(cast(Capacitor, row).name for row in rows),
        capacitance_f=array(rows, "capacitance_uf", 1e-6),
        rated_v=array(rows, "rated_v"),
        esr_ohm=array(rows, "esr_mohm", 1e-3),
        half_v=array(rows, "half_capacitance_v"),
        tolerance=array(rows, "tolerance_percent", 0.01),
        ripple_a=array(rows, "ripple_a"),
        part=np.array([parts.index(row.name) for row in rows], dtype=np.int64),
        lossy=np.array([cast(Capacitor, row).kind != "ceramic" for row in rows], dtype=bool),
    )


def supervisor_table(study: ResolvedStudy, catalogue: Catalogue, parts: PartTable) -> SupervisorTable:
    """Return the supervisors, cheapest first so that the first that suffices is the plain choice."""
    rows = cast("list[Supervisor]", allowed(study, catalogue, "supervisors"))
    rows = sorted(rows, key=lambda row: (row.price_1k, row.power_mw, row.name))
    return SupervisorTable(
        names=tuple(row.name for row in rows),
        level=np.array([1 if row.control == "two_levels" else 2 for row in rows], dtype=np.int64),
        power_w=array(list(rows), "power_mw", 1e-3),
        buses=np.array([row.buses for row in rows], dtype=np.int64),
        part=np.array([parts.index(row.name) for row in rows], dtype=np.int64),
    )


def bias_table(study: ResolvedStudy, catalogue: Catalogue, parts: PartTable) -> BiasTable:
    """Return the bias supplies."""
    rows = cast("list[BiasSupply]", allowed(study, catalogue, "bias_supplies"))
    plain: list[Part] = list(rows)
    return BiasTable(
        names=tuple(row.name for row in rows),
        input_min_v=array(plain, "input_min_v"),
        input_max_v=array(plain, "input_max_v"),
        isolated=np.array([row.isolated for row in rows], dtype=bool),
        max_power_w=array(plain, "max_power_w", study.derating.current),
        no_load_w=array(plain, "no_load_mw", 1e-3),
        efficiency=array(plain, "efficiency"),
        part=np.array([parts.index(row.name) for row in rows], dtype=np.int64),
    )


def stack_table(study: ResolvedStudy, catalogue: Catalogue) -> StackTable:
    """Return the stacks to choose from, by price."""
    foils = {
        cast(CopperFoil, row).copper_oz: cast(CopperFoil, row) for row in catalogue.families["copper_foils"].values()
    }
    rows = cast("list[Stack]", allowed(study, catalogue, "stacks"))
    rows = [row for row in rows if not study.board.stacks or row.name in study.board.stacks]
    rows = sorted(rows, key=lambda row: (row.price_per_cm2, row.name))
    plain: list[Part] = list(rows)
    return StackTable(
        names=tuple(row.name for row in rows),
        layers=np.array([row.layers for row in rows], dtype=np.int64),
        pairs=np.array([row.pairs for row in rows], dtype=np.int64),
        copper_oz=array(plain, "copper_oz"),
        thickness_m=np.array([foils[row.copper_oz].finished_um * 1e-6 for row in rows]),
        price_per_cm2=array(plain, "price_per_cm2"),
    )


def path_parameters(study: ResolvedStudy, catalogue: Catalogue, parts: PartTable) -> PathParameters:
    """Return the study's input path."""
    row = cast(InputPath, catalogue.families["input_paths"][study.supply.path])
    return PathParameters(
        name=row.name,
        resistance_ohm=row.resistance_mohm * 1e-3,
        inductance_h=row.inductance_uh * 1e-6,
        limit_a=row.max_current_a * study.derating.current,
        power_w=row.power_mw * 1e-3,
        part=parts.index(row.name),
    )
