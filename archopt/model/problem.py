"""The compiled problem: study, catalogue and states as arrays, and what each rail and bus may choose from."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace
from functools import cached_property

import numpy as np

from archopt.errors import InputError
from archopt.inputs.resolved import Catalogue, ResolvedStudy
from archopt.model import parameters as tables_of
from archopt.model.offers import Offers, build_space, contradictions, empty_choices, empty_rails
from archopt.model.overlaps import Overlaps, overlaps
from archopt.model.parameters import (
    LINEAR,
    SINGLE,
    BiasTable,
    BoolArray,
    CapacitorTable,
    ConverterTable,
    FloatArray,
    IntArray,
    PartTable,
    PathParameters,
    StackTable,
    StageTable,
    SupervisorTable,
)
from archopt.model.planes import BusPlanes, bus_planes, copper_degc, with_pours
from archopt.model.rails import RailArrays, rail_arrays
from archopt.model.space import BANK_COUNTS, BUS_A, INPUT, PARENT, Layout, Space
from archopt.model.states import StateTable, own_rails
from archopt.physics.ampacity import current_limit_a
from archopt.physics.capacitor import effective_capacitance_f
from archopt.physics.copper import sheet_resistance_ohm

BUS_LEAST_MARGIN = 1.15  # a buck stage wants its input this much above its output before drops


@dataclass(frozen=True)
class Problem:
    """Everything the evaluator reads. N stages, C converters, K capacitors, R rails, G grid voltages.

    stage_ok (R, N); phases_low, phases_high (R, N); feed_ok (R, N, 3 + R): straight from the input, bus A,
    bus B, rail j; capacitor_ok (R, K); bank_f (K, counts, R) effective bank at the rail's voltage, end of life.
    """

    study: ResolvedStudy
    catalogue: Catalogue
    rails: RailArrays
    layout: Layout
    space: Space
    states: StateTable
    parts: PartTable
    stages: StageTable
    converters: ConverterTable
    capacitors: CapacitorTable
    supervisors: SupervisorTable
    biases: BiasTable
    stacks: StackTable
    path: PathParameters
    grid_v: FloatArray
    stage_ok: BoolArray
    phases_low: IntArray
    phases_high: IntArray
    feed_ok: BoolArray
    capacitor_ok: BoolArray
    bulk_ok: BoolArray
    sheet_ohm: FloatArray  # (stacks,) one layer, warm
    planes: BusPlanes
    overlaps: Overlaps
    bank_counts: IntArray

    @property
    def bus_squares(self) -> FloatArray:
        """Port resistance matrix of each bus in squares, one way, (2, R, R)."""
        return self.planes.squares

    @cached_property
    def pour_limit_a(self) -> FloatArray:
        """What one pair of each rail's pour may carry on each stack, (stacks, R) A, by IPC-2221."""
        thickness, rise_k = self.stacks.thickness_m[:, None], self.study.board.copper_rise_k
        return current_limit_a(self.rails.copper_width_m, thickness, rise_k, inner=True)

    @cached_property
    def place_limit_a(self) -> FloatArray:
        """What one pair of each place of the bus planes may carry on each stack, (stacks, 2, K) A, by IPC-2221."""
        thickness, rise_k = self.stacks.thickness_m[:, None, None], self.study.board.copper_rise_k
        return current_limit_a(self.planes.place_width_m, thickness, rise_k, inner=True)


def voltage_grid(study: ResolvedStudy) -> FloatArray:
    """Return the bus voltages a design may use: whole multiples of the study's grid."""
    step = study.control.grid_v
    first = math.ceil(study.control.bus_min_v / step - 1e-9)
    last = math.floor(study.control.bus_max_v / step + 1e-9)
    return np.asarray(np.arange(first, last + 1) * step, dtype=np.float64)


def stage_limits(study: ResolvedStudy, rails: RailArrays, stages: StageTable) -> tuple[BoolArray, IntArray, IntArray]:
    """Return which stages can make which rail, and the fewest and most phases worth trying, (R, N)."""
    own = own_rails(study)
    volts = rails.voltage_v[:, None]
    low = np.ceil(rails.max_a[:, None] / stages.phase_limit_a[None, :] - 1e-9).astype(np.int64)
    low = np.maximum(low, 1)
    high = np.minimum(stages.max_phases[None, :], 2 * low + 1)
    ok = (volts >= stages.output_min_v) & (volts <= stages.output_max_v) & (low <= stages.max_phases)
    linear_only = np.array([rail.linear_only for rail in own], dtype=bool)
    ok &= ~linear_only[:, None] | (stages.kind == LINEAR)
    return ok, low, np.maximum(high, low)


def feed_limits(
    study: ResolvedStudy, rails: RailArrays, stages: StageTable, grid_v: FloatArray, stage_ok: BoolArray
) -> BoolArray:
    """Return which feeds each rail's stage can take, (R, N, 3 + R)."""
    own = own_rails(study)
    supply = study.supply
    count = len(own)
    out = np.zeros((count, len(stages.names), PARENT + count), dtype=bool)
    takes_input = (stages.input_min_v <= supply.low_v) & (stages.input_max_v >= supply.high_v)
    safe = stages.isolated | (not supply.isolation)
    direct = study.choices.direct
    out[:, :, INPUT] = stage_ok & takes_input & safe & direct & (rails.voltage_v[:, None] < supply.low_v)
    reach_low = np.maximum(stages.input_min_v[None, :], rails.voltage_v[:, None] * BUS_LEAST_MARGIN)
    on_grid = (reach_low <= grid_v[-1]) & (stages.input_max_v[None, :] >= grid_v[0])
    for bus in range(min(study.choices.max_buses, 2)):
        out[:, :, BUS_A + bus] = stage_ok & on_grid & (stages.kind != SINGLE)
    place = {rail.name: k for k, rail in enumerate(own)}
    for r, rail in enumerate(own):
        for parent in rail.parents:
            j = place[parent]
            volts = rails.voltage_v[j]
            fits = (stages.input_min_v <= volts) & (stages.input_max_v >= volts) & (volts > rails.voltage_v[r])
            out[r, :, PARENT + j] = stage_ok[r] & fits & (stages.kind != SINGLE)
    return out


