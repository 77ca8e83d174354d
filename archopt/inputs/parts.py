"""The catalogue's column table: one frozen model a family, one field a CSV column.

The field name is the column name and ends in its unit; the field's bounds are what a cell may hold. The
loader, the documentation of the columns and the checks are all derived from these models.
"""

from __future__ import annotations

from typing import Annotated, ClassVar, Literal

from pydantic import BaseModel, ConfigDict, Field

Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
SHEDDING = (
    "phases running at light load: ideal (the number that loses least), threshold (the load over shed_share of "
    "the phase current, rounded up), none (all)"
)


MEASURED_POINTS = (
    "CSV of measured points, path from this catalogue folder; losses are then read from these points, between them and "
    "never beyond: points at 0 A carry it to light load. Empty, or no such column: losses follow from the row's numbers"
)
#: Columns a file need not have.
MAY_LACK = ("measured_points",)


class Part(BaseModel):
    """Columns every family has.

    Unit prices are steps: ``price_100`` holds below 1,000 pieces a year, ``price_1k`` from 1,000,
    ``price_10k`` from 10,000 and ``price_100k`` from 100,000 pieces.
    """

    model_config = ConfigDict(frozen=True, extra="forbid")
    family: ClassVar[str] = ""

    name: str = Field(min_length=1, description="part name, unique in the catalogue")
    price_100: NotNegative = Field(description="unit price below 1,000 pieces, in the study's currency")
    price_1k: NotNegative = Field(description="unit price from 1,000 pieces")
    price_10k: NotNegative = Field(description="unit price from 10,000 pieces")
    price_100k: NotNegative = Field(description="unit price from 100,000 pieces")
    area_mm2: NotNegative = Field(description="board area of one piece with its keep-out")
    placements: int = Field(ge=0, le=60, description="pieces placed on the board for one unit of this part")
    spread_percent: float = Field(ge=0, le=50, description="relative spread of this row's loss numbers")
    source: str = Field(min_length=1, description="key into sources.csv")


class BuckStage(Part):
    """One phase of a synchronous buck stage; numbers are per phase. The inductor is a part of its own.

    There is no column for derating over ambient: the permitted current follows from the junction limit, the local
    air and thermal_k_per_w at the study's air speed, and a second curve would count the same heat twice.
    """

    family = "buck_stages"

    part: str = Field(min_length=1, description="part number; variants of one part share it")
    inductor: str = Field(min_length=1, description="row of inductors.csv")
    input_min_v: Positive = Field(le=100, description="lowest input voltage")
    input_max_v: Positive = Field(le=100, description="highest input voltage")
    output_min_v: Positive = Field(le=100, description="lowest output voltage it can be set to")
    output_max_v: Positive = Field(le=100, description="highest output voltage it can be set to")
    phase_current_a: Positive = Field(le=200, description="rated current of one phase before derating")
    max_phases: int = Field(ge=1, le=16, description="most phases in parallel")
    frequency_khz: float = Field(ge=50, le=5000, description="switching frequency")
    high_side_mohm: Positive = Field(description="at 25 degC")
    low_side_mohm: Positive = Field(description="at 25 degC")
    resistance_per_k: NotNegative = Field(le=0.02, description="relative rise of switch resistance per kelvin")
    edge_rise_ns: NotNegative = Field(le=500, description="turn-on overlap of current and voltage")
    edge_fall_ns: NotNegative = Field(le=500, description="turn-off overlap of current and voltage")
    dead_time_ns: NotNegative = Field(le=500, description="both edges together, a cycle")
    diode_v: NotNegative = Field(le=2, description="voltage across the low side during the dead time")
    high_side_gate_nc: NotNegative = Field(description="gate charge of the high side, a cycle")
    low_side_gate_nc: NotNegative = Field(description="gate charge of the low side, a cycle")
    gate_supply: Literal["input", "bias", "output"] = Field(
        description="gate drive derived from the stage input, from a 5 V bias, or from the stage's own output "
        "(of at least 4.5 V)"
    )
    gate_v: Positive = Field(le=20, description="gate drive voltage")
    high_side_output_nc: NotNegative = Field(description="output charge at output_charge_at_v")
    low_side_output_nc: NotNegative = Field(description="output charge at output_charge_at_v")
    output_charge_at_v: Positive = Field(description="voltage the output charges are stated at")
    recovery_nc: NotNegative = Field(description="reverse recovery charge at rated phase current")
    input_capacitor_mohm: NotNegative = Field(
        description="equivalent series resistance of the stage's own input capacitor"
    )
    input_capacitance_uf: NotNegative = Field(description="the stage's own input capacitance under bias, per phase")
    quiescent_ma: NotNegative = Field(description="controller and driver current, per running phase")
    light_load: Literal["forced", "emulation"] = Field(
        description="forced conduction, or diode emulation: the low side stops at zero current"
    )
    fold_floor_khz: NotNegative = Field(
        0.0, le=5000, description="emulation: lowest frequency pulses fold to; frequency_khz where they do not fold"
    )
    folded_crossover_share: float = Field(
        1.0, gt=0, le=1, description="emulation: share of the loop bandwidth left without load"
    )
    shedding: Literal["ideal", "threshold", "none"] = Field(description=SHEDDING)
    shed_share: float = Field(
        1.0, gt=0, le=1, description="threshold: share of phase_current_a from which another phase runs"
    )
    max_duty: float = Field(gt=0, le=1, description="largest duty it can reach")
    min_on_ns: NotNegative = Field(le=1000, description="shortest on-time of the high side")
    min_off_ns: NotNegative = Field(le=1000, description="shortest off-time of the high side")
    crossover_khz: Positive = Field(description="loop bandwidth")
    delay_ns: NotNegative = Field(description="dead time of the loop before the current starts to move")
    wakeup_us: NotNegative = Field(description="delay until an added phase carries current")
    loop_min_uf: NotNegative = Field(description="least output capacitance the loop can be compensated for")
    loop_max_uf: Positive = Field(description="most output capacitance the loop can be compensated for")
    thermal_k_per_w: Positive = Field(description="local air to junction, per phase, at air_speed_m_s")
    air_speed_m_s: Positive = Field(description="air speed that thermal_k_per_w holds at")
    measured_points: str = Field("", description=MEASURED_POINTS)


