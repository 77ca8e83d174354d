"""Catalogue rows as columns in SI, and what follows from single rows."""

from __future__ import annotations

import math
from dataclasses import fields
from typing import cast

import numpy as np
from numpy.typing import NDArray

from archopt.inputs.parts import BuckStage, Inductor, LinearRegulator, Part, SingleStage
from archopt.inputs.resolved import Catalogue, ResolvedStudy
from archopt.physics.buck import BuckParameters
from archopt.physics.bus_converter import ConverterParameters
from archopt.physics.thermal import thermal_resistance_at

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

IDEAL_SHEDDING, THRESHOLD_SHEDDING, NO_SHEDDING = 0, 1, 2
LEAST_INPUT_DRIVEN_V = 5.5  # a gate supply derived from the input, at start-up at least, needs this (common practice)


def allowed(study: ResolvedStudy, catalogue: Catalogue, family: str) -> list[Part]:
    """Return the rows of a family the study allows, in catalogue order."""
    choices = study.choices
    if choices.families and family not in choices.families:
        return []
    rows = catalogue.families.get(family, {}).values()
    forbidden = set(choices.forbidden_parts)
    return [row for row in rows if row.name not in forbidden and getattr(row, "part", "") not in forbidden]


def array(rows: list[Part], name: str, scale: float = 1.0) -> FloatArray:
    """Return one column as an array in SI; a row without the column gives nan."""
    return np.array([float(getattr(row, name, math.nan)) * scale for row in rows], dtype=np.float64)


HARMLESS_ZERO = ("gate_from_input", "gate_from_output", "emulation")


def buck_parameters(study: ResolvedStudy, catalogue: Catalogue, rows: list[Part]) -> BuckParameters:
    """Return buck parameters in SI; rows of other families get harmless ones, never used."""
    dummy = next((row for row in rows if isinstance(row, BuckStage)), None)
    bucks = [row if isinstance(row, BuckStage) else dummy for row in rows]
    columns: dict[str, list[float]] = {field.name: [] for field in fields(BuckParameters)}
    for row in bucks:
        if row is None:
            for name, column in columns.items():
                column.append(0.0 if name in HARMLESS_ZERO else 1.0)
            continue
        inductor = cast(Inductor, catalogue.families["inductors"][row.inductor])
        core_w = inductor.core_loss_mw * 1e-3
        core_w *= (row.frequency_khz / inductor.core_frequency_khz) ** inductor.core_frequency_exponent
        values = {
            "frequency_hz": row.frequency_khz * 1e3,
            "inductance_h": inductor.inductance_nh * 1e-9,
            "winding_ohm": inductor.winding_mohm * 1e-3,
            "core_w": core_w,
            "core_ripple_a": inductor.core_ripple_a,
            "core_exponent": inductor.core_ripple_exponent,
            "core_frequency_exponent": inductor.core_frequency_exponent,
            "high_side_ohm": row.high_side_mohm * 1e-3,
            "low_side_ohm": row.low_side_mohm * 1e-3,
            "switch_per_k": row.resistance_per_k,
            "winding_per_k": 0.00393,
            "rise_s": row.edge_rise_ns * 1e-9,
            "fall_s": row.edge_fall_ns * 1e-9,
            "dead_s": row.dead_time_ns * 1e-9,
            "diode_v": row.diode_v,
            "high_side_gate_c": row.high_side_gate_nc * 1e-9,
            "low_side_gate_c": row.low_side_gate_nc * 1e-9,
            "gate_v": row.gate_v,
            "gate_from_input": 1.0 if row.gate_supply == "input" else 0.0,
            "gate_from_output": 1.0 if row.gate_supply == "output" else 0.0,
            "high_side_output_c": row.high_side_output_nc * 1e-9,
            "low_side_output_c": row.low_side_output_nc * 1e-9,
            "output_charge_v": row.output_charge_at_v,
            "recovery_c": row.recovery_nc * 1e-9,
            "recovery_a": row.phase_current_a,
            "input_capacitor_ohm": row.input_capacitor_mohm * 1e-3,
            "quiescent_a": row.quiescent_ma * 1e-3,
            "emulation": 1.0 if row.light_load == "emulation" else 0.0,
            "fold_floor_hz": row.fold_floor_khz * 1e3,
            "thermal_k_per_w": float(
                thermal_resistance_at(row.thermal_k_per_w, row.air_speed_m_s, study.supply.air_speed_m_s)
            ),
            "max_duty": row.max_duty,
            "min_on_s": max(row.min_on_ns, study.derating.min_on_ns) * 1e-9,
            "min_off_s": row.min_off_ns * 1e-9,
        }
        for name, column in columns.items():
            column.append(values[name])
    return BuckParameters(**{name: np.array(column) for name, column in columns.items()})


def converter_parameters(study: ResolvedStudy, rows: list[Part]) -> ConverterParameters:
    """Return loss parameters of bus converters or single stages; other rows get harmless ones."""
    thermal = thermal_resistance_at(
        np.nan_to_num(array(rows, "thermal_k_per_w"), nan=1.0),
        np.nan_to_num(array(rows, "air_speed_m_s"), nan=1.0),
        study.supply.air_speed_m_s,
    )

    def column(name: str, scale: float = 1.0, missing: float = 0.0) -> FloatArray:
        return np.nan_to_num(array(rows, name, scale), nan=missing)

    return ConverterParameters(
        fixed_w=column("fixed_w"),
        switching_w=column("switching_w"),
        input_exponent=column("input_exponent"),
        output_exponent=column("output_exponent"),
        input_nominal_v=column("input_nominal_v", missing=1.0),
        output_nominal_v=column("output_nominal_v", missing=1.0),
        linear_w_per_a=column("linear_w_per_a"),
        resistance_ohm=column("resistance_mohm", 1e-3),
        resistance_per_k=column("resistance_per_k"),
        thermal_k_per_w=np.asarray(thermal, dtype=np.float64),
    )


def stage_input_min_v(row: Part) -> float:
    """Return the lowest input a stage starts at, V: its own, or what its gate supply needs."""
    lowest = float(cast("BuckStage | SingleStage | LinearRegulator", row).input_min_v)
    own_drive = isinstance(row, BuckStage) and row.gate_supply != "bias"
    return max(lowest, LEAST_INPUT_DRIVEN_V) if own_drive else lowest


def folded_share(row: Part) -> float:
    """Return the share of its bandwidth a stage has left without load."""
    return row.folded_crossover_share if isinstance(row, BuckStage) and row.light_load == "emulation" else 1.0


def shedding_of(rows: list[Part]) -> tuple[IntArray, FloatArray]:
    """Return how each stage sheds phases and the load of a phase from which another one runs, A."""
    kinds = {"ideal": IDEAL_SHEDDING, "threshold": THRESHOLD_SHEDDING, "none": NO_SHEDDING}
    kind = np.array([kinds[getattr(row, "shedding", "ideal")] for row in rows], dtype=np.int64)
    share = np.nan_to_num(array(rows, "shed_share"), nan=1.0)
    return kind, np.where(kind == THRESHOLD_SHEDDING, share * array(rows, "phase_current_a"), np.inf)
