"""The rails of a study with every value filled in: budgets, copper, capacitors."""

from __future__ import annotations

import math

from archopt.inputs.catalogue_checks import voltage_fits
from archopt.inputs.choice_names import flatten
from archopt.inputs.draft import Draft
from archopt.inputs.parts import Capacitor
from archopt.inputs.problems import Notebook, nearest
from archopt.inputs.resolved import Catalogue, Rail
from archopt.inputs.study_load import RailRow

LEAST_BUDGET_PERCENT = 0.2
WIDTH_MM_PER_A = 1.5
LEAST_WIDTH_MM = 5.0
LARGEST_POUR_SHARE = 1 / 8
LARGEST_RATED = 4.0  # rated voltage over rail voltage of the capacitors taken by default
LEAST_RATED_V = 10.0


def is_core(row: RailRow) -> bool:
    """Return whether a rail is a core rail: below 1.2 V and above 20 A unless the study says."""
    return row.core if row.core is not None else row.voltage_v < 1.2 and row.max_current_a > 20


def resolve_rails(
    draft: Draft, catalogue: Catalogue, forbidden: frozenset[str], derating_voltage: float, notebook: Notebook
) -> tuple[Rail, ...]:
    """Return the rails that can stand, in study order; each fault is noted.

    Parameters
    ----------
    forbidden : names of parts that may not be used
    derating_voltage : share of rated capacitor voltage used
    """
    rails = tuple(_rail(draft, row, catalogue, forbidden, derating_voltage, notebook) for row in draft.rails)
    _check_relations(draft, {rail.name: rail for rail in rails}, notebook)
    return rails


def _rail(
    draft: Draft, row: RailRow, catalogue: Catalogue, forbidden: frozenset[str], derating_voltage: float,
    notebook: Notebook,
) -> Rail:  # fmt: skip
    """Return one rail."""
    core = is_core(row)

    def take(key: str, default: float, reason: str) -> float:
        return float(notebook.take(f"rails.{row.name}.{key}", getattr(row, key), default, reason))

    def wrong(key: str, message: str) -> None:
        place, file = draft.place(row.name, key)
        notebook.problem(place, message, file)

    half = 0.5 * row.max_current_a
    typical_a = take("typical_current_a", half, "50 % of maximum")
    step_a = take("step_a", half, "50 % of maximum")
    for key, value in (("typical_current_a", typical_a), ("step_a", step_a)):
        if value > row.max_current_a:
            wrong(key, f"{value:g} A is above max_current_a {row.max_current_a:g} A")
    kind, slew = ("core rail", 100.0) if core else ("logic", 10.0) if row.voltage_v < 2 else ("not core nor logic", 1.0)
    slew_a_per_us = take("slew_a_per_us", slew, kind)
    sensed = row.remote_sense
    if sensed is None:
        sensed = core
        notebook.assume(f"rails.{row.name}.remote_sense", sensed, "core rail" if core else "not a core rail")
    tolerance = take("tolerance_percent", 5.0, "+-5 % is usual")
    set_point = take("set_point_percent", 1.0, "plain default")
    ripple = take("ripple_percent", 0.5, "plain default")
    drop = take("drop_budget_percent", *((2.0, "sensed") if sensed else (0.3 * tolerance, "0.3 of the tolerance")))
    unsensed = 0.0 if sensed else drop
    budget = tolerance - set_point - ripple - unsensed
    if budget < LEAST_BUDGET_PERCENT:
        taken = f"set point {set_point:g} %" + f" and ripple {ripple:g} %"
        taken += f" and unsensed drop {unsensed:g} %" if unsensed else ""
        millivolt = budget / 100 * row.voltage_v * 1e3
        wrong(
            "tolerance_percent",
            f"the +-{tolerance:g} % leave {budget:.2f} % ({millivolt:.1f} mV) for droop after {taken}; "
            f"at least {LEAST_BUDGET_PERCENT:g} % must be left",
        )
    squares, area_cm2, width_mm = _copper(draft, row, core, notebook)
    tap = row.tap_of or ""
    return Rail(
        name=row.name,
        voltage_v=row.voltage_v,
        max_current_a=row.max_current_a,
        typical_current_a=typical_a,
        tolerance_percent=tolerance,
        step_a=step_a,
        slew_a_per_us=slew_a_per_us,
        droop_budget_v=budget / 100 * row.voltage_v,
        set_point_percent=set_point,
        ripple_percent=ripple,
        capacitors=_capacitors(draft, row, catalogue, forbidden, derating_voltage, notebook),
        remote_sense=sensed,
        squares=squares,
        copper_area_cm2=area_cm2,
        copper_width_mm=width_mm,
        drop_budget_percent=drop,
        step_group=notebook.take(f"rails.{row.name}.step_group", row.step_group, row.name, "steps alone"),
        parents=row.parents or (),
        tap_of=tap,
        tap_mohm=take("tap_mohm", 10.0, "ferrite or load switch") if tap else row.tap_mohm or 0.0,
        linear_only=bool(row.linear_only),
        core=core,
    )


