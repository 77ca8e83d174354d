"""What a measurement can tell of a catalogue row: candidate forms of each family, mapped onto the row's columns."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from itertools import chain, combinations
from typing import Any, Protocol

import numpy as np

from archopt.inputs.fitting import Fit, Form
from archopt.inputs.measured import MeasuredPoints, level_means
from archopt.inputs.parts import BuckStage, Part
from archopt.physics.arrays import FloatArray


class PartLosses(Protocol):
    """Losses of one unit of a part by mechanism, W in the shape (points,) of the operating points."""

    def __call__(
        self, part: Part, input_v: FloatArray, output_v: FloatArray, current_a: FloatArray, ambient_degc: FloatArray,
        own_heat: bool = True,
    ) -> Mapping[str, FloatArray]:
        """``own_heat`` False: the part is as warm as ``ambient_degc``, not warmer by its loss."""
        ...  # fmt: skip


@dataclass(frozen=True)
class Candidates:
    """Forms to choose from, how a fit becomes columns of the row, and what the points cannot tell."""

    forms: tuple[Form, ...]
    columns_of: Callable[[Fit], dict[str, Any]]
    untold: tuple[str, ...]


#: Mechanisms of a buck stage that a measurement can tell apart, and the columns they scale.
BUCK_GROUPS: dict[str, tuple[tuple[str, ...], tuple[str, ...]]] = {
    "resistance": (("high_side_conduction_w", "low_side_conduction_w"), ("high_side_mohm", "low_side_mohm")),
    "edges": (("overlap_w", "recovery_w"), ("edge_rise_ns", "edge_fall_ns", "recovery_nc")),
    "own supply": (("gate_w", "controller_w"), ("quiescent_ma", "high_side_gate_nc", "low_side_gate_nc")),
    "output charge": (("output_charge_w",), ("high_side_output_nc", "low_side_output_nc")),
    "dead time": (("dead_time_w",), ("dead_time_ns",)),
}
#: A resistance column must stay above 0; no scale falls below this.
LEAST_SCALE = 0.01


def part_temperature_degc(part: Part, points: MeasuredPoints) -> FloatArray:
    """Temperature (degC) of the part at each point (points,): local air and the measured loss times its own K/W."""
    result: FloatArray = points.temperature_degc + float(part.model_dump()["thermal_k_per_w"]) * points.loss_w
    return result


def converter_candidates(like: Part, points: MeasuredPoints, losses_of: PartLosses) -> Candidates:
    """Candidates of a bus converter or single stage: constant, switching with exponents, linear, resistive.

    How many numbers the constant part may have follows from how many voltages were measured.

    Parameters
    ----------
    like : row that gives what no measurement tells (thermal resistance, temperature coefficient, nominal voltages)
    points : measured points
    losses_of : physics of a row
    """
    temperature = part_temperature_degc(like, points)
    unit = like.model_copy(update={"fixed_w": 1.0, "switching_w": 1.0, "linear_w_per_a": 1.0, "resistance_mohm": 1e3})
    known: dict[tuple[float, float], dict[str, FloatArray]] = {}

    def mechanisms(a: float, b: float) -> dict[str, FloatArray]:
        if (a, b) not in known:
            row = unit.model_copy(update={"input_exponent": a, "output_exponent": b})
            at = (points.input_v, points.output_v, points.current_a, temperature)
            known[a, b] = dict(losses_of(row, *at, own_heat=False))
        return known[a, b]

    def form(terms: tuple[str, ...], free: tuple[str, ...]) -> Form:
        def columns(exponents: tuple[float, ...]) -> FloatArray:
            value = dict(zip(free, exponents, strict=True))
            found = mechanisms(value.get("input_exponent", 0.0), value.get("output_exponent", 0.0))
            return np.stack([found[term] for term in terms], axis=1)

        words = [WORDS[term] + (_of(free) if term == "switching_w" else "") for term in terms]
        return Form(", ".join(words), terms, columns, free)

    inputs, outputs = len(level_means(points.input_v)), len(level_means(points.output_v))
    constants: list[tuple[tuple[str, ...], tuple[str, ...]]] = [(("fixed_w",), ())]
    for free, levels in (
        (("input_exponent",), inputs),
        (("output_exponent",), outputs),
        (("input_exponent", "output_exponent"), min(inputs, outputs)),
    ):
        if levels >= 2:
            constants.append((("switching_w",), free))
        if levels >= 3:
            constants.append((("fixed_w", "switching_w"), free))
    loads = [("resistive_w",), ("linear_w",), ("linear_w", "resistive_w")]
    if len(level_means(points.current_a)) == 2:
        loads = loads[:2]
    forms = tuple(form((*terms, *load), free) for terms, free in constants for load in loads)
    untold = []
    if inputs < 2:
        untold.append("how loss varies with input voltage: one input voltage was measured")
    if outputs < 2:
        untold.append("how loss varies with output voltage: one output voltage was measured")
    return Candidates(forms, _converter_columns, tuple(untold))


WORDS = {
    "fixed_w": "fixed", "switching_w": "switching", "linear_w": "linear in current", "resistive_w": "resistive",
}  # fmt: skip


def _of(free: tuple[str, ...]) -> str:
    """Say which voltages an exponent is free in."""
    return f" by {' and '.join(name.removesuffix('_exponent') for name in free)} voltage" if free else ""


def _converter_columns(fit: Fit) -> dict[str, Any]:
    """Return the row's loss columns of a fit; what the form does not have is 0."""
    get = fit.coefficient.get
    return {
        "fixed_w": get("fixed_w", 0.0),
        "switching_w": get("switching_w", 0.0),
        "input_exponent": fit.exponent.get("input_exponent", 0.0),
        "output_exponent": fit.exponent.get("output_exponent", 0.0),
        "linear_w_per_a": get("linear_w", 0.0),
        "resistance_mohm": get("resistive_w", 0.0) * 1e3,
    }


