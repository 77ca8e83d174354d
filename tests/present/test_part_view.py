"""The parts browser: every family and part can be shown, columns explain themselves, charts are what they draw."""

from __future__ import annotations

import json
import math

import numpy as np
import pytest
from plain_print import plain_text
from rich.console import Group

from archopt.errors import InputError
from archopt.inputs.measured_catalogue import read_catalogue
from archopt.inputs.parts import FAMILIES
from archopt.inputs.resolved import Catalogue
from archopt.physics import bus_converter
from archopt.present.part_chart import Curve, chart_lines, round_ticks
from archopt.present.part_losses import RowLosses
from archopt.present.part_view import browse, column_rows, efficiency


@pytest.fixture(scope="module")
def catalogue() -> Catalogue:
    return read_catalogue()


def text_of(catalogue: Catalogue, *words: str | None, **options: object) -> str:
    return plain_text(Group(*browse(catalogue, *words, **options).sections()))  # type: ignore[arg-type]


def test_families_and_their_counts(catalogue: Catalogue) -> None:
    text = text_of(catalogue, None)
    for family in FAMILIES:
        line = next(line for line in text.splitlines() if line.strip().startswith(family))
        assert line.split()[1] == str(len(catalogue.families[family]))
    assert browse(catalogue, None).data() == {family: len(rows) for family, rows in catalogue.families.items()}


@pytest.mark.parametrize("family", FAMILIES)
def test_every_family_lists_and_explains_itself(catalogue: Catalogue, family: str) -> None:
    text = text_of(catalogue, family)
    for name in catalogue.families[family]:
        assert name in text
    explained = text_of(catalogue, family, columns=True)
    for column in FAMILIES[family].model_fields:
        assert f"  {column} " in explained
    assert all(row["meaning"] for row in column_rows(family))


@pytest.mark.parametrize("family", FAMILIES)
def test_every_part_shows_every_column_and_converters_a_sound_efficiency(catalogue: Catalogue, family: str) -> None:
    for name, part in catalogue.families[family].items():
        data = json.loads(json.dumps(browse(catalogue, family, name).data(), allow_nan=False))
        assert [row["column"] for row in data["columns"]] == list(FAMILIES[family].model_fields)
        assert data["source"]["title"]
        for curve in data["efficiency"]:
            assert min(curve["efficiency"]) > 0
            assert max(curve["efficiency"]) < 1
        converts = family in {"buck_stages", "bus_converters", "single_stages", "linear_regulators"}
        assert bool(data["efficiency"]) == converts, part.name


def test_units_and_ranges_come_from_the_schema() -> None:
    rows = {row["column"]: row for family in FAMILIES for row in column_rows(family)}
    assert rows["linear_w_per_a"]["unit"] == "W/A"
    assert rows["resistance_per_k"]["unit"] == "1/K"
    assert rows["thermal_k_per_w"]["unit"] == "K/W"
    assert rows["frequency_khz"]["range"] == "number, at least 50, at most 5000"
    assert rows["max_phases"]["range"].startswith("whole number")
    assert rows["isolated"]["range"] == "true or false"
    assert rows["control"]["range"] == "two_levels or follow_load"


def test_one_part_as_text(catalogue: Catalogue) -> None:
    text = text_of(catalogue, "trim_bus_150w")  # its name alone is enough
    assert "catalog/bus_converters/regulated.csv" in text
    assert "common practice" in text
    assert "efficiency, %" in text
    assert "current of one unit, A" in text
    assert "35 V to 12 V" in text
    assert max(map(len, text.splitlines())) <= 220


def test_the_efficiency_shown_is_that_of_the_physics(catalogue: Catalogue) -> None:
    part = catalogue.families["bus_converters"]["trim_bus_150w"].model_dump()
    p = bus_converter.ConverterParameters(
        *(np.asarray(part[name]) for name in ("fixed_w", "switching_w", "input_exponent", "output_exponent",
                                              "input_nominal_v", "output_nominal_v", "linear_w_per_a")),
        np.asarray(part["resistance_mohm"] * 1e-3), np.asarray(part["resistance_per_k"]),
        np.asarray(part["thermal_k_per_w"]),
    )  # fmt: skip
    load = np.array([1.0, 6.0, 12.5])
    loss = bus_converter.losses(p, 60.0, 11.0, load, 40.0).total_w
    row = catalogue.families["bus_converters"]["trim_bus_150w"]
    (curve,) = efficiency(catalogue, row, 60.0, 11.0, tuple(load / 12.5))
    np.testing.assert_allclose(curve["efficiency"], 11.0 * load / (11.0 * load + loss), rtol=1e-12)
    np.testing.assert_allclose(sum(RowLosses(catalogue)(row, 60.0, 11.0, load, 40.0).values()), loss, rtol=1e-12)


