"""What the load may do at once: one largest jump, the jumps of a load series, or jumps between listed states."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from archopt.inputs.draft import Draft
from archopt.inputs.problems import Notebook, nearest
from archopt.inputs.resolve_load import ResolvedLoad
from archopt.inputs.resolved import Jump, LoadTable, Rail

DEFAULT_PERCENT = 100.0


@dataclass(frozen=True)
class ResolvedJump:
    """The largest unannounced jump in percent of rated load, and the listed jumps that stand instead of it."""

    percent: float
    listed: tuple[Jump, ...] = ()


def resolve_jump(draft: Draft, rails: Sequence[Rail], load: ResolvedLoad, notebook: Notebook) -> ResolvedJump:
    """Return what the load may do at once, by the one way the study states it."""
    table, key = draft.control, "control.largest_unannounced_jump_percent"
    stated = table.largest_unannounced_jump_percent
    ways = (stated is not None, bool(table.jumps_from_series), table.jumps is not None)
    if sum(ways) > 1:
        notebook.problem(
            key, "the jump is stated in two ways; keep one of a percentage, jumps_from_series and [[control.jumps]]"
        )
        return ResolvedJump(DEFAULT_PERCENT)
    if table.jumps is not None:
        return ResolvedJump(DEFAULT_PERCENT, _listed(draft, notebook))
    if table.jumps_from_series:
        return ResolvedJump(_from_series(rails, load, notebook))
    reason = "the whole load may come at once until it is known not to"
    return ResolvedJump(notebook.take(key, stated, DEFAULT_PERCENT, reason))


def _listed(draft: Draft, notebook: Notebook) -> tuple[Jump, ...]:
    """Return the listed jumps, their states among those of the load."""
    names = [state.name for state in draft.load.states or ()]
    if not names:
        notebook.problem("control.jumps", "jumps go between [[load.states]]; this load has none listed")
        return ()
    for number, row in enumerate(draft.control.jumps or (), start=1):
        for end in (row.before, row.after):
            if end not in names:
                notebook.problem(f"control.jumps.{number}", f"there is no state '{end}'; {nearest(end, names)}")
    return tuple(Jump(row.before, row.after, row.announced) for row in draft.control.jumps or ())


def _from_series(rails: Sequence[Rail], load: ResolvedLoad, notebook: Notebook) -> float:
    """Return the largest rise of the load from one row of the profile to the next, percent of rated load."""
    place = "control.jumps_from_series"
    if load.table is None:
        return DEFAULT_PERCENT
    if not load.table.series or len(load.table.hours) < 2:
        notebook.problem(place, "needs a load profile of two rows or more; state the jump in percent instead")
        return DEFAULT_PERCENT
    percent = largest_rise_percent(rails, load.table, load.coincidence)
    notebook.assume("control.largest_unannounced_jump_percent", f"{percent:.4g}", "largest rise of the load profile")
    return percent


def largest_rise_percent(rails: Sequence[Rail], load: LoadTable, coincidence: float) -> float:
    """Return the largest rise of useful power between consecutive rows, percent of the coincident maximum.

    Parameters
    ----------
    rails : in the order of the table's columns
    load : a time series of two rows or more
    coincidence : share of the maxima drawn at once
    """
    volts = np.array([rail.voltage_v for rail in rails])
    power_w = np.where(load.off, 0.0, load.current_a) @ volts
    rated_w = float(volts @ np.array([rail.max_current_a for rail in rails])) * coincidence
    return float(np.clip(100.0 * np.diff(power_w).max() / rated_w, 0.0, 100.0))
