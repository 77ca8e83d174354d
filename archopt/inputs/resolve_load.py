"""The load of a study: a time series, listed states or the default distribution, as one table of moments."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass

import numpy as np

from archopt.inputs.draft import Draft
from archopt.inputs.problems import Notebook, nearest, shown
from archopt.inputs.profile import ProfileLimits, read_profile
from archopt.inputs.resolved import FloatArray, LoadTable, Rail
from archopt.inputs.study_load import StateRow
from archopt.inputs.text_files import read_csv

YEAR_HOURS = 8760.0
LEAP_YEAR_HOURS = 8784.0
DEFAULT_LOAD = ((0.20, 0.15), (0.50, 0.40), (0.25, 0.60), (0.05, 0.90))  # share of hours, utilisation
MANY_RAILS = 6


@dataclass(frozen=True)
class ResolvedLoad:
    """The load table, None when it could not be read, and what belongs to it.

    hottest_degc is the hottest inlet that the load states, nan when it states none.
    """

    table: LoadTable | None
    coincidence: float
    growth: float
    hottest_degc: float


def resolve_load(draft: Draft, rails: Sequence[Rail], notebook: Notebook) -> ResolvedLoad:
    """Return the load of the rails that stand, in their order."""
    take = notebook.take
    many = len(draft.rail_names) > MANY_RAILS
    reason = f"{'above' if many else 'not above'} {MANY_RAILS} rails"
    coincidence = take("load.coincidence", draft.load.coincidence, 0.85 if many else 1.0, reason)
    growth = 1 + take("load.growth_percent", draft.load.growth_percent, 15.0, "plain default") / 100
    if draft.load.profile is not None and draft.load.states is not None:
        notebook.problem("load.profile", "a profile and states are both there; keep one")
        return ResolvedLoad(None, coincidence, growth, math.nan)
    if draft.load.profile is not None:
        table = _from_profile(draft, draft.load.profile, rails, coincidence, notebook)
    elif draft.load.states is not None:
        table = _from_states(draft, draft.load.states, rails, coincidence, notebook)
    else:
        if draft.load.covers is not None:
            notebook.problem("load.covers", "needs a profile or states beside it")
        table = _default(draft, rails, coincidence, notebook)
    hottest = math.nan
    if table is not None and np.isfinite(table.inlet_degc).any():
        hottest = float(np.nanmax(table.inlet_degc))
    return ResolvedLoad(table, coincidence, growth, hottest)


def _default(draft: Draft, rails: Sequence[Rail], coincidence: float, notebook: Notebook) -> LoadTable:
    """Return the default distribution of load."""
    hours = notebook.take("load.hours_per_year", draft.load.hours_per_year, YEAR_HOURS, "always on")
    told = ", ".join(f"{share:.0%} of hours at {use:.2f}" for share, use in DEFAULT_LOAD)
    notebook.assume("load.states", told, "no profile and no states")
    largest = np.array([rail.max_current_a for rail in rails]) * coincidence
    count = len(DEFAULT_LOAD)
    return LoadTable(
        hours=np.array([share * hours for share, _ in DEFAULT_LOAD]),
        current_a=np.array([use for _, use in DEFAULT_LOAD])[:, None] * largest[None, :],
        off=np.zeros((count, len(rails)), dtype=np.bool_),
        input_v=np.full(count, math.nan),
        inlet_degc=np.full(count, math.nan),
        label=tuple(f"{use:.0%} load" for _, use in DEFAULT_LOAD),
        series=False,
    )


def _from_profile(
    draft: Draft, shown_path: str, rails: Sequence[Rail], coincidence: float, notebook: Notebook
) -> LoadTable | None:
    """Return the moments of the profile, hours scaled to the year where it is a sample."""
    if not draft.rail_names:  # told with the rails; the file itself can still be checked
        read_csv(draft.folder / shown_path, shown_path, "the load profile", notebook)
        return None
    supply = draft.supply
    limits = ProfileLimits(
        rail_max_a={rail.name: rail.max_current_a for rail in rails},
        coincident_a={rail.name: rail.max_current_a * coincidence for rail in rails},
        **({"input_v": (supply.low_v, supply.high_v)} if supply is not None else {}),
    )
    names = [rail.name for rail in rails]
    profile = read_profile(draft.folder / shown_path, shown_path, names, draft.rail_names, limits, notebook)
    if profile is None:
        return None
    covers = notebook.take("load.covers", draft.load.covers, "year", "no sample declared")
    hours = _hours_of_year(draft, profile.hours, covers, True, shown_path, notebook)
    if hours is None:
        return None
    return LoadTable(
        hours=hours,
        current_a=profile.current_a,
        off=profile.off,
        input_v=profile.input_v,
        inlet_degc=profile.inlet_degc,
        label=tuple(f"row {line}" for line in profile.line),
        series=True,
        repeats=float(hours.sum() / profile.hours.sum()),
    )


def _from_states(
    draft: Draft, states: Sequence[StateRow], rails: Sequence[Rail], coincidence: float, notebook: Notebook
) -> LoadTable | None:
    """Return listed states as moments. Hours may be fewer than a year's: the board is off for the rest."""
    if not states:
        if not draft.content["load"]["states"]:
            notebook.problem("load.states", "there is no state")
        return None
    seen: set[str] = set()
    for state in states:
        if state.name in seen:
            notebook.problem(f"load.states.{state.name}.name", "there are two states of this name")
        seen.add(state.name)
        _check_state(draft, state, notebook)
    current_a = np.array([[_state_current(state, rail, coincidence) for rail in rails] for state in states])
    off = np.array([[rail.name in (state.off or ()) for rail in rails] for state in states], dtype=np.bool_)
    _check_currents(states, rails, current_a, notebook)
    stated = np.array([state.hours for state in states])
    hours = _hours_of_year(draft, stated, draft.load.covers, False, "", notebook)
    if hours is None:
        return None
    return LoadTable(
        hours=hours,
        current_a=np.where(off, 0.0, current_a.reshape(off.shape)),
        off=off,
        input_v=np.array([math.nan if state.input_v is None else state.input_v for state in states]),
        inlet_degc=np.array([math.nan if state.inlet_degc is None else state.inlet_degc for state in states]),
        label=tuple(state.name for state in states),
        series=False,
    )


