"""Topologies that did not win: the best of each by lifetime cost, and what it loses where, or what stops it.

``losing(evaluator, rows, objectives, infeasible=..., names=...)``. A topology is the feeds (direct, one bus,
two buses, and direct) with how the buses are controlled, in the words of ``archopt.model.explain.topology``.

Rows: ``topology, best_design`` (explained), ``lifetime_cost, behind_by`` (currency a board over the life),
``energy_more_kwh, cost_more, difference_by_mechanism`` (kWh a year against the winner, positive where this
one loses more; they sum to ``energy_more_kwh``), ``limit`` (None, or the record of the limit not met).
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np

from archopt.model.evaluator import Evaluator
from archopt.model.explain import explain_many, topology
from archopt.model.parameters import IntArray
from archopt.physics.arrays import FloatArray
from archopt.trade.money import lifetime_costs

STAGE_GROUPS = {
    "high side conduction": "stage conduction", "low side conduction": "stage conduction",
    "winding": "stage conduction", "linear": "stage conduction", "resistive": "stage conduction",
    "overlap": "stage switching", "output charge": "stage switching", "recovery": "stage switching",
    "dead time": "stage switching", "switching": "stage switching", "fixed": "stage no-load",
    "core": "inductor core", "gate": "gates", "controller": "controllers", "quiescent": "controllers",
    "input capacitor": "capacitors", "output bank": "capacitors", "pass element": "linear regulators",
}  # fmt: skip
CONVERTER_GROUPS = {
    "fixed": "bus converter no-load", "switching": "bus converter no-load",
    "linear": "bus converter conduction", "resistive": "bus converter conduction",
}  # fmt: skip
WHOLE_PARTS = {"bias supply": "gate bias", "bus transitions": "bus transitions"}


def losing(
    evaluator: Evaluator,
    rows: IntArray,
    objectives: FloatArray,
    *,
    infeasible: Mapping[str, tuple[IntArray, float]] | None = None,
    names: Sequence[str] | None = None,
) -> list[dict[str, Any]]:
    """Return the topologies behind the winner, nearest first, then those with no feasible design.

    Parameters
    ----------
    rows : (P, width) decided feasible designs the search kept
    objectives : (P, 3)
    infeasible : topology -> (decided row, violation) of the least violated design seen of it; those with a
        feasible design among ``rows`` are left out
    names : (P,) what a design is called where it is published, else empty
    """
    problem = evaluator.problem
    words = topology(problem, rows) if len(rows) else []
    best = best_of_each(words, lifetime_costs(problem.study, objectives) if len(rows) else np.zeros(0))
    order = list(best)
    explained = explain_many(evaluator, rows[[best[name] for name in order]]) if order else []
    for name, design in zip(order, explained, strict=True):
        called = names[best[name]] if names is not None else ""
        design["design"] = called or f"best of {name}"
    life = [float(design["beside"]["lifetime_cost"]) for design in explained]
    out: list[dict[str, Any]] = []
    if explained:
        winner = int(np.argmin(life))
        ranked = [int(k) for k in np.argsort(life, kind="stable")]
        out += [behind(order[k], explained[k], explained[winner]) for k in ranked if k != winner]
    missing = {name: row for name, (row, _) in (infeasible or {}).items() if name not in best}
    return out + unable(evaluator, missing)


def best_of_each(words: Sequence[str], lifetime: FloatArray) -> dict[str, int]:
    """Return topology -> position of its design of least lifetime cost, in order of first sight."""
    best: dict[str, int] = {}
    for position, name in enumerate(words):
        if name not in best or lifetime[position] < lifetime[best[name]]:
            best[name] = position
    return best


def behind(name: str, design: dict[str, Any], winner: dict[str, Any]) -> dict[str, Any]:
    """Return how far, and through what, one topology's best design stands behind the winner."""
    own, other = by_group(design["year_kwh"]), by_group(winner["year_kwh"])
    difference = {key: own.get(key, 0.0) - other.get(key, 0.0) for key in dict.fromkeys([*own, *other])}
    ordered = sorted(difference.items(), key=lambda term: -abs(term[1]))
    life = [float(one["beside"]["lifetime_cost"]) for one in (design, winner)]
    mine, best = design["objectives"], winner["objectives"]
    return {
        "topology": name,
        "best_design": design,
        "lifetime_cost": life[0],
        "behind_by": life[0] - life[1],
        "energy_more_kwh": mine["energy_loss_kwh_per_year"] - best["energy_loss_kwh_per_year"],
        "cost_more": mine["cost_per_board"] - best["cost_per_board"],
        "difference_by_mechanism": dict(ordered),
        "limit": None,
    }


def unable(evaluator: Evaluator, missing: Mapping[str, IntArray]) -> list[dict[str, Any]]:
    """Return the topologies of which no design met every limit, with the limit its best one misses most."""
    if not missing:
        return []
    explained = explain_many(evaluator, np.stack(list(missing.values())))
    return [
        {
            "topology": name,
            "best_design": None,
            "lifetime_cost": None,
            "behind_by": None,
            "energy_more_kwh": None,
            "cost_more": None,
            "difference_by_mechanism": {},
            "limit": next((limit for limit in design["limits"] if limit["slack"] < 0), None),
        }
        for name, design in zip(missing, explained, strict=True)
    ]


def by_group(year_kwh: Mapping[str, Mapping[str, float]]) -> dict[str, float]:
    """Return a year's losses by group of mechanisms, kWh; the groups sum to the year.

    Parameters
    ----------
    year_kwh : part -> mechanism -> kWh, as in an explained design
    """
    out: dict[str, float] = {}
    for part, losses in year_kwh.items():
        for mechanism, energy in losses.items():
            group = group_of(part, mechanism)
            out[group] = out.get(group, 0.0) + energy
    return out


def group_of(part: str, mechanism: str) -> str:
    """Return the group a loss belongs to, from the part and mechanism names of an explained design."""
    if part.endswith(" stage"):
        return STAGE_GROUPS.get(mechanism, f"stage {mechanism}")
    if part.endswith(" converter"):
        return CONVERTER_GROUPS.get(mechanism, f"bus converter {mechanism}")
    if part.endswith((" pour", " plane")):
        return "copper"
    return WHOLE_PARTS.get(part, part)
