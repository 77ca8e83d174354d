"""What a rail finds on each bus: voltage, dipped voltage and the price of a kilowatt-hour there."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.converter_loss import ConverterLoss
from archopt.model.decide import coincident_step_w
from archopt.model.evaluator import Evaluator
from archopt.model.hardware import Hardware, unpack
from archopt.model.options import band_hours, option_index
from archopt.model.parameters import FIXED_RATIO
from archopt.model.space import FIXED, TWO_LEVELS, Designs
from archopt.physics.arrays import FloatArray, IntArray
from archopt.physics.transient import bus_dip_v
from archopt.search.genome import Plan
from archopt.search.rail_tables import DROP_SHARE, DROP_V, dipped_grid_v

FIRST_DIP = 0.02  # share of the bus voltage assumed to dip before a design is known
FIRST_OVERHEAD = 1.12  # stage input over output before a design is known


@dataclass(frozen=True)
class Conditions:
    """P designs, two buses, B places: the bands and the fall-back behind them.

    volts, top_volts (P, 2, B): grid index at the lowest and at the highest input (they differ for fixed
    ratio); dipped (P, 2, B): index of the dipped grid; marginal (P, 2, B): board input energy per energy on
    the bus; parent_marginal (P,): the same behind a parent rail.
    """

    volts: IntArray
    top_volts: IntArray
    dipped: IntArray
    marginal: FloatArray
    parent_marginal: FloatArray


def straight_line(plan: Plan, bands: int) -> IntArray:
    """Return a schedule rising evenly from the lower to the upper limit, (P, 2, B)."""
    lower, upper = plan.bus["lower_v"][..., None], plan.bus["upper_v"][..., None]
    share = np.arange(bands) / max(bands - 1, 1)
    line = np.floor(lower + (upper - lower) * share + 0.5).astype(np.int64)
    control = plan.bus["control"][..., None]
    stepped = np.where(np.arange(bands) * 2 < bands, lower, upper)
    line = np.where(control == TWO_LEVELS, stepped, line)
    return np.where(control == FIXED, plan.bus["nominal_v"][..., None], line)


def first_conditions(evaluator: Evaluator, plan: Plan) -> Conditions:
    """Return the conditions assumed before a design is known: a straight line, a small dip, all rails on a bus."""
    problem, states = evaluator.problem, evaluator.states
    line = np.concatenate([straight_line(plan, states.bands), plan.bus["nominal_v"][..., None]], axis=2)
    volts = within_converter(evaluator, plan, line)
    useful = (problem.rails.voltage_v * states.mix_a).sum(axis=1) * FIRST_OVERHEAD * 0.7
    both = (plan.bus["converter"] > 0).all(axis=1)
    mean_w = useful[None, None, :] * np.where(both, 0.5, 1.0)[:, None, None]
    mean_w = np.broadcast_to(mean_w, volts.shape)
    units = np.maximum(plan.bus["count"], 1)[..., None]
    return conditions(evaluator, plan.bus["converter"] - 1, volts, mean_w, units, None)


def within_converter(evaluator: Evaluator, plan: Plan, volts: IntArray) -> IntArray:
    """Return schedules clipped to what the converters can make."""
    converters, grid = evaluator.problem.converters, evaluator.problem.grid_v
    if not len(converters.names):
        return volts
    index = np.maximum(plan.bus["converter"] - 1, 0)
    low = np.searchsorted(grid, converters.output_min_v[index] - 1e-9)
    high = np.searchsorted(grid, converters.output_max_v[index] + 1e-9) - 1
    last = len(grid) - 1
    low = np.clip(low, 0, last)[..., None]
    return np.clip(volts, low, np.maximum(np.clip(high, 0, last)[..., None], low))


def conditions_of(evaluator: Evaluator, designs: Designs, unused: Conditions) -> Conditions:
    """Return the conditions of decided designs; buses they do not use keep those of ``unused``."""
    problem, states, options = evaluator.problem, evaluator.states, evaluator.options
    hardware = unpack(problem, designs, states)
    used = hardware.converter >= 0
    decided = np.concatenate([designs.volts, designs.bus("nominal_v")[..., None]], axis=2)
    volts = np.where(used[..., None], decided, unused.volts)
    option = option_index(
        options, designs.rail("stage"), designs.rail("phases"), designs.rail("fewest"), problem.phases_high
    )
    row = options.row[option]
    band = np.arange(states.places)
    hours = np.maximum(band_hours(states), 1e-6)
    mean_w, mix_w = np.zeros(volts.shape), np.zeros(volts.shape)
    for b in range(2):
        at = volts[:, b, None, :]
        on = hardware.on_bus[:, b, :, None]
        mean_w[:, b] = (options.rows.energy_kwh[row, band, at] * on).sum(axis=1) * 1e3 / hours
        mix_w[:, b] = (options.rows.mix_w[row, band, at] * on).sum(axis=1)
    dip = dips(evaluator, coincident_step_w(problem, options, option, hardware), hardware, mix_w, volts)
    dip = np.where(used[..., None], dip, FIRST_DIP * problem.grid_v[volts])
    found = conditions(evaluator, hardware.converter, volts, mean_w, hardware.units_band, dip)
    marginal = np.where(used[..., None], found.marginal, unused.marginal)
    dipped = np.where(used[..., None], found.dipped, unused.dipped)
    return Conditions(found.volts, found.top_volts, dipped, marginal, found.parent_marginal)


def dips(
    evaluator: Evaluator, step_w: FloatArray, hardware: Hardware, mix_w: FloatArray, volts: IntArray
) -> FloatArray:
    """Return the dip of each bus in each band, V (P, 2, B)."""
    problem = evaluator.problem
    converters = problem.converters
    if not len(converters.names):
        return np.zeros(mix_w.shape)
    index = np.maximum(hardware.converter, 0)[..., None]
    set_v = problem.grid_v[volts]
    ratio = converters.ratio[index] * problem.study.supply.low_v
    set_v = np.where(hardware.fixed_ratio[..., None], ratio, set_v)
    return np.asarray(
        bus_dip_v(
            step_w,
            set_v,
            converters.bandwidth_rad_s[index],
            converters.delay_s[index],
            hardware.bulk_f,
            hardware.bulk_esr_ohm,
            mix_w,
            hardware.damped_ohm,
        )
    )


def conditions(
    evaluator: Evaluator, converter: IntArray, volts: IntArray, mean_w: FloatArray, units: IntArray,
    dip_v: FloatArray | None,
) -> Conditions:  # fmt: skip
    """Return conditions at grid indices ``volts``, mean power and running units, all (P, 2, B)."""
    problem = evaluator.problem
    converters, supply, grid = problem.converters, problem.study.supply, problem.grid_v
    top = volts
    set_v = grid[volts]
    marginal = np.ones(volts.shape)
    if len(converters.names):
        index = np.maximum(converter, 0)
        fixed_ratio = ((converter >= 0) & (converters.kind[index] == FIXED_RATIO))[..., None]
        ratio = converters.ratio[index][..., None]
        low_v, high_v = ratio * supply.low_v, ratio * supply.high_v
        last = len(grid) - 1
        low_index = np.clip(np.searchsorted(grid, low_v), 0, last)
        high_index = np.clip(np.searchsorted(grid, high_v - 1e-9), 0, last)
        volts = np.where(fixed_ratio, low_index, volts)
        top = np.where(fixed_ratio, high_index, top)
        set_v = np.where(fixed_ratio, low_v, set_v)
        marginal = marginal_energy(evaluator, index, np.where(fixed_ratio, ratio * supply.nominal_v, set_v),
                                   mean_w, units)  # fmt: skip
    dip = FIRST_DIP * set_v if dip_v is None else dip_v
    dipped_v = set_v * (1.0 - DROP_SHARE) - DROP_V - dip
    dipped_grid = dipped_grid_v(evaluator)
    dipped = np.searchsorted(dipped_grid, dipped_v + 1e-9, side="right") - 1
    behind = marginal[:, 0].mean(axis=1) * 1.1
    return Conditions(volts, top, np.clip(dipped, 0, len(dipped_grid) - 1), marginal, behind)


def marginal_energy(
    evaluator: Evaluator, index: IntArray, set_v: FloatArray, mean_w: FloatArray, units: IntArray
) -> FloatArray:
    """Return d(board input) / d(bus power) of the converters at their mean power, (P, 2, B)."""
    problem = evaluator.problem
    supply = problem.study.supply
    ambient = np.asarray(supply.inlet_degc + supply.local_rise_k)
    converter_losses = ConverterLoss.of(problem.converters, index[..., None])
    input_v = np.asarray(supply.nominal_v)
    step = 0.02 * mean_w + 0.1
    at = [
        converter_losses(input_v, set_v, power / set_v / units, ambient).total_w * units
        for power in (mean_w, mean_w + step)
    ]
    return np.asarray(1.0 + np.clip((at[1] - at[0]) / step, 0.0, 1.0))

