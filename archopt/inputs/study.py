"""The study file as a person writes it: one frozen model a table of the TOML file, unknown keys refused.

Every dimensional key ends in its unit; bounds catch a wrong magnitude. What may be left out has a default
that ``archopt.inputs.resolve`` fills in and records as assumed. The rails and the load are in ``study_load``.
"""

from __future__ import annotations

from typing import Annotated, Any, Literal

from pydantic import BaseModel, ConfigDict, Field

from archopt.inputs.study_load import LoadTable, RailRow

Names = Annotated[tuple[str, ...], Field(strict=False)]
Control = Literal["fixed", "two_levels", "follow_load"]


class Table(BaseModel):
    """A table of the study file."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


class LevelRow(Table):
    """One level of ``input.levels``; the shares of all levels sum to 1."""

    voltage_v: float = Field(ge=4, le=450, description="input voltage of this level")
    share: float = Field(ge=0, le=1, description="share of the hours at this level, 0 to 1")


class InputTable(Table):
    """``[input]``: the board's one supply and its surroundings."""

    low_v: float = Field(ge=4, le=450, description="lowest input voltage the board must work at")
    high_v: float = Field(ge=4, le=450, description="highest input voltage the board must work at")
    nominal_v: float | None = Field(
        None,
        ge=4,
        le=450,
        description="usual voltage; default 53.5 (range above 60 V), 54, 24, 12 or the middle",
    )
    levels: Annotated[tuple[LevelRow, ...], Field(strict=False)] | None = Field(
        None,
        description="voltage_v and share of the hours; default nominal 0.95, lowest and highest 0.025 each",
    )
    inlet_degc: float | None = Field(None, ge=-40, le=85, description="air at the board's inlet; default 40")
    hottest_inlet_degc: float | None = Field(
        None, ge=-40, le=95, description="hottest inlet air; default the hottest the study states"
    )
    local_rise_k: float | None = Field(None, ge=0, le=60, description="local air above inlet; default 15")
    air_speed_m_s: float | None = Field(None, gt=0, le=10, description="air over the parts; default 1.5")
    isolation: bool | None = Field(None, description="default: required where high_v is above 60 V")
    path: str | None = Field(None, description="part of input_paths; default the cheapest that is rated for it")
    filter_capacitance_uf: float | None = Field(
        None, gt=0, le=1e6, description="capacitance behind the input path, under bias; default not stated"
    )
    filter_esr_mohm: float | None = Field(None, ge=0, le=1e5, description="its series resistance; 0 when not stated")
    filter_damper_uf: float | None = Field(None, gt=0, le=1e6, description="damping bank beside it; default none")
    filter_damper_mohm: float | None = Field(None, gt=0, le=1e6, description="series resistance of the damping bank")


class BoardTable(Table):
    """``[board]``: area, stacks to choose from, and the copper of the buses."""

    area_cm2: float = Field(gt=1, le=6000, description="board area")
    stacks: Names | None = Field(None, min_length=1, description="stacks to choose from; default all of the catalogue")
    usable_copper_share: float | None = Field(
        None, gt=0, le=1, description="share of a layer pair left for power copper; default 0.7"
    )
    bus_shared_squares: float | None = Field(None, ge=0, le=100, description="one way, shared by the stages; default 3")
    bus_own_squares: float | None = Field(None, ge=0, le=100, description="one way, to each stage; default 3")
    bus_area_cm2: float | None = Field(None, gt=0, le=6000, description="plane of one bus; default 0.25 of area_cm2")
    max_pairs_per_net: int | None = Field(None, ge=1, le=10, description="layer pairs one net may take; default 4")


class JumpRow(Table):
    """One of ``[[control.jumps]]``: the load may go from one listed state to another at once."""

    before: str = Field(min_length=1, description="state of [[load.states]] the load comes from")
    after: str = Field(min_length=1, description="state it goes to")
    announced: bool = Field(False, description="the bus is told and raised before; default false")


class ControlTable(Table):
    """``[control]``: how the bus voltage may follow the load, and what must be survived."""

    kinds: Annotated[tuple[Control, ...], Field(strict=False)] | None = Field(
        None, min_length=1, description="fixed, two_levels, follow_load; default all three"
    )
    largest_unannounced_jump_percent: float | None = Field(
        None, ge=0, le=100, description="largest sudden rise of the load, of rated load; default 100"
    )
    jumps_from_series: bool | None = Field(
        None,
        description="take the largest unannounced jump from the load profile: its largest rise from one row to the"
        " next; default false",
    )
    jumps: Annotated[tuple[JumpRow, ...], Field(strict=False)] | None = Field(
        None,
        description="[[control.jumps]]: the only jumps between listed states, instead of one largest; default none",
    )
    grid_v: float | None = Field(None, ge=0.05, le=2, description="bus voltage grid; default 0.25")
    bus_min_v: float | None = Field(None, ge=3, le=100, description="default the lowest a converter can make")
    bus_max_v: float | None = Field(None, ge=3, le=100, description="default the highest a converter can make")
    habitual_v: float | None = Field(None, ge=3, le=100, description="bus voltage taken out of habit; default 12")
    hysteresis_percent: float | None = Field(None, ge=0, le=50, description="of a power threshold; default 5")
    response_ms: float | None = Field(
        None, ge=0, le=10000, description="from a jump until the bus starts to rise; default 20"
    )
    transitions_per_day: float | None = Field(
        None, ge=0, le=1e6, description="changes of bus voltage; default from the load series, else 24"
    )
    dwell_s: float | None = Field(
        None, ge=0, le=86400, description="how long the load stays in a lower band before the bus steps down; default 0"
    )
    deadband_v: float | None = Field(
        None, ge=0, le=50, description="least change of bus voltage from one band to the next, if any; default 0"
    )


