"""One design explained as plain data: what it is, what it loses where, what binds it, what it costs."""

from __future__ import annotations

from typing import Any

import numpy as np

from archopt.inputs.resolved import Rail
from archopt.model.board import bank_loss_w
from archopt.model.cost import unit_price
from archopt.model.evaluator import Detail, Evaluator
from archopt.model.limits import INDEX, LIMITS, ROOM
from archopt.model.loss_lists import all_losses
from archopt.model.parameters import FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.rail_checks import output_ripple_v
from archopt.model.space import BUS_NAMES, PARENT, Designs
from archopt.model.states import KIND_NAMES, MIX, PRINT, StateTable
from archopt.model.thresholds import raise_thresholds_w
from archopt.model.topology import topology


def state_records(
    problem: Problem, detail: Detail, p: int, losses: dict[str, dict[str, FloatArray]]
) -> list[dict[str, Any]]:
    """Return every state of one design; shown and hottest ones with losses by part and mechanism."""
    states, solution = problem.states, detail.solution
    listed = sum(sum(parts.values()) for parts in losses.values())
    balance = (solution.loss_w[p] - listed) / np.maximum(solution.input_w[p], 1e-12)
    steady = states.of_kind(MIX)
    hottest = steady[int(solution.loss_w[p, steady].argmax())]
    buses = np.flatnonzero(detail.hardware.converter[p] >= 0)
    out = []
    for s, name in enumerate(states.name):
        record: dict[str, Any] = {
            "state": name,
            "kind": KIND_NAMES[int(states.kind[s])],
            "band": int(states.band[s]) + 1,
            "hours": float(states.hours[s]),
            "input_v": float(states.input_v[s]),
            "volts": {BUS_NAMES[bus]: float(solution.bus_v[p, s, bus]) for bus in buses},
            "load_w": float(solution.input_w[p, s] - solution.loss_w[p, s]),
            "input_w": float(solution.input_w[p, s]),
            "input_a": float(solution.input_a[p, s]),
            "loss_w": float(solution.loss_w[p, s]),
            "balance": float(balance[s]),
        }
        if states.kind[s] == PRINT or s == hottest:
            record["losses"] = {
                part: {key: float(values[s]) for key, values in parts.items()} for part, parts in losses.items()
            }
        out.append(record)
    return out


def band_records(problem: Problem, detail: Detail, p: int) -> list[dict[str, Any]]:
    """Return the schedule by band with its thresholds as board input power."""
    states, hardware, solution = problem.states, detail.hardware, detail.solution
    mix_low = states.of_kind(MIX)[0::2]
    hysteresis = problem.study.control.hysteresis_percent * 0.01
    thresholds_w = raise_thresholds_w(states, solution.input_w[p])
    out = []
    for band in range(states.bands):
        up = float(thresholds_w[band]) if band + 1 < states.bands else None
        out.append(
            {
                "band": band + 1,
                "load_from_w": float(states.edges_w[band]),
                "load_to_w": float(states.edges_w[band + 1]),
                "raise_above_input_w": up,
                "fall_below_input_w": None if up is None else up * (1.0 - hysteresis),
                "hours": float(states.hours[states.with_hours][states.band[states.with_hours] == band].sum()),
                "volts": {
                    BUS_NAMES[bus]: float(
                        solution.bus_v[p, mix_low[band], bus]
                        if hardware.fixed_ratio[p, bus]
                        else hardware.band_v[p, bus, band]
                    )
                    for bus in range(2)
                    if hardware.converter[p, bus] >= 0
                },
                "converters": {
                    BUS_NAMES[bus]: int(hardware.units_band[p, bus, band])
                    for bus in range(2)
                    if hardware.converter[p, bus] >= 0
                },
                "phases": {name: int(hardware.running_band[p, r, band]) for r, name in enumerate(problem.rails.names)},
            }
        )
    return out


def limit_records(detail: Detail, p: int, currency: str = "currency") -> list[dict[str, Any]]:
    """Return the worst place of every limit checked, tightest first; money in ``currency``."""
    out = []
    for limit in LIMITS:
        worst = detail.ledger.worst.get(limit.name)
        if worst is None or worst.normalised[p] >= ROOM:
            continue
        where = worst.where[p] if worst.where else ""
        place, _, rest = where.partition("; ")
        out.append(
            {
                "limit": limit.name,
                "where": place,
                "state": rest,
                "value": float(worst.value[p]),
                "bound": float(worst.bound[p]),
                "slack": float(worst.slack[p]),
                "unit": currency if limit.unit == "currency" else limit.unit,
                "normalised": float(worst.normalised[p]),
            }
        )
    return sorted(out, key=lambda record: (record["normalised"], INDEX[record["limit"]]))


NOT_BINDING = ("choices that fit together",)


def binding(limits: list[dict[str, Any]]) -> dict[str, Any]:
    """Return the limit with the least normalised slack that says something of the design."""
    for record in limits:
        if record["limit"] not in NOT_BINDING or record["slack"] < 0:
            return record
    return {}