def _copper(draft: Draft, row: RailRow, core: bool, notebook: Notebook) -> tuple[float, float, float]:
    """Return squares, area (cm2) and narrowest width (mm) of a rail's pour from what is stated.

    A plain pour is a strip: squares = length / width, area = length x width.
    """
    squares, area_cm2 = row.squares, row.copper_area_cm2
    width_mm, length_mm = row.copper_width_mm, row.copper_length_mm
    place = f"rails.{row.name}"
    if length_mm is not None and width_mm is not None:
        strip = length_mm / width_mm
        if squares is not None and abs(squares / strip - 1) > 0.01:
            where, file = draft.place(row.name, "squares")
            message = f"{squares:g} is not copper_length_mm / copper_width_mm = {strip:.3g}; keep one of them"
            notebook.problem(where, message, file)
        return strip, area_cm2 or length_mm * width_mm / 100, width_mm
    if length_mm is not None and squares is not None:
        width_mm = length_mm / squares
        return squares, area_cm2 or length_mm * width_mm / 100, width_mm
    if length_mm is not None:
        where, file = draft.place(row.name, "copper_length_mm")
        notebook.problem(where, "needs copper_width_mm or squares beside it", file)
    squares = notebook.take(f"{place}.squares", squares, 1.0 if core else 3.0, "core rail" if core else "not core")
    if area_cm2 is not None:
        width_mm = width_mm or math.sqrt(area_cm2 * 100 / squares)
        return squares, area_cm2, width_mm
    if width_mm is None:
        width_mm = max(LEAST_WIDTH_MM, WIDTH_MM_PER_A * row.max_current_a)
        reason = f"{WIDTH_MM_PER_A:g} mm an ampere, at least {LEAST_WIDTH_MM:g} mm"
        if draft.board is not None:
            most_mm = math.sqrt(draft.board.area_cm2 * 100 * LARGEST_POUR_SHARE / squares)
            if width_mm > most_mm:
                width_mm, reason = most_mm, "pour of an eighth of the board"
        notebook.assume(f"{place}.copper_width_mm", width_mm, reason)
    area_cm2 = squares * width_mm**2 / 100
    notebook.assume(f"{place}.copper_area_cm2", area_cm2, f"strip of {squares:g} squares, {width_mm:.3g} mm wide")
    return squares, area_cm2, width_mm