class LimitsTable(Table):
    """``[limits]``: what a design must keep to."""

    bus_dip_percent: float | None = Field(None, gt=0, le=50, description="permitted dip of a bus; default 10")
    bus_drop_budget_percent: float | None = Field(None, gt=0, le=20, description="drop along a bus plane; default 3")
    copper_rise_k: float | None = Field(None, gt=0, le=60, description="copper above local air; default 20")
    stability_margin: float | None = Field(
        None, ge=1, le=20, description="factor on the least bus capacitance; default 1.5"
    )
    area_cap_cm2: float | None = Field(None, gt=0, le=6000, description="most area of the power parts; default none")
    cost_cap: float | None = Field(None, gt=0, description="most cost a board, in the currency; default none")


class DeratingTable(Table):
    """``[derating]``: engineering margins."""

    current: float | None = Field(None, gt=0, le=1, description="share of rated current used; default 0.8")
    voltage: float | None = Field(None, gt=0, le=1, description="share of rated capacitor voltage used; default 0.8")
    junction_degc: float | None = Field(None, ge=60, le=175, description="hottest part temperature; default 110")
    capacitance_end_of_life: float | None = Field(None, gt=0, le=1, description="share left; default 0.8")
    esr_end_of_life: float | None = Field(None, ge=1, le=10, description="factor; default 1.5")
    min_on_ns: float | None = Field(None, ge=0, le=1000, description="least on-time designed for; default 50")
    spare_converters: int | None = Field(None, ge=0, le=4, description="bus converters beyond need; default 0")


class ChoicesTable(Table):
    """``[choices]``: what is allowed, forbidden, preferred and pinned."""

    families: Names | None = Field(None, description="converter families allowed; default all")
    forbidden_families: Names | None = Field(None, description="converter families not used; default none")
    parts: Names | None = Field(None, description="where a family has a part here, only those; default all")
    forbidden_parts: Names | None = Field(None, description="parts not used; default none")
    preferred_parts: Names | None = Field(None, description="parts that cost no new part number; default none")
    pin: dict[str, Any] | None = Field(
        None, description='choice name to value or list of values, e.g. "core.stage" = "..."; default none'
    )
    max_buses: int | None = Field(None, ge=0, le=2, description="intermediate buses at most; default 2")
    direct: bool | None = Field(None, description="rails straight from the input permitted; default true")


class EconomicsTable(Table):
    """``[economics]``: money, energy and carbon."""

    boards_per_year: float | None = Field(None, ge=1, le=1e8, description="production volume; default 1000")
    new_part_cost: float | None = Field(
        None, ge=0, le=1e7, description="once for every new part number, in the currency; default 5000"
    )
    placement_cost: float | None = Field(None, ge=0, le=100, description="a placed piece; default 0.02")
    energy_price_per_kwh: float | None = Field(None, ge=0, le=10, description="default 0.15")
    carbon_kg_per_kwh: float | None = Field(None, ge=0, le=3, description="default 0.4")
    cooling_overhead: float | None = Field(None, ge=1, le=4, description="factor on electricity; default 1.4")
    upstream_efficiency: float | None = Field(None, gt=0, le=1, description="of the supply before; default 0.95")
    life_years: float | None = Field(None, gt=0, le=50, description="default 7")
    currency: str | None = Field(None, min_length=1, max_length=12, description="default EUR")


class SearchTable(Table):
    """``[search]``: how long to search."""

    evaluations: int | None = Field(None, ge=10, le=100_000_000, description="designs evaluated; default 20000")
    population: int | None = Field(None, ge=4, le=2000, description="bus genomes kept; default 80")
    seed: int | None = Field(None, ge=0, le=2**32 - 1, description="of the random numbers; default 1")
    stagnation_generations: int | None = Field(
        None, ge=1, le=100_000, description="generations without gain before it stops; default 40"
    )


class Study(Table):
    """The whole study file."""

    name: str | None = Field(None, min_length=1, description="short name; default the name of the file")
    title: str | None = Field(None, min_length=1, description="one line for the report; default the name")
    catalogue: str | None = Field(None, description="folder of your own parts, which override or add; default none")
    floorplan: str | None = Field(
        None, description="TOML file of regions and places, which then give squares and areas; default none"
    )
    input: InputTable
    board: BoardTable
    rails: str | Annotated[tuple[RailRow, ...], Field(strict=False)] = Field(
        description="[[rails]] tables, or the path of a CSV with the same keys as columns"
    )
    load: LoadTable = LoadTable()
    control: ControlTable = ControlTable()
    limits: LimitsTable = LimitsTable()
    derating: DeratingTable = DeratingTable()
    choices: ChoicesTable = ChoicesTable()
    incumbent: dict[str, Any] | None = Field(None, description="today's design: choice names and values")
    economics: EconomicsTable = EconomicsTable()
    search: SearchTable = SearchTable()


TABLES: dict[str, type[BaseModel]] = {
    "input": InputTable, "board": BoardTable, "load": LoadTable, "control": ControlTable,
    "limits": LimitsTable, "derating": DeratingTable, "choices": ChoicesTable,
    "economics": EconomicsTable, "search": SearchTable,
}  # fmt: skip
