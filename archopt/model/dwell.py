"""Changes of bus voltage a year: how many, and how long a bus stays up after its load has fallen.

A supervisor that dwells steps a bus down only when the load has stayed in the lower band for so long. Short
valleys of the load then move nothing, and for the dwell itself the bus stands higher than its band asks for.
"""

from __future__ import annotations

from collections import deque
from dataclasses import replace

import numpy as np

from archopt.inputs.resolved import LoadTable, ResolvedStudy
from archopt.model.energy_states import EnergyStates
from archopt.model.parameters import FloatArray, IntArray

DAYS_PER_YEAR = 365.0
SECONDS_PER_HOUR = 3600.0
COUNTED_SHARE = 1e-3  # of the year: less than this spent above the own band is not counted as energy


def walk(band: IntArray, seconds: FloatArray, dwell_s: float, bands: int) -> tuple[FloatArray, FloatArray]:
    """Return how often the bus moves from band to band, and how long it is held, by band of load and of bus.

    Parameters
    ----------
    band, seconds : (M,) the load's band in consecutive moments and how long each lasts
    dwell_s : how long the load must have stayed below a band before the bus leaves it
    bands : number of bands

    Returns
    -------
    (B, B) moves from band to band, (B, B) seconds with the load in one band and the bus in a higher one
    """
    moves, held_s = np.zeros((bands, bands)), np.zeros((bands, bands))
    kept: deque[tuple[int, float]] = deque()  # bands the bus may not leave yet and until when, falling
    now_s, bus = 0.0, int(band[0])
    for load, lasts_s in zip(band.tolist(), seconds.tolist(), strict=True):
        end_s = now_s + lasts_s
        while kept and kept[-1][0] <= load:
            kept.pop()
        while now_s < end_s:
            while kept and kept[0][1] <= now_s:
                kept.popleft()
            level, until_s = kept[0] if kept else (load, end_s)
            until_s = min(until_s, end_s)
            moves[bus, level] += bus != level
            held_s[load, level] += until_s - now_s
            bus, now_s = level, until_s
        kept.append((load, end_s + dwell_s))
    np.fill_diagonal(held_s, 0.0)
    return moves, held_s


def moves_a_year(study: ResolvedStudy, load: LoadTable, band: IntArray, bands: int) -> tuple[FloatArray, FloatArray]:
    """Return (B, B) moves a year and (B, B) hours a year held, by band of load and of bus.

    As the study states them (from end to end of the load and back), else from the load series.
    """
    moves, held_h = np.zeros((bands, bands)), np.zeros((bands, bands))
    control = study.control
    if np.isfinite(control.transitions_per_day):
        if bands > 1:
            moves[0, -1] = moves[-1, 0] = DAYS_PER_YEAR * control.transitions_per_day / 2
            held_h[0, -1] = moves[-1, 0] * control.dwell_s / SECONDS_PER_HOUR
        return moves, held_h
    if load.series and len(load.hours) > 1:
        one_hours = load.hours / load.repeats
        moves, held_s = walk(band[: len(load.hours)], one_hours * SECONDS_PER_HOUR, control.dwell_s, bands)
        return moves * load.repeats, held_s / SECONDS_PER_HOUR * load.repeats
    return moves, held_h


def split_held(energy: EnergyStates, held_h: FloatArray) -> tuple[EnergyStates, EnergyStates | None]:
    """Return the energy states with the hours the bus follows, and those with the hours it is held up.

    Held hours of a band are shared by all of its states and spent at the mean band they are held in, rounded up.
    Where they are less than a thousandth of the year nothing is split.

    Parameters
    ----------
    held_h : (B, B) hours a year, by band of load and of bus
    """
    held = held_h.sum(axis=1)
    total = float(energy.hours.sum())
    if held.sum() <= COUNTED_SHARE * total:
        return energy, None
    own = np.bincount(energy.band, weights=energy.hours, minlength=len(held))
    share = np.minimum(held / np.maximum(own, 1e-12), 1.0)
    mean = held_h @ np.arange(len(held)) / np.maximum(held, 1e-12)
    to = np.ceil(mean - 1e-9).astype(np.int64)
    where = np.flatnonzero(share[energy.band] > 0)
    up = energy.take(where)
    up = replace(
        up,
        name=tuple(f"{name}, held in band {to[band] + 1}" for name, band in zip(up.name, up.band, strict=True)),
        hours=up.hours * share[up.band],
        band=to[up.band],
    )
    return replace(energy, hours=energy.hours * (1.0 - share[energy.band])), up
