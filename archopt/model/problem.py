"""The compiled problem: study, catalogue and states as arrays, and what each rail and bus may choose from."""

from __future__ import annotations

import math
from dataclasses import dataclass, replace

import numpy as np

from archopt.errors import InputError
from archopt.errors import Problem as InputProblem
from archopt.inputs.resolved import Catalogue, Rail, ResolvedStudy
from archopt.model import parameters as tables_of
from archopt.model.parameters import (
    BUCK,
    FIXED_RATIO,
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
from archopt.model.space import (
    BANK_COUNTS,
    BUS_NAMES,
    CONTROL_NAMES,
    FEWEST_NAMES,
    INPUT,
    PARENT,
    Layout,
    Space,
    choice_names,
)
from archopt.model.states import EnergyStates, StateTable, own_rails
from archopt.physics.capacitor import effective_capacitance_f
from archopt.physics.copper import sheet_resistance_ohm, squares_matrix

BUS_LEAST_MARGIN = 1.15  # a buck stage wants its input this much above its output before drops


@dataclass(frozen=True)
class RailArrays:
    """Per rail with a stage of its own, (R,)."""

    names: tuple[str, ...]
    voltage_v: FloatArray
    max_a: FloatArray  # own maximum with its taps, grown
    step_a: FloatArray
    load_slew_a_per_s: FloatArray
    budget_v: FloatArray
    remote_sense: BoolArray
    squares: FloatArray
    copper_area_m2: FloatArray
    copper_width_m: FloatArray
    drop_budget: FloatArray  # share of the rail voltage
    step_group: IntArray


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
    bus_squares: FloatArray  # (R, R) one way
    bank_counts: IntArray

    def with_states(self, states: StateTable) -> Problem:
        """Return the same problem in other states (same rails; the layout follows the number of bands)."""
        layout = Layout(self.layout.rails, states.bands)
        return replace(self, states=states, layout=layout, space=replace(self.space, layout=layout))


def rail_arrays(study: ResolvedStudy) -> RailArrays:
    """Return the study's rails as SI arrays; taps are added to the rail they tap."""
    rails = own_rails(study)
    place = {rail.name: k for k, rail in enumerate(rails)}
    maximum = np.array([rail.max_current_a for rail in rails])
    step = np.array([rail.step_a for rail in rails])
    for rail in study.rails:
        if rail.tap_of:
            maximum[place[rail.tap_of]] += rail.max_current_a
            step[place[rail.tap_of]] = max(step[place[rail.tap_of]], rail.step_a)
    groups: dict[str, int] = {}
    group = [groups.setdefault(rail.step_group or f" {rail.name}", len(groups)) for rail in rails]
    return RailArrays(
        names=tuple(rail.name for rail in rails),
        voltage_v=np.array([rail.voltage_v for rail in rails]),
        max_a=maximum * study.growth,
        step_a=step,
        load_slew_a_per_s=np.array([rail.slew_a_per_us * 1e6 for rail in rails]),
        budget_v=np.array([rail.droop_budget_v for rail in rails]),
        remote_sense=np.array([rail.remote_sense for rail in rails], dtype=bool),
        squares=np.array([rail.squares for rail in rails]),
        copper_area_m2=np.array([rail.copper_area_cm2 * 1e-4 for rail in rails]),
        copper_width_m=np.array([rail.copper_width_mm * 1e-3 for rail in rails]),
        drop_budget=np.array([rail.drop_budget_percent * 0.01 for rail in rails]),
        step_group=np.array(group, dtype=np.int64),
    )


def voltage_grid(study: ResolvedStudy) -> FloatArray:
    """Return the bus voltages a design may use: whole multiples of the study's grid."""
    step = study.control.grid_v
    first = math.ceil(study.control.bus_min_v / step - 1e-9)
    last = math.floor(study.control.bus_max_v / step + 1e-9)
    return np.arange(first, last + 1) * step


def stage_limits(
    study: ResolvedStudy, rails: RailArrays, stages: StageTable
) -> tuple[BoolArray, IntArray, IntArray]:
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
        out[:, :, 1 + bus] = stage_ok & on_grid & (stages.kind != SINGLE)
    place = {rail.name: k for k, rail in enumerate(own)}
    for r, rail in enumerate(own):
        for parent in rail.parents:
            j = place[parent]
            volts = rails.voltage_v[j]
            fits = (
                (stages.input_min_v <= volts) & (stages.input_max_v >= volts) & (volts > rails.voltage_v[r])
            )
            out[r, :, PARENT + j] = stage_ok[r] & fits & (stages.kind != SINGLE)
    return out


def bank_effective_f(
    study: ResolvedStudy, capacitors: CapacitorTable, bias_v: FloatArray | float
) -> FloatArray:
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


def bank_esr_ohm(study: ResolvedStudy, capacitors: CapacitorTable) -> FloatArray:
    """Return one piece's series resistance at end of life, (K,)."""
    return capacitors.esr_ohm * study.derating.esr_end_of_life


def restricted(values: IntArray, pins: tuple[str, ...] | None, labels: dict[int, str]) -> IntArray:
    """Return the values a pin leaves."""
    if pins is None:
        return values
    keep = []
    for value in values:
        label = labels.get(int(value), str(int(value)))
        if any(label == pin or same_number(label, pin) for pin in pins):
            keep.append(int(value))
    return np.array(keep, dtype=np.int64)


def same_number(first: str, second: str) -> bool:
    """Tell whether two texts are the same number."""
    try:
        return abs(float(first) - float(second)) < 1e-9
    except ValueError:
        return False


@dataclass(frozen=True)
class Offers:
    """What is on offer before pins: the pieces a space is built from."""

    rails: RailArrays
    stages: StageTable
    converters: ConverterTable
    capacitors: CapacitorTable
    supervisors: SupervisorTable
    biases: BiasTable
    stacks: StackTable
    grid_v: FloatArray
    feed_ok: BoolArray
    capacitor_ok: BoolArray
    bulk_ok: BoolArray
    phases_high: IntArray


def build_space(study: ResolvedStudy, layout: Layout, offers: Offers) -> Space:
    """Return the decision space with pins applied."""
    names = choice_names(offers.rails.names)
    grid_labels = {k: f"{volts:g}" for k, volts in enumerate(offers.grid_v)}
    numbers = {k: str(k) for k in range(33)}
    with_none = lambda items: {0: "none", **{k + 1: item for k, item in enumerate(items)}}  # noqa: E731
    feed_labels = {0: "input", 1: BUS_NAMES[0], 2: BUS_NAMES[1]}
    feed_labels |= {PARENT + j: name for j, name in enumerate(offers.rails.names)}
    stage_labels = dict(enumerate(offers.stages.names))
    capacitor_labels = dict(enumerate(offers.capacitors.names))
    count_labels = {k: str(count) for k, count in enumerate(BANK_COUNTS)}
    buses = min(study.choices.max_buses, 2)
    converters = np.arange(len(offers.converters.names) + 1) if buses else np.zeros(1, dtype=np.int64)
    most_parallel = int(offers.converters.max_parallel.max()) if len(offers.converters.names) else 1
    pairs = np.arange(1, study.board.max_pairs_per_net + 1)
    kinds = np.array([k for k, name in enumerate(CONTROL_NAMES) if name in study.control.kinds])
    grid = np.arange(len(offers.grid_v))
    counts = np.arange(len(BANK_COUNTS))
    bulk = np.flatnonzero(offers.bulk_ok)
    fewest = dict(enumerate(FEWEST_NAMES))
    per_rail = {
        "feed": lambda r: (np.flatnonzero(offers.feed_ok[r].any(axis=0)), feed_labels),
        "stage": lambda r: (np.flatnonzero(offers.feed_ok[r].any(axis=1)), stage_labels),
        "phases": lambda r: (
            np.arange(1, int(offers.phases_high[r][offers.feed_ok[r].any(axis=1)].max(initial=1)) + 1),
            numbers,
        ),
        "fewest": lambda _: (np.arange(2), fewest),
        "bank": lambda r: (np.flatnonzero(offers.capacitor_ok[r]), capacitor_labels),
        "bank_count": lambda _: (counts, count_labels),
        "pairs": lambda _: (pairs, numbers),
    }
    per_bus = {
        "converter": (converters, with_none(offers.converters.names)),
        "count": (np.arange(1, most_parallel + 1), numbers),
        "fewest": (np.arange(2), fewest),
        "nominal_v": (grid, grid_labels),
        "control": (kinds, dict(enumerate(CONTROL_NAMES))),
        "lower_v": (grid, grid_labels),
        "upper_v": (grid, grid_labels),
        "bulk": (bulk, capacitor_labels),
        "bulk_count": (counts, count_labels),
        "pairs": (pairs, numbers),
    }
    board = {
        "stack": (np.arange(len(offers.stacks.names)), dict(enumerate(offers.stacks.names))),
        "bias": (np.arange(len(offers.biases.names) + 1), with_none(offers.biases.names)),
        "bias_feed": (np.arange(2), {0: "input", 1: "bus_a"}),
        "supervisor": (np.arange(len(offers.supervisors.names) + 1), with_none(offers.supervisors.names)),
    }
    columns: list[tuple[IntArray, dict[int, str]]] = []
    for build in per_rail.values():
        columns += [build(r) for r in range(layout.rails)]
    for values, labels in per_bus.values():
        columns += [(values, labels), (values if buses > 1 else values[:1], labels)]
    columns += list(board.values())
    allowed = [
        restricted(np.asarray(values, dtype=np.int64), study.choices.pins.get(name), labels)
        for name, (values, labels) in zip(names, columns, strict=True)
    ]
    return Space(
        layout=layout,
        rail_names=offers.rails.names,
        grid_v=offers.grid_v,
        allowed=tuple(allowed),
        names=names,
        values=tuple(labels for _, labels in columns),
    )


def compile_problem(study: ResolvedStudy, catalogue: Catalogue, states: StateTable) -> Problem:
    """Return the compiled problem.

    Raises
    ------
    InputError
        every rail nothing can make, every pin that leaves nothing, every choice without an offer.
    """
    parts = tables_of.part_table(study, catalogue)
    stages = tables_of.stage_table(study, catalogue, parts)
    converters = tables_of.converter_table(study, catalogue, parts)
    capacitors = tables_of.capacitor_table(study, catalogue, parts)
    stacks = tables_of.stack_table(study, catalogue)
    rails = rail_arrays(study)
    grid_v = voltage_grid(study)
    layout = Layout(len(rails.names), states.bands)
    stage_ok, low, high = stage_limits(study, rails, stages)
    feed_ok = feed_limits(study, rails, stages, grid_v, stage_ok)
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
        phases_high=high,
    )
    space = build_space(study, layout, offers)
    problems = [*empty_rails(study, offers), *empty_choices(study, space)]
    if problems:
        raise InputError(problems)
    warm_degc = study.supply.inlet_degc + study.supply.local_rise_k + study.board.copper_rise_k
    own = own_rails(study)
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
        sheet_ohm=np.asarray(sheet_resistance_ohm(stacks.thickness_m, warm_degc)),
        bus_squares=squares_matrix(
            study.board.bus_shared_squares, np.full(len(own), study.board.bus_own_squares)
        ),
        bank_counts=np.array(BANK_COUNTS, dtype=np.int64),
    )


