"""Every net of one design: its squares, loss, drop, and how warm it runs where its current crowds most."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.checks import pour_limits_a
from archopt.model.copper_heat import rise_k
from archopt.model.evaluator import Detail
from archopt.model.hardware import place_limits_a
from archopt.model.parameters import FloatArray, IntArray
from archopt.model.planes import pour_place
from archopt.model.problem import Problem
from archopt.model.situation import Situation
from archopt.model.space import BUS_NAMES
from archopt.model.states import FALLBACK, MIX


@dataclass(frozen=True)
class NetFigures:
    """One net of one design: a bus plane or a rail's pour.

    squares : one way, power layer; of a bus to its farthest stage
    loss_kwh : in copper and vias, a year
    drop_mv, drop_percent : there and back, of the voltage, at the worst mix; a sensed pour's is made up by its stage
    rise_k : of the most crowded place over the board around it, by the form of IPC-2221; place: where that is
    copper_degc : of the whole net at that rise, in the state that is hottest
    """

    net: str
    pairs: int
    squares: float
    area_cm2: float
    loss_kwh: float
    drop_mv: float
    drop_percent: float
    rise_k: float
    place: str
    copper_degc: float


def net_figures(problem: Problem, detail: Detail, p: int) -> list[NetFigures]:
    """Return every net of one design of a batch by the figures its limits were checked with."""
    steady = np.concatenate([problem.states.of_kind(MIX), problem.states.of_kind(FALLBACK)])
    used = [k for k in range(2) if detail.hardware.on_bus[p, k].any()]
    planes = [plane_figures(problem, detail, p, bus, steady) for bus in used]
    return [*planes, *pour_figures(problem, detail, p, steady)]


def plane_load(problem: Problem, detail: Detail, p: int, bus: int, steady: IntArray) -> FloatArray:
    """Return the current through every place of a bus plane over what it may carry, (states, K)."""
    solution, hardware, planes = detail.solution, detail.hardware, problem.planes
    on_a = solution.stage_in_w[p, steady] / solution.stage_v[p, steady] * hardware.on_bus[p, bus]
    bias_a = np.maximum(solution.bus_a[p, steady, bus] - on_a.sum(axis=1), 0.0)
    through = on_a @ planes.place_share[bus].T + bias_a[:, None] * planes.place_bias[bus]
    limit = place_limits_a(problem, hardware.stack[p : p + 1], hardware.bus_pairs[p : p + 1])[0, bus]
    return np.asarray(through / np.maximum(limit, 1e-12))


def plane_figures(problem: Problem, detail: Detail, p: int, bus: int, steady: IntArray) -> NetFigures:
    """Return the figures of a bus plane."""
    states, solution, hardware = problem.states, detail.solution, detail.hardware
    on_it = hardware.on_bus[p, bus]
    drop_v = solution.bus_v[p, steady, bus][:, None] - solution.stage_v[p, steady]
    drop_v = np.where(on_it & ~states.off[steady], drop_v, 0.0)
    percent = 100.0 * drop_v / np.maximum(solution.bus_v[p, steady, bus][:, None], 1e-3)
    load = plane_load(problem, detail, p, bus, steady)
    rise = rise_k(problem, load.max(axis=1))
    return NetFigures(
        net=BUS_NAMES[bus],
        pairs=int(hardware.bus_pairs[p, bus]),
        squares=float(np.diag(problem.bus_squares[bus])[on_it].max()),
        area_cm2=float(problem.planes.area_m2[bus] * 1e4),
        loss_kwh=float((solution.plane_w[p, :, bus] * states.hours).sum() * 1e-3),
        drop_mv=float(1e3 * drop_v.max()),
        drop_percent=float(percent.max()),
        rise_k=float(rise.max()),
        place=problem.planes.place_names[bus][int(load.max(axis=0).argmax())],
        copper_degc=float((states.ambient_degc[steady] + rise).max()),
    )


def pour_figures(problem: Problem, detail: Detail, p: int, steady: IntArray) -> list[NetFigures]:
    """Return the figures of every rail's pour."""
    states, rails, solution, hardware = problem.states, problem.rails, detail.solution, detail.hardware
    situation = Situation(problem, states, detail.designs, hardware, solution, detail.bill)
    amps = solution.current_a[p, steady]
    rise = rise_k(problem, amps / np.maximum(pour_limits_a(situation)[p], 1e-12))
    drop_v = (amps * solution.pour_ohm[p, steady]).max(axis=0)
    loss_kwh = (solution.pour_w[p] * states.hours[:, None]).sum(axis=0) * 1e-3
    degc = (states.ambient_degc[steady][:, None] + rise).max(axis=0)
    return [
        NetFigures(
            net=name,
            pairs=int(hardware.pairs[p, k]),
            squares=float(rails.squares[k]),
            area_cm2=float(rails.copper_area_m2[k] * 1e4),
            loss_kwh=float(loss_kwh[k]),
            drop_mv=float(1e3 * drop_v[k]),
            drop_percent=float(100.0 * drop_v[k] / rails.voltage_v[k]),
            rise_k=float(rise[:, k].max()),
            place=pour_place(problem.study, name),
            copper_degc=float(degc[k]),
        )
        for k, name in enumerate(rails.names)
    ]
