"""One rail stage at an operating point, whatever its kind: the physics of each kind behind one call.

Index, running count and operating point broadcast against each other; results have the broadcast shape.
"""

from __future__ import annotations

from dataclasses import dataclass
from types import EllipsisType
from typing import Any

import numpy as np
from numpy.typing import NDArray

from archopt.model.converter_loss import ConverterLoss, any_measured, is_measured, table_w
from archopt.model.parameters import BUCK, LINEAR, SINGLE, FloatArray, IntArray, StageTable
from archopt.physics import buck, bus_converter, linear
from archopt.physics.buck_light_load import crossover_share, pulses
from archopt.physics.output_ripple import summed_ripple_at
from archopt.physics.transient import buck_slew_a_per_s

#: Rows of a table of stages; all of it, as it stands, where it was gathered before.
Rows = IntArray | EllipsisType
LINEAR_SLEW_A_PER_S = 1e12  # a linear regulator has no inductor: only its loop limits it


@dataclass(frozen=True)
class StagePoint:
    """A whole stage (all running phases) at an operating point; arrays of one shape.

    loss_w : what the stage input delivers beyond the output power, W
    bias_w : power drawn from the separate gate bias, W
    temperature_degc, gain : of one phase; a gain of 1 or more is thermal runaway
    """

    loss_w: FloatArray
    bias_w: FloatArray
    temperature_degc: FloatArray
    gain: FloatArray


def operate(
    stages: StageTable,
    index: IntArray,
    running: NDArray[Any],
    input_v: FloatArray,
    output_v: FloatArray,
    current_a: FloatArray,
    ambient_degc: FloatArray,
) -> StagePoint:
    """Return losses of whole stages at their operating points.

    Parameters
    ----------
    index : rows of ``stages``
    running : phases running, at least 1
    input_v, output_v, current_a, ambient_degc : stage input, stage output, whole current, local air
    """
    shape = np.broadcast_shapes(*(np.shape(x) for x in (index, running, input_v, output_v, current_a, ambient_degc)))
    kinds = np.unique(stages.kind[index])
    if len(kinds) == 1:
        return operate_kind(stages, int(kinds[0]), index, running, input_v, output_v, current_a, ambient_degc, shape)
    flat = [np.broadcast_to(x, shape).ravel() for x in (index, running, input_v, output_v, current_a, ambient_degc)]
    out = [np.empty(flat[0].size) for _ in range(4)]
    kind_of = stages.kind[flat[0]]
    for kind in kinds:
        pick = np.flatnonzero(kind_of == kind)
        picked = [x[pick] for x in flat]
        point = operate_kind(
            stages, int(kind), picked[0], picked[1], picked[2], picked[3], picked[4], picked[5], pick.shape
        )
        for target, values in zip(out, (point.loss_w, point.bias_w, point.temperature_degc, point.gain), strict=True):
            target[pick] = values
    return StagePoint(*(x.reshape(shape) for x in out))


def operate_kind(
    stages: StageTable,
    kind: int,
    index: IntArray,
    running: NDArray[Any],
    input_v: FloatArray,
    output_v: FloatArray,
    current_a: FloatArray,
    ambient_degc: FloatArray,
    shape: tuple[int, ...],
) -> StagePoint:
    """Return losses where every stage is of one kind."""
    per_phase_a = current_a / running
    bias: FloatArray = np.zeros(())
    gain: FloatArray = np.zeros(())
    if kind == BUCK:
        result = buck.losses(stages.buck.take(index), input_v, output_v, per_phase_a, ambient_degc)
        loss, temperature, gain, bias = (
            result.total_w, result.temperature_degc, result.thermal_gain, result.bias_w,
        )  # fmt: skip
        if any_measured(stages.measured):
            tabled = measured_phase_w(stages, index, input_v, output_v, per_phase_a, ambient_degc)
            mine = is_measured(stages.measured, index)
            loss = np.where(mine, tabled, loss)
            temperature = np.where(mine, ambient_degc + stages.thermal_k_per_w[index] * (tabled + bias), temperature)
    elif kind == SINGLE:
        converter_losses = ConverterLoss(stages.single, stages.measured, index)
        unit = converter_losses(input_v, output_v, per_phase_a, ambient_degc)
        loss, temperature, gain = unit.total_w, unit.temperature_degc, unit.thermal_gain
    else:
        series = linear.losses(stages.linear.take(index), input_v, output_v, per_phase_a, ambient_degc)
        loss, temperature = series.total_w, series.temperature_degc
    return StagePoint(
        loss_w=np.broadcast_to(loss * running, shape),
        bias_w=np.broadcast_to(bias * running, shape),
        temperature_degc=np.broadcast_to(temperature, shape),
        gain=np.broadcast_to(gain, shape),
    )