def part_records(problem: Problem, detail: Detail, p: int) -> list[dict[str, Any]]:
    """Return the parts of one board with quantity and unit price at the production volume."""
    pieces = detail.bill.pieces[p]
    price = unit_price(problem.parts, pieces * problem.study.economics.boards_per_year)
    uses = part_uses(problem, detail, p)
    return [
        {
            "part": problem.parts.names[k],
            "family": problem.parts.families[k],
            "used_for": ", ".join(uses.get(int(k), [])),
            "quantity": int(pieces[k]),
            "unit_price": float(price[k]),
            "total": float(pieces[k] * price[k]),
            "new": not bool(problem.parts.preferred[k]),
        }
        for k in np.flatnonzero(pieces)
    ]


def part_uses(problem: Problem, detail: Detail, p: int) -> dict[int, list[str]]:
    """Return what each part number is used for."""
    uses: dict[int, list[str]] = {}
    designs, hardware = detail.designs, detail.hardware
    for r, name in enumerate(problem.rails.names):
        stage = int(hardware.stage[p, r])
        for part in {int(problem.stages.part[stage]), int(problem.stages.second_part[stage])}:
            uses.setdefault(part, []).append(f"{name} stage")
        bank = int(problem.capacitors.part[designs.rail("bank")[p, r]])
        uses.setdefault(bank, []).append(f"{name} bank")
    for bus in range(2):
        index = int(hardware.converter[p, bus])
        if index >= 0:
            uses.setdefault(int(problem.converters.part[index]), []).append(f"{BUS_NAMES[bus]} converter")
            bulk = int(problem.capacitors.part[designs.bus("bulk")[p, bus]])
            uses.setdefault(bulk, []).append(f"{BUS_NAMES[bus]} bulk")
            damper = int(designs.bus("damper")[p, bus])
            if damper:
                uses.setdefault(int(problem.capacitors.part[damper - 1]), []).append(f"{BUS_NAMES[bus]} damping")
    if hardware.bias[p] >= 0:
        uses.setdefault(int(problem.biases.part[hardware.bias[p]]), []).append("gate bias")
    if hardware.supervisor[p] >= 0:
        uses.setdefault(int(problem.supervisors.part[hardware.supervisor[p]]), []).append("bus voltage")
    uses.setdefault(problem.path.part, []).append("input path")
    return uses


def heat_records(problem: Problem, detail: Detail, p: int) -> list[dict[str, Any]]:
    """Return heat and temperature of every stage and converter in its hottest checked state."""
    states, hardware, solution = problem.states, detail.hardware, detail.solution
    steady = states.of_kind(MIX)
    limit = problem.study.derating.junction_degc
    bank_w = bank_loss_w(problem, hardware, solution.stage_v, solution.current_a)
    out = []
    for r, name in enumerate(problem.rails.names):
        own_w = solution.stage_loss_w[p, steady, r] - bank_w[p, steady, r]
        heat = own_w / hardware.running[p, steady, r] + hardware.bias_w[p, r]
        degc = states.ambient_degc[steady] + problem.stages.thermal_k_per_w[hardware.stage[p, r]] * heat
        k = int(degc.argmax())
        out.append(
            {
                "part": f"{name} stage, each phase",
                "loss_w": float(heat[k]),
                "temperature_degc": float(degc[k]),
                "limit_degc": limit,
            }
        )
    for bus in range(2):
        if hardware.converter[p, bus] < 0:
            continue
        k = int(solution.converter_degc[p, steady, bus].argmax())
        s = steady[k]
        out.append(
            {
                "part": f"{BUS_NAMES[bus]} converter, each unit",
                "loss_w": float(solution.converter_loss_w[p, s, bus] / hardware.units_running[p, s, bus]),
                "temperature_degc": float(solution.converter_degc[p, s, bus]),
                "limit_degc": limit,
            }
        )
    return out


def tolerance_records(problem: Problem, detail: Detail, p: int) -> list[dict[str, Any]]:
    """Return the tolerance stack of every rail, mV."""
    states, hardware = problem.states, detail.hardware
    rails: dict[str, Rail] = {rail.name: rail for rail in problem.study.rails}
    steady = states.of_kind(MIX)
    ripple_v = output_ripple_v(problem, hardware, detail.solution, steady)[p].max(axis=0)
    out = []
    for r, name in enumerate(problem.rails.names):
        rail = rails[name]
        volts_mv = rail.voltage_v * 1e3
        drop_v = (detail.solution.current_a * detail.solution.pour_ohm)[p, steady, r].max()
        drop = 0.0 if rail.remote_sense else float(drop_v) * 1e3
        droop = float(detail.droop.droop_v[p, r].max()) * 1e3
        release = float(detail.droop.release_v[p, r].max()) * 1e3
        budget = rail.droop_budget_v * 1e3
        out.append(
            {
                "rail": name,
                "voltage_v": rail.voltage_v,
                "tolerance_mv": volts_mv * rail.tolerance_percent * 0.01,
                "set_point_mv": volts_mv * rail.set_point_percent * 0.01,
                "ripple_mv": float(ripple_v[r]) * 1e3,
                "ripple_allowed_mv": volts_mv * rail.ripple_percent * 0.01,
                "drop_mv": drop,
                "budget_mv": budget,
                "droop_mv": droop,
                "release_mv": release,
                "left_mv": budget - max(droop, release),
            }
        )
    return out