def test_rows_are_chosen_by_voltage_and_current(catalogue: Catalogue) -> None:
    rows = browse(catalogue, "bus_converters", input_v=48.0, output_v=12.0, current_a=30.0).data()
    assert isinstance(rows, list)
    assert rows
    for row in rows:
        assert row["input_min_v"] <= 48 <= row["input_max_v"]
        assert row["output_min_v"] <= 12 <= row["output_max_v"]
        assert row["max_current_a"] >= 30
    left = set(catalogue.families["bus_converters"]) - {row["name"] for row in rows}
    for name in left:
        part = catalogue.families["bus_converters"][name].model_dump()
        inside = part["input_min_v"] <= 48 <= part["input_max_v"] and part["output_min_v"] <= 12 <= part["output_max_v"]
        assert not (inside and part["max_current_a"] >= 30)


@pytest.mark.parametrize(
    ("words", "options", "expected"),
    [
        (("bus_converter",), {}, "did you mean 'bus_converters'"),
        (("trim_bus_151w",), {}, "did you mean 'trim_bus_"),
        (("frob",), {}, "there is bias_supplies"),
        (("bus_converters", "trim_bus"), {}, "is not in bus_converters; did you mean"),
        (("capacitors",), {"current_a": 3.0}, "have no rated current"),
        (("capacitors",), {"output_v": 3.0}, "have no output_max_v"),
        (("bus_converters", "trim_bus_150w"), {"input_v": 24.0}, "24 V is outside 35 to 75 V"),
    ],
)
def test_what_is_not_there_is_said(
    catalogue: Catalogue, words: tuple[str, ...], options: dict[str, float], expected: str
) -> None:
    with pytest.raises(InputError) as refused:
        browse(catalogue, *words, **options)
    assert expected in str(refused.value)


def test_a_chart_line_by_line() -> None:
    rising = Curve("rising", [0.0, 10.0], [0.0, 10.0])
    level = Curve("level", [0.0, 10.0], [5.0, 5.0])
    lines = chart_lines([rising, level], "load, A", "height, m", width=21, height=11)
    assert lines == [
        "height, m",
        "10 +                   aa",
        "   |                  a",
        " 8 +               aaa",
        "   |              a",
        " 6 +           aaa",
        "   |bbbbbbbbbb*bbbbbbbbbb",
        " 4 +       aaa",
        "   |      a",
        " 2 +   aaa",
        "   |  a",
        " 0 +aa",
        "   ++---+---+---+---+---+",
        "    0   2   4   6   8  10",
        "           load, A",
        "    a  rising",
        "    b  level",
        "    *  several of them",
    ]


def test_a_chart_of_nothing_and_of_one_value() -> None:
    assert chart_lines([Curve("none", [1.0], [math.nan])], "x", "y") == ["nothing to draw"]
    flat = chart_lines([Curve("flat", [1.0, 2.0], [7.0, 7.0])], "x", "y", width=20, height=5)
    assert sum(line.count("a") for line in flat[1:6]) == 20


@pytest.mark.parametrize(("low", "high"), [(0.0, 12.5), (69.9, 95.9), (0.001, 0.0011), (5.0, 5.0), (-3.0, 1e6)])
def test_ticks_are_round_and_hold_the_range(low: float, high: float) -> None:
    ticks = round_ticks(low, high, 6)
    assert 2 <= len(ticks) <= 6
    assert ticks[0] <= low + 1e-9 * abs(low)
    assert ticks[-1] >= high - 1e-9 * abs(high)
    np.testing.assert_allclose(np.diff(ticks), ticks[1] - ticks[0], rtol=1e-9)
