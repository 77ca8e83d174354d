"""The rails and the load of the study file."""

from __future__ import annotations

from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, field_validator

Names = Annotated[tuple[str, ...], Field(strict=False)]
RESERVED_NAMES = ("input", "bus", "bus_a", "bus_b", "board", "none", "incumbent")


class Row(BaseModel):
    """A row of the study file: a rail or a state of the load."""

    model_config = ConfigDict(frozen=True, extra="forbid", strict=True, allow_inf_nan=False)


class RailRow(Row):
    """``[[rails]]`` or one row of the rails CSV, where lists are separated by ``;``."""

    name: str = Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_+-]*$", description="rail's name, without dots or blanks")
    voltage_v: float = Field(ge=0.3, le=60, description="voltage at the load")
    max_current_a: float = Field(gt=0, le=1500, description="most the load draws")
    typical_current_a: float | None = Field(None, ge=0, le=1500, description="default 50 % of max_current_a")
    tolerance_percent: float | None = Field(None, gt=0, le=20, description="5 means +-5 %; default 5")
    step_a: float | None = Field(None, ge=0, le=1500, description="largest load step; default 50 % of max_current_a")
    slew_a_per_us: float | None = Field(
        None, gt=0, le=10000, description="of the load step; default 100 core rails, 10 below 2 V, 1 others"
    )
    set_point_percent: float | None = Field(None, ge=0, le=10, description="set-point error; default 1")
    ripple_percent: float | None = Field(None, ge=0, le=10, description="output ripple, either side; default 0.5")
    capacitors: Names | None = Field(
        None,
        min_length=1,
        description="capacitors of its bank; default ceramic and polymer of enough voltage",
    )
    remote_sense: bool | None = Field(None, description="sensed at the load; default core rails only")
    squares: float | None = Field(None, gt=0, le=100, description="one way, stage to load; default core 1, others 3")
    copper_area_cm2: float | None = Field(None, gt=0, le=3000, description="region of its pour; default from width")
    copper_width_mm: float | None = Field(
        None, gt=0, le=600, description="narrowest width of its pour; default 1.5 mm an ampere, 5 at least"
    )
    copper_length_mm: float | None = Field(None, gt=0, le=1000, description="stage to load; default from squares")
    drop_budget_percent: float | None = Field(
        None, gt=0, le=20, description="drop from stage to load; default 2 sensed, else 0.3 of the tolerance"
    )
    step_group: str | None = Field(None, min_length=1, description="rails of one group step together; default alone")
    parents: Names | None = Field(None, description="rails it may be fed from; default none")
    tap_of: str | None = Field(None, min_length=1, description="rail of equal voltage it taps; default none")
    tap_mohm: float | None = Field(None, ge=0, le=1000, description="ferrite or load switch of the tap; default 10")
    linear_only: bool | None = Field(None, description="only linear regulators may feed it; default false")
    core: bool | None = Field(None, description="default: below 1.2 V and above 20 A")

    @field_validator("name")
    @classmethod
    def _not_reserved(cls, name: str) -> str:
        if name.lower() in RESERVED_NAMES:
            raise ValueError(f"'{name}' is a name of the board itself ({', '.join(RESERVED_NAMES)}); take another")
        return name


class StateRow(Row):
    """``[[load.states]]``: one operating state and its hours."""

    name: str = Field(min_length=1, description="state's name")
    hours: float = Field(ge=0, le=8784, description="hours in this state")
    utilisation: float | None = Field(
        None, ge=0, le=1, description="of each rail's coincident maximum, 0 to 1; default its typical current"
    )
    currents: Annotated[dict[str, float], Field()] | None = Field(
        None, description="amperes of single rails, e.g. { core = 12.0 }; the others follow utilisation"
    )
    off: Names | None = Field(None, description="rails switched off; default none")
    input_v: float | None = Field(None, ge=4, le=450, description="default the distribution of [input]")
    inlet_degc: float | None = Field(None, ge=-40, le=95, description="default that of [input]")


class LoadTable(Row):
    """``[load]``: how the board is loaded over the year."""

    profile: str | None = Field(
        None,
        description="CSV time series: hours, then <rail>_a each or utilisation; maybe input_v, inlet_degc",
    )
    states: Annotated[tuple[StateRow, ...], Field(strict=False)] | None = Field(
        None,
        description="[[load.states]]; default 20 % of hours at 0.15, 50 % at 0.40, 25 % at 0.60, 5 % at 0.90",
    )
    covers: Literal["year", "sample"] | None = Field(
        None,
        description="what the hours add up to: a year, or a sample scaled to hours_per_year; default year",
    )
    hours_per_year: float | None = Field(None, gt=0, le=8784, description="hours the board is on; default 8760")
    coincidence: float | None = Field(
        None,
        gt=0,
        le=1,
        description="share of the maxima drawn at once; default 0.85 above six rails, else 1",
    )
    growth_percent: float | None = Field(
        None, ge=0, le=200, description="growth of currents in limits and rated load; default 15"
    )
