"""The published front: the archive thinned, recomputed by direct physics with its stored decisions, filtered."""

from __future__ import annotations

from dataclasses import dataclass, replace

import numpy as np

from archopt.errors import InfeasibleError
from archopt.inputs.resolved import ResolvedStudy
from archopt.model.evaluator import Evaluator
from archopt.model.limits import INDEX, LIMITS
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.archive import Archive
from archopt.search.driver import SearchResult

PUBLISHED = 400
BATCH = 64


@dataclass(frozen=True)
class Published:
    """The thinned front recomputed by direct physics: decided rows (P, columns), objectives (P, 3)."""

    rows: IntArray
    objectives: FloatArray
    recomputed: int
    dropped: int

    def take(self, index: IntArray) -> Published:
        """Return some of the front."""
        return replace(self, rows=self.rows[index], objectives=self.objectives[index])


def publish(evaluator: Evaluator, found: SearchResult, picked: IntArray | None = None) -> Published:
    """Return the archive thinned, recomputed by direct physics with its stored decisions, and filtered again.

    picked : decided rows that were thinned already, in place of the archive's

    Raises
    ------
    InfeasibleError : nothing is left
    """
    if not len(found.rows):
        raise infeasible(found, evaluator.problem.study)
    if picked is None:
        thinned = Archive(found.rows.shape[1])
        thinned.add(found.rows, found.objectives)
        picked = thinned.rows[thinned.thin(limit=PUBLISHED)]
    exact = Archive(found.rows.shape[1])
    dropped = 0
    for start in range(0, len(picked), BATCH):
        real = picked[start : start + BATCH]
        evaluation = evaluator.evaluate(real, exact=True)
        kept = evaluation.feasible
        dropped += len(real) - len(kept)
        if len(kept):
            exact.add(evaluation.rows[kept], evaluation.objectives[kept])
    if not len(exact.rows):
        raise infeasible(found, evaluator.problem.study)
    order = np.lexsort((exact.objectives[:, 2], exact.objectives[:, 1], exact.objectives[:, 0]))
    return Published(exact.rows[order], exact.objectives[order], len(picked), dropped)


def infeasible(found: SearchResult, study: ResolvedStudy) -> InfeasibleError:
    """Return the error that names the limits no design could meet and by how much."""
    never = []
    caps = {
        "cost cap": (study.board.cost_cap, study.economics.currency),
        "area cap": (study.board.area_cap_cm2, "cm2"),
    }
    for name, excess in sorted(found.excess.items(), key=lambda item: -item[1]):
        limit = LIMITS[INDEX[name]]
        size = excess * limit.tolerance
        share = f"{100 * size:,.0f}" if size >= 1.0 else f"{100 * size:.2g}"
        text = f"{share} % of the limit" if limit.relative else f"{size:.3g} {limit.unit}"
        if name in caps:
            cap, unit = caps[name]
            text = f"{size * cap:,.2f} {unit}, {share} % of the cap of {cap:,g} {unit},"
        never.append(f"{name}: missed by at least {text} in every design tried")
    if not never:
        never = ["every limit was met by some design, but no design met all of them together"]
    return InfeasibleError("no design meets every limit", tuple(never))
