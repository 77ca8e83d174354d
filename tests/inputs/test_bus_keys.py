"""Keys of a study about how a bus moves, what damps it, and what stands behind the input path."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from conftest import Desk


def with_input(text: str, *lines: str) -> str:
    return text.replace("low_v = 36", "\n".join(["low_v = 36", *lines]), 1)


def test_dwell_and_deadband_default_to_none(desk: Desk, study_text: str) -> None:
    control = desk.load(study_text).study.control
    assert (control.dwell_s, control.deadband_v) == (0.0, 0.0)
    supply = desk.load(study_text).study.supply
    assert (supply.filter_capacitance_uf, supply.filter_damper_uf) == (0.0, 0.0)


def test_dwell_deadband_and_filter_are_taken(desk: Desk, study_text: str) -> None:
    text = with_input(
        study_text, "filter_capacitance_uf = 10", "filter_damper_uf = 47", "filter_damper_mohm = 300",
    )  # fmt: skip
    text += "\n[control]\ndwell_s = 2.5\ndeadband_v = 1\n"
    study = desk.load(text).study
    assert (study.control.dwell_s, study.control.deadband_v) == (2.5, 1.0)
    assert (study.supply.filter_capacitance_uf, study.supply.filter_esr_mohm) == (10.0, 0.0)
    assert (study.supply.filter_damper_uf, study.supply.filter_damper_mohm) == (47.0, 300.0)
    assert "filter_esr_mohm" in " ".join(str(entry) for entry in study.assumed)


@pytest.mark.parametrize(
    ("lines", "words"),
    [
        (("filter_esr_mohm = 2",), ("input.filter_esr_mohm", "without filter_capacitance_uf")),
        (("filter_capacitance_uf = 10", "filter_damper_uf = 4"), ("input.filter_damper_mohm", "both")),
        (("filter_capacitance_uf = -1",), ("input.filter_capacitance_uf", "above 0")),
    ],
)
def test_half_a_filter_is_refused(desk: Desk, study_text: str, lines: tuple[str, ...], words: tuple[str, ...]) -> None:
    problems = desk.problems(with_input(study_text, *lines))
    assert len(problems) == 1
    assert all(word in problems[0] for word in words), problems


def test_a_ceramic_damps_no_bus(desk: Desk, study_text: str) -> None:
    text = study_text + '\n[choices.pin]\n"bus_a.damper" = "ceramic_100"\n'
    problems = desk.problems(text)
    assert any("bus_a.damper" in problem and "no damper" in problem for problem in problems), problems


@pytest.mark.parametrize("count", ["5", "33"])
def test_a_damper_has_a_count_of_the_list(desk: Desk, study_text: str, count: str) -> None:
    problems = desk.problems(study_text + f'\n[choices.pin]\n"bus_a.damper_count" = {count}\n')
    assert any("is not one of" in problem for problem in problems), problems
