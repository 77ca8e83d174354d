"""Everything asked of a front after a search: baselines, losing topologies, leverage and remarks."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np

from archopt.model.evaluator import Evaluator
from archopt.model.problem import Problem
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.driver import SearchResult
from archopt.search.published import Published
from archopt.trade.baselines import baselines
from archopt.trade.fixed_front import fixed_front
from archopt.trade.leverage import leverage
from archopt.trade.losing import losing
from archopt.trade.roles import knee

Data = dict[str, Any]


@dataclass(frozen=True)
class Answers:
    """What is printed beside a front."""

    baselines: list[Data]
    gains: list[Data]
    losing: list[Data]
    leverage: list[Data]
    notes: list[str]


def question(
    evaluator: Evaluator,
    found: SearchResult,
    published: Published,
    designs: Sequence[Data],
    today: IntArray | None,
) -> Answers:
    """Return baselines of the knee and of today's hardware, losing topologies, leverage and remarks."""
    problem = evaluator.problem
    best = published.rows[knee(published.objectives)]
    asked = [baselines(problem, best, "knee")]
    if today is not None:
        asked.append(baselines(problem, today, "incumbent"))
    called = {row.tobytes(): str(design["design"]) for row, design in zip(published.rows, designs, strict=True)}
    nearest = {name: (kind.row, kind.violation) for name, kind in found.kinds.items() if kind.violation > 0}
    rows, objectives = everything_kept(found)
    return Answers(
        baselines=[row for answer in asked for row in answer.rows],
        gains=[answer.summary for answer in asked if answer.summary],
        losing=losing(
            evaluator, rows, objectives, infeasible=nearest, names=[called.get(row.tobytes(), "") for row in rows]
        ),
        leverage=leverage(problem, best),
        notes=remarks(problem, rows, objectives),
    )


def everything_kept(found: SearchResult) -> tuple[IntArray, FloatArray]:
    """Return every feasible design the search kept: the archive, the fixed front, the best of each topology."""
    best = [kind for kind in found.kinds.values() if kind.violation <= 0]
    rows = np.concatenate([found.rows, found.fixed_rows, *(kind.row[None] for kind in best)])
    objectives = np.concatenate([found.objectives, found.fixed_objectives, *(kind.objectives[None] for kind in best)])
    _, first = np.unique(rows, axis=0, return_index=True)
    return rows[np.sort(first)], objectives[np.sort(first)]


def remarks(problem: Problem, rows: IntArray, objectives: FloatArray) -> list[str]:
    """Return what the front as a whole is worth remarking."""
    fixed = fixed_front(problem, rows, objectives)
    if fixed.hypervolume_share is None or fixed.least_loss_kwh is None:
        return []
    note = f"Boards chosen for a fixed bus reach {100 * fixed.hypervolume_share:.1f} % of the front's hypervolume"
    if fixed.energy_more_percent is not None:
        _, median, most = fixed.energy_more_percent
        note += f"; at equal cost they lose {median:.1f} % more energy in the median, {most:.1f} % at most"
    return [note + "."]
