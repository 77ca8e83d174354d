"""Every feasible nondominated design the search has seen, and its thinning to a front a person can read."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from moocore import is_nondominated
from numpy.typing import NDArray

from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.search.operators import tell_apart

RANKING_DIGITS = 12

# Correctly rounded powers of ten: numpy's vectorised power may differ in the last bit between processors.
_POWER_OF_TEN: FloatArray = np.array([float(f"1e{exponent}") for exponent in range(301)])

# New designs that may wait before the archive is sorted anew.
_MOST_UNSETTLED = 1000

# Boxes grow by a tenth a notch, a thousandfold in all, before the droop step doubles.
_NOTCH, _NOTCHES = 1.1, 72

ENERGY, COST, DROOP = 0, 1, 2


def significant(values: FloatArray, digits: int = RANKING_DIGITS) -> FloatArray:
    """Values rounded to significant decimal digits, same shape.

    Values that are not finite pass through, -0.0 becomes 0.0, and what is smaller than 1e-280 stays as it is.
    Ranking compares rounded values, so that a last bit that differs between machines decides nothing.
    """
    result = np.array(values, dtype=np.float64) + 0.0
    usable = np.isfinite(result) & (np.abs(result) > 1e-280)
    chosen = result[usable]
    places = digits - 1 - np.floor(np.log10(np.abs(chosen))).astype(np.int64)
    power = _POWER_OF_TEN[np.minimum(np.abs(places), 300)]
    # an exact power, above or below the line: a product with 1e-3 would add an error of its own
    above, below = np.where(places >= 0, power, 1.0), np.where(places >= 0, 1.0, power)
    result[usable] = np.rint(chosen * above / below) / above * below
    return result


@dataclass(frozen=True, slots=True)
class Thinning:
    """The designs kept of an archive and the resolution that was reached.

    Parameters
    ----------
    indices : positions in the archive, ascending, shape (kept,)
    energy_resolution, cost_resolution : relative width of a box actually used
    droop_step : width of a box in droop, percent of the budget, actually used
    """

    indices: IntArray
    energy_resolution: float
    cost_resolution: float
    droop_step: float


class Archive:
    """An unbounded set of feasible nondominated designs in a fixed order, independent of the order of adding.

    Objectives are minimised, held and ranked rounded to 12 significant digits. Of designs with equal
    objectives the lexicographically first row stays. A row is held once; should a row come again with other
    objectives, the first ones stand.

    Parameters
    ----------
    n_columns : integers a design row has
    n_objectives : objectives a design has (at least 2)
    """

    def __init__(self, n_columns: int, n_objectives: int = 3) -> None:
        if n_columns < 1 or n_objectives < 2:
            raise ValueError("an archive needs a column and two objectives at least")
        # Settled designs: objectives in order, and where in the store each one's row is. The newest designs
        # wait beside them until somebody looks, so that adding a batch does not move the whole archive.
        self._store: IntArray = np.zeros((0, n_columns), dtype=np.int64)
        self._slot: IntArray = np.zeros(0, dtype=np.int64)
        self._objectives: FloatArray = np.zeros((0, n_objectives), dtype=np.float64)
        self._by_objective: FloatArray = np.zeros((n_objectives, 0), dtype=np.float64)
        self._new_rows: IntArray = np.zeros((0, n_columns), dtype=np.int64)
        self._new_objectives: FloatArray = np.zeros((0, n_objectives), dtype=np.float64)
        self._known: set[bytes] = set()

    def __len__(self) -> int:
        self._settle()
        return len(self._slot)

    @property
    def rows(self) -> IntArray:
        """Design rows, shape (designs, columns), sorted by objectives; a copy."""
        self._settle()
        return self._store[self._slot]

    @property
    def objectives(self) -> FloatArray:
        """Objectives, shape (designs, objectives), rounded to 12 significant digits; a copy."""
        self._settle()
        return self._objectives.copy()

    def add(self, rows: NDArray[np.integer[Any]], objectives: FloatArray) -> int:
        """Add feasible designs; return how many of them are now held and were not before.

        Parameters
        ----------
        rows : shape (count, columns), whole numbers
        objectives : shape (count, objectives), finite

        Raises
        ------
        ValueError : shapes that do not fit, rows that are not integers, objectives that are not finite
        """
        candidates, values = self._checked(rows, objectives)
        if not len(candidates):
            return 0
        order = _canonical_order(candidates, values)
        candidates, values = candidates[order], values[order]
        keep = is_nondominated(values)  # sorted: of equal objectives the first row stays
        candidates, values = candidates[keep], values[keep]
        keep = tell_apart(candidates, self._known)
        keep[keep] = [
            self._admits(row, point) for row, point in zip(candidates[keep], values[keep], strict=True)
        ]
        candidates, values = candidates[keep], values[keep]
        return self._join(candidates, values) if len(candidates) else 0

    def _admits(self, row: IntArray, point: FloatArray) -> bool:
        """Whether no settled design is as good; of equal objectives the first row in order counts."""
        end = int(np.searchsorted(self._by_objective[0], point[0], side="right"))
        as_good = self._by_objective[1, :end] <= point[1]
        for column in range(2, len(point)):
            as_good &= self._by_objective[column, :end] <= point[column]
        if not as_good.any():
            return True
        found = np.flatnonzero(as_good)
        if len(found) > 1 or (self._objectives[found[0]] != point).any():
            return False
        return bool(tuple(row) < tuple(self._store[self._slot[found[0]]]))

    def _join(self, candidates: IntArray, values: FloatArray) -> int:
        """Put designs that no settled one equals or beats among the new ones; how many stay."""
        fresh = np.repeat([False, True], [len(self._new_rows), len(candidates)])
        rows = np.concatenate([self._new_rows, candidates])
        objectives = np.concatenate([self._new_objectives, values])
        order = _canonical_order(rows, objectives)
        rows, objectives, fresh = rows[order], objectives[order], fresh[order]
        keep = is_nondominated(objectives)
        self._known.difference_update(row.tobytes() for row in rows[~keep])
        self._known.update(row.tobytes() for row in rows[keep & fresh])
        self._new_rows, self._new_objectives = rows[keep], objectives[keep]
        if len(self._new_rows) > _MOST_UNSETTLED:
            self._settle()
        return int((keep & fresh).sum())

    def _settle(self) -> None:
        """Merge the new designs into the settled ones and let go of what they beat."""
        if not len(self._new_rows):
            return
        slots = np.arange(len(self._store), len(self._store) + len(self._new_rows))
        slot = np.concatenate([slots, self._slot])
        objectives = np.concatenate([self._new_objectives, self._objectives])
        # new ones stand first and the sort is stable: of equals the new one is kept, as _admits decided
        order = np.lexsort(objectives.T[::-1])
        slot, objectives = slot[order], objectives[order]
        keep = is_nondominated(objectives)
        self._store = np.concatenate([self._store, self._new_rows])
        self._known.difference_update(row.tobytes() for row in self._store[slot[~keep]])
        self._slot, self._objectives = slot[keep], objectives[keep]
        self._by_objective = np.ascontiguousarray(self._objectives.T)
        self._new_rows, self._new_objectives = self._new_rows[:0], self._new_objectives[:0]
        if len(self._store) > 2 * len(self._slot) + _MOST_UNSETTLED:
            self._store, self._slot = self._store[self._slot], np.arange(len(self._slot))

    def _checked(self, rows: NDArray[np.integer[Any]], objectives: FloatArray) -> tuple[IntArray, FloatArray]:
        given = np.asarray(rows)
        values = np.asarray(objectives, dtype=np.float64)
        if given.dtype.kind not in "iu":
            raise ValueError("design rows are whole numbers")
        if given.ndim != 2 or given.shape[1] != self._store.shape[1]:
            raise ValueError(f"design rows have {self._store.shape[1]} columns, got shape {given.shape}")
        if values.shape != (len(given), self._objectives.shape[1]):
            raise ValueError(f"objectives of shape {values.shape} do not fit {len(given)} rows")
        if not np.isfinite(values).all():
            raise ValueError("an objective is not finite; only feasible designs belong in the archive")
        return np.ascontiguousarray(given, dtype=np.int64), significant(values)

    def thin(
        self,
        limit: int = 400,
        energy_resolution: float = 0.003,
        cost_resolution: float = 0.003,
        droop_step: float = 2.0,
    ) -> IntArray:
        """Positions of the designs kept by :meth:`thinning`, ascending."""
        return self.thinning(limit, energy_resolution, cost_resolution, droop_step).indices

    def thinning(
        self,
        limit: int = 400,
        energy_resolution: float = 0.003,
        cost_resolution: float = 0.003,
        droop_step: float = 2.0,
        preferred: IntArray | None = None,
    ) -> Thinning:
        """Keep one design a box of the declared resolution and the extreme designs of each objective.

        Boxes are equal in the logarithm of energy and of cost and in droop, anchored at the least of each.
        They grow in energy and cost until at most ``limit`` designs are kept; only where a thousandfold
        growth is not enough does the droop step double. So each droop step keeps its own energy-cost front.
        Within a box the design stays that holds its place on the energy-cost front the longest as larger
        droops are admitted; then the one nearest the box's ideal corner; then the first in order.

        Parameters
        ----------
        limit : most designs kept, at least 3
        energy_resolution, cost_resolution : relative width of a box
        droop_step : width of a box, percent of the droop budget
        preferred : rank of each design, shape (designs,); in a box only the highest rank is looked at

        Raises
        ------
        ValueError : fewer than 3 allowed, a width that is not positive, other than three objectives,
            or an energy or cost that is not positive
        """
        if limit < 3 or min(energy_resolution, cost_resolution, droop_step) <= 0.0:
            raise ValueError("thinning needs a limit of 3 or more and positive widths")
        if self._objectives.shape[1] != 3:
            raise ValueError("thinning is declared for energy, cost and droop")
        values = self.objectives
        if not len(values):
            empty = np.zeros(0, dtype=np.int64)
            return Thinning(empty, energy_resolution, cost_resolution, droop_step)
        if (values[:, :DROOP] <= 0.0).any():
            raise ValueError("energy and cost must be positive to be thinned by a relative resolution")
        logs = np.log(values[:, :DROOP])
        logs -= logs.min(axis=0)
        held = _held_until(values, droop_step)
        extremes = _extremes(values)

        def kept(notch: int, step: float) -> IntArray:
            widths = np.log1p(np.array([energy_resolution, cost_resolution]) * _NOTCH**notch)
            return _one_a_box(values, logs / widths, step, held, extremes, preferred)

        step, last = droop_step, _NOTCHES
        while len(kept(last, step)) > limit:
            step, last = 2.0 * step, last + 8
        # the finest notch that fits: try it, then gallop, then halve the gap
        failed, fits = -1, 0
        while fits < last and len(kept(fits, step)) > limit:
            failed, fits = fits, min(2 * fits + 1, last)
        while fits - failed > 1:
            middle = (failed + fits) // 2
            failed, fits = (failed, middle) if len(kept(middle, step)) <= limit else (middle, fits)
        growth = _NOTCH**fits
        return Thinning(kept(fits, step), energy_resolution * growth, cost_resolution * growth, step)

    def state(self) -> dict[str, NDArray[Any]]:
        """Everything the archive holds, as plain arrays that :meth:`from_state` takes back."""
        return {"rows": self.rows, "objectives": self.objectives}

    @classmethod
    def from_state(cls, state: Mapping[str, NDArray[Any]]) -> Archive:
        """An archive equal to the one whose :meth:`state` is given.

        Raises
        ------
        ValueError : arrays that are no archive: wrong shapes, not finite, dominated, repeated or out of order
        """
        rows, objectives = np.asarray(state["rows"]), np.asarray(state["objectives"])
        if rows.ndim != 2 or objectives.ndim != 2:
            raise ValueError("the state of an archive holds two matrices")
        archive = cls(rows.shape[1], objectives.shape[1])
        archive.add(rows, objectives)
        if not (np.array_equal(archive.rows, rows) and np.array_equal(archive.objectives, objectives)):
            raise ValueError("the state given is not that of an archive")
        return archive


def _canonical_order(rows: IntArray, objectives: FloatArray) -> IntArray:
    """Order by objectives, first objective first, then by row; rows are looked at only among equals."""
    order = np.lexsort(objectives.T[::-1])
    ordered = objectives[order]
    same = (ordered[1:] == ordered[:-1]).all(axis=1)
    if same.any():
        group = np.concatenate([[0], np.cumsum(~same)])
        order = order[np.lexsort((*rows[order].T[::-1], group))]
    return order


def _held_until(values: FloatArray, droop_step: float) -> FloatArray:
    """Largest droop box a design stays on the energy-cost front of all designs up to that box; shape (N,)."""
    box = _droop_box(values, droop_step)
    held = box.copy()
    alive: BoolArray = np.zeros(len(values), dtype=np.bool_)
    for level in np.unique(box):
        # designs off an earlier front stay off every later one
        member = np.flatnonzero(alive | (box == level))
        front = member[is_nondominated(values[member][:, :DROOP], keep_weakly=True)]
        alive[:] = False
        alive[front] = True
        held[front] = level
    return held


def _extremes(values: FloatArray) -> IntArray:
    """Positions of the least energy, least cost and least droop; ties go to the better other objectives."""
    orders = ((ENERGY, COST, DROOP), (COST, ENERGY, DROOP), (DROOP, ENERGY, COST))
    firsts = [np.lexsort(tuple(values[:, column] for column in order[::-1]))[0] for order in orders]
    return np.unique(np.array(firsts, dtype=np.int64))


def _one_a_box(
    values: FloatArray, scaled: FloatArray, droop_step: float, held: FloatArray, extremes: IntArray,
    preferred: IntArray | None = None,
) -> IntArray:  # fmt: skip
    """Positions kept: the extremes, and the best design of every box that holds no extreme."""
    energy_box, cost_box = np.floor(scaled).T
    droop_box = _droop_box(values, droop_step)
    corner = (scaled - np.floor(scaled)).sum(axis=1)
    extreme = np.zeros(len(values), dtype=np.bool_)
    extreme[extremes] = True
    rank = np.zeros(len(values)) if preferred is None else -preferred
    order = np.lexsort((corner, -held, rank, ~extreme, droop_box, cost_box, energy_box))
    box = np.column_stack([energy_box, cost_box, droop_box])[order]
    first = np.concatenate([[True], (box[1:] != box[:-1]).any(axis=1)])
    return np.union1d(order[first], extremes)


def _droop_box(values: FloatArray, droop_step: float) -> FloatArray:
    """Whole number of droop steps above the least droop, shape (N,)."""
    # a droop that is a whole number of steps must not fall into the box below by its last bit
    steps: FloatArray = np.floor((values[:, DROOP] - values[:, DROOP].min()) / droop_step + 1e-9)
    return steps
