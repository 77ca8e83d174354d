"""A study with every value filled in: what the model reads. Units are in the names; plain frozen data.

``assumed`` lists the values nobody stated, by their path in the study file.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Literal

import numpy as np
from numpy.typing import NDArray

from archopt.inputs.floorplan_shape import Floorplan
from archopt.inputs.parts import Part, Source
from archopt.physics.measured import LossTable

FloatArray = NDArray[np.float64]

ControlKind = Literal["fixed", "two_levels", "follow_load"]


@dataclass(frozen=True)
class Assumption:
    """A value the study did not state: its place, the value taken and why."""

    place: str
    value: str
    reason: str


@dataclass(frozen=True)
class InputLevel:
    """One level of the input voltage distribution; shares sum to 1."""

    voltage_v: float
    share: float


@dataclass(frozen=True)
class InputSupply:
    """The board's one supply and its surroundings."""

    low_v: float
    high_v: float
    nominal_v: float
    levels: tuple[InputLevel, ...]
    inlet_degc: float
    hottest_inlet_degc: float
    local_rise_k: float
    air_speed_m_s: float
    isolation: bool
    path: str  # name in input_paths
    filter_capacitance_uf: float = 0.0  # behind the path; 0 where the study does not say
    filter_esr_mohm: float = 0.0
    filter_damper_uf: float = 0.0  # beside it, with a resistance that damps; 0 where there is none
    filter_damper_mohm: float = 0.0


@dataclass(frozen=True)
class Board:
    """Board area, stacks to choose from, and the copper of the buses."""

    area_cm2: float
    usable_copper_share: float  # of one pair's area
    stacks: tuple[str, ...]  # names in stacks
    bus_shared_squares: float  # one way, power layer
    bus_own_squares: float  # one way, from the shared plane to each stage
    bus_area_cm2: float  # region of one bus plane
    bus_drop_budget_percent: float
    copper_rise_k: float  # permitted rise of copper over local air
    max_pairs_per_net: int
    area_cap_cm2: float  # inf when none
    cost_cap: float  # inf when none


@dataclass(frozen=True)
class Rail:
    """One rail as the study asks for it. Currents are the rail's own, before growth."""

    name: str
    voltage_v: float
    max_current_a: float
    typical_current_a: float
    tolerance_percent: float  # 5 means +-5 %
    step_a: float
    slew_a_per_us: float
    droop_budget_v: float  # what is left for droop or release
    set_point_percent: float
    ripple_percent: float
    capacitors: tuple[str, ...]  # names in capacitors this rail's bank may use
    remote_sense: bool
    squares: float  # one way, power layer, stage to load
    copper_area_cm2: float
    copper_width_mm: float  # narrowest width, for ampacity
    drop_budget_percent: float
    step_group: str  # rails of one group step together
    parents: tuple[str, ...]  # rails it may be fed from
    tap_of: str  # "" or the rail it taps
    tap_mohm: float
    linear_only: bool
    core: bool


@dataclass(frozen=True)
class LoadTable:
    """Moments of the load: M rows, R rails in the order of the study's rails.

    hours (M,), current_a (M, R), off (M, R) bool, input_v (M,) with nan where the distribution applies,
    inlet_degc (M,), label (M,), covers_year: hours are those of a year.
    ``series`` tells a time series (consecutive rows, used for transitions) from listed states.
    """

    hours: FloatArray
    current_a: FloatArray
    off: NDArray[np.bool_]
    input_v: FloatArray
    inlet_degc: FloatArray
    label: tuple[str, ...]
    series: bool
    repeats: float = 1.0  # how often a sampled series comes round in the year


@dataclass(frozen=True)
class Jump:
    """A jump from one listed state of the load to another; an announced one finds the bus raised."""

    before: str
    after: str
    announced: bool


@dataclass(frozen=True)
class Control:
    """How the bus voltage may follow the load, and what must be survived."""

    kinds: tuple[ControlKind, ...]
    grid_v: float  # bus voltage grid
    bus_min_v: float
    bus_max_v: float
    habitual_v: float  # the nominal used out of habit
    jump_percent: float  # largest unannounced jump, percent of rated load
    hysteresis_percent: float
    response_ms: float  # detection and command, until the bus starts to rise
    bus_dip_percent: float  # permitted dip of the bus
    stability_margin: float  # factor on the least capacitance
    transitions_per_day: float  # nan: take from the series
    dwell_s: float = 0.0  # how long the load stays in a lower band before the bus steps down
    deadband_v: float = 0.0  # least change of the bus voltage from one band to the next, unless it stays
    jumps: tuple[Jump, ...] = ()  # where there are any, they stand instead of jump_percent


@dataclass(frozen=True)
class Derating:
    """Engineering margins."""

    current: float
    voltage: float
    junction_degc: float
    capacitance_end_of_life: float  # factor left
    esr_end_of_life: float  # factor
    min_on_ns: float  # least on-time for design, whatever the part claims
    spare_converters: int  # N + this many


@dataclass(frozen=True)
class Economics:
    """Money, energy and carbon."""

    boards_per_year: float
    new_part_cost: float
    placement_cost: float
    energy_price_per_kwh: float
    carbon_kg_per_kwh: float
    cooling_overhead: float
    upstream_efficiency: float
    life_years: float
    currency: str


@dataclass(frozen=True)
class Choices:
    """What the person allows, forbids, prefers and pins.

    ``families`` are the families allowed; ``forbidden_parts`` are all parts that may not be used, for
    whatever reason (by name, by family, or because only others of their family are listed); ``pins`` maps a
    choice name (e.g. ``core.stage``, ``bus_a.converter``) to the tuple of values it may take.
    """

    families: tuple[str, ...]
    forbidden_parts: tuple[str, ...]
    preferred_parts: tuple[str, ...]
    pins: dict[str, tuple[str, ...]]
    max_buses: int
    direct: bool  # rails straight from the input permitted


@dataclass(frozen=True)
class SearchBudget:
    """How long to search."""

    evaluations: int
    population: int
    seed: int
    stagnation_generations: int


@dataclass(frozen=True)
class ResolvedStudy:
    """A whole study, every value stated or assumed, in study-file order of rails."""

    name: str
    title: str
    file: str
    supply: InputSupply
    board: Board
    rails: tuple[Rail, ...]
    load: LoadTable
    coincidence: float
    growth: float  # factor, 1.15
    control: Control
    derating: Derating
    economics: Economics
    choices: Choices
    search: SearchBudget
    incumbent: dict[str, str] | None  # choice name -> value name, the same names as pins
    floorplan: Floorplan | None = None
    assumed: tuple[Assumption, ...] = ()
    stated: dict[str, object] = field(default_factory=dict)  # the file's own content, as read
    study_hash: str = ""


@dataclass(frozen=True)
class Catalogue:
    """Every part offered, by family and name; sources by key; ``file_of`` says where a part came from.

    ``measured`` holds the loss tables of the parts, by name, that name measured points.
    """

    families: dict[str, dict[str, Part]]
    sources: dict[str, Source]
    file_of: dict[str, str]
    content_hash: str
    measured: dict[str, LossTable] = field(default_factory=dict)