def _capacitors(
    draft: Draft,
    row: RailRow,
    catalogue: Catalogue,
    forbidden: frozenset[str],
    derating: float,
    notebook: Notebook,
) -> tuple[str, ...]:
    """Return the capacitors of a rail's bank: those stated, else all that stand its voltage."""
    offered = {
        name: part
        for name, part in catalogue.families["capacitors"].items()
        if isinstance(part, Capacitor) and name not in forbidden
    }
    place, file = draft.place(row.name, "capacitors")
    if row.capacitors is not None:
        for name in row.capacitors:
            part = offered.get(name)
            if part is None:
                notebook.problem(place, f"there is no capacitor '{name}'; {nearest(name, list(offered))}", file)
            elif not voltage_fits(part, row.voltage_v, derating):
                message = (
                    f"'{name}' is rated for {part.rated_v:g} V, "
                    f"with derating {part.rated_v * derating:g} V, below the rail's {row.voltage_v:g} V"
                )
                notebook.problem(place, message, file)
        return tuple(dict.fromkeys(row.capacitors))
    fitting = {name: part for name, part in offered.items() if voltage_fits(part, row.voltage_v, derating)}
    most_v = max(LEAST_RATED_V, LARGEST_RATED * row.voltage_v)
    suited = [name for name, part in fitting.items() if part.kind != "electrolytic" and part.rated_v <= most_v]
    named = _named_banks(draft, row.name)
    chosen = [name for name in fitting if name in suited or name in named] or list(fitting)
    if not chosen:
        highest = max((part.rated_v for part in offered.values()), default=0.0)
        place, file = draft.place(row.name, "voltage_v")
        message = (
            f"no capacitor offered stands {row.voltage_v:g} V: the highest is rated for {highest:g} V, "
            f"with derating {highest * derating:g} V"
        )
        notebook.problem(place, message, file)
        return ()
    return notebook.take(
        f"rails.{row.name}.capacitors", None, tuple(chosen), f"ceramic and polymer rated up to {most_v:g} V"
    )


def _named_banks(draft: Draft, rail: str) -> frozenset[str]:
    """Return the capacitors that pins and today's design name for a rail, which its bank may then use."""
    unread = Notebook(draft.file)
    pinned = flatten(draft.choices.pin or {}, "", unread)
    stated = flatten(draft.incumbent or {}, "", unread)
    return frozenset(name for choices in (pinned, stated) for name in choices.get(f"{rail}.bank", ()))


def _check_relations(draft: Draft, rails: dict[str, Rail], notebook: Notebook) -> None:
    """Note parents and taps that are not there, not of equal voltage, or in a circle."""
    for row in draft.rails:
        for name in row.parents or ():
            place, file = draft.place(row.name, "parents")
            if name not in draft.rail_names:
                notebook.problem(place, f"there is no rail '{name}'; {nearest(name, draft.rail_names)}", file)
            elif name == row.name:
                notebook.problem(place, "a rail cannot feed itself", file)
            elif name in rails and rails[name].voltage_v <= row.voltage_v:
                message = f"'{name}' has {rails[name].voltage_v:g} V, not above this rail's {row.voltage_v:g} V"
                notebook.problem(place, message, file)
            elif name in rails and rails[name].tap_of:
                notebook.problem(place, f"'{name}' is a tap; name the rail it taps, {rails[name].tap_of}", file)
        if row.tap_of:
            _check_tap(draft, row, rails, notebook)


def _check_tap(draft: Draft, row: RailRow, rails: dict[str, Rail], notebook: Notebook) -> None:
    """Note a tap whose parent is missing, itself a tap, or of another voltage."""
    place, file = draft.place(row.name, "tap_of")
    name = row.tap_of or ""
    if name not in draft.rail_names:
        notebook.problem(place, f"there is no rail '{name}'; {nearest(name, draft.rail_names)}", file)
    elif name == row.name:
        notebook.problem(place, "a rail cannot tap itself", file)
    elif name in rails and rails[name].tap_of:
        notebook.problem(place, f"'{name}' is itself a tap; tap {rails[name].tap_of}", file)
    elif name in rails and abs(rails[name].voltage_v / row.voltage_v - 1) > 1e-6:
        message = f"'{name}' has {rails[name].voltage_v:g} V, this rail {row.voltage_v:g} V; a tap's is equal"
        notebook.problem(place, message, file)
    if row.parents:
        notebook.problem(place, "a tap has no parents of its own", file)