class Inductor(Part):
    """An inductor that buck stages name."""

    family = "inductors"

    inductance_nh: Positive = Field(description="inductance at rated current")
    winding_mohm: Positive = Field(description="at 25 degC, copper")
    saturation_a: Positive = Field(description="peak current it may carry")
    core_loss_mw: NotNegative = Field(description="core loss at core_ripple_a peak to peak and core_frequency_khz")
    core_ripple_a: Positive = Field(description="peak-to-peak ripple core_loss_mw is stated at")
    core_frequency_khz: Positive = Field(description="frequency core_loss_mw is stated at")
    core_frequency_exponent: float = Field(ge=1, le=3, description="Steinmetz exponent of frequency")
    core_ripple_exponent: float = Field(ge=1.5, le=3.5, description="Steinmetz exponent of flux swing")


class BusConverter(Part):
    """A converter from the board input to an intermediate bus; numbers are per unit."""

    family = "bus_converters"

    kind: Literal["regulated", "fixed_ratio", "non_isolated"] = Field(
        description="regulated, of fixed ratio to the input, or regulated without isolation"
    )
    isolated: bool = Field(description="whether output and input are isolated from each other")
    input_min_v: Positive = Field(le=450, description="lowest input voltage")
    input_max_v: Positive = Field(le=450, description="highest input voltage")
    output_min_v: Positive = Field(le=100, description="lowest output voltage it can be set to")
    output_max_v: Positive = Field(le=100, description="highest output voltage it can be set to")
    input_nominal_v: Positive = Field(description="input voltage the loss numbers are stated at")
    output_nominal_v: Positive = Field(description="output voltage the loss numbers are stated at")
    ratio: NotNegative = Field(le=1, description="output over input of a fixed-ratio converter, else 0")
    max_current_a: Positive = Field(description="rated output current before derating")
    max_power_w: Positive = Field(description="rated output power before derating")
    overload_a: Positive = Field(description="guaranteed short-time current")
    overload_ms: NotNegative = Field(description="how long overload_a is guaranteed")
    fixed_w: NotNegative = Field(description="loss that depends on nothing")
    switching_w: NotNegative = Field(description="magnetics and switching loss at nominal input and output")
    input_exponent: float = Field(
        ge=-1, le=4, description="power of input over nominal input that switching_w follows"
    )
    output_exponent: float = Field(
        ge=-1, le=4, description="power of output over nominal output that switching_w follows"
    )
    linear_w_per_a: NotNegative = Field(description="loss in proportion to output current")
    resistance_mohm: NotNegative = Field(description="referred to the output, at 25 degC")
    resistance_per_k: NotNegative = Field(le=0.02, description="relative rise of resistance per kelvin")
    thermal_k_per_w: Positive = Field(description="local air to hottest part at air_speed_m_s")
    air_speed_m_s: Positive = Field(description="air speed that thermal_k_per_w holds at")
    setting_grid_v: NotNegative = Field(description="step of the output setting; 0 for fixed ratio")
    accuracy_percent: NotNegative = Field(le=10, description="accuracy of the output setting")
    slew_v_per_ms: NotNegative = Field(description="rate at which the output follows a new setting")
    crossover_khz: Positive = Field(description="loop bandwidth")
    delay_us: NotNegative = Field(description="dead time of the loop before the current starts to move")
    output_mohm: NotNegative = Field(
        description="closed-loop output impedance (regulated) or droop resistance (fixed ratio)"
    )
    startup_max_uf: Positive = Field(description="largest output capacitance it starts into, per unit")
    wakeup_ms: NotNegative = Field(description="delay until a paralleled unit that was off carries current")
    max_parallel: int = Field(ge=1, le=8, description="most units in parallel")
    measured_points: str = Field("", description=MEASURED_POINTS)