def measured_phase_w(
    stages: StageTable, index: IntArray, input_v: FloatArray, output_v: FloatArray, per_phase_a: FloatArray,
    ambient_degc: FloatArray,
) -> FloatArray:  # fmt: skip
    """Return the loss of one buck phase read from its table, W; 0 where a row has none."""
    at = (input_v, output_v, per_phase_a, ambient_degc)
    shape = np.broadcast_shapes(index.shape, *(np.shape(values) for values in at))
    rows = np.broadcast_to(index, shape)

    def terms_w(
        volts: FloatArray, out: FloatArray, amps: FloatArray, degc: FloatArray, place: IntArray
    ) -> FloatArray:
        return buck.losses(stages.buck.take(rows.ravel()[place]), volts, out, amps, degc).total_w

    return table_w(stages.measured, rows, at, terms_w)


def mechanisms(
    stages: StageTable,
    kind: int,
    index: IntArray,
    running: NDArray[Any],
    input_v: FloatArray,
    output_v: FloatArray,
    current_a: FloatArray,
    ambient_degc: FloatArray,
) -> dict[str, FloatArray]:
    """Return whole stages' losses by mechanism in words, W, where every stage is of one kind (flat arrays).

    Of stages read from measured tables there is one, "measured".
    """
    per_phase_a = current_a / running
    result: Any
    names: tuple[str, ...]
    if kind == BUCK:
        result = buck.losses(stages.buck.take(index), input_v, output_v, per_phase_a, ambient_degc)
        names = buck.MECHANISMS
    elif kind == SINGLE:
        result = bus_converter.losses(stages.single.take(index), input_v, output_v, per_phase_a, ambient_degc)
        names = bus_converter.MECHANISMS
    else:
        result = linear.losses(stages.linear.take(index), input_v, output_v, per_phase_a, ambient_degc)
        names = linear.MECHANISMS
    found = {name.removesuffix("_w").replace("_", " "): getattr(result, name) * running for name in names}
    mine = is_measured(stages.measured, index)
    if kind == LINEAR or not mine.any():
        return found
    whole = operate_kind(
        stages, kind, index, running, input_v, output_v, current_a, ambient_degc, per_phase_a.shape
    ).loss_w
    by_terms = {name: np.where(mine, 0.0, values) for name, values in found.items()}
    return {**by_terms, "measured": np.where(mine, whole, 0.0)}


def conduction_ratio(
    stages: StageTable, index: Rows, input_v: FloatArray, output_v: FloatArray, per_phase_a: FloatArray
) -> FloatArray:
    """Return the duty a stage needs, with its drops; 0 for a linear regulator (its headroom is separate)."""
    kind = stages.kind[index]
    duty = np.zeros(np.broadcast_shapes(kind.shape, np.shape(input_v), np.shape(per_phase_a)))
    if np.any(kind == BUCK):
        value = buck.duty(stages.buck.take(index), input_v, output_v, per_phase_a)
        duty = np.where(kind == BUCK, value, duty)
    if np.any(kind == SINGLE):
        resistance = stages.single.resistance_ohm[index]
        value = (output_v + per_phase_a * resistance) * stages.turns[index] / np.maximum(input_v, 1e-3)
        duty = np.where(kind == SINGLE, value, duty)
    return duty


def headroom_v(
    stages: StageTable, index: Rows, input_v: FloatArray, output_v: FloatArray, current_a: FloatArray
) -> FloatArray:
    """Return the headroom of linear regulators above their dropout, V; inf for other kinds."""
    kind = stages.kind[index]
    value = linear.headroom_v(stages.linear.take(index), input_v, output_v, current_a)
    return np.where(kind == LINEAR, value, np.inf)


def slew_up_a_per_s(
    stages: StageTable, index: Rows, running: NDArray[Any], input_v: FloatArray, output_v: FloatArray
) -> FloatArray:
    """Return how fast the running phases can raise their current, A/s."""
    inductance = stages.inductance_h[index]
    free = np.isnan(inductance)
    value = buck_slew_a_per_s(
        running,
        stages.max_duty[index],
        input_v / stages.turns[index],
        output_v,
        np.where(free, 1.0, inductance),
    )
    return np.where(free, LINEAR_SLEW_A_PER_S, value)


