"""What sets the adaptive limits, in words: every reason a step can have, and the line beside the front."""

from __future__ import annotations

from collections.abc import Iterable

import pytest
from plain_print import plain_text
from rich.console import Group, RenderableType
from synthetic_result import design

from archopt.present.adaptive_view import (
    adaptive_lines,
    adaptive_sections,
    limit_line,
    moves,
    step_text,
    with_adaptive_limits,
)
from archopt.present.record import Data, FrontRecord

DROOP = {
    "limit": "rail droop", "where": "core_0v9", "state": "band 1", "value": 103.0, "bound": 100.0, "slack": -3.0,
    "unit": "% of budget", "normalised": -0.6,
}  # fmt: skip


def step(reason: str, change: float | None = 0.4, limit: Data | None = None, more: int = 0) -> Data:
    return {"volts": 7.5, "reason": reason, "limit": limit, "more_limits": more, "energy_change_kwh": change}


@pytest.mark.parametrize(
    ("reason", "side", "expected"),
    [
        (step("limit", -0.26, DROOP), "lower",
         "rail droop of core_0v9, band 1, 3 % of budget beyond (would save 0.26 kWh a year)"),
        (step("limit", 0.26, {**DROOP, "where": "bus_a", "state": "", "unit": "ratio"}, 2), "lower",
         "rail droop of bus A, 3 beyond, and 2 more"),
        (step("waste"), "upper", "no limit: it would waste 0.4 kWh a year more"),
        (step("order", -0.1), "lower", "no limit of its own: a lighter band stands at this voltage"),
        (step("order", -0.1), "upper", "no limit of its own: a heavier band stands at this voltage"),
        (step("grid end", None), "upper", "the highest bus voltage the study allows"),
        (step("waste", 0.0000074), "upper", "no limit: within 0.001 kWh a year of this voltage"),
        (step("left", -0.0005), "upper", "no limit: within 0.001 kWh a year of this voltage"),
        (step("limit", -0.0001, DROOP), "lower", "rail droop of core_0v9, band 1, 3 % of budget beyond"),
        (step("same year", 0.0), "upper", "no limit: the year stays as it is"),
        (step("left", -0.002), "upper", "no limit: it would save 0.002 kWh a year, which the search left"),
        (None, "upper", "-"),
    ],
)  # fmt: skip
def test_every_reason_has_its_words(reason: Data | None, side: str, expected: str) -> None:
    assert step_text(reason, side) == expected


def sections_text(sections: Iterable[RenderableType]) -> str:
    return plain_text(Group(*sections))


def bus(control: str = "follow_load") -> Data:
    first, second = (1, 2) if control == "follow_load" else (None, None)
    low, high = step("limit", -0.26, DROOP), step("waste")
    return {
        "bus": "bus_a", "control": control,
        "lower": {"from_volts": 8.0, "band": 1, **low}, "upper": {"from_volts": 12.0, "band": 2, **high},
        "bands": [
            {"band": first, "volts": 8.0, "hours": 6000.0, "lower": low, "upper": high},
            {"band": second, "volts": 12.0, "hours": 2760.0, "lower": high, "upper": high},
        ],
    }  # fmt: skip


def test_the_bands_of_a_design_are_listed_under_both_ends() -> None:
    text = sections_text(adaptive_sections({"adaptive_limits": [bus()]}))
    lines = text.splitlines()
    assert lines[0] == "What sets the adaptive limits of bus A (one grid step at a time, all else held)"
    assert lines[1] == f"  {limit_line(bus(), 'lower')}"
    assert lines[1].startswith("  lower limit 8.00 V: rail droop of core_0v9, band 1, 3 % of budget beyond")
    assert lines[2] == "  upper limit 12.00 V: no limit: it would waste 0.4 kWh a year more"
    assert [line.split()[0] for line in lines[3:6]] == ["band", "1", "2"]


def test_levels_are_named() -> None:
    lines = sections_text(adaptive_sections({"adaptive_limits": [bus("two_levels")]})).splitlines()
    assert [line.split()[0] for line in lines[3:6]] == ["level", "lower", "upper"]


def test_the_front_says_it_of_the_knee_and_of_the_least_lifetime_cost() -> None:
    one, two, three = (
        {**design(name, roles=roles), "adaptive_limits": [bus()]}
        for name, roles in (("D001", ("least loss",)), ("D002", ("knee",)), ("D003", ("least lifetime cost",)))
    )
    assert [line.split(":")[0] for line in sections_text(adaptive_lines([one, two, three])).splitlines()[:3]] == [
        "What sets the adaptive limits", "  D002 (knee)", "  D003 (least lifetime cost)",
    ]  # fmt: skip
    assert sections_text(adaptive_lines([one])).splitlines()[1].startswith("  D001: bus A lower limit 8.00 V")
    assert sections_text(adaptive_lines([{**one, "adaptive_limits": []}])).strip() == ""


def test_a_fixed_bus_asks_for_nothing_and_a_result_that_cannot_compute_says_so(record: FrontRecord) -> None:
    moving, still = record.designs[0], record.designs[-1]
    assert moves(moving)
    assert not moves(still)
    assert with_adaptive_limits(still, record.problem) is still
    said = with_adaptive_limits(moving, record.problem)
    assert said["adaptive_limits"] == []
    assert "not known: the result lacks" in sections_text(adaptive_sections(said))
