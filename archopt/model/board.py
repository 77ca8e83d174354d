"""The whole board in every state: constant-power rails, planes, bus converters and the shared input path.

One fixed point for a batch of designs; the loss of a stage comes from a provider, either the physics itself
or the tables made from it, so that both paths share every other line.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Protocol

import numpy as np

from archopt.model.converter_loss import ConverterLoss
from archopt.model.copper_heat import CopperHeat
from archopt.model.feeds import LEAST_STAGE_SHARE, Feeds
from archopt.model.hardware import Hardware
from archopt.model.parameters import FloatArray
from archopt.model.problem import Problem
from archopt.model.stages import operate, ripple_square_a2
from archopt.model.states import JUMP, StateTable
from archopt.physics.transient import bus_dip_v

FAST_PASSES = 3
EXACT_PASSES = 60
EXACT_TOLERANCE = 1e-13
LARGEST_STEP_RATIO = 3.0  # at most this is believed of a stage that hardly carries anything
STEP_POWER_RATIO = 1.2  # stage input over output power where the worst mix has the rail off


class StageLoss(Protocol):
    """Gives the loss of every stage of one batch in every state, (P, S, R) W."""

    def __call__(self, stage_v: FloatArray, current_a: FloatArray) -> FloatArray:
        """Return losses at the given stage inputs (V) and stage output currents (A)."""
        ...


class StageLosses(Protocol):
    """Gives the stage losses of any batch of designs."""

    def of(self, hardware: Hardware) -> StageLoss:
        """Return those of one batch."""
        ...


@dataclass
class Solution:
    """The solved board: P designs, S states, R rails, two buses.

    stage_v, stage_in_w, stage_loss_w, current_a, pour_w, pour_ohm (loop, as warm as it runs), pour_rise_k (P, S, R);
    bus_v, bus_a, bus_w, converter_loss_w, plane_w, plane_rise_k (P, S, 2); node_v (after the input path), input_a,
    input_w, loss_w, bias_in_w, bias_out_w, supervisor_w, path_w, missing_w (power beyond what the path can deliver),
    deliverable_w (P, S);
    dip_v, step_w (P, 2, B + 1); step_ratio (P, B + 1, R): stage input over output power at the worst mix, for steps.
    """

    stage_v: FloatArray
    stage_in_w: FloatArray
    stage_loss_w: FloatArray
    current_a: FloatArray
    pour_w: FloatArray
    pour_ohm: FloatArray
    pour_rise_k: FloatArray
    bus_v: FloatArray
    bus_a: FloatArray
    bus_w: FloatArray
    converter_loss_w: FloatArray
    converter_degc: FloatArray
    plane_w: FloatArray
    plane_rise_k: FloatArray
    node_v: FloatArray
    input_a: FloatArray
    input_w: FloatArray
    loss_w: FloatArray
    bias_in_w: FloatArray
    bias_out_w: FloatArray
    supervisor_w: FloatArray
    path_w: FloatArray
    missing_w: FloatArray
    dip_v: FloatArray
    step_w: FloatArray
    step_ratio: FloatArray


class DirectStages:
    """Stage losses by the physics itself."""

    def __init__(self, problem: Problem, states: StateTable) -> None:
        self.problem = problem
        self.states = states

    def of(self, hardware: Hardware) -> StageLoss:
        """Return what evaluates every stage of a batch."""
        return lambda stage_v, current_a: self.loss_w(hardware, stage_v, current_a)

    def loss_w(self, hardware: Hardware, stage_v: FloatArray, current_a: FloatArray) -> FloatArray:
        """Return losses by evaluating every stage, (P, S, R) W."""
        problem = self.problem
        point = operate(
            problem.stages,
            hardware.stage[:, None, :],
            hardware.running,
            stage_v,
            problem.rails.voltage_v,
            current_a,
            self.states.ambient_degc[:, None],
        )
        return np.where(self.states.off, 0.0, point.loss_w + bank_loss_w(problem, hardware, stage_v, current_a))


def bank_loss_w(problem: Problem, hardware: Hardware, stage_v: FloatArray, current_a: FloatArray) -> FloatArray:
    """Return the loss of the output banks in their series resistance, (P, S, R) W; phases add no cancelling."""
    square = ripple_square_a2(
        problem.stages,
        hardware.stage[:, None, :],
        stage_v,
        problem.rails.voltage_v,
        current_a / hardware.running,
    )
    return hardware.bank_esr_ohm[:, None, :] * hardware.running * square


def children_current_a(problem: Problem, hardware: Hardware, stage_in_w: FloatArray) -> FloatArray:
    """Return the current children draw from each parent rail, (P, S, R) A."""
    p, child = np.nonzero(hardware.parent >= 0)
    parent = hardware.parent[p, child]
    extra = np.zeros((*hardware.stage.shape, stage_in_w.shape[1]))
    np.add.at(extra, (p, parent), stage_in_w[p, :, child] / problem.rails.voltage_v[parent][:, None])
    return extra.transpose(0, 2, 1)


def bias_power_w(problem: Problem, states: StateTable, hardware: Hardware) -> tuple[FloatArray, FloatArray]:
    """Return what the bias supply delivers to gates and what it draws, (P, S) W."""
    delivered = np.einsum("psr,sr,pr->ps", hardware.running.astype(np.float64), ~states.off * 1.0, hardware.bias_w)
    if not len(problem.biases.names):
        return delivered, delivered
    index = np.maximum(hardware.bias, 0)
    drawn = problem.biases.no_load_w[index][:, None] + delivered / problem.biases.efficiency[index][:, None]
    return delivered, np.where(hardware.bias[:, None] >= 0, drawn, 0.0)


def worst_step_w(problem: Problem, hardware: Hardware, ratio: FloatArray) -> FloatArray:
    """Return the largest coincident step of bus power in each band, (P, 2, B) W; ratio (P, B, R) in over out.

    A child's step reaches the bus through its parent, whose own ratio it takes on.
    """
    rails = problem.rails
    parent = np.maximum(hardware.parent, 0)[:, None, :]
    onward = np.where(hardware.parent[:, None, :] >= 0, np.take_along_axis(ratio, parent, axis=2), 1.0)
    step_w = rails.step_a * rails.voltage_v * ratio * onward
    reached = hardware.steps_on_bus
    order = np.argsort(rails.step_group, kind="stable")  # rails of a group side by side
    _, first = np.unique(rails.step_group[order], return_index=True)
    here = step_w[:, None, :, order] * reached[:, :, None, order]
    return np.asarray(np.add.reduceat(here, first, axis=3).max(axis=3))


def standing_w(hardware: Hardware, mix_in_w: FloatArray, jump_in_w: FloatArray, step_w: FloatArray) -> FloatArray:
    """Return the power on each bus before the step that dips it most, (P, 2, B) W.

    A jump is made of steps; the last one finds all but itself on the bus. Stage inputs are (P, B, R).
    """
    on_bus = hardware.on_bus.astype(np.float64)
    mix = np.einsum("pbr,pkr->pkb", mix_in_w, on_bus)
    jump = np.einsum("pbr,pkr->pkb", jump_in_w, on_bus)
    return np.asarray(np.maximum(mix, jump - step_w))


class BusUnits:
    """The converters of a batch: their losses, asked only where there is one."""

    def __init__(self, problem: Problem, states: StateTable, hardware: Hardware) -> None:
        self.states, self.hardware = states, hardware
        self.here = np.nonzero(hardware.converter >= 0)
        self.losses = ConverterLoss.of(problem.converters, hardware.converter[self.here][:, None])

    def __call__(self, node_v: FloatArray, bus_v: FloatArray, bus_a: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return loss of all running units, W, and temperature of one, degC, (P, 2, S); local air without one.

        node_v (P, S), bus_v and bus_a (P, 2, S)
        """
        p, bus = self.here
        running = self.hardware.units_running[p, :, bus]
        found = self.losses(
            node_v[p], np.maximum(bus_v[p, bus], 1e-3), bus_a[p, bus] / running, self.states.ambient_degc
        )
        shape = (len(node_v), 2, node_v.shape[1])
        loss_w, degc = np.zeros(shape), np.broadcast_to(self.states.ambient_degc, shape).copy()
        loss_w[p, bus] = found.total_w * running
        degc[p, bus] = found.temperature_degc
        return loss_w, degc


