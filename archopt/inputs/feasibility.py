"""What no design could meet, found before a search: rails no stage can make, an input no converter stands."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import TypeAlias

from archopt.inputs.choice_names import STAGE_FAMILIES
from archopt.inputs.draft import Draft
from archopt.inputs.parts import (
    BuckStage,
    BusConverter,
    Capacitor,
    LinearRegulator,
    Part,
    SingleStage,
    Supervisor,
)
from archopt.inputs.problems import Notebook
from archopt.inputs.resolved import Catalogue, Choices, Control, Derating, InputSupply, Rail

Stage: TypeAlias = BuckStage | SingleStage | LinearRegulator


@dataclass(frozen=True)
class Demand:
    """What every rail must be able to draw at once: factor on its maximum, and derating of current."""

    factor: float
    derating_current: float


def check_feasible(
    draft: Draft, rails: Sequence[Rail], supply: InputSupply | None, control: Control, derating: Derating,
    choices: Choices, catalogue: Catalogue, demand_factor: float, notebook: Notebook,
) -> None:  # fmt: skip
    """Note what no design could meet.

    Parameters
    ----------
    demand_factor : coincidence x growth, on each rail's maximum
    """
    allowed = {
        family: [part for name, part in parts.items() if name not in choices.forbidden_parts]
        for family, parts in catalogue.families.items()
    }
    demand = Demand(demand_factor, derating.current)
    for rail in rails:
        if not rail.tap_of:
            _check_rail(draft, rail, rails, allowed, choices, demand, notebook)
    if supply is not None:
        _check_input(supply, allowed, choices, notebook)
    if choices.max_buses > 0:
        _check_bulk(control, derating, allowed["capacitors"], notebook)
    if "fixed" not in control.kinds:
        _check_supervisor(control, allowed["supervisors"], notebook)


def carried_a(stage: Stage, derating_current: float) -> float:
    """Return the most current a stage carries with all its phases, after derating, A."""
    phases = 1 if isinstance(stage, LinearRegulator) else stage.max_phases
    return stage.phase_current_a * phases * derating_current


def _check_rail(
    draft: Draft, rail: Rail, rails: Sequence[Rail], allowed: dict[str, list[Part]], choices: Choices,
    demand: Demand, notebook: Notebook,
) -> None:  # fmt: skip
    """Note a rail that no allowed stage makes, by its voltage or by its current."""
    families = ("linear_regulators",) if rail.linear_only else STAGE_FAMILIES
    stages = [
        part
        for family in families
        for part in allowed[family]
        if isinstance(part, (BuckStage, SingleStage, LinearRegulator))
    ]
    pinned = choices.pins.get(f"{rail.name}.stage")
    if pinned:
        stages = [part for part in stages if part.name in pinned]
        if not stages:
            return
    which = "pinned" if pinned else "linear" if rail.linear_only else "allowed"
    place, file = draft.place(rail.name, "voltage_v")
    fitting = [part for part in stages if part.output_min_v <= rail.voltage_v <= part.output_max_v]
    if not stages:
        notebook.problem(place, f"no {which} stage is left to make {rail.voltage_v:g} V", file)
        return
    if not fitting:
        ranges = sorted({(part.output_min_v, part.output_max_v) for part in stages})
        reach = ", ".join(f"{low:g} to {high:g} V" for low, high in ranges)
        message = f"no {which} stage makes {rail.voltage_v:g} V; their output ranges are {reach}"
        notebook.problem(place, message, file)
        return
    tapped_a = sum(other.max_current_a for other in _taps(rail, rails))
    needed_a = (rail.max_current_a + tapped_a) * demand.factor
    strongest = max(fitting, key=lambda part: carried_a(part, demand.derating_current))
    most_a = carried_a(strongest, demand.derating_current)
    if most_a < needed_a:
        place, file = draft.place(rail.name, "max_current_a")
        with_taps = f" and its taps' {tapped_a:g} A" if tapped_a else ""
        message = (
            f"{rail.max_current_a:g} A{with_taps} need {needed_a:.4g} A with coincidence and growth; "
            f"the strongest {which} stage, {strongest.name}, carries {most_a:.4g} A after derating"
        )
        notebook.problem(place, message, file)


def _taps(rail: Rail, rails: Sequence[Rail]) -> list[Rail]:
    """Return the taps a rail carries; one of another voltage is a fault told elsewhere."""
    return [other for other in rails if other.tap_of == rail.name and other.voltage_v == rail.voltage_v]


def _check_input(supply: InputSupply, allowed: dict[str, list[Part]], choices: Choices, notebook: Notebook) -> None:
    """Note an input range that nothing stands, and isolation that nothing gives."""
    buses = [part for part in allowed["bus_converters"] if isinstance(part, BusConverter)]
    pinned = choices.pins.get("bus_a.converter")
    if pinned:
        buses = [part for part in buses if part.name in pinned]
    direct: list[SingleStage | BuckStage] = [
        part
        for family in ("single_stages", "buck_stages")
        for part in allowed[family]
        if isinstance(part, (SingleStage, BuckStage))
    ]
    first: list[BusConverter | SingleStage | BuckStage] = [
        *(buses if choices.max_buses > 0 else []),
        *(direct if choices.direct else []),
    ]
    if choices.max_buses == 0 and not choices.direct:
        return  # told with the choices
    span = f"{supply.low_v:g} to {supply.high_v:g} V"
    standing = [part for part in first if part.input_min_v <= supply.low_v and part.input_max_v >= supply.high_v]
    if not first:
        notebook.problem("input", f"no allowed converter is left to stand {span}")
        return
    if not standing:
        ranges = sorted({(part.input_min_v, part.input_max_v) for part in first})
        reach = ", ".join(f"{low:g} to {high:g}" for low, high in ranges[-8:])
        notebook.problem("input", f"no allowed converter stands {span}; input ranges are {reach} V")
        return
    isolating = [part for part in standing if isinstance(part, (BusConverter, SingleStage)) and part.isolated]
    if supply.isolation and not isolating:
        message = f"isolation is required and no allowed converter that stands {span} isolates"
        notebook.problem("input.isolation", message)


def _check_bulk(control: Control, derating: Derating, capacitors: Sequence[Part], notebook: Notebook) -> None:
    """Note buses that no allowed capacitor stands at their lowest voltage."""
    highest = max((part.rated_v for part in capacitors if isinstance(part, Capacitor)), default=0.0)
    if highest * derating.voltage < control.bus_min_v:
        message = (
            f"no allowed capacitor stands a bus of {control.bus_min_v:g} V: the highest is rated for "
            f"{highest:g} V, with derating {highest * derating.voltage:g} V; allow others or no bus"
        )
        notebook.problem("control.bus_min_v", message)


def _check_supervisor(control: Control, supervisors: Sequence[Part], notebook: Notebook) -> None:
    """Note a bus control that no allowed supervisor can do."""
    able = {part.control for part in supervisors if isinstance(part, Supervisor)}
    if "follow_load" in able or ("two_levels" in able and "two_levels" in control.kinds):
        return
    message = f"without fixed a supervisor is needed for {' or '.join(control.kinds)}; none is allowed that can"
    notebook.problem("control.kinds", message)