def slew_down_a_per_s(stages: StageTable, index: Rows, running: NDArray[Any], output_v: FloatArray) -> FloatArray:
    """Return how fast the running phases can lower their current, A/s."""
    inductance = stages.inductance_h[index]
    free = np.isnan(inductance)
    return np.where(free, LINEAR_SLEW_A_PER_S, running * output_v / np.where(free, 1.0, inductance))


def ripple_square_a2(
    stages: StageTable, index: Rows, input_v: FloatArray, output_v: FloatArray, per_phase_a: FloatArray
) -> FloatArray:
    """Return the mean square of the current one phase sends into the output bank, A^2."""
    kind = stages.kind[index]
    out = np.zeros(np.broadcast_shapes(kind.shape, np.shape(input_v), np.shape(per_phase_a)))
    if np.any(kind == BUCK):
        value = buck.ripple_square_a2(stages.buck.take(index), input_v, output_v, per_phase_a)
        out = np.where(kind == BUCK, value, out)
    if np.any(kind == SINGLE):
        single = single_ripple_a(stages, index, input_v, output_v)
        out = np.where(kind == SINGLE, single * single / 12.0, out)
    return out


@dataclass(frozen=True)
class Switching:
    """What switching does at an operating point; arrays of one shape.

    square_a2 : mean square of the current one phase sends into the output bank
    gain : rise of one phase's loss per kelvin times its thermal resistance
    ripple_a, charge_c : current and charge, peak to peak, the whole stage leaves its output bank to smooth
    """

    square_a2: FloatArray
    gain: FloatArray
    ripple_a: FloatArray
    charge_c: FloatArray


def switching(
    stages: StageTable,
    index: Rows,
    running: NDArray[Any],
    input_v: FloatArray,
    output_v: FloatArray,
    current_a: FloatArray,
) -> Switching:
    """Return ripple and thermal gain of whole stages; all 0 for linear regulators.

    Buck phases interleave; single stages in parallel are not in step, and at worst add.
    """
    kind = stages.kind[index]
    per_phase_a = current_a / running
    shape = np.broadcast_shapes(kind.shape, np.shape(input_v), np.shape(per_phase_a))
    out = [np.zeros(shape) for _ in range(4)]
    if np.any(kind == BUCK):
        phase = stages.buck.take(index)
        at = buck.operating_point(phase, input_v, output_v, per_phase_a)
        found = (buck.ripple_square_at(at), buck.thermal_gain_at(phase, at), *summed_ripple_at(phase, at, running))
        out = [np.where(kind == BUCK, value, others) for value, others in zip(found, out, strict=True)]
    if np.any(kind == SINGLE):
        single_a = single_ripple_a(stages, index, input_v, output_v)
        gain = bus_converter.thermal_gain(stages.single.take(index), per_phase_a)
        summed_a = running * single_a
        found = (single_a * single_a / 12.0, gain, summed_a, summed_a / (8.0 * stages.frequency_hz[index]))
        out = [np.where(kind == SINGLE, value, others) for value, others in zip(found, out, strict=True)]
    return Switching(*out)


def single_ripple_a(stages: StageTable, index: Rows, input_v: FloatArray, output_v: FloatArray) -> FloatArray:
    """Return the ripple of the output choke of one single stage, A peak to peak."""
    duty = np.clip(output_v * stages.turns[index] / np.maximum(input_v, 1e-3), 0.0, 1.0)
    inductance_h = np.nan_to_num(stages.inductance_h[index], nan=1.0)
    return np.asarray(output_v * (1.0 - duty) / (inductance_h * stages.frequency_hz[index]))


def loop_bandwidth_rad_s(
    stages: StageTable, index: Rows, input_v: FloatArray, output_v: FloatArray, per_phase_a: FloatArray
) -> FloatArray:
    """Return the loop bandwidth at a load of each phase, rad/s: in emulation it falls with the load."""
    full = stages.bandwidth_rad_s[index]
    folded = stages.folded_share[index]
    if not np.any(folded < 1.0):
        return full
    phase = stages.buck.take(index)
    ripple = buck.ripple_a(phase, input_v, output_v, per_phase_a)
    pulse = pulses(phase.emulation, phase.fold_floor_hz, phase.frequency_hz, per_phase_a, ripple)
    return full * crossover_share(folded, pulse.load_share)
