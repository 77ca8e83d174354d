"""All checks of a batch of solved designs: rails, jump, buses, copper, input, and that choices fit together."""

from __future__ import annotations

import numpy as np

from archopt.model.bus_checks import check_buses
from archopt.model.bus_stability import check_impedance
from archopt.model.copper_heat import rise_k
from archopt.model.cost import copper_area_m2
from archopt.model.hardware import place_limits_a
from archopt.model.limits import Ledger
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.rail_checks import check_jump, check_rails
from archopt.model.situation import Droop, Situation
from archopt.model.space import BUS_NAMES
from archopt.model.states import FALLBACK, JUMP, MIX


def check_copper(situation: Situation, ledger: Ledger) -> None:
    """Check drops, ampacity and the layer budget."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    rails, board, solution = problem.rails, problem.study.board, situation.solution
    steady = np.concatenate([states.of_kind(MIX), states.of_kind(FALLBACK)])
    axes = (situation.state_names(steady), situation.rail_names)
    amps = solution.current_a[:, steady]
    drop = (amps * solution.pour_ohm[:, steady] + rails.tap_drop_v) / rails.voltage_v  # to the farthest tap
    ledger.add("rail drop", 100.0 * drop, 100.0 * rails.drop_budget, at_most=True, axes=axes)
    ledger.add("copper ampacity", amps, pour_limits_a(situation)[:, None, :], at_most=True, axes=axes)
    permitted_k = board.copper_rise_k
    rise = solution.pour_rise_k[:, steady]
    ledger.add("copper temperature rise", rise, permitted_k, at_most=True, axes=axes)
    bus_axes = (situation.state_names(steady), tuple(f"{name} plane" for name in BUS_NAMES))
    through, limit = crowding(situation, steady)
    ledger.add(
        "copper ampacity", through, limit, at_most=True, axes=bus_axes,
        applies=(hardware.converter >= 0)[:, None, :],
    )  # fmt: skip
    plane_rise = rise_k(problem, through / np.maximum(limit, 1e-12))
    ledger.add(
        "copper temperature rise", plane_rise, permitted_k, at_most=True, axes=bus_axes,
        applies=(hardware.converter >= 0)[:, None, :],
    )  # fmt: skip
    stack_pairs = problem.stacks.pairs[hardware.stack]
    offered = stack_pairs * board.area_cm2 * board.usable_copper_share
    ledger.add("layer budget", 1e4 * copper_area_m2(problem, situation.designs), offered, at_most=True)
    check_vias(situation, ledger, steady)
    if len(problem.overlaps.names):
        used = hardware.on_bus.any(axis=2)
        pairs = np.concatenate([hardware.bus_pairs * used, hardware.pairs], axis=1)
        there = np.einsum("pn,gn->pg", pairs, problem.overlaps.holds)
        ledger.add("crowding", there, stack_pairs[:, None], at_most=True, axes=(problem.overlaps.names,))


def check_vias(situation: Situation, ledger: Ledger, steady: IntArray) -> None:
    """Check the current of every via field that a floorplan draws: under converters, stage inputs, pours."""
    problem, solution, on_bus = situation.problem, situation.solution, situation.hardware.on_bus
    planes, states, names = problem.planes, situation.state_names(steady), situation.rail_names
    if not (np.isfinite(problem.rails.via_limit_a).any() or np.isfinite(planes.source_limit_a).any()):
        return

    def add(amps: FloatArray, limit_a: FloatArray, labels: tuple[str, ...]) -> None:
        known: BoolArray = np.asarray(np.isfinite(limit_a))
        bound = np.where(known, limit_a, 1.0)
        ledger.add("via ampacity", amps, bound, at_most=True, axes=(states, labels), applies=known)

    add(solution.current_a[:, steady], problem.rails.via_limit_a, tuple(f"{name} pour" for name in names))
    rail_a = solution.stage_in_w[:, steady] / solution.stage_v[:, steady]
    own = np.where(on_bus, planes.own_limit_a, np.inf).min(axis=1)[:, None]
    add(rail_a, own, tuple(f"{name} input" for name in names))
    bus_a = np.einsum("psr,pkr->psk", rail_a, on_bus.astype(np.float64))
    add(bus_a, planes.source_limit_a, tuple(f"{name} converters" for name in BUS_NAMES))


def pour_limits_a(situation: Situation) -> FloatArray:
    """Return what the pour of each rail may carry, (P, R) A, by IPC-2221."""
    hardware = situation.hardware
    return np.asarray(hardware.pairs * situation.problem.pour_limit_a[hardware.stack])


def crowding(situation: Situation, steady: IntArray) -> tuple[FloatArray, FloatArray]:
    """Return current and limit at the place of each bus plane where they are nearest, (P, states, 2) A.

    Places are necks and discs of 3 mm; without a floorplan the plane's own width.
    """
    planes, solution = situation.problem.planes, situation.solution
    limit_a = place_limits_a(situation.problem, situation.hardware.stack, situation.designs.bus("pairs"))
    rail_a = solution.stage_in_w[:, steady] / solution.stage_v[:, steady]
    on_a = rail_a[:, :, None, :] * situation.hardware.on_bus[:, None, :, :]
    bias_a = np.maximum(solution.bus_a[:, steady] - on_a.sum(axis=3), 0.0)
    through = np.einsum("pskr,kcr->pskc", on_a, planes.place_share) + bias_a[..., None] * planes.place_bias
    spread = np.broadcast_to(limit_a[:, None], through.shape)
    worst = (through / np.maximum(spread, 1e-12)).argmax(axis=3)[..., None]
    return np.take_along_axis(through, worst, 3)[..., 0], np.take_along_axis(spread, worst, 3)[..., 0]


def check_board(situation: Situation, ledger: Ledger) -> None:
    """Check the input path, the bias supply, caps, and that the choices fit together."""
    problem, states, hardware = situation.problem, situation.states, situation.hardware
    solution, board = situation.solution, problem.study.board
    steady = np.concatenate([states.of_kind(MIX), states.of_kind(JUMP), states.of_kind(FALLBACK)])
    axes = (situation.state_names(steady),)
    ledger.add("input current", solution.input_a[:, steady], problem.path.limit_a, at_most=True, axes=axes)
    every = (states.name,)
    most = states.input_v**2 / (4.0 * max(problem.path.resistance_ohm, 1e-12))
    wanted = solution.input_w - solution.path_w
    ledger.add("deliverable power", wanted, most, at_most=True, axes=every)
    needs_bias: BoolArray = np.asarray((hardware.bias_w > 0).any(axis=1))
    if len(problem.biases.names):
        bound = problem.biases.max_power_w[np.maximum(hardware.bias, 0)]
        demand = solution.bias_out_w[:, steady]
        applies = needs_bias[:, None] & (hardware.bias >= 0)[:, None]
        ledger.add("bias supply power", demand, bound[:, None], at_most=True, axes=axes, applies=applies)
    if np.isfinite(board.cost_cap):
        ledger.add("cost cap", situation.bill.total, board.cost_cap, at_most=True)
    if np.isfinite(board.area_cap_cm2):
        ledger.add("area cap", situation.bill.area_mm2 * 0.01, board.area_cap_cm2, at_most=True)
    ledger.add("choices that fit together", misfits(situation).astype(np.float64), 0.0, at_most=True)


def misfits(situation: Situation) -> IntArray:
    """Return how many choices of each design cannot be combined, (P,)."""
    problem, hardware, designs = situation.problem, situation.hardware, situation.designs
    stage, feed = hardware.stage, hardware.feed
    rail = np.arange(stage.shape[1])
    count = (~problem.feed_ok[rail, stage, feed]).sum(axis=1)
    count += (hardware.phases > problem.stages.max_phases[stage]).sum(axis=1)
    count += (~problem.capacitor_ok[rail, designs.rail("bank")]).sum(axis=1)
    parent = np.maximum(hardware.parent, 0)
    grandparent = np.take_along_axis(hardware.parent, parent, axis=1)
    count += ((hardware.parent >= 0) & (grandparent >= 0)).sum(axis=1)
    used: BoolArray = np.asarray(hardware.on_bus.any(axis=2))
    count += (used & (hardware.converter < 0)).sum(axis=1)
    if len(problem.converters.names):
        most = problem.converters.max_parallel[np.maximum(hardware.converter, 0)]
        count += ((hardware.converter >= 0) & (hardware.units > most)).sum(axis=1)
    pairs = problem.stacks.pairs[hardware.stack][:, None]
    count += (designs.rail("pairs") > pairs).sum(axis=1)
    count += (used & (designs.bus("pairs") > pairs)).sum(axis=1)
    return np.asarray(count + bias_misfits(situation) + supervisor_misfits(situation, used))


def bias_misfits(situation: Situation) -> IntArray:
    """Return 1 where gates need a bias that is missing or cannot run from its feed."""
    problem, hardware = situation.problem, situation.hardware
    needs: BoolArray = np.asarray((hardware.bias_w > 0).any(axis=1))
    if not len(problem.biases.names):
        return needs.astype(np.int64)
    index = np.maximum(hardware.bias, 0)
    supply = problem.study.supply
    biases = problem.biases
    low_bus, high_bus = bus_a_span_v(situation)
    on_bus = hardware.bias_on_bus
    low = np.where(on_bus, low_bus, supply.low_v)
    high = np.where(on_bus, high_bus, supply.high_v)
    fits = (biases.input_min_v[index] <= low) & (biases.input_max_v[index] >= high)
    fits &= on_bus | biases.isolated[index] | (not supply.isolation)
    fits &= ~on_bus | hardware.on_bus[:, 0].any(axis=1)
    return np.asarray(needs & ~((hardware.bias >= 0) & fits), dtype=np.int64)


def bus_a_span_v(situation: Situation) -> tuple[FloatArray, FloatArray]:
    """Return the lowest voltage of bus A in its deepest dip and its highest, V, (P,).

    A regulated bus is at its nominal when it starts and falls back; a fixed ratio follows the input.
    """
    problem, hardware = situation.problem, situation.hardware
    low, high = hardware.band_v[:, 0].min(axis=1), hardware.band_v[:, 0].max(axis=1)
    if len(problem.converters.names):
        index, supply = np.maximum(hardware.converter[:, 0], 0), problem.study.supply
        ratio, off = problem.converters.ratio[index], problem.converters.accuracy[index]
        follows = hardware.fixed_ratio[:, 0]
        low = np.where(follows, ratio * (1.0 - off) * supply.low_v, low)
        high = np.where(follows, ratio * (1.0 + off) * supply.high_v, high)
    return low - situation.solution.dip_v[:, 0].max(axis=1), high


def supervisor_misfits(situation: Situation, used: BoolArray) -> IntArray:
    """Return 1 where a bus moves and nothing that can move it is on the board."""
    problem, hardware = situation.problem, situation.hardware
    control = situation.designs.bus("control")
    level = np.where(used, control, 0)
    needed, buses = level.max(axis=1), (level > 0).sum(axis=1)
    if not len(problem.supervisors.names):
        return np.asarray(needed > 0, dtype=np.int64)
    index = np.maximum(hardware.supervisor, 0)
    fits = (problem.supervisors.level[index] >= needed) & (problem.supervisors.buses[index] >= buses)
    return np.asarray((needed > 0) & ~((hardware.supervisor >= 0) & fits), dtype=np.int64)


def check_all(situation: Situation, droop: Droop, *, explain: bool = False, bare: bool = False) -> Ledger:
    """Check every limit of a batch of solved designs; ``bare`` keeps the normalised slack alone."""
    ledger = Ledger(len(situation.designs), explain=explain, bare=bare, states=frozenset(situation.states.name))
    check_rails(situation, droop, ledger)
    check_jump(situation, ledger)
    check_buses(situation, ledger)
    check_impedance(situation, ledger)
    check_copper(situation, ledger)
    check_board(situation, ledger)
    return ledger
