"""How good a front is, by hypervolume on a declared scale, and when a search has stopped getting better."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from moocore import hypervolume
from numpy.typing import NDArray

from archopt.physics.arrays import FloatArray

# A loose reference point flatters every front: at 1.1 the corners count but do not drown the middle.
REFERENCE_POINT = 1.1


@dataclass(frozen=True, slots=True)
class Scale:
    """The ideal and the nadir of a reference front, mapped to 0 and 1 in each objective.

    Parameters
    ----------
    ideal, nadir : shape (objectives,)
    """

    ideal: FloatArray
    nadir: FloatArray

    @classmethod
    def of(cls, front: FloatArray) -> Scale:
        """The scale of a nondominated front, shape (designs, objectives).

        Raises
        ------
        ValueError : an empty front, or one that is not finite
        """
        values = np.asarray(front, dtype=np.float64)
        if values.ndim != 2 or not len(values) or not np.isfinite(values).all():
            raise ValueError("a scale needs a front of finite objectives")
        return cls(values.min(axis=0), values.max(axis=0))

    @property
    def width(self) -> FloatArray:
        """Nadir less ideal; where they agree, the size of the ideal, or 1; shape (objectives,)."""
        width = self.nadir - self.ideal
        fallback = np.where(self.ideal != 0.0, np.abs(self.ideal), 1.0)
        return np.where(width > 0.0, width, fallback)

    def hypervolume(self, objectives: FloatArray) -> float:
        """Scaled hypervolume to the reference point 1.1 in each; objectives of shape (designs, objectives).

        An objective that is constant in the reference front is scaled by its own size.
        """
        values = np.asarray(objectives, dtype=np.float64)
        if not len(values):
            return 0.0
        if not np.isfinite(values).all():
            raise ValueError("hypervolume needs finite objectives")
        corner = np.full(len(self.ideal), REFERENCE_POINT)
        return float(hypervolume((values - self.ideal) / self.width, corner))


def share(front: FloatArray, reference_front: FloatArray) -> float:
    """Hypervolume of a front as a share of the reference front's, on the reference front's scale."""
    scale = Scale.of(reference_front)
    return scale.hypervolume(front) / scale.hypervolume(reference_front)


class Stagnation:
    """Says when the archive's hypervolume has stopped growing.

    The scale is fixed from the archive after a few generations and does not follow it: a scale that moved
    would count as growth or loss. But an early archive may reach far beyond the later one, and on so loose a
    scale every late gain looks small. So when growth ends, the scale is compared with the archive of that
    moment; where the archive has become narrower by a fifth in an objective, the scale is fixed anew and the
    count starts again. Only growth that ends on a tight scale stops the search.

    Parameters
    ----------
    generations : length of the window
    least_growth : relative growth of hypervolume over the window below which it has stopped
    fix_after : generations with a non-empty archive before the scale is fixed
    """

    def __init__(self, generations: int = 30, least_growth: float = 0.001, fix_after: int = 5) -> None:
        if generations < 1 or least_growth <= 0.0 or fix_after < 1:
            raise ValueError("a stagnation rule needs positive numbers")
        self.generations = generations
        self.least_growth = least_growth
        self.fix_after = fix_after
        self.scale: Scale | None = None
        self._seen = 0
        self._history: list[float] = []

    @property
    def history(self) -> FloatArray:
        """Hypervolume after each generation since the scale was last fixed."""
        return np.array(self._history, dtype=np.float64)

    def update(self, objectives: FloatArray) -> bool:
        """Record the archive's objectives after one generation, shape (designs, n); True when to stop."""
        if not len(objectives):
            return False
        self._seen += 1
        if self._seen < self.fix_after:
            return False
        if self.scale is None:
            self.scale = Scale.of(objectives)
        self._history.append(self.scale.hypervolume(objectives))
        if len(self._history) <= self.generations:
            return False
        before, now = self._history[-1 - self.generations], self._history[-1]
        if now - before >= self.least_growth * max(before, 1e-12):
            return False
        present = Scale.of(objectives)
        if (present.width < 0.8 * self.scale.width).any():
            self.scale = present
            self._history = [present.hypervolume(objectives)]
            return False
        return True

    def state(self) -> dict[str, NDArray[Any]]:
        """What has been recorded, as plain arrays for :meth:`restore`."""
        scale = self.scale or Scale(np.zeros(0), np.zeros(0))
        return {
            "seen": np.array([self._seen], dtype=np.int64),
            "history": self.history,
            "ideal": scale.ideal.copy(),
            "nadir": scale.nadir.copy(),
        }

    def restore(self, state: Mapping[str, NDArray[Any]]) -> None:
        """Go on from a :meth:`state` of a rule with the same parameters."""
        self._seen = int(np.asarray(state["seen"])[0])
        self._history = [float(value) for value in np.asarray(state["history"])]
        ideal, nadir = np.asarray(state["ideal"], np.float64), np.asarray(state["nadir"], np.float64)
        self.scale = Scale(ideal, nadir) if len(ideal) else None