class SingleStage(Part):
    """A converter from the board input straight to a rail; numbers are per unit (phase)."""

    family = "single_stages"

    isolated: bool = Field(description="whether output and input are isolated from each other")
    input_min_v: Positive = Field(le=450, description="lowest input voltage")
    input_max_v: Positive = Field(le=450, description="highest input voltage")
    output_min_v: Positive = Field(le=100, description="lowest output voltage it can be set to")
    output_max_v: Positive = Field(le=100, description="highest output voltage it can be set to")
    input_nominal_v: Positive = Field(description="input voltage the loss numbers are stated at")
    output_nominal_v: Positive = Field(description="output voltage the loss numbers are stated at")
    phase_current_a: Positive = Field(description="rated current of one unit before derating")
    max_phases: int = Field(ge=1, le=16, description="most units in parallel")
    fixed_w: NotNegative = Field(description="loss that depends on nothing")
    switching_w: NotNegative = Field(description="magnetics and switching loss at nominal input and output")
    input_exponent: float = Field(
        ge=-1, le=4, description="power of input over nominal input that switching_w follows"
    )
    output_exponent: float = Field(
        ge=-1, le=4, description="power of output over nominal output that switching_w follows"
    )
    linear_w_per_a: NotNegative = Field(description="loss in proportion to output current")
    resistance_mohm: NotNegative = Field(description="referred to the output, at 25 degC")
    resistance_per_k: NotNegative = Field(le=0.02, description="relative rise of resistance per kelvin")
    thermal_k_per_w: Positive = Field(description="local air to hottest part at air_speed_m_s")
    air_speed_m_s: Positive = Field(description="air speed that thermal_k_per_w holds at")
    transformer_ratio: Positive = Field(description="primary over secondary turns; 1 without transformer")
    inductance_nh: Positive = Field(description="output inductance per unit")
    frequency_khz: float = Field(ge=50, le=5000, description="switching frequency")
    max_duty: float = Field(gt=0, le=1, description="largest duty it can reach")
    crossover_khz: Positive = Field(description="loop bandwidth")
    delay_ns: NotNegative = Field(description="dead time of the loop before the current starts to move")
    wakeup_us: NotNegative = Field(description="delay until an added phase carries current")
    shedding: Literal["ideal", "threshold", "none"] = Field(description=SHEDDING)
    shed_share: float = Field(
        1.0, gt=0, le=1, description="threshold: share of phase_current_a from which another phase runs"
    )
    loop_min_uf: NotNegative = Field(description="least output capacitance the loop can be compensated for")
    loop_max_uf: Positive = Field(description="most output capacitance the loop can be compensated for")
    input_capacitance_uf: NotNegative = Field(description="the stage's own input capacitance under bias, per unit")
    measured_points: str = Field("", description=MEASURED_POINTS)


