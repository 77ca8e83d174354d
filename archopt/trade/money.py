"""Money over time: what a kilowatt-hour of loss costs, a design over its life, and when it pays back."""

from __future__ import annotations

import numpy as np

from archopt.inputs.resolved import ResolvedStudy
from archopt.physics.arrays import FloatArray


def money_per_kwh(study: ResolvedStudy) -> float:
    """Return what a kilowatt-hour lost on the board costs at the meter, cooling and supply included."""
    economics = study.economics
    return economics.energy_price_per_kwh * economics.cooling_overhead / economics.upstream_efficiency


def lifetime_costs(study: ResolvedStudy, objectives: FloatArray) -> FloatArray:
    """Return purchase plus the energy lost over the life of each design, (P,), currency a board.

    Parameters
    ----------
    objectives : (P, 3) or (P, 2): energy lost, kWh a year; cost of a board, currency
    """
    values = np.asarray(objectives, dtype=np.float64)
    return values[:, 1] + values[:, 0] * money_per_kwh(study) * study.economics.life_years


def payback_years(
    study: ResolvedStudy, objectives: FloatArray, reference: FloatArray | None
) -> list[float | None]:
    """Return after how many years each design has earned back what it costs more than a reference.

    0.0 where it costs no more and loses less. None where it never pays back: it saves no energy, or there is
    no reference. None says nothing against a design that is merely cheaper: it has nothing to earn back, and
    no energy saving to earn it with.

    Parameters
    ----------
    objectives : (P, 2 or 3) kWh a year and currency a board
    reference : (2 or 3,) the same of the incumbent, or None where there is none
    """
    values = np.asarray(objectives, dtype=np.float64)
    if reference is None:
        return [None] * len(values)
    saved = (reference[0] - values[:, 0]) * money_per_kwh(study)
    extra = values[:, 1] - reference[1]
    return [
        None if yearly <= 0.0 else max(0.0, float(more / yearly))
        for yearly, more in zip(saved, extra, strict=True)
    ]