def unregulated(problem: Problem, states: StateTable, hardware: Hardware) -> tuple[FloatArray, FloatArray]:
    """Return output over input of the converters without load and their droop resistance, (P, 2, S) and ohm.

    Where limits are checked the ratio is off by its accuracy, to the side that is checked, and the lowest bus is that
    of the units left when the spare ones have failed: those sag more.
    """
    converters, index = problem.converters, np.maximum(hardware.converter, 0)
    off = 1.0 + converters.accuracy[index][..., None] * states.setting_side
    units = hardware.units_running.transpose(0, 2, 1)
    left = np.maximum(units - problem.study.derating.spare_converters, 0.5)
    sharing = np.where(states.setting_side < 0, left, units)
    return converters.ratio[index][..., None] * off, converters.output_ohm[index][..., None] / sharing


def solve(problem: Problem, states: StateTable, hardware: Hardware, stages: StageLosses, *, exact: bool) -> Solution:
    """Solve the board for a batch of designs.

    With ``exact`` the fixed point is iterated until nothing moves by more than 1e-13 relative, else a fixed
    number of passes is made. Never raises on a collapsing design: ``missing_w`` and low voltages say so.
    Arrays over states and rails are (P, S, R) with states last in memory, those over buses (P, 2, S) in here.
    """
    rails, converters, path = problem.rails, problem.converters, problem.path
    count = len(hardware.stage)
    base_a = np.broadcast_to(np.ascontiguousarray(states.current_a.T), (*hardware.stage.shape, len(states.hours)))
    base_a = base_a.transpose(0, 2, 1)
    with_children = bool((hardware.parent >= 0).any())
    feeds, units = Feeds(problem, hardware), BusUnits(problem, states, hardware)
    node_v = np.broadcast_to(states.input_v, (count, len(states.hours))).copy()
    index = np.maximum(hardware.converter, 0)
    has_converter = hardware.converter >= 0
    alive = (np.einsum("pkr,sr->pks", feeds.on_bus, ~states.off * 1.0) > 0) & has_converter[..., None]
    ratio = converters.ratio[index][..., None]
    made, droop_ohm = unregulated(problem, states, hardware)
    set_v = hardware.set_v.transpose(0, 2, 1)
    fixed_ratio = hardware.fixed_ratio[..., None]
    bus_v = np.where(fixed_ratio, node_v[:, None] * made, set_v)
    least_bus_v = LEAST_STAGE_SHARE * np.where(np.isfinite(set_v), set_v, 1.0)
    supervisor_w = np.where(
        hardware.supervisor >= 0, problem.supervisors.power_w[np.maximum(hardware.supervisor, 0)], 0.0
    ) if len(problem.supervisors.names) else np.zeros(count)  # fmt: skip
    bias_out, bias_in = bias_power_w(problem, states, hardware)
    bias_bus = np.where(hardware.bias_on_bus[:, None], bias_in, 0.0)
    bias_node = bias_in - bias_bus
    bias_bus = np.where(alive[:, 0], bias_bus, 0.0)
    dip_v = np.zeros(hardware.band_v.shape)
    step_w = np.zeros(hardware.band_v.shape)
    step_ratio = np.ones((count, states.places, len(rails.names)))
    jump_index, jump_band = states.of_kind(JUMP), states.band[states.of_kind(JUMP)]
    mix = states.mix_low
    current = base_a
    stage_loss = stages.of(hardware)
    sensed = rails.remote_sense.astype(np.float64)
    heat = CopperHeat(problem, states, hardware)
    pour_rise = heat.pour_rise_k()
    pour_ohm = heat.pour_ohm(pour_rise)
    pour_w = current * current * pour_ohm
    delivered = current * rails.voltage_v + pour_w * sensed
    plane_rise, plane_factor = np.zeros((*node_v.shape, 2)), np.ones((*node_v.shape, 2))
    drop = np.zeros_like(pour_w)
    previous = np.full_like(node_v, np.inf)
    passes = EXACT_PASSES if exact else FAST_PASSES
    for turn in range(passes):
        stage_v = feeds.stage_v(bus_v, node_v, drop)
        stage_loss_w = stage_loss(stage_v, current)
        stage_in = delivered + stage_loss_w
        if with_children and (turn == 0 or exact):
            current = base_a + children_current_a(problem, hardware, stage_in)
            stage_loss_w = stage_loss(stage_v, current)
            heat.with_children(pour_rise, current)
            pour_ohm = heat.pour_ohm(pour_rise)
            pour_w = current * current * pour_ohm
            delivered = current * rails.voltage_v + pour_w * sensed
            stage_in = delivered + stage_loss_w
        if turn == 0:
            mix_in, jump_in = stage_in[:, mix], stage_in[:, jump_index]
            output_w = current[:, mix] * rails.voltage_v
            in_over_out = np.where(output_w > 0, mix_in / np.maximum(output_w, 1e-12), STEP_POWER_RATIO)
            step_ratio = np.minimum(in_over_out, LARGEST_STEP_RATIO)
            step_w = worst_step_w(problem, hardware, step_ratio)
            band_volts = np.where(
                fixed_ratio, ratio * problem.study.supply.low_v, hardware.band_v
            )  # fmt: skip
            dip_v = bus_dip_v(
                step_w,
                band_volts,
                converters.bandwidth_rad_s[index][..., None],
                converters.delay_s[index][..., None],
                hardware.bulk_f,
                hardware.bulk_esr_ohm,
                standing_w(hardware, mix_in, jump_in, step_w),
                hardware.damped_ohm,
            )
            dip_v = np.where(has_converter[..., None], dip_v, 0.0)
        rail_a = stage_in / stage_v
        bias_a = bias_bus / np.maximum(bus_v[:, 0], 1e-3)
        if exact or turn == passes - 2:  # a pass late is near enough: the drop moves the current by per cents
            plane_rise = heat.plane_rise_k(rail_a, bias_a)
            plane_factor = heat.factor(plane_rise)
        drop, plane_w = feeds.plane_drops(rail_a, plane_factor)
        bus_a, bus_w = feeds.bus_sum(rail_a), feeds.bus_sum(stage_in) + plane_w
        bus_a[:, 0] += bias_a
        bus_w[:, 0] += bias_bus
        if exact or turn != passes - 2:  # a pass late is near enough: it moves the input by a ten-thousandth
            converter_loss, converter_degc = units(node_v, bus_v, bus_a)
            converter_loss = np.where(alive, converter_loss, 0.0)
        converter_in = np.where(alive, bus_w + converter_loss, 0.0)
        node_w = converter_in.sum(axis=1) + np.einsum("psr,pr->ps", stage_in, feeds.direct)
        node_w += bias_node + supervisor_w[:, None]
        most = states.input_v**2 / (4.0 * max(path.resistance_ohm, 1e-12))
        missing = np.maximum(node_w - most, 0.0)
        root = np.sqrt(np.maximum(states.input_v**2 - 4.0 * path.resistance_ohm * node_w, 0.0))
        node_v = 0.5 * (states.input_v + root)
        input_a = (node_w - missing) / node_v
        moving = np.where(fixed_ratio, node_v[:, None] * made - droop_ohm * bus_a, set_v)
        moving[..., jump_index] -= dip_v[..., jump_band]
        bus_v = np.maximum(moving, least_bus_v)
        input_w = node_w + path.resistance_ohm * input_a**2 + path.power_w
        if exact:
            change = np.abs(input_w - previous) / np.maximum(np.abs(input_w), 1e-12)
            previous = input_w
            if turn > 2 and float(change.max(initial=0.0)) <= EXACT_TOLERANCE:
                break
    unsensed = np.einsum("psr,r->ps", pour_w, 1.0 - sensed)
    loss_w = input_w - (states.useful_w - unsensed - states.tap_w)
    return Solution(
        stage_v=stage_v,
        stage_in_w=stage_in,
        stage_loss_w=stage_loss_w,
        current_a=current,
        pour_w=pour_w,
        pour_ohm=pour_ohm,
        pour_rise_k=pour_rise,
        bus_v=bus_v.transpose(0, 2, 1),
        bus_a=bus_a.transpose(0, 2, 1),
        bus_w=bus_w.transpose(0, 2, 1),
        converter_loss_w=converter_loss.transpose(0, 2, 1),
        converter_degc=converter_degc.transpose(0, 2, 1),
        plane_w=plane_w.transpose(0, 2, 1),
        plane_rise_k=plane_rise,
        node_v=node_v,
        input_a=input_a,
        input_w=input_w,
        loss_w=loss_w,
        bias_in_w=bias_in,
        bias_out_w=bias_out,
        supervisor_w=np.broadcast_to(supervisor_w[:, None], node_v.shape),
        path_w=path.resistance_ohm * input_a**2 + path.power_w,
        missing_w=missing,
        dip_v=dip_v,
        step_w=step_w,
        step_ratio=step_ratio,
    )
