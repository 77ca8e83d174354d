"""Faults of the load: profile cells, hours, states."""

from __future__ import annotations

from typing import TYPE_CHECKING

import numpy as np
import pytest

if TYPE_CHECKING:
    from conftest import Desk

PROFILE = "[load]\nprofile = 'load.csv'\n"


@pytest.mark.parametrize(
    ("rows", "told"),
    [
        ("8760,ten,1", "load.csv: row 2, column core_a: needs a number, found 'ten'"),
        ("8760,nan,1", "load.csv: row 2, column core_a: nan is not a finite number"),
        ("8760,1,inf", "load.csv: row 2, column io_a: inf is not a finite number"),
        ("8760,1,-2", "load.csv: row 2, column io_a: -2 is negative"),
        ("8760,1,6.5", "load.csv: row 2, column io_a: 6.5 is above the 6 A that io draws at most"),
        (",1,2", "load.csv: row 2, column hours: is empty; it needs a number"),
        ("8760,1", "load.csv: row 2: has 2 cells where the header has 3"),
        (
            "8500,1,2",
            'column hours: hours sum to 8500, a year has 8760; covers = "sample" scales them to a year',
        ),
        ("8700,1,2\n100,1,1", "load.csv: column hours: hours sum to 8800, more than the 8760 of a year"),
        ("0,1,2", "load.csv: column hours: hours sum to 0"),
        ("", "load.csv: has no rows"),
    ],
)
def test_profile_fault(desk: Desk, study_text: str, rows: str, told: str) -> None:
    desk.write("load.csv", f"hours,core_a,io_a\n{rows}\n")
    problems = desk.problems(study_text + PROFILE)
    assert len(problems) == 1, problems
    assert told in problems[0]


@pytest.mark.parametrize(
    ("header", "told"),
    [
        ("hours,core_a,ios_a", ["column ios_a: is no rail; did you mean 'io_a'?", "column io_a missing"]),
        ("hour,core_a,io_a", ["did you mean 'hours'?", "column hours is missing"]),
        ("hours,utilisation,io_a", ["utilisation and io_a are both there"]),
        ("hours;core_a;io_a", ["separate them by ','"]),
        ("hours\tcore_a\tio_a", ["columns are separated by tabs; separate them by ','"]),
        ("hours,core_a,core_a", ["column core_a is there twice", "column io_a missing"]),
    ],
)
def test_profile_header_fault(desk: Desk, study_text: str, header: str, told: list[str]) -> None:
    desk.write("load.csv", f"{header}\n{'8760;1;1' if ';' in header else '8760,0.5,1'}\n")
    problems = desk.problems(study_text + PROFILE)
    assert len(problems) == len(told), problems
    for problem, words in zip(problems, told, strict=True):
        assert words in problem


def test_only_ten_cells_are_told_and_the_rest_counted(desk: Desk, study_text: str) -> None:
    desk.write("load.csv", "hours,core_a,io_a\n" + "100,x,1\n" * 25)
    problems = desk.problems(study_text + PROFILE)
    assert len(problems) == 11
    assert problems[9].startswith("load.csv: row 11, column core_a")
    assert problems[10] == "load.csv: 15 more cells are wrong in this file"


def test_input_voltage_of_a_moment_stays_in_the_range(desk: Desk, study_text: str) -> None:
    desk.write("load.csv", "hours,core_a,io_a,input_v\n8760,1,1,80\n")
    problems = desk.problems(study_text + PROFILE)
    assert problems == ["load.csv: row 2, column input_v: 80 is outside the study's input range 36 to 75 V"]


def test_profile_is_read_with_off_rails_and_gaps(desk: Desk, study_text: str) -> None:
    desk.write("load.csv", "hours,io_a,core_a,input_v,inlet_degc\n4000,,20,,45\n4760,3,0,60,\n")
    study = desk.load(study_text + PROFILE).study
    table = study.load
    assert table.series
    np.testing.assert_array_equal(table.current_a, [[20, 0], [0, 3]])
    np.testing.assert_array_equal(table.off, [[False, True], [False, False]])
    np.testing.assert_array_equal(table.input_v, [np.nan, 60])
    np.testing.assert_array_equal(table.hours, [4000, 4760])
    assert study.supply.hottest_inlet_degc == 45
    assert np.isnan(study.control.transitions_per_day)


def test_sample_is_scaled_to_the_year_and_leap_years_pass(desk: Desk, study_text: str) -> None:
    desk.write("load.csv", "hours,utilisation\n6,0.5\n18,0.25\n")
    table = desk.load(study_text + PROFILE + "covers = 'sample'\nhours_per_year = 8000\n").study.load
    np.testing.assert_allclose(table.hours, [2000, 6000], rtol=1e-12)
    np.testing.assert_allclose(
        table.current_a, [[25, 3], [12.5, 1.5]], rtol=1e-12
    )  # coincidence 1 for two rails
    desk.write("load.csv", "hours,utilisation\n8784,0.5\n")
    assert desk.load(study_text + PROFILE).study.load.hours.sum() == 8784


STATES = """
[[load.states]]
name = "day"
hours = 4000
utilisation = 0.5
currents = { core = 12.0 }
[[load.states]]
name = "night"
hours = 3000
off = ["io"]
input_v = 40
"""


def test_states(desk: Desk, study_text: str) -> None:
    table = desk.load(study_text + STATES).study.load
    np.testing.assert_allclose(table.hours, [4000, 3000])  # fewer than a year: off for the rest
    np.testing.assert_allclose(table.current_a, [[12, 3], [25, 0]])  # night: typical current of core
    np.testing.assert_array_equal(table.off, [[False, False], [False, True]])
    np.testing.assert_array_equal(table.input_v, [np.nan, 40])
    assert table.label == ("day", "night")


@pytest.mark.parametrize(
    ("old", "new", "told"),
    [
        (
            "core = 12.0",
            "cores = 12.0",
            "load.states.day.currents: there is no rail 'cores'; did you mean 'core'?",
        ),
        ("core = 12.0", "core = 80.0", "load.states.day.currents.core: 80 A is above its max_current_a 50 A"),
        ("core = 12.0", "core = -1", "load.states.day.currents.core: -1 A is negative"),
        ("core = 12.0", "core = 'x'", "load.states.day.currents.core: needs a number, found 'x'"),
        ('off = ["io"]', 'off = ["fan"]', "load.states.night.off: there is no rail 'fan'"),
        ("hours = 4000", "hours = 5900", "load.states: hours sum to 8900, more than the 8760 of a year"),
        (
            "utilisation = 0.5",
            "utilisation = 50",
            "load.states.day.utilisation: 50 is out of range; it must be at most 1",
        ),
        (
            "input_v = 40",
            "input_v = 20",
            "load.states.night.input_v: 20 V is outside the input range 36 to 75 V",
        ),
        ('"night"', '"day"', "load.states.day.name: there are two states of this name"),
        ("hours = 3000", "", "load.states.night.hours: missing; it is the hours in this state"),
    ],
)
def test_state_fault(desk: Desk, study_text: str, old: str, new: str, told: str) -> None:
    assert old in STATES
    problems = desk.problems(study_text + STATES.replace(old, new, 1))
    assert len(problems) == 1, problems
    assert told in problems[0]


def test_profile_and_states_together(desk: Desk, study_text: str) -> None:
    problems = desk.problems(study_text + PROFILE + STATES)
    assert problems == ["study.toml: load.profile: a profile and states are both there; keep one"]
