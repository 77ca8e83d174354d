"""What a search says of itself: how far it is, what it offers to be put by, and what it found."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from archopt.model.limits import LIMITS
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.record import BestOfKind, Record

NO_GROWTH = "no more growth"


class Keep(Protocol):
    """Offered the state of a search after each generation, with the designs tried so far."""

    def __call__(
        self, evaluations: int, state: Callable[[], dict[str, NDArray[Any]]], *, at_once: bool = False
    ) -> object:
        """Put the state by if it is time, or ``at_once``."""
        ...


@dataclass(frozen=True)
class Progress:
    """Where a search stands; ``budget``: the evaluations allowed.

    seconds_left: at the pace of late, until the budget is spent; a search that stops growing ends before.
    replicate, replicates: which of how many searches this is.
    """

    generation: int
    evaluations: int
    feasible: int
    archive: int
    hypervolume: float
    seconds: float
    seconds_left: float
    budget: int
    replicate: int = 0
    replicates: int = 1


@dataclass(frozen=True)
class SearchResult:
    """What a search found.

    rows, objectives: the archive (designs, columns) and (designs, 3); fixed_rows, fixed_objectives: the front
    of designs no bus of which moves. evaluations: completed designs evaluated. least_row: the least violated
    design, with least_violation. excess: limit -> least normalised excess seen in any design, for the limits
    no design met. kinds: topology -> its best design. ended: why the search stopped.
    """

    rows: IntArray
    objectives: FloatArray
    fixed_rows: IntArray
    fixed_objectives: FloatArray
    evaluations: int
    feasible: int
    generations: int
    seconds: float
    ended: str
    least_row: IntArray | None
    least_violation: float
    excess: dict[str, float]
    kinds: dict[str, BestOfKind]
    history: FloatArray


def progress_of(
    record: Record, generation: int, history: FloatArray, spent: float, pace: float, budget: int,
    seconds: float | None,
) -> Progress:  # fmt: skip
    """Return where a search stands; ``pace``: designs a second, lately."""
    left = max(budget - record.evaluations, 0) / max(pace, 1e-9)
    if seconds is not None:
        left = min(left, max(seconds - spent, 0.0))
    volume = float(history[-1]) if len(history) else 0.0
    return Progress(
        generation, record.evaluations, record.feasible, len(record.archive), volume, spent, left, budget
    )


def result_of(record: Record, generations: int, history: FloatArray, spent: float, ended: str) -> SearchResult:
    """Return what a search found."""
    excess = {
        limit.name: float(least)
        for limit, least in zip(LIMITS, record.least_excess, strict=True)
        if np.isfinite(least) and least > 0.0
    }
    return SearchResult(
        rows=record.archive.rows.copy(),
        objectives=record.archive.objectives.copy(),
        fixed_rows=record.fixed.rows.copy(),
        fixed_objectives=record.fixed.objectives.copy(),
        evaluations=record.evaluations,
        feasible=record.feasible,
        generations=generations,
        seconds=spent,
        ended=ended,
        least_row=record.least_row,
        least_violation=record.least_sum,
        excess=excess,
        kinds=dict(sorted(record.kinds.items())),
        history=history,
    )


def state_of(found: SearchResult) -> dict[str, NDArray[Any]]:
    """Return what a search found as plain arrays, for :func:`found_again`."""
    kinds = list(found.kinds.values())
    width = found.rows.shape[1]
    none = np.zeros((0, width), dtype=np.int64)
    return {
        "rows": found.rows,
        "objectives": found.objectives,
        "fixed_rows": found.fixed_rows,
        "fixed_objectives": found.fixed_objectives,
        "counts": np.array([found.evaluations, found.feasible, found.generations], dtype=np.int64),
        "seconds": np.array([found.seconds]),
        "ended": np.array([found.ended], dtype=np.str_),
        "least_row": none if found.least_row is None else found.least_row[None],
        "least_violation": np.array([found.least_violation]),
        "excess_names": np.array(list(found.excess), dtype=np.str_),
        "excess": np.array(list(found.excess.values()), dtype=np.float64),
        "kind_names": np.array(list(found.kinds), dtype=np.str_),
        "kind_rows": np.array([best.row for best in kinds], dtype=np.int64).reshape(-1, width),
        "kind_objectives": np.array([best.objectives for best in kinds], dtype=np.float64).reshape(-1, 3),
        "kind_violation": np.array([best.violation for best in kinds], dtype=np.float64),
        "history": found.history,
    }


def found_again(state: Mapping[str, NDArray[Any]]) -> SearchResult:
    """Return the result whose :func:`state_of` is given."""
    evaluations, feasible, generations = (int(count) for count in state["counts"])
    least = state["least_row"]
    kinds = (state["kind_names"], state["kind_rows"], state["kind_objectives"], state["kind_violation"])
    return SearchResult(
        rows=state["rows"],
        objectives=state["objectives"],
        fixed_rows=state["fixed_rows"],
        fixed_objectives=state["fixed_objectives"],
        evaluations=evaluations,
        feasible=feasible,
        generations=generations,
        seconds=float(state["seconds"][0]),
        ended=str(state["ended"][0]),
        least_row=least[0] if len(least) else None,
        least_violation=float(state["least_violation"][0]),
        excess={str(name): float(size) for name, size in zip(state["excess_names"], state["excess"], strict=True)},
        kinds={
            str(name): BestOfKind(row, values, float(violation))
            for name, row, values, violation in zip(*kinds, strict=True)
        },
        history=state["history"],
    )