def buck_candidates(like: BuckStage, points: MeasuredPoints, losses_of: PartLosses) -> Candidates:
    """Candidates of a buck stage: groups of mechanisms of the row ``like``, each scaled; the rest stays as it is.

    Inductor and input capacitor stay those of ``like``: they are parts of their own. The groups go with I^2,
    V I, V, V^1.5 and I, which is what a loss measurement tells apart; with one input voltage only those that
    differ in current are scaled.
    """
    temperature = part_temperature_degc(like, points)
    at = (points.input_v, points.output_v, points.current_a, temperature)
    found = losses_of(like, *at, own_heat=False)
    column = {name: sum((found[m] for m in of), np.zeros(len(points))) for name, (of, _) in BUCK_GROUPS.items()}
    groups = [name for name, loss in column.items() if float(np.max(loss)) > 0]
    untold = ["loss of inductor and input capacitor: parts of their own, taken as they are"]
    one_input = len(level_means(points.input_v)) < 2
    if one_input:
        untold.append("what goes with input voltage: one input voltage was measured")
    total = sum(found.values(), np.zeros(len(points)))

    def form(chosen: tuple[str, ...]) -> Form:
        matrix = np.stack([column[name] for name in chosen], axis=1)
        return Form(", ".join(chosen), chosen, lambda _: matrix, (), total - matrix.sum(axis=1))

    sets = chain.from_iterable(combinations(groups, count) for count in range(1, len(groups) + 1))
    alike = ({"edges", "dead time"}, {"own supply", "output charge"})
    forms = tuple(form(chosen) for chosen in sets if not (one_input and any(pair <= set(chosen) for pair in alike)))

    def columns_of(fit: Fit) -> dict[str, Any]:
        values = like.model_dump()
        changed: dict[str, Any] = {}
        for name, scale in fit.coefficient.items():
            for target in BUCK_GROUPS[name][1]:
                if target.endswith("gate_nc") and like.gate_supply == "bias":
                    continue  # drawn from the bias, not from the stage input
                changed[target] = values[target] * max(scale, LEAST_SCALE if target.endswith("mohm") else 0.0)
        return changed

    return Candidates(forms, columns_of, tuple(untold))
