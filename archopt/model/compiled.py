"""From a loaded study to a compiled problem: the load reduced to states, as finely as a plain design needs."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from archopt.errors import InputError
from archopt.errors import Problem as InputProblem
from archopt.inputs.resolved import Catalogue, ResolvedStudy
from archopt.model.board import DirectStages, solve
from archopt.model.energy_states import EnergyStates
from archopt.model.hardware import unpack
from archopt.model.parameters import REGULATED, IntArray
from archopt.model.problem import Problem, compile_problem
from archopt.model.space import BUS_A, Designs
from archopt.model.states import ENERGY, HELD, StateTable, reduce_load

SERIES_CHUNK = 512  # moments solved at once: what stays in the processor's cache


def compile_study(study: ResolvedStudy, catalogue: Catalogue) -> Problem:
    """Return the compiled problem of a study.

    A time series is reduced to clusters, added until the annual loss of the incumbent (or of a plain fixed
    design) is within 0.5 % of the whole series; listed states are kept as they are.
    """
    draft = compile_problem(study, catalogue, reduce_load(study))
    if not study.load.series:
        return draft
    row = incumbent_row(draft)
    plain = plain_row(draft) if row is None else row
    states = reduce_load(study, lambda energy: annual_loss_kwh(draft, plain, energy))
    return compile_problem(study, catalogue, states)


def first_row(problem: Problem) -> IntArray:
    """Return the row of every first allowed value."""
    row = np.zeros(problem.layout.width, dtype=np.int64)
    for column, values in enumerate(problem.space.allowed):
        row[column] = values[0] if len(values) else 0
    return row


def incumbent_row(problem: Problem) -> IntArray | None:
    """Return today's design as a row without decisions, None where the study gives none.

    Raises
    ------
    InputError
        every choice of it that this study does not offer: a forbidden part, one not rated for the input.
    """
    given = problem.study.incumbent
    if given is None:
        return None
    space = problem.space
    taps = {rail.name for rail in problem.study.rails if rail.tap_of}
    row = first_row(problem)
    faults = []
    for name, value in given.items():
        if name.rsplit(".", 1)[0] in taps:
            continue
        try:
            row = space.encode({name: str(value)}, row)
        except KeyError:
            text = f"{value} is not on offer in this study: forbidden by its choices, or not rated for its input"
            faults.append(InputProblem(problem.study.file, f"incumbent.{name}", text))
    if faults:
        raise InputError(faults)
    return row


def plain_row(problem: Problem) -> IntArray:
    """Return a plain fixed design: one bus at the habitual voltage, for each rail the cheapest stage that fits."""
    row = first_row(problem)
    designs = Designs(problem.layout, row[None])
    stages, parts = problem.stages, problem.parts
    habitual = int(np.abs(problem.grid_v - problem.study.control.habitual_v).argmin())
    second = np.where(stages.second_part >= 0, parts.price[stages.second_part, 1], 0.0)
    unit = parts.price[stages.part, 1] + second
    for r in range(problem.layout.rails):
        cost = np.where(problem.feed_ok[r].any(axis=1), problem.phases_low[r] * unit, np.inf)
        on_bus = problem.feed_ok[r, :, BUS_A]
        pick = int(np.where(on_bus, cost, np.inf).argmin()) if on_bus.any() else int(cost.argmin())
        feeds = np.flatnonzero(problem.feed_ok[r, pick])
        designs.rail("feed")[0, r] = BUS_A if on_bus[pick] else feeds[0]
        designs.rail("stage")[0, r] = pick
        designs.rail("phases")[0, r] = problem.phases_low[r, pick]
        designs.rail("fewest")[0, r] = 1
    converters = problem.converters
    if len(converters.names):
        power = float((problem.rails.voltage_v * problem.states.rated_a).sum()) * 1.15
        units = np.ceil(power / converters.limit_w)
        regulated = np.where(converters.kind == REGULATED, 0.0, 1e6)
        pick = int((regulated + units * parts.price[converters.part, 1]).argmin())
        designs.bus("converter")[0, 0] = pick + 1
        designs.bus("count")[0, 0] = min(int(units[pick]), int(converters.max_parallel[pick]))
        for field in ("nominal_v", "lower_v", "upper_v"):
            designs.bus(field)[0, 0] = habitual
    return row


def annual_loss_kwh(problem: Problem, row: IntArray, energy: EnergyStates) -> float:
    """Return the annual loss of one fixed design with everything running, over given energy states, kWh."""
    count = len(energy.hours)
    if count > SERIES_CHUNK:
        pieces = [np.arange(k, min(k + SERIES_CHUNK, count)) for k in range(0, count, SERIES_CHUNK)]
        return sum(annual_loss_kwh(problem, row, energy.take(piece)) for piece in pieces)
    states = energy_only(problem.states, energy, problem.study)
    designs = Designs(problem.layout, row[None].copy())
    layout = designs.layout
    designs.rows[:, layout.volts] = np.repeat(designs.bus("nominal_v"), layout.bands, axis=1)
    designs.rows[:, layout.running_converters] = np.repeat(designs.bus("count"), layout.bands, axis=1)
    designs.rows[:, layout.running_phases] = np.repeat(designs.rail("phases"), layout.bands, axis=1)
    hardware = unpack(problem, designs, states)
    solution = solve(problem, states, hardware, DirectStages(problem, states), exact=False)
    return float((solution.loss_w[0] * states.hours).sum()) * 1e-3


def energy_only(states: StateTable, energy: EnergyStates, study: ResolvedStudy) -> StateTable:
    """Return the states with their energy states exchanged for others."""
    keep = (states.kind != ENERGY) & (states.kind != HELD)
    count = len(energy.hours)
    return replace(
        states,
        name=(*energy.name, *(name for name, kept in zip(states.name, keep, strict=True) if kept)),
        kind=np.concatenate([np.zeros(count, dtype=np.int64), states.kind[keep]]),
        hours=np.concatenate([energy.hours, states.hours[keep]]),
        input_v=np.concatenate([energy.input_v, states.input_v[keep]]),
        ambient_degc=np.concatenate([energy.inlet_degc + study.supply.local_rise_k, states.ambient_degc[keep]]),
        current_a=np.vstack([energy.current_a, states.current_a[keep]]),
        off=np.vstack([energy.off, states.off[keep]]),
        band=np.concatenate([energy.band, states.band[keep]]),
        tap_w=np.concatenate([energy.tap_w, states.tap_w[keep]]),
        useful_w=np.concatenate([energy.useful_w, states.useful_w[keep]]),
    )