def beside(problem: Problem, energy_kwh: float, cost: float, states: StateTable) -> dict[str, float]:
    """Return what money and carbon the annual loss comes to, and lifetime cost."""
    economics = problem.study.economics
    useful = float((states.useful_w * states.hours).sum()) * 1e-3
    upstream = energy_kwh * economics.cooling_overhead / economics.upstream_efficiency
    per_year = upstream * economics.energy_price_per_kwh
    return {
        "energy_input_kwh_per_year": useful + energy_kwh,
        "energy_useful_kwh_per_year": useful,
        "loss_at_supply_kwh_per_year": upstream,
        "energy_cost_per_year": per_year,
        "co2_kg_per_year": upstream * economics.carbon_kg_per_kwh,
        "lifetime_cost": cost + per_year * economics.life_years,
    }


def year_by_mechanism(
    losses: dict[str, dict[str, FloatArray]], hours: FloatArray, transition_kwh: float
) -> dict[str, dict[str, float]]:
    """Return annual losses by part and mechanism, kWh; bus transitions are a part of their own."""
    out = {
        part: {key: float((values * hours).sum()) * 1e-3 for key, values in parts.items()}
        for part, parts in losses.items()
    }
    if transition_kwh > 0:
        out["bus transitions"] = {"charging": transition_kwh}
    return out


def explain(evaluator: Evaluator, row: IntArray) -> dict[str, Any]:
    """Return one decided design row explained by direct physics, as plain data."""
    return explain_many(evaluator, np.atleast_2d(row))[0]


def explain_many(evaluator: Evaluator, rows: IntArray) -> list[dict[str, Any]]:
    """Return decided design rows explained by direct physics."""
    detail = evaluator.detail(rows, exact=True, explain=True)
    losses = all_losses(evaluator.problem, detail)
    return [explain_one(evaluator.problem, detail, p, losses[p]) for p in range(len(rows))]


def explain_one(problem: Problem, detail: Detail, p: int, losses: dict[str, dict[str, FloatArray]]) -> dict[str, Any]:
    """Return one design of an explained batch."""
    states = problem.states
    energy, cost, droop = (float(x) for x in detail.evaluation.objectives[p])
    records = state_records(problem, detail, p, losses)
    limits = limit_records(detail, p, problem.study.economics.currency)
    shown = {states.name[s].replace(" load", ""): float(detail.solution.loss_w[p, s]) for s in states.of_kind(PRINT)}
    steady = states.of_kind(MIX)
    shown["hottest"] = float(detail.solution.loss_w[p, steady].max())
    low_line = steady[0::2]
    feeds = Designs(problem.layout, detail.designs.rows[p : p + 1]).rail("feed")[0]
    names = {0: "input", 1: BUS_NAMES[0], 2: BUS_NAMES[1]}
    return {
        "topology": topology(problem, detail.designs.rows[p])[0],
        "choices": problem.space.describe(detail.designs.rows[p]),
        "feeds": {
            name: names.get(int(feeds[r])) or problem.rails.names[int(feeds[r]) - PARENT]
            for r, name in enumerate(problem.rails.names)
        },
        "bands": band_records(problem, detail, p),
        "objectives": {
            "energy_loss_kwh_per_year": energy,
            "cost_per_board": cost,
            "worst_droop_percent": droop,
            "worst_droop_exact_percent": float(detail.evaluation.droop_exact[p]),
        },
        "transition_kwh_per_year": float(detail.transition_kwh[p]),
        "beside": {
            **beside(problem, energy, cost, states),
            "payback_years": None,
            "area_mm2": float(detail.bill.area_mm2[p]),
        },
        "watts": shown,
        "feasible": bool(detail.evaluation.violation[p] <= 0),
        "violation": float(detail.evaluation.violation[p]),
        "binding": binding(limits),
        "limits": limits,
        "parts": part_records(problem, detail, p),
        "cost": {
            "parts": float(detail.bill.parts[p]),
            "placement": float(detail.bill.placement[p]),
            "new part numbers": float(detail.bill.new_parts[p]),
            "board": float(detail.bill.board[p]),
        },
        "states": records,
        "year_kwh": year_by_mechanism(losses, states.hours, float(detail.transition_kwh[p])),
        "heat": heat_records(problem, detail, p),
        "tolerance": tolerance_records(problem, detail, p),
        "input_current_low_line_a": float(detail.solution.input_a[p, low_line].max()),
        "row": [int(x) for x in detail.designs.rows[p]],
    }


__all__ = ["explain", "explain_many", "topology"]
