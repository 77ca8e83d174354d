"""Cautions: each appears where it applies and only there."""

from __future__ import annotations

from dataclasses import replace

import pytest

from archopt.model.evaluator import Evaluator
from archopt.model.explain import explain_many
from archopt.trade.cautions import NOT_MODELLED, cautions
from archopt.trade.pinned import pinned_problem


def explained(problem, row):
    evaluator = Evaluator(pinned_problem(problem, row))
    return explain_many(evaluator, evaluator.decide(row[None]))


@pytest.fixture(scope="module")
def card(telecom):
    problem, row = telecom
    return problem, row, explained(problem, row)


def with_supply(problem, **changes):
    study = problem.study
    return replace(problem, study=replace(study, supply=replace(study.supply, **changes)))


def said(sentences: list[str], words: str) -> list[str]:
    return [sentence for sentence in sentences if words in sentence]


@pytest.mark.parametrize(("high_v", "expected"), [(75.0, 1), (60.0, 0), (60.5, 1), (32.0, 0)])
def test_input_above_sixty_volts_is_not_safe_to_touch(card, high_v: float, expected: int) -> None:
    problem, _, designs = card
    found = said(cautions(with_supply(problem, high_v=high_v), designs), "not safe to touch")
    assert len(found) == expected
    if found:
        assert f"{high_v:g} V DC" in found[0]
        assert "licensed" in found[0]


def test_input_without_isolation_says_what_that_means(card) -> None:
    problem, _, designs = card
    found = said(cautions(with_supply(problem, isolation=False), designs), "not safe to touch")
    assert "every rail counts as connected to the input" in found[0]


def test_bus_from_240_va_is_an_energy_hazard(card) -> None:
    """One 150 W converter is below 240 VA, two are above it: 300 W, and twice 17 A for a short time."""
    problem, row, designs = card
    assert not said(cautions(problem, designs), "converters of bus A")
    twice = explained(problem, problem.space.encode({"bus_a.count": "2"}, row))
    found = said(cautions(problem, [*designs, *twice]), "converters of bus A")
    assert len(found) == 1
    assert "300 W" in found[0]
    assert "34 A" in found[0]


def test_input_path_is_an_energy_hazard_by_its_own_rating(card) -> None:
    """10 A at up to 75 V is 750 VA; at 20 V it would be 200 VA."""
    problem, _, designs = card
    assert "750 VA" in said(cautions(problem, designs), "energy hazard")[0]
    assert not said(cautions(with_supply(problem, high_v=20.0), designs), "energy hazard")


def test_hot_parts_are_named_with_the_hottest(card) -> None:
    problem, _, designs = card
    found = said(cautions(problem, designs), "Parts run hot")
    hottest = max(designs[0]["heat"], key=lambda entry: entry["temperature_degc"])
    assert f"{hottest['temperature_degc']:.0f} degC" in found[0]
    cool = [{**designs[0], "heat": [{**entry, "temperature_degc": 69.0} for entry in designs[0]["heat"]]}]
    assert not said(cautions(problem, cool), "Parts run hot")


def test_invented_numbers_are_counted(card) -> None:
    problem, _, designs = card
    used = {entry["part"] for entry in designs[0]["parts"]}
    coils = {entry["part"] for entry in designs[0]["parts"] if entry["family"] == "inductors"}
    found = said(cautions(problem, designs), "invented or remembered")
    assert found[0].startswith(f"{len(coils)} of {len(used)} part numbers")
    sources = {key: source.model_copy(update={"kind": "published", "title": "sheet"})
               for key, source in problem.catalogue.sources.items()}  # fmt: skip
    proven = replace(problem, catalogue=replace(problem.catalogue, sources=sources))
    assert not said(cautions(proven, designs), "invented")


def test_copper_limits_are_always_called_estimates(card) -> None:
    problem, _, _ = card
    assert len(said(cautions(problem, []), "IPC-2221")) == 1


def test_what_is_not_modelled_names_the_design_pages_five() -> None:
    text = " ".join(NOT_MODELLED)
    for words in ("first droop", "electromagnetic", "order of switching on", "fault clearing", "hold-up"):
        assert words in text


def test_rails_that_never_draw_are_told(card) -> None:
    problem, _, designs = card
    assert not said(cautions(problem, designs), "in any hour of the year")

    def with_idle(rails: list[int]):
        current = problem.states.current_a.copy()
        current[:, rails] = 0.0
        return replace(problem, states=replace(problem.states, current_a=current))

    (one,) = said(cautions(with_idle([1]), designs), "in any hour of the year")
    assert one.startswith(f"1 rail draws nothing in any hour of the year ({problem.rails.names[1]})")
    every = list(range(len(problem.rails.names)))
    (many,) = said(cautions(with_idle(every[:-1]), designs), "in any hour of the year")
    assert many.startswith(f"{len(every) - 1} rails draw nothing")
    (idle,) = said(cautions(with_idle(every), designs), "in any hour of the year")
    assert idle.startswith("No rail draws anything")
