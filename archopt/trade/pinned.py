"""One design's hardware taken out of a problem: the same problem with nothing but its bus voltage to choose.

The choices of one design are the only ones left, so that tables are made in milliseconds and the decisions
that are stored with a design (schedule, running counts) can be made again under other rules.
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import replace

import numpy as np

from archopt.model.evaluator import Detail, Evaluation, Evaluator
from archopt.model.explain import limit_records
from archopt.model.parameters import IntArray
from archopt.model.problem import Problem
from archopt.model.space import CONTROL_NAMES, FIXED, Designs
from archopt.model.states import JUMP, StateTable, jump_currents, own_rails
from archopt.physics.arrays import FloatArray

BATCH = 64
AS_LISTED = -1.0  # instead of a percentage: the jumps that the study lists


def with_jump(problem: Problem, jump_percent: float) -> Problem:
    """Return the problem with another largest unannounced jump; states, bands and hours are kept.

    Parameters
    ----------
    jump_percent : of rated load; 0 where every jump is announced and the bus raised before it, 100 where
        anything may come at once; ``AS_LISTED`` changes nothing
    """
    if jump_percent == AS_LISTED:
        return problem
    study = replace(problem.study, control=replace(problem.study.control, jump_percent=jump_percent, jumps=()))
    states = problem.states
    after = jump_currents(study, states.mix_a, states.rated_a)
    jump = states.of_kind(JUMP)
    band = states.band[jump]
    current, off, useful = states.current_a.copy(), states.off.copy(), states.useful_w.copy()
    current[jump] = after[band]
    off[jump] = states.mix_off[band] & (after[band] <= 0)
    useful[jump] = after[band] @ np.array([rail.voltage_v for rail in own_rails(study)])
    changed: StateTable = replace(states, current_a=current, off=off, useful_w=useful, after_a=after)
    return replace(problem, study=study, states=changed)


def pinned_problem(problem: Problem, row: IntArray) -> Problem:
    """Return the problem with the hardware of one design as the only one on offer.

    Bus voltages are free over the whole grid, control free among the study's kinds, and the supervisor free.
    Pins on these, which a study may carry, do not hold here: the question is what another voltage would do.

    Parameters
    ----------
    row : (width,) in canonical form; its decisions are not read
    """
    designs = Designs(problem.layout, row[None])
    rails = np.arange(problem.layout.rails)
    feed_ok = np.zeros_like(problem.feed_ok)
    chosen = (rails, designs.rail("stage")[0], designs.rail("feed")[0])
    feed_ok[chosen] = problem.feed_ok[chosen]
    capacitor_ok = np.zeros_like(problem.capacitor_ok)
    held = (rails, designs.rail("bank")[0])
    capacitor_ok[held] = problem.capacitor_ok[held]
    return replace(
        problem,
        study=replace(problem.study, choices=replace(problem.study.choices, pins=bus_pins(problem))),
        feed_ok=feed_ok,
        capacitor_ok=capacitor_ok,
        space=replace(problem.space, allowed=allowed_columns(problem, row)),
    )


def bus_pins(problem: Problem) -> dict[str, tuple[str, ...]]:
    """Return a pin that keeps the buses in their order: which of the two is bus A is part of the hardware."""
    return {"bus_a.converter": ("none", *problem.converters.names)}


def allowed_columns(problem: Problem, row: IntArray) -> tuple[IntArray, ...]:
    """Return what each column may hold: the design's own value, but for voltages, control and supervisor."""
    layout = problem.layout
    allowed = [np.array([value], dtype=np.int64) for value in row[: len(problem.space.allowed)]]
    grid = np.arange(len(problem.grid_v), dtype=np.int64)
    kinds = [k for k, name in enumerate(CONTROL_NAMES) if name in problem.study.control.kinds]
    for bus in range(2):
        for field in ("nominal_v", "lower_v", "upper_v"):
            allowed[layout.bus(field).start + bus] = grid
        allowed[layout.bus("control").start + bus] = np.array(sorted({FIXED, *kinds}), dtype=np.int64)
    column = layout.board("supervisor")
    allowed[column] = np.arange(len(problem.supervisors.names) + 1, dtype=np.int64)
    return tuple(allowed)


def evaluate_exactly(evaluator: Evaluator, rows: IntArray) -> Evaluation:
    """Evaluate many decided rows by direct physics, a batch at a time."""
    return together(
        [evaluator.evaluate(rows[start : start + BATCH], exact=True) for start in range(0, len(rows), BATCH)]
    )


def together(parts: Sequence[Evaluation]) -> Evaluation:
    """Return the evaluations of several batches as one."""
    return Evaluation(
        rows=np.concatenate([part.rows for part in parts]),
        objectives=np.concatenate([part.objectives for part in parts]),
        droop_exact=np.concatenate([part.droop_exact for part in parts]),
        slack=np.concatenate([part.slack for part in parts]),
        violation=np.concatenate([part.violation for part in parts]),
    )


def best_row(objectives: FloatArray, violation: FloatArray) -> int:
    """Return the feasible design of least energy, then cost; the least violated where none is feasible."""
    feasible = violation <= 0.0
    if feasible.any():
        energy = np.where(feasible, objectives[:, 0], np.inf)
        return int(np.lexsort((objectives[:, 1], energy))[0])
    return int(np.argmin(violation))


def unmet_limits(evaluator: Evaluator, row: IntArray) -> list[str]:
    """Return the limits one decided row does not meet by direct physics, worst first, with their size."""
    detail: Detail = evaluator.detail(row[None], exact=True, explain=True)
    currency = evaluator.problem.study.economics.currency
    return [limit_sentence(record) for record in limit_records(detail, 0, currency) if record["slack"] < 0]


def limit_sentence(record: dict[str, object]) -> str:
    """Return a limit record in words: which limit, where, when, and how far beyond it."""
    place = " at ".join(str(part) for part in (record["limit"], record["where"]) if part)
    state = f", {record['state']}" if record.get("state") else ""
    slack = record["slack"]
    size = abs(float(slack)) if isinstance(slack, int | float) else float("nan")
    return f"{place}{state}: beyond by {size:.3g} {record['unit']}"
