"""What stands beside a front: baselines that came out the same, and baselines searched afresh."""

from __future__ import annotations

import dataclasses

import pytest
from plain_print import plain_text
from rich.console import Group
from synthetic_result import design

from archopt.present.explanation import payback, schedule_table, schedule_title, thresholds_matter
from archopt.present.front import Front
from archopt.present.questions import (
    afresh_body,
    afresh_gain,
    gain_lines,
    joined_names,
    merged_baselines,
    question_sections,
)
from archopt.present.record import Data, FrontRecord


def baseline(name: str, of: str = "knee", energy: float | None = 60.0, note: str = "") -> Data:
    return {
        "baseline": name, "of": of, "volts": [8.0, 10.0], "energy_loss_kwh_per_year": energy, "cost_per_board": 99.0,
        "worst_droop_percent": 84.0, "feasible": True, "note": note,
    }  # fmt: skip


def test_baselines_of_one_hardware_that_are_equal_take_one_row() -> None:
    rows = merged_baselines([
        baseline("fixed at the habitual voltage", energy=70.0), baseline("best fixed bus", energy=65.0),
        baseline("follows the load, every jump unannounced"),
        baseline("follows the load, jumps as the study states", note="jump of 100 % of rated load"),
        baseline("follows the load, every jump unannounced", of="incumbent"),
    ])  # fmt: skip
    assert [(row["baseline"], row["of"], row["note"]) for row in rows] == [
        ("fixed at the habitual voltage", "knee", ""),
        ("best fixed bus", "knee", ""),
        ("follows the load, every jump unannounced; jumps as the study states", "knee", "jump of 100 % of rated load"),
        ("follows the load, every jump unannounced", "incumbent", ""),
    ]


@pytest.mark.parametrize(
    ("years", "expected"),
    [(1.25, "after 1.25 years"), (0.0254, "after 0.3 months"), (0.0, "at once"), (None, "-")],
)
def test_payback_is_said_in_what_suits_it(years: float | None, expected: str) -> None:
    assert payback(years) == expected


def test_baselines_that_do_not_apply_keep_their_rows() -> None:
    rows = [baseline(name, energy=None) for name in ("follows the load, a", "follows the load, b")]
    assert [row["baseline"] for row in merged_baselines(rows)] == ["follows the load, a", "follows the load, b"]
    assert joined_names(["fixed at the habitual voltage", "best fixed bus"]) == (
        "fixed at the habitual voltage; best fixed bus"
    )


def test_a_gain_that_no_other_jump_changes_is_said_once(record: FrontRecord) -> None:
    gain = record.gains[0]
    (said,) = [str(line) for line in gain_lines([gain], "EUR")]
    assert "it would save 1.10 kWh were every jump unannounced" in said
    assert "it would save 2.50 kWh were every jump announced" in said
    same = {**gain, "gain_all_unannounced_kwh_per_year": 1.928, "gain_announced_kwh_per_year": 1.929}
    (said,) = [str(line) for line in gain_lines([same], "EUR")]
    assert "were every jump" not in said


def afresh(less: float = 3.16) -> Data:
    def row(name: str, volts: object, note: str = "") -> Data:
        found = volts is not None
        return {
            "baseline": name, "topology": "one bus, fixed" if found else None, "volts": volts,
            "energy_loss_kwh_per_year": 63.29 if found else None, "cost_per_board": 99.82 if found else None,
            "worst_droop_percent": 88.0 if found else None, "lifetime_cost": 211.75 if found else None,
            "least_energy_kwh_per_year": 59.34 if found else None, "feasible": found, "note": note,
        }  # fmt: skip

    return {
        "rows": [row("best fixed bus", 9.25), row("follows the load, every jump announced", None, "not searched")],
        "gains": [{
            "of": "follows the load, jumps as the study states", "lifetime_cost_less": less, "energy_less_kwh": 2.82,
            "cost_more": 1.83, "energy_less_at_equal_cost_percent": [0.5, 2.9, 3.9],
        }],
        "notes": ["the budget is too small"],
    }  # fmt: skip


def test_baselines_searched_afresh_stand_beside_the_same_hardware(record: FrontRecord) -> None:
    record = dataclasses.replace(record, afresh=afresh())
    titles = [line for line in plain_text(Group(*question_sections(record))).splitlines() if line[:1].strip()]
    assert titles.index("Every choice made again for each bus") == titles.index(
        "The same hardware with another bus voltage"
    ) + 1  # fmt: skip


def test_the_gain_of_boards_made_for_a_moving_bus_is_against_the_best_fixed_one() -> None:
    lines = [line.strip() for line in plain_text(Group(*afresh_body(afresh(), "EUR"))).splitlines()]
    assert lines[1].split() == ["best", "fixed", "bus", "one", "bus,", "fixed", "9.25", "63.29", "99.82", "88",
                                "211.75", "59.34"]  # fmt: skip
    assert lines[2].endswith("not searched")
    assert lines[4] == (
        "follows the load, jumps as the study states: against the best fixed bus 3.16 EUR less over the life"
        " (2.82 kWh a year less, 1.83 EUR a board more); at equal cost 2.9 % less energy lost in the median,"
        " 3.9 % less at most."
    )
    assert lines[5] == "the budget is too small"
    worse = {**afresh(-3.0)["gains"][0], "energy_less_at_equal_cost_percent": [-6.0, -4.8, -1.0]}
    assert "3.00 EUR more over the life" in afresh_gain(worse, "EUR")
    assert afresh_gain(worse, "EUR").endswith("at equal cost 4.8 % more energy lost in the median.")


@pytest.mark.parametrize(("control", "thresholds"), [("follow_load", True), ("fixed", True)])
def test_thresholds_are_shown_where_something_is_set_by_them(control: str, thresholds: bool) -> None:
    """On a held bus too, where converters are switched by the load."""
    one = design("D001", control=control)
    assert thresholds_matter(one) is thresholds
    assert "raise above input W" in plain_text(schedule_table(one["bands"]))


def test_a_bus_that_is_held_has_no_thresholds(record: FrontRecord) -> None:
    still = design("D001", control="fixed")
    for band in still["bands"]:
        band["converters"]["bus_a"] = 2
    assert not thresholds_matter(still)
    text = plain_text(Front(FrontRecord([still], [], record.problem, {})).design(1))
    assert schedule_title(thresholds=False) in text
    assert "raise above" not in text
