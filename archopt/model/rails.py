"""The rails that have a stage of their own, as SI arrays."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.inputs.resolved import ResolvedStudy
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.states import own_rails


@dataclass(frozen=True)
class RailArrays:
    """Per rail with a stage of its own, (R,)."""

    names: tuple[str, ...]
    voltage_v: FloatArray
    max_a: FloatArray  # own maximum with its taps, grown
    step_a: FloatArray  # largest of its own and its taps', grown
    load_slew_a_per_s: FloatArray
    budget_v: FloatArray
    ripple_v: FloatArray  # allowed either side of the mean
    remote_sense: BoolArray
    squares: FloatArray
    copper_area_m2: FloatArray
    copper_width_m: FloatArray
    pour_via_ohm: FloatArray  # via fields at both ends, one way, warm
    via_limit_a: FloatArray  # what the via fields of either end may carry
    drop_budget: FloatArray  # share of the rail voltage
    tap_drop_v: FloatArray  # largest of its taps', at the coincident maximum, grown
    step_group: IntArray


def rail_arrays(study: ResolvedStudy) -> RailArrays:
    """Return the study's rails as SI arrays; taps are added to the rail they tap."""
    rails = own_rails(study)
    place = {rail.name: k for k, rail in enumerate(rails)}
    maximum = np.array([rail.max_current_a for rail in rails])
    step = np.array([rail.step_a for rail in rails])
    tap_drop = np.zeros(len(rails))
    for rail in study.rails:
        if rail.tap_of:
            maximum[place[rail.tap_of]] += rail.max_current_a
            step[place[rail.tap_of]] = max(step[place[rail.tap_of]], rail.step_a)
            lost_v = rail.tap_mohm * 1e-3 * rail.max_current_a * study.coincidence * study.growth
            tap_drop[place[rail.tap_of]] = max(tap_drop[place[rail.tap_of]], lost_v)
    groups: dict[str, int] = {}
    group = [groups.setdefault(rail.step_group or f" {rail.name}", len(groups)) for rail in rails]
    return RailArrays(
        names=tuple(rail.name for rail in rails),
        voltage_v=np.array([rail.voltage_v for rail in rails]),
        max_a=maximum * study.growth,
        step_a=step * study.growth,
        load_slew_a_per_s=np.array([rail.slew_a_per_us * 1e6 for rail in rails]),
        budget_v=np.array([rail.droop_budget_v for rail in rails]),
        ripple_v=np.array([rail.ripple_percent * 0.01 * rail.voltage_v for rail in rails]),
        remote_sense=np.array([rail.remote_sense for rail in rails], dtype=bool),
        squares=np.array([rail.squares for rail in rails]),
        copper_area_m2=np.array([rail.copper_area_cm2 * 1e-4 for rail in rails]),
        copper_width_m=np.array([rail.copper_width_mm * 1e-3 for rail in rails]),
        pour_via_ohm=np.zeros(len(rails)),
        via_limit_a=np.full(len(rails), np.inf),
        drop_budget=np.array([rail.drop_budget_percent * 0.01 for rail in rails]),
        tap_drop_v=tap_drop,
        step_group=np.array(group, dtype=np.int64),
    )
