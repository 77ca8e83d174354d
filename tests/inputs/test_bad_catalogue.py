"""Faults of the catalogue: every row is checked, and rows against each other."""

from __future__ import annotations

from collections.abc import Callable
from typing import TYPE_CHECKING, Any

import pytest

from archopt.errors import InputError
from archopt.inputs.catalogue import load_catalogue, locate_catalogue
from archopt.inputs.load import load
from archopt.inputs.problems import Notebook

if TYPE_CHECKING:
    from conftest import Desk

CsvText = Callable[[str, list[dict[str, Any]]], str]


@pytest.mark.parametrize(
    ("family", "name", "columns", "told"),
    [
        (
            "buck_stages",
            "stage_40",
            {"inductor": "coils"},
            "row 2, column inductor: 'coils' is not in inductors; did",
        ),
        (
            "buck_stages",
            "stage_40",
            {"gate_supply": "bus"},
            "column gate_supply: 'bus' is not one of input, bias or output",
        ),
        (
            "buck_stages",
            "stage_40",
            {"gate_supply": "output"},
            "column gate_supply: gates need 4.5 V from the output, output_min_v is 0.6 V",
        ),
        (
            "buck_stages",
            "stage_40",
            {"light_load": "emulation"},
            "column light_load: emulation needs a gate supply from input or output",
        ),
        (
            "buck_stages",
            "stage_40",
            {"fold_floor_khz": 600},
            "column fold_floor_khz: 600 kHz is above frequency_khz 500 kHz",
        ),
        ("buck_stages", "stage_40", {"max_duty": 1.2}, "column max_duty: 1.2 is out of range"),
        ("buck_stages", "stage_40", {"max_phases": 2.5}, "column max_phases: needs a whole number"),
        (
            "buck_stages",
            "stage_40",
            {"input_min_v": 20},
            "column input_min_v: 20 V is above input_max_v 16 V",
        ),
        (
            "buck_stages",
            "stage_40",
            {"loop_min_uf": "nan"},
            "column loop_min_uf: nan uF is not a finite number",
        ),
        ("inductors", "coil", {"winding_mohm": -1}, "column winding_mohm: -1 mohm is out of range"),
        (
            "inductors",
            "coil",
            {"source": "made"},
            "column source: 'made' is not in sources.csv; did you mean 'made_up'",
        ),
        (
            "inductors",
            "coil",
            {"price_10k": 1.6},
            "column price_10k: 1.6 is above price_1k 1.5; more pieces never",
        ),
        ("inductors", "coil", {"core_loss_mw": ""}, "column core_loss_mw: missing; it is the core loss"),
        (
            "bus_converters",
            "bus_200",
            {"isolated": "maybe"},
            "column isolated: needs true or false, found 'maybe'",
        ),
        ("bus_converters", "bus_200", {"output_nominal_v": 14}, "column output_nominal_v: 14 V is outside"),
        (
            "bus_converters",
            "bus_200",
            {"kind": "fixed_ratio"},
            "column ratio: a fixed-ratio converter needs its ratio",
        ),
        (
            "bus_converters",
            "bus_200",
            {"overload_a": 10},
            "column max_current_a: 17 A is above overload_a 10 A",
        ),
        ("stacks", "two_pairs", {"copper_oz": 4}, "column copper_oz: 4 oz is not in copper_foils"),
        ("stacks", "two_pairs", {"pairs": 6}, "column layers: 8 layers cannot hold 6 pairs"),
    ],
)
def test_row_fault(desk: Desk, family: str, name: str, columns: dict[str, Any], told: str) -> None:
    desk.part(family, name, **columns)
    notebook = Notebook("study.toml")
    load_catalogue(desk.catalogue, None, "", notebook)
    told_all = [str(problem) for problem in notebook.problems]
    assert len(told_all) == 1, told_all
    assert f"{family}/rows.csv: " in told_all[0]
    assert told in told_all[0]


def test_all_faults_of_all_families_are_told_together(desk: Desk) -> None:
    desk.part("inductors", "coil", winding_mohm="x", source="y")
    desk.part("capacitors", "ceramic_100", kind="paper")
    desk.part("stacks", "four_pairs", layers=50)
    problems = desk.problems()
    for words in (
        "column winding_mohm: needs a number",
        "'paper' is not one of",
        "layers: 50 is out of range",
    ):
        assert any(words in problem for problem in problems), (words, problems)
    assert not any(
        "is not in inductors" in problem for problem in problems
    )  # follows from the coil's own fault


def test_header_faults(desk: Desk, rows_as_csv: CsvText) -> None:
    file = desk.catalogue / "copper_foils" / "rows.csv"
    file.write_text(file.read_text().replace("finished_um", "finished_mm"))
    problems = desk.problems()
    assert (
        "copper_foils/rows.csv: row 1, column finished_mm: unknown; did you mean 'finished_um'?"
        in problems[0]
    )
    assert "column finished_um missing" in problems[1]
    assert rows_as_csv("copper_foils", []).count(",") > 10


def test_unknown_family_and_double_name(desk: Desk, rows_as_csv: CsvText) -> None:
    (desk.catalogue / "capacitor").mkdir()
    row = {"name": "foil_1", "copper_oz": 1, "nominal_um": 34.3, "finished_um": 24.9}
    (desk.catalogue / "copper_foils" / "more.csv").write_text(rows_as_csv("copper_foils", [row]))
    problems = desk.problems()
    assert "capacitor: is no family of parts; did you mean 'capacitors'?" in problems[0]
    assert "'foil_1' is there already" in problems[1]


def test_own_folder_overrides_and_adds(desk: Desk, study_text: str, rows_as_csv: CsvText) -> None:
    own = desk.folder / "parts" / "supervisors"
    own.mkdir(parents=True)
    rows = [
        {"name": "watcher", "control": "two_levels", "power_mw": 50, "buses": 1},
        {"name": "other", "control": "follow_load", "power_mw": 60, "buses": 1},
    ]
    (own / "own.csv").write_text(rows_as_csv("supervisors", rows))
    before = desk.load(study_text).catalogue
    after = desk.load("catalogue = 'parts'\n" + study_text).catalogue
    assert after.families["supervisors"]["watcher"].model_dump()["control"] == "two_levels"
    assert set(after.families["supervisors"]) == {"watcher", "other"}
    assert after.file_of["watcher"] == "parts/supervisors/own.csv"
    assert after.content_hash != before.content_hash


def test_own_part_may_not_take_the_name_of_another_family(
    desk: Desk, study_text: str, rows_as_csv: CsvText
) -> None:
    (desk.folder / "parts").mkdir()
    row = {"name": "coil", "control": "two_levels", "power_mw": 50, "buses": 1}
    (desk.folder / "parts" / "supervisors.csv").write_text(rows_as_csv("supervisors", [row]))
    problems = desk.problems("catalogue = 'parts'\n" + study_text)
    assert problems == [
        "parts/supervisors.csv: row 2, column name: 'coil' is the name of a part of inductors; "
        "names are unique over the catalogue"
    ]


def test_missing_catalogue_folder(desk: Desk, study_text: str) -> None:
    path = desk.write("study.toml", study_text)
    with pytest.raises(InputError, match="there is no such folder"):
        load(path, desk.folder / "nowhere")


def test_catalogue_is_found_beside_the_package() -> None:
    assert (locate_catalogue() / "sources.csv").is_file()
