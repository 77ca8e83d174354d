"""Designs in time: worst points of rails, buses and jumps against closed form and limit.

The circuits are those of :mod:`archopt.trade.circuits`.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, replace
from typing import Any

import numpy as np

from archopt.model.evaluator import Detail, Evaluator
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES
from archopt.physics.averaged import rail_wave
from archopt.physics.averaged_bus import bus_wave
from archopt.trade.circuits import Waves, bus_case, bus_step, jump_of, rail_case, tightest_band, waves_of

TOLERANCE = 1e-3  # share of a limit: what integration leaves open


@dataclass(frozen=True)
class Finding:
    """One worst point in time. value, closed and bound in ``unit``; ``met`` where the limit holds in time.

    ``closed`` is what the limit was checked with; ``row`` which design of the batch.
    """

    row: int
    limit: str
    where: str
    state: str
    value: float
    closed: float
    bound: float
    unit: str
    met: bool

    def as_data(self) -> dict[str, Any]:
        """The finding as plain data."""
        return dict(vars(self))


def worst_band(values: FloatArray) -> int:
    """Return where values by band are largest, the first of equals."""
    return int(np.argmax(values))


def rail_findings(waves: Waves, p: int, rail: int) -> list[Finding]:
    """Return one rail's droop and release in the band where each is worst."""
    droop, budget_v = waves.detail.droop, float(waves.problem.rails.budget_v[rail])
    names = waves.problem.states.place_names
    out = []
    for name, closed, rises in (
        ("rail droop", droop.droop_percent[p, rail], True), ("rail release", droop.release_percent[p, rail], False),
    ):  # fmt: skip
        band = worst_band(closed)
        wave = rail_wave(*rail_case(waves, p, rail, band, rises=rises))
        value = 100.0 * (wave.droop_v if rises else wave.release_v) / budget_v
        out.append(
            Finding(
                p, name, waves.problem.rails.names[rail], names[band], value, float(closed[band]), 100.0,
                "% of budget", value <= 100.0 * (1.0 + TOLERANCE),
            )
        )  # fmt: skip
    return out


def dip_finding(waves: Waves, p: int, bus: int) -> Finding:
    """Return a bus's dip at its largest coincident step in the band where it is worst."""
    bound = waves.problem.study.control.bus_dip_percent
    hardware, solution = waves.detail.hardware, waves.detail.solution
    circuits = [bus_case(waves, p, bus, band) for band in range(waves.problem.states.places)]
    volts = np.array([circuit.bus_v for circuit in circuits])
    closed = 100.0 * solution.dip_v[p, bus] / np.where(hardware.fixed_ratio[p, bus], volts, hardware.band_v[p, bus])
    band = worst_band(closed)
    wave = bus_wave(replace(circuits[band], limit_a=np.inf), bus_step(waves, p, bus, band))
    value = 100.0 * wave.dip_v / circuits[band].bus_v
    met = wave.survives and value <= bound * (1.0 + TOLERANCE)
    where = waves.problem.states.place_names[band]
    return Finding(p, "bus dip", BUS_NAMES[bus], where, value, float(closed[band]), bound, "% of bus", met)


def jump_findings(waves: Waves, p: int, bus: int) -> list[Finding]:
    """Return how a bus and its rails live through the jump from the band with least room."""
    states = waves.problem.states
    band = tightest_band(waves, p, bus)
    if band is None:
        return []
    jump = jump_of(waves, p, bus, band)
    state = states.name[int(waves.jump_at[band])]
    left_v = jump.spare_v()
    k = int(np.argmin(left_v))
    names = waves.problem.rails.names
    lived = jump.wave.survives
    out = [
        Finding(
            p, "jump survival: stage input", names[int(jump.rails[k])], state, float(left_v[k]),
            float(waves.spare_v[p, band, jump.rails].min()),
            0.0, "V", lived,
        )
    ]  # fmt: skip
    percent = 100.0 * jump.wave.droop_v() / waves.problem.rails.budget_v[jump.rails]
    closed = waves.detail.droop.droop_percent[p, jump.rails, band]
    k = int(np.argmax(percent))
    out.append(
        Finding(
            p, "rail droop", names[int(jump.rails[k])], f"{state}, dipped bus", float(percent[k]), float(closed[k]),
            100.0, "% of budget", bool(percent[k] <= 100.0 * (1.0 + TOLERANCE)),
        )
    )  # fmt: skip
    return out


def recheck(problem: Problem, detail: Detail) -> list[Finding]:
    """Return the worst points in time of a batch of designs, one by one.

    For each design: the rails whose closed-form droop and release are worst, every bus's dip, and every bus
    through the jump with the least room.
    """
    waves = waves_of(problem, detail)
    out: list[Finding] = []
    for p in range(len(detail.designs)):
        for percent in (detail.droop.droop_percent[p], detail.droop.release_percent[p]):
            rail = int(np.unravel_index(int(percent.argmax()), percent.shape)[0])
            if not any(f.row == p and f.where == problem.rails.names[rail] for f in out):
                out += rail_findings(waves, p, rail)
        for bus in np.flatnonzero(detail.hardware.converter[p] >= 0):
            out.append(dip_finding(waves, p, int(bus)))
            out += jump_findings(waves, p, int(bus))
    return out


@dataclass(frozen=True)
class Settled:
    """Designs left after the look in time: their places (K,) in what was given, and every finding.

    ``row`` of a finding is a place in what was given; ``failed`` are the places removed.
    """

    kept: IntArray
    failed: IntArray
    findings: list[Finding]


def settled(evaluator: Evaluator, rows: IntArray, telling: Callable[[IntArray], IntArray]) -> Settled:
    """Look at the telling designs in time; one that fails is removed and the next takes its place.

    Parameters
    ----------
    rows : (P, width) decided designs that meet every limit in closed form
    telling : given the places still kept (K,), returns which of these places are told
    """
    alive: BoolArray = np.ones(len(rows), dtype=bool)
    seen: BoolArray = np.zeros(len(rows), dtype=bool)
    findings: list[Finding] = []
    while True:
        told = np.asarray(telling(np.flatnonzero(alive)), dtype=np.int64)
        fresh = told[~seen[told]]
        if not len(fresh):
            return Settled(np.flatnonzero(alive), np.flatnonzero(~alive), findings)
        seen[fresh] = True
        for found in recheck(evaluator.problem, evaluator.detail(rows[fresh], exact=True)):
            place = int(fresh[found.row])
            findings.append(replace(found, row=place))
            alive[place] &= found.met