def empty_rails(study: ResolvedStudy, offers: Offers) -> list[InputProblem]:
    """Return a problem for every rail that nothing on offer can make or hold up."""
    problems = []
    for r, rail in enumerate(own_rails(study)):
        place = f"rails.{rail.name}"
        if not offers.feed_ok[r].any():
            text = f"no stage on offer makes {rail.voltage_v:g} V at {offers.rails.max_a[r]:g} A (grown) from any feed"
            problems.append(InputProblem(study.file, place, text))
        if not offers.capacitor_ok[r].any():
            text = f"no capacitor allowed for this rail is rated for {rail.voltage_v:g} V after derating"
            problems.append(InputProblem(study.file, f"{place}.capacitors", text))
    if not len(offers.stacks.names):
        problems.append(InputProblem(study.file, "board.stacks", "no board stack is left to choose"))
    return problems


def empty_choices(study: ResolvedStudy, space: Space) -> list[InputProblem]:
    """Return a problem for every pin that names nothing or leaves nothing."""
    problems = []
    known = set(space.names)
    for name, wanted in study.choices.pins.items():
        if name not in known:
            problems.append(InputProblem(study.file, f"choices.pin.{name}", "no such choice in this study"))
        elif not len(space.allowed[space.names.index(name)]):
            text = f"none of {', '.join(wanted)} is possible here"
            problems.append(InputProblem(study.file, f"choices.pin.{name}", text))
    return problems


__all__ = ["BUCK", "FIXED_RATIO", "EnergyStates", "Problem", "Rail", "compile_problem"]
