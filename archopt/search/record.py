"""What a search has found: the archive, and beside it what a report needs that the front does not hold."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from archopt.model.evaluator import Evaluation
from archopt.model.limits import LIMITS
from archopt.model.problem import Problem
from archopt.model.space import PARENT, Designs
from archopt.model.topology import has_moving_bus, kind_words, topology_kinds
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.archive import Archive


@dataclass(frozen=True)
class BestOfKind:
    """The best design seen of one topology: feasible if any was, else the nearest to feasible."""

    row: IntArray
    objectives: FloatArray
    violation: float


@dataclass
class Record:
    """Everything kept of the designs evaluated so far.

    least_violation (limits,): smallest normalised excess of each limit in any design whose other limits hold
    or not; 0 where some design met it. kinds: topology -> best design by lifetime cost.
    """

    problem: Problem
    price: float
    archive: Archive
    fixed: Archive
    evaluations: int = 0
    feasible: int = 0
    least_row: IntArray | None = None
    least_sum: float = np.inf
    least_excess: FloatArray = field(default_factory=lambda: np.full(len(LIMITS), np.inf))
    kinds: dict[str, BestOfKind] = field(default_factory=dict)

    @classmethod
    def of(cls, problem: Problem, price: float) -> Record:
        """Return an empty record; ``price`` is money a kWh a year for lifetime cost."""
        width = problem.layout.width
        return cls(problem, price, Archive(width), Archive(width))

    def add(self, evaluation: Evaluation, real: int) -> int:
        """Take in the first ``real`` designs of a batch; return how many entered the archive."""
        rows, objectives = evaluation.rows[:real], evaluation.objectives[:real]
        violation, slack = evaluation.violation[:real], evaluation.slack[:real]
        self.evaluations += real
        self.least_excess = np.minimum(self.least_excess, np.maximum(-slack, 0.0).min(axis=0))
        ok = np.flatnonzero(violation <= 0.0)
        self.feasible += len(ok)
        worst = int(violation.argmin())
        if violation[worst] < self.least_sum:
            self.least_sum = float(violation[worst])
            self.least_row = rows[worst].copy()
        self.note_kinds(rows, objectives, violation)
        if not len(ok):
            return 0
        still = ok[is_fixed(self.problem, rows[ok])]
        if len(still):
            self.fixed.add(rows[still], objectives[still])
        return self.archive.add(rows[ok], objectives[ok])

    def note_kinds(self, rows: IntArray, objectives: FloatArray, violation: FloatArray) -> None:
        """Keep the best of every topology in the batch."""
        lifetime = objectives[:, 1] + self.price * objectives[:, 0]
        score = np.where(violation <= 0.0, lifetime, 1e9 + np.minimum(violation, 1e9))
        kinds = topology_kinds(self.problem, rows)
        for kind in np.unique(kinds):
            here = np.flatnonzero(kinds == kind)
            best = here[score[here].argmin()]
            name = kind_words(int(kind))
            known = self.kinds.get(name)
            if known is None or score[best] < score_of(known, self.price):
                self.kinds[name] = BestOfKind(
                    rows[best].copy(), objectives[best].copy(), float(violation[best])
                )

    def state(self) -> dict[str, NDArray[Any]]:
        """Everything recorded, as plain arrays for :meth:`restore`."""
        kinds = [self.kinds[name] for name in self.kinds]
        width = self.problem.layout.width
        none = np.zeros((0, width), dtype=np.int64)
        return {
            **{f"archive_{name}": values for name, values in self.archive.state().items()},
            **{f"fixed_{name}": values for name, values in self.fixed.state().items()},
            "counts": np.array([self.evaluations, self.feasible], dtype=np.int64),
            "least_row": none if self.least_row is None else self.least_row[None],
            "least_sum": np.array([self.least_sum]),
            "least_excess": self.least_excess.copy(),
            "kind_names": np.array(list(self.kinds), dtype=np.str_),
            "kind_rows": np.array([best.row for best in kinds], dtype=np.int64).reshape(-1, width),
            "kind_objectives": np.array([best.objectives for best in kinds], dtype=np.float64).reshape(-1, 3),
            "kind_violation": np.array([best.violation for best in kinds], dtype=np.float64),
        }

    def restore(self, state: Mapping[str, NDArray[Any]]) -> None:
        """Go on from a :meth:`state` of a record of the same problem.

        Raises
        ------
        ValueError : arrays that do not fit
        """
        self.archive, self.fixed = (
            Archive.from_state({name: state[f"{which}_{name}"] for name in ("rows", "objectives")})
            for which in ("archive", "fixed")
        )
        least = np.asarray(state["least_row"], dtype=np.int64)
        excess = np.asarray(state["least_excess"], dtype=np.float64)
        width = self.problem.layout.width
        if {least.shape[1], state["kind_rows"].shape[1], state["archive_rows"].shape[1]} != {width}:
            raise ValueError(f"a record of rows that are not {width} columns wide does not fit this problem")
        if excess.shape != self.least_excess.shape:
            raise ValueError(f"a record of {len(excess)} limits does not fit {len(LIMITS)}")
        self.evaluations, self.feasible = (int(count) for count in state["counts"])
        self.least_row = least[0] if len(least) else None
        self.least_sum = float(state["least_sum"][0])
        self.least_excess = excess
        columns = (state["kind_names"], state["kind_rows"], state["kind_objectives"], state["kind_violation"])
        self.kinds = {
            str(name): BestOfKind(row.astype(np.int64), values.astype(np.float64), float(violation))
            for name, row, values, violation in zip(*columns, strict=True)
        }


def score_of(best: BestOfKind, price: float) -> float:
    """Return what a best design is compared by: lifetime cost, or its violation where infeasible."""
    if best.violation <= 0.0:
        return float(best.objectives[1] + price * best.objectives[0])
    return 1e9 + min(best.violation, 1e9)


def is_fixed(problem: Problem, rows: IntArray) -> IntArray:
    """Return the positions of designs no bus of which moves."""
    return np.flatnonzero(~has_moving_bus(topology_kinds(problem, rows)))


def has_parents(problem: Problem, rows: IntArray) -> IntArray:
    """Return the positions of designs with a rail fed from another rail."""
    feed = Designs(problem.layout, rows).rail("feed")
    return np.flatnonzero((feed >= PARENT).any(axis=1))
