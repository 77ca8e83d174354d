"""Defaults: each value nobody stated is taken as the trade takes it, and echoed as assumed."""

from __future__ import annotations

import math
import re
from typing import TYPE_CHECKING

import numpy as np
import pytest

from archopt.inputs.problems import nearest, unit_of
from archopt.inputs.study import TABLES
from archopt.inputs.study_load import RailRow

if TYPE_CHECKING:
    from conftest import Desk


def test_defaults_are_echoed(desk: Desk) -> None:
    study = desk.load().study
    assumed = {item.place: item.value for item in study.assumed}
    assert assumed["rails.core.step_a"] == "25"
    assert assumed["rails.core.slew_a_per_us"] == "100"
    assert assumed["rails.io.slew_a_per_us"] == "1"
    assert assumed["rails.core.remote_sense"] == "true"
    assert assumed["rails.io.remote_sense"] == "false"
    assert assumed["control.largest_unannounced_jump_percent"] == "100"
    assert assumed["input.nominal_v"] == "53.5"
    assert assumed["input.isolation"] == "true"
    assert assumed["load.growth_percent"] == "15"
    assert assumed["economics.new_part_cost"] == "5000"
    assert "input.low_v" not in assumed
    assert len(assumed) == len(study.assumed)
    assert all(item.reason for item in study.assumed)


def test_every_key_of_every_table_is_stated_or_assumed(desk: Desk) -> None:
    """A default that is not echoed would be a number nobody can defend; caps and names have none."""
    study = desk.load().study
    places = {item.place for item in study.assumed}
    silent = {
        "limits.area_cap_cm2", "limits.cost_cap", "choices.forbidden_families", "choices.parts",
        "choices.forbidden_parts", "choices.preferred_parts", "choices.pin", "load.profile", "load.covers",
        "input.low_v", "input.high_v", "board.area_cm2", "control.jumps", "control.jumps_from_series",
            "input.filter_esr_mohm", "input.filter_damper_uf", "input.filter_damper_mohm",
    }  # fmt: skip
    for table, model in TABLES.items():
        for key in model.model_fields:
            place = f"{table}.{key}"
            assert (place in places) != (place in silent), place
    rail_silent = {
        "name", "voltage_v", "max_current_a", "copper_length_mm", "parents", "tap_of",
        "tap_mohm", "linear_only", "core",
    }  # fmt: skip
    for key in RailRow.model_fields:
        assert (f"rails.io.{key}" in places) != (key in rail_silent), key


def test_defaults_are_those_the_keys_describe(desk: Desk) -> None:
    """The description of a key is its documentation: the number it names is the number taken."""
    assumed = {item.place: item.value for item in desk.load().study.assumed}
    compared = 0
    for table, model in TABLES.items():
        for key, field in model.model_fields.items():
            found = re.search(r"default (\d+(?:\.\d+)?)$", field.description or "")
            if found:
                assert float(assumed[f"{table}.{key}"]) == float(found[1]), key
                compared += 1
    assert compared > 25


def test_droop_budget(desk: Desk, study_text: str) -> None:
    """Tolerance less 1 % set point, 0.5 % ripple and, without remote sense, the drop budget (closed form)."""
    core, io = desk.load(study_text).study.rails
    assert core.droop_budget_v == pytest.approx(0.9 * 0.035, rel=1e-9)
    assert io.droop_budget_v == pytest.approx(3.3 * (0.05 - 0.015 - 0.015), rel=1e-9)


@pytest.mark.parametrize(
    ("keys", "squares", "area_cm2", "width_mm"),
    [
        ("copper_width_mm = 20\ncopper_length_mm = 60", 3.0, 12.0, 20.0),
        ("squares = 2\ncopper_area_cm2 = 8", 2.0, 8.0, 20.0),
        ("squares = 2\ncopper_length_mm = 60", 2.0, 18.0, 30.0),
        ("squares = 2\ncopper_width_mm = 30", 2.0, 18.0, 30.0),
        ("squares = 2\ncopper_width_mm = 10\ncopper_area_cm2 = 18", 2.0, 18.0, 10.0),
        ("", 3.0, 3 * 0.9**2, 9.0),
    ],
)
def test_copper_of_a_rail(
    desk: Desk, study_text: str, keys: str, squares: float, area_cm2: float, width_mm: float
) -> None:
    """A strip: squares = length / width, area = length x width (closed form); 1.5 mm an ampere by default."""
    rail = desk.load(study_text.replace('name = "io"', f'name = "io"\n{keys}')).study.rails[1]
    assert (rail.squares, rail.copper_area_cm2, rail.copper_width_mm) == pytest.approx(
        (squares, area_cm2, width_mm), rel=1e-9
    )


