"""The front of fixed-bus designs among what the search saw, beside the whole front.

This compares best with best: not the same hardware held at one voltage, but hardware chosen for a fixed bus
against hardware chosen for a moving one, as far as one search saw both.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from moocore import is_nondominated

from archopt.model.problem import Problem
from archopt.model.topology import has_moving_bus, topology_kinds
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.search.indicator import share
from archopt.trade.roles import energy_cost_front


@dataclass(frozen=True)
class FixedFront:
    """Fixed-bus designs nothing fixed beats, and how far they stand behind the whole front.

    Parameters
    ----------
    index : positions of the fixed front in the rows given, by energy
    hypervolume_share : of the whole front's hypervolume (energy, cost, droop), None where a front is empty
    energy_more_percent : (least, median, greatest) energy lost more at equal cost than the whole energy-cost
        front; measured at every cost of that front a fixed design can be had for. None where there is none
    least_loss_kwh : the least energy of a fixed design and of any design, None where a front is empty
    """

    index: IntArray
    hypervolume_share: float | None
    energy_more_percent: tuple[float, float, float] | None
    least_loss_kwh: tuple[float, float] | None


def bus_is_fixed(problem: Problem, rows: IntArray) -> BoolArray:
    """Return whether no bus of a design moves by the load, (P,): fixed, fixed ratio, or no bus at all."""
    return ~has_moving_bus(topology_kinds(problem, rows))


def fixed_front(problem: Problem, rows: IntArray, objectives: FloatArray) -> FixedFront:
    """Return the front of fixed-bus designs beside the whole front of what was seen.

    Parameters
    ----------
    rows : (P, width) feasible designs the search saw; the more of them, the fairer: an archive of the whole
        front alone has lost the fixed designs a moving one beats
    objectives : (P, 3)
    """
    values = np.asarray(objectives, dtype=np.float64)
    fixed = np.flatnonzero(bus_is_fixed(problem, rows)) if len(rows) else np.zeros(0, dtype=np.int64)
    if not len(fixed):
        return FixedFront(fixed, 0.0 if len(values) else None, None, None)
    kept = fixed[is_nondominated(values[fixed])]
    kept = kept[np.lexsort(values[kept].T[::-1])]
    whole = values[is_nondominated(values)]
    reach = equal_cost_percent(values[kept], values)
    return FixedFront(
        index=kept,
        hypervolume_share=share(values[kept], whole),
        energy_more_percent=reach,
        least_loss_kwh=(float(values[kept, 0].min()), float(values[:, 0].min())),
    )


def equal_cost_percent(fixed: FloatArray, every: FloatArray) -> tuple[float, float, float] | None:
    """Return the least, median and greatest extra energy of fixed designs at no more cost, percent."""
    front = every[energy_cost_front(every)]
    caps = front[:, 1] * (1.0 + 1e-9)
    best = np.array([fixed[fixed[:, 1] <= cap, 0].min(initial=np.inf) for cap in caps])
    reached = np.isfinite(best)
    if not reached.any():
        return None
    more = 100.0 * (best[reached] / front[reached, 0] - 1.0)
    return float(more.min()), float(np.median(more)), float(more.max())