def _state_current(state: StateRow, rail: Rail, coincidence: float) -> float:
    """Return a rail's current in a state, A: its own, else by utilisation, else its typical one."""
    if state.currents and rail.name in state.currents:
        return state.currents[rail.name]
    if state.utilisation is not None:
        return state.utilisation * rail.max_current_a * coincidence
    return rail.typical_current_a


def _check_state(draft: Draft, state: StateRow, notebook: Notebook) -> None:
    """Note names that are no rails, and an input voltage outside the range."""
    place = f"load.states.{state.name}"
    for key, names in (("currents", state.currents or {}), ("off", state.off or ())):
        for name in names:
            if name not in draft.rail_names:
                notebook.problem(f"{place}.{key}", f"there is no rail '{name}'; {nearest(name, draft.rail_names)}")
    for name in state.off or ():
        if name in (state.currents or {}):
            notebook.problem(f"{place}.off", f"'{name}' is off and has a current; keep one")
    supply = draft.supply
    if state.input_v is not None and supply is not None and not supply.low_v <= state.input_v <= supply.high_v:
        message = f"{state.input_v:g} V is outside the input range {supply.low_v:g} to {supply.high_v:g} V"
        notebook.problem(f"{place}.input_v", message)
    if state.utilisation is None and len(state.currents or {}) + len(state.off or ()) < len(draft.rail_names):
        notebook.assume(f"{place}.utilisation", "typical currents", "rails with no current of their own")


def _check_currents(
    states: Sequence[StateRow], rails: Sequence[Rail], current_a: FloatArray,
    notebook: Notebook,
) -> None:  # fmt: skip
    """Note currents below zero or above what the rail draws at most."""
    for state, row in zip(states, current_a, strict=True):
        for rail, current in zip(rails, row, strict=True):
            place = f"load.states.{state.name}.currents.{rail.name}"
            if current < 0:
                notebook.problem(place, f"{shown(float(current))} A is negative")
            elif current > rail.max_current_a * (1 + 1e-9):
                message = f"{shown(float(current))} A is above its max_current_a {rail.max_current_a:g} A"
                notebook.problem(place, message)


def _hours_of_year(
    draft: Draft, hours: FloatArray, covers: str | None, series: bool,
    shown_path: str, notebook: Notebook,
) -> FloatArray | None:  # fmt: skip
    """Return the hours of a year (M,), or None after noting a sum that is none."""
    total = float(hours.sum())
    place, file = ("column hours", shown_path) if series else ("load.states", None)
    if total <= 0:
        notebook.problem(place, "hours sum to 0", file)
        return None
    if covers == "sample":
        year = notebook.take("load.hours_per_year", draft.load.hours_per_year, YEAR_HOURS, "always on")
        return hours * (year / total)
    if total > LEAP_YEAR_HOURS * (1 + 1e-9):
        message = f"hours sum to {total:g}, more than the {YEAR_HOURS:g} of a year"
        notebook.problem(place, f'{message}; covers = "sample" scales them to a year', file)
        return None
    if covers == "year" and abs(total / YEAR_HOURS - 1) > 0.01:
        message = f"hours sum to {total:g}, a year has {YEAR_HOURS:g}"
        notebook.problem(place, f'{message}; covers = "sample" scales them to a year', file)
        return None
    if draft.load.hours_per_year is not None and abs(total / draft.load.hours_per_year - 1) > 0.01:
        message = f"{draft.load.hours_per_year:g} h, but the hours sum to {total:g}; leave it out"
        notebook.problem("load.hours_per_year", f'{message} or set covers = "sample"')
    return hours
