"""Every loss of a design by part and mechanism in every state; together they close the power balance."""

from __future__ import annotations

import numpy as np

from archopt.model.converter_loss import ConverterLoss
from archopt.model.evaluator import Detail
from archopt.model.parameters import BUCK, LINEAR, SINGLE, FloatArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES
from archopt.model.stages import mechanisms
from archopt.physics import bus_converter


def stage_mechanisms(problem: Problem, detail: Detail) -> list[dict[str, FloatArray]]:
    """Return each stage kind's losses by mechanism over the batch, (P, S, R) W, zero where another kind is."""
    states, hardware, solution = problem.states, detail.hardware, detail.solution
    shape = solution.stage_v.shape
    stage = np.broadcast_to(hardware.stage[:, None, :], shape)
    ambient = np.broadcast_to(states.ambient_degc[:, None], shape)
    output_v = np.broadcast_to(problem.rails.voltage_v, shape)
    on = np.broadcast_to(~states.off, shape)
    out = []
    for kind in (BUCK, SINGLE, LINEAR):
        here = on & (problem.stages.kind[stage] == kind)
        index = np.nonzero(here)
        arrays: dict[str, FloatArray] = {}
        if len(index[0]):
            found = mechanisms(
                problem.stages, kind, stage[index], hardware.running[index], solution.stage_v[index],
                output_v[index], solution.current_a[index], ambient[index],
            )  # fmt: skip
            for name, values in found.items():
                arrays[name] = np.zeros(shape)
                arrays[name][index] = values
            arrays["output bank"] = np.where(here, solution.stage_loss_w - sum(arrays.values()), 0.0)
        out.append(arrays)
    return out


def converter_mechanisms(problem: Problem, detail: Detail) -> dict[str, FloatArray]:
    """Return the bus converters' losses by mechanism, (P, S, 2) W."""
    states, hardware, solution = problem.states, detail.hardware, detail.solution
    if not len(problem.converters.names):
        return {}
    index = np.maximum(hardware.converter, 0)[:, None, :]
    loss = ConverterLoss.of(problem.converters, index)(
        solution.node_v[..., None],
        np.maximum(solution.bus_v, 1e-3),
        solution.bus_a / hardware.units_running,
        states.ambient_degc[:, None],
    )
    running = np.where(solution.bus_a > 0, hardware.units_running, 0)
    keys = bus_converter.MECHANISMS if loss.measured_w is None else (*bus_converter.MECHANISMS, "measured_w")
    return {word(key): getattr(loss, key) * running for key in keys}


def told(losses: dict[str, FloatArray], measured: bool) -> dict[str, FloatArray]:
    """Return the mechanisms of one part: a measured part's loss is one number, of others no measured one is told."""
    return {key: values for key, values in losses.items() if key == "output bank" or (key == "measured") == measured}


def word(field: str) -> str:
    """Return a mechanism's name in words."""
    return field.removesuffix("_w").replace("_", " ")


def all_losses(problem: Problem, detail: Detail) -> list[dict[str, dict[str, FloatArray]]]:
    """Return every loss of each design by part and mechanism over the states, (S,) W; together they balance."""
    states, hardware, solution = problem.states, detail.hardware, detail.solution
    by_kind = stage_mechanisms(problem, detail)
    converters = converter_mechanisms(problem, detail)
    out = []
    for p in range(len(detail.designs)):
        parts: dict[str, dict[str, FloatArray]] = {}
        for r, name in enumerate(problem.rails.names):
            kind = int(problem.stages.kind[hardware.stage[p, r]])
            tabled = problem.stages.measured[hardware.stage[p, r]] is not None
            parts[f"{name} stage"] = told({key: values[p, :, r] for key, values in by_kind[kind].items()}, tabled)
            parts[f"{name} pour"] = {"copper": solution.pour_w[p, :, r]}
        for bus in np.flatnonzero(hardware.converter[p] >= 0):
            tabled = problem.converters.measured[hardware.converter[p, bus]] is not None
            parts[f"{BUS_NAMES[bus]} converter"] = told({key: w[p, :, bus] for key, w in converters.items()}, tabled)
            parts[f"{BUS_NAMES[bus]} plane"] = {"copper": solution.plane_w[p, :, bus]}
        if hardware.bias[p] >= 0:
            delivered = solution.bias_out_w[p]
            parts["bias supply"] = {"gates": delivered, "conversion": solution.bias_in_w[p] - delivered}
        if hardware.supervisor[p] >= 0:
            parts["supervisor"] = {"supply": solution.supervisor_w[p]}
        own = np.full(len(states.name), problem.path.power_w)
        parts["input path"] = {"resistance": solution.path_w[p] - own, "supply": own}
        if states.tap_w.any():
            parts["taps"] = {"series resistance": states.tap_w}
        out.append(parts)
    return out