def test_copper_stated_twice_must_agree(desk: Desk, study_text: str) -> None:
    keys = "copper_width_mm = 20\ncopper_length_mm = 60\nsquares = 2"
    problems = desk.problems(study_text.replace('name = "io"', f'name = "io"\n{keys}'))
    assert len(problems) == 1
    assert "copper_length_mm / copper_width_mm = 3" in problems[0]


def test_default_load_is_the_usual_distribution(desk: Desk) -> None:
    table = desk.load().study.load
    np.testing.assert_allclose(table.hours, [1752, 4380, 2190, 438], rtol=1e-12)
    np.testing.assert_allclose(table.current_a[:, 0], [7.5, 20, 30, 45], rtol=1e-12)
    assert not table.series
    assert not table.off.any()


@pytest.mark.parametrize(
    ("low_v", "high_v", "nominal_v", "isolation"),
    [(36, 75, 53.5, True), (40, 60, 54, False), (36, 52, 44, False)],
)
def test_input_defaults(
    desk: Desk, study_text: str, low_v: float, high_v: float, nominal_v: float, isolation: bool
) -> None:
    text = study_text.replace("low_v = 36", f"low_v = {low_v}").replace("high_v = 75", f"high_v = {high_v}")
    supply = desk.load(text).study.supply
    assert supply.nominal_v == nominal_v
    assert supply.isolation is isolation
    assert [(level.voltage_v, level.share) for level in supply.levels] == [
        (nominal_v, 0.95), (low_v, 0.025), (high_v, 0.025),
    ]  # fmt: skip
    assert math.isclose(sum(level.share for level in supply.levels), 1.0, rel_tol=1e-12)
    assert supply.path == "path_80"


def test_coincidence_falls_above_six_rails(desk: Desk, study_text: str) -> None:
    rails = "".join(f'[[rails]]\nname = "r{n}"\nvoltage_v = 1.8\nmax_current_a = 2\n' for n in range(5))
    assert desk.load(study_text).study.coincidence == 1.0
    assert desk.load(study_text + rails).study.coincidence == 0.85


def test_parts_list_forbids_the_rest_of_its_family(desk: Desk, study_text: str) -> None:
    text = study_text.replace("[board]", "[choices]\nparts = ['polymer_330']\n[board]")
    study = desk.load(text).study
    assert study.choices.forbidden_parts == ("ceramic_100",)
    assert study.rails[0].capacitors == ("polymer_330",)


def test_pins_take_lists_and_nested_tables(desk: Desk, study_text: str) -> None:
    pins = "[choices.pin]\n'core.phases' = [1, 2]\nbus_a.nominal_v = 9.5\n[choices.pin.io]\nfeed = 'bus_a'\n"
    study = desk.load(study_text.replace("[board]", f"{pins}[board]")).study
    assert study.choices.pins == {
        "core.phases": ("1", "2"), "bus_a.nominal_v": ("9.5",), "io.feed": ("bus_a",),
    }  # fmt: skip


INCUMBENT = """
[incumbent]
"io.stage" = "stage_40"
[incumbent.core]
stage = "stage_40"
bank = "ceramic_100"
[incumbent.bus_a]
converter = "bus_200"
"""


def test_incumbent_is_filled(desk: Desk, study_text: str) -> None:
    study = desk.load(study_text + INCUMBENT).study
    assert study.incumbent is not None
    expected = {
        "core.feed": "bus_a", "core.phases": "2", "io.phases": "1", "core.bank": "ceramic_100",
        "core.bank_count": "8", "bus_a.nominal_v": "12", "bus_a.lower_v": "12", "bus_a.upper_v": "12",
        "bus_a.control": "fixed", "bus_a.bulk": "polymer_330", "bus_b.converter": "none",
        "board.stack": "two_pairs", "board.bias": "bias_bus", "board.bias_feed": "bus_a",
        "board.supervisor": "none",
    }  # fmt: skip
    assert {name: study.incumbent[name] for name in expected} == expected
    assert "incumbent.core.phases" in {item.place for item in study.assumed}
    assert len(study.incumbent) == 2 * 7 + 10 + 1 + 4


def test_incumbent_without_a_bus(desk: Desk, study_text: str) -> None:
    study = desk.load(study_text + "[incumbent]\n'core.stage' = 'stage_40'\n'io.stage' = 'stage_40'\n").study
    assert study.incumbent is not None
    assert study.incumbent["core.feed"] == "input"
    assert study.incumbent["board.bias"] == "none"  # the only bias supply stands neither input nor bus
    assert [name for name in study.incumbent if name.startswith("bus_")] == ["bus_a.converter", "bus_b.converter"]


def test_units_and_nearest_names() -> None:
    assert unit_of("slew_a_per_us") == "A/us"
    assert unit_of("air_speed_m_s") == "m/s"
    assert unit_of("price_1k") == ""
    assert nearest("CORE", ["core", "io"]) == "did you mean 'core'?"
    assert nearest("zzz", ["core", "io"]) == "there is core, io"
    assert nearest("zzz", []) == "there is none to choose from"