class LinearRegulator(Part):
    """A linear regulator, from a bus or from another rail."""

    family = "linear_regulators"

    input_min_v: Positive = Field(le=100, description="lowest input voltage")
    input_max_v: Positive = Field(le=100, description="highest input voltage")
    output_min_v: Positive = Field(le=100, description="lowest output voltage it can be set to")
    output_max_v: Positive = Field(le=100, description="highest output voltage it can be set to")
    dropout_mv: NotNegative = Field(description="at rated current")
    phase_current_a: Positive = Field(description="rated current")
    quiescent_ma: NotNegative = Field(description="ground current")
    crossover_khz: Positive = Field(description="loop bandwidth")
    delay_ns: NotNegative = Field(description="dead time of the loop before the current starts to move")
    loop_min_uf: NotNegative = Field(description="least output capacitance the loop can be compensated for")
    loop_max_uf: Positive = Field(description="most output capacitance the loop can be compensated for")
    thermal_k_per_w: Positive = Field(description="local air to junction at air_speed_m_s")
    air_speed_m_s: Positive = Field(description="air speed that thermal_k_per_w holds at")


class Capacitor(Part):
    """A capacitor of output and bulk banks; numbers are per piece."""

    family = "capacitors"

    kind: Literal["ceramic", "polymer", "electrolytic"] = Field(description="ceramic, polymer or electrolytic")
    capacitance_uf: Positive = Field(description="nominal capacitance without bias")
    rated_v: Positive = Field(description="rated voltage before derating")
    esr_mohm: Positive = Field(description="equivalent series resistance")
    half_capacitance_v: Positive = Field(
        description="bias at which half the capacitance is left; very large where bias does nothing"
    )
    tolerance_percent: NotNegative = Field(le=50, description="tolerance of the capacitance, either way")
    ripple_a: Positive = Field(description="permitted ripple current, rms")


class Supervisor(Part):
    """What sets the bus voltage from measured input power."""

    family = "supervisors"

    control: Literal["two_levels", "follow_load"] = Field(
        description="the most it can do; follow_load includes two_levels"
    )
    power_mw: NotNegative = Field(description="its own supply power, constant")
    buses: int = Field(ge=1, le=4, description="how many buses it can set")


class BiasSupply(Part):
    """The separate 5 V supply of gate drivers."""

    family = "bias_supplies"

    input_min_v: Positive = Field(le=450, description="lowest input voltage")
    input_max_v: Positive = Field(le=450, description="highest input voltage")
    isolated: bool = Field(description="whether output and input are isolated from each other")
    output_v: Positive = Field(description="output voltage")
    max_power_w: Positive = Field(description="rated output power")
    no_load_mw: NotNegative = Field(description="input power without load")
    efficiency: float = Field(gt=0, le=1, description="of the power above no-load")


class Stack(Part):
    """A board stack: the signal stack and its power layer pairs, priced whole from a table."""

    family = "stacks"

    layers: int = Field(ge=2, le=40, description="copper layers of the board")
    pairs: int = Field(ge=1, le=10, description="power and ground layer pairs of equal weight")
    copper_oz: Positive = Field(description="weight of the power layers; a row of copper_foils.csv")
    price_per_cm2: Positive = Field(description="the whole board, per area, at production volume")


class CopperFoil(Part):
    """Finished thickness of a copper weight on an inner layer."""

    family = "copper_foils"

    copper_oz: Positive = Field(description="copper weight, ounces a square foot")
    nominal_um: Positive = Field(description="thickness of the foil before processing")
    finished_um: Positive = Field(description="least thickness left on an inner layer")


class InputPath(Part):
    """Connector, fuse, hot-swap and filter between the supply and the board's converters."""

    family = "input_paths"

    input_max_v: Positive = Field(le=450, description="highest input voltage")
    resistance_mohm: NotNegative = Field(description="series resistance")
    inductance_uh: NotNegative = Field(description="series inductance")
    max_current_a: Positive = Field(description="rated current before derating")
    power_mw: NotNegative = Field(description="its own supply current times input, constant")


class Source(BaseModel):
    """One row of sources.csv: where a number comes from."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    key: str = Field(min_length=1)
    kind: Literal["published", "common practice", "memory", "measured", "invented"]
    dated: str = Field(pattern=r"^\d{4}-\d{2}-\d{2}$")
    title: str = Field(min_length=1)


FAMILIES: dict[str, type[Part]] = {
    model.family: model
    for model in (
        BuckStage, Inductor, BusConverter, SingleStage, LinearRegulator, Capacitor, Supervisor, BiasSupply,
        Stack, CopperFoil, InputPath,
    )
}  # fmt: skip
