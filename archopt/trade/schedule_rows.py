"""The voltage schedule of one design as it is handed over to whoever programs the supervisor."""

from __future__ import annotations

from typing import Any

import numpy as np

from archopt.model.evaluator import Detail, Evaluator
from archopt.model.parameters import FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES
from archopt.trade.pinned import pinned_problem
from archopt.trade.rebuilt import detail_of, problem_of, row_of
from archopt.trade.schedules import best_fixed, regulated_buses

Data = dict[str, Any]


def band_energy_kwh(problem: Problem, detail: Detail) -> FloatArray:
    """Return the energy each design loses in each band, (P, B) kWh a year."""
    states = problem.states
    out = np.zeros((len(detail.designs), states.bands))
    lost = detail.solution.loss_w * states.hours * 1e-3
    for band in range(states.bands):
        out[:, band] = lost[:, states.with_hours[states.band[states.with_hours] == band]].sum(axis=1)
    return out


def set_voltage_v(problem: Problem, converter: int, volts: float) -> float:
    """Return a bus voltage on its converter's own setting grid, V."""
    step = float(problem.converters.setting_grid_v[converter])
    return volts if step <= 0 else step * round(volts / step)


def best_fixed_row(problem: Problem, row: IntArray) -> IntArray | None:
    """Return the same hardware at its best feasible fixed voltage; None where no voltage can be chosen or met."""
    if not regulated_buses(problem, row):
        return None
    found = best_fixed(Evaluator(pinned_problem(problem, row)), row)
    return found.row if found.feasible else None


def schedule_rows(record: Data, design: Data) -> list[Data]:
    """Return one row a band: load, thresholds of input power, bus settings, saving against the best fixed bus.

    Columns: ``band, load_from_w, load_to_w, raise_above_input_w, fall_below_input_w, hours``, then
    ``<bus>_v`` on the converter's setting grid and ``<bus>_converters`` for every bus, and
    ``saving_kwh_per_year`` (None where the same hardware has no feasible fixed bus).

    Raises
    ------
    OutputError : the result cannot be computed again
    """
    problem = problem_of(record)
    row = row_of(problem, design)
    fixed = best_fixed_row(problem, row)
    rows = row[None] if fixed is None else np.stack([row, fixed])
    detail = detail_of(problem, rows)
    energy = band_energy_kwh(problem, detail)
    out: list[Data] = []
    for band, entry in enumerate(design["bands"]):
        line: Data = {
            name: entry[name]
            for name in (
                "band", "load_from_w", "load_to_w", "raise_above_input_w", "fall_below_input_w", "hours",
            )
        }  # fmt: skip
        for bus, name in enumerate(BUS_NAMES):
            if name in entry["volts"]:
                converter = int(detail.hardware.converter[0, bus])
                fixed_ratio = bool(detail.hardware.fixed_ratio[0, bus])
                volts = float(entry["volts"][name])
                line[f"{name}_v"] = volts if fixed_ratio else set_voltage_v(problem, converter, volts)
                line[f"{name}_converters"] = entry["converters"][name]
        line["saving_kwh_per_year"] = None if fixed is None else float(energy[1, band] - energy[0, band])
        out.append(line)
    return out