def awake_with(states: StateTable) -> BoolArray:
    """Return which rails are on whenever another is, (R, R): child first; no other rail can be its parent.

    A parent that carries nothing of its own but still feeds a child is at 0 A, not off.
    """
    left_alone = (~states.off[:, :, None]) & states.off[:, None, :]
    return np.asarray(~left_alone.any(axis=0))


def bank_effective_f(study: ResolvedStudy, capacitors: CapacitorTable, bias_v: FloatArray | float) -> FloatArray:
    """Return one piece's capacitance under bias, at its tolerance and end of life; shapes broadcast on (K,)."""
    return np.asarray(
        effective_capacitance_f(
            capacitors.capacitance_f,
            bias_v,
            capacitors.half_v,
            capacitors.tolerance,
            study.derating.capacitance_end_of_life,
        )
    )


def bank_most_f(capacitors: CapacitorTable, bias_v: FloatArray | float) -> FloatArray:
    """Return one piece's greatest capacitance under bias: new, at the top of its tolerance; broadcasts on (K,)."""
    return np.asarray(
        effective_capacitance_f(capacitors.capacitance_f, bias_v, capacitors.half_v, -capacitors.tolerance)
    )


def bank_esr_ohm(study: ResolvedStudy, capacitors: CapacitorTable) -> FloatArray:
    """Return one piece's series resistance at end of life, (K,)."""
    return capacitors.esr_ohm * study.derating.esr_end_of_life


def compile_problem(study: ResolvedStudy, catalogue: Catalogue, states: StateTable) -> Problem:
    """Return the compiled problem.

    Raises
    ------
    InputError
        every rail nothing can make, every pin that leaves nothing, every choice without an offer.
    """
    if not tables_of.bus_converters_offered(study, catalogue):
        study = replace(study, choices=replace(study.choices, max_buses=0))
    parts = tables_of.part_table(study, catalogue)
    stages = tables_of.stage_table(study, catalogue, parts)
    converters = tables_of.converter_table(study, catalogue, parts)
    capacitors = tables_of.capacitor_table(study, catalogue, parts)
    stacks = tables_of.stack_table(study, catalogue)
    rails = with_pours(study, rail_arrays(study))
    planes = bus_planes(study, rails.names)
    grid_v = voltage_grid(study)
    layout = Layout(len(rails.names), states.bands)
    stage_ok, low, high = stage_limits(study, rails, stages)
    feed_ok = feed_limits(study, rails, stages, grid_v, stage_ok)
    feed_ok[:, :, BUS_A : BUS_A + 2] &= planes.reached.T[:, None, :]
    feed_ok[:, :, PARENT:] &= awake_with(states)[:, None, :]
    rated = capacitors.rated_v * study.derating.voltage
    named = [set(rail.capacitors) for rail in own_rails(study)]
    capacitor_ok = (rated[None, :] >= rails.voltage_v[:, None] - 1e-9) & np.array(
        [[name in wanted for name in capacitors.names] for wanted in named], dtype=bool
    ).reshape(len(named), len(capacitors.names))
    bulk_ok = rated >= grid_v[0]
    offers = Offers(
        rails=rails,
        stages=stages,
        converters=converters,
        capacitors=capacitors,
        supervisors=tables_of.supervisor_table(study, catalogue, parts),
        biases=tables_of.bias_table(study, catalogue, parts),
        stacks=stacks,
        grid_v=grid_v,
        feed_ok=feed_ok,
        capacitor_ok=capacitor_ok,
        bulk_ok=bulk_ok,
        damper_ok=bulk_ok & capacitors.lossy,
        phases_high=high,
    )
    space = build_space(study, layout, offers)
    problems = [*empty_rails(study, offers), *empty_choices(study, space)]
    problems = problems or contradictions(study, offers, space)
    if problems:
        raise InputError(problems)
    return Problem(
        study=study,
        catalogue=catalogue,
        rails=rails,
        layout=layout,
        space=space,
        states=states,
        parts=parts,
        stages=stages,
        converters=converters,
        capacitors=capacitors,
        supervisors=offers.supervisors,
        biases=offers.biases,
        stacks=stacks,
        path=tables_of.path_parameters(study, catalogue, parts),
        grid_v=grid_v,
        stage_ok=stage_ok,
        phases_low=low,
        phases_high=high,
        feed_ok=feed_ok,
        capacitor_ok=capacitor_ok,
        bulk_ok=bulk_ok,
        sheet_ohm=np.asarray(sheet_resistance_ohm(stacks.thickness_m, copper_degc(study))),
        planes=planes,
        overlaps=overlaps(study.floorplan, rails.names),
        bank_counts=np.array(BANK_COUNTS, dtype=np.int64),
    )
