"""``archopt parts`` and ``archopt fit`` as a person uses them, bad input included."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

sys.path.append(str(Path(__file__).parents[1] / "inputs"))

from fitting_bench import SHARES, measure, write_points

from archopt.inputs.measured_catalogue import read_catalogue
from archopt.inputs.starter import write_starter

Run = Callable[..., tuple[int, str, str]]


@pytest.fixture
def points(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    catalogue = read_catalogue()
    row = catalogue.families["bus_converters"]["open_bus_24v_120w"]
    measured = measure(catalogue, row, [18, 24, 32], [6, 9, 12], [13 * share for share in SHARES], 0.0005)
    return write_points(tmp_path / "points.csv", measured)


def fit(run: Run, *words: str) -> tuple[int, str, str]:
    return run("fit", "points.csv", "--family", "bus_converters", "--name", "my_bus", "--out", "parts", *words)


def test_parts_lists_families_rows_columns_and_one_part(run: Run) -> None:
    code, out, err = run("parts")
    assert (code, err) == (0, "")
    assert "bus_converters" in out
    assert all(line == line.rstrip() for line in out.splitlines())
    code, out, _ = run("parts", "bus_converters", "--input-v", "24", "--current-a", "12")
    assert code == 0
    assert "open_bus_24v_120w" in out
    assert "trim_bus_150w" not in out
    code, out, _ = run("parts", "buck_stages", "--columns")
    assert code == 0
    assert "number, at least 50, at most 5000" in out
    code, out, _ = run("parts", "bus_converters", "trim_bus_150w", "--json")
    assert code == 0
    assert json.loads(out)["name"] == "trim_bus_150w"


def test_parts_that_are_not_there(run: Run) -> None:
    code, out, err = run("parts", "bus_convertors")
    assert (code, out) == (2, "")
    assert "did you mean 'bus_converters'" in err


def test_fit_writes_a_part_that_parts_and_check_then_know(run: Run, points: Path, tmp_path: Path) -> None:
    code, out, err = fit(run, "--table")
    assert (code, err) == (0, "")
    for said in ("worst error", "rms error", "May be used", "18 to 32 V", "Not measured, taken from",
                 "wrote parts/bus_converters/my_bus.csv", "no temperature_degc"):  # fmt: skip
        assert said in out
    study, _ = write_starter(tmp_path / "s")
    study.write_text('catalogue = "../parts"\n' + study.read_text(encoding="utf-8"), encoding="utf-8")
    code, out, err = run("parts", "my_bus", "--study", str(study))
    assert (code, err) == (0, "")
    assert "(measured, " in out
    assert "Row less measured table" in out
    table = json.loads(run("parts", "my_bus", "--study", str(study), "--json")[1])["measured_table"]
    assert len(table["loss_w"]) == 63
    assert max(map(abs, table["error_points"])) < 0.3
    assert run("parts", "my_bus")[0] == 2
    code, out, err = run("check", str(study), "--json")
    assert (code, err) == (0, "")


def test_fit_says_what_it_did_as_json(run: Run, points: Path) -> None:
    code, out, _ = fit(run, "--json", "--like", "open_bus_24v_60w")
    assert code == 0
    answer = json.loads(out)
    assert len(answer["fit"]["residuals"]) == 63
    assert answer["fit"]["worst_points"] < 0.3
    assert answer["fit"]["like"] == "open_bus_24v_60w"
    assert [Path(path).name for path in answer["files"]] == ["my_bus.csv", "sources.csv"]


def test_fit_never_overwrites_unasked(run: Run, points: Path) -> None:
    assert fit(run)[0] == 0
    before = Path("parts/bus_converters/my_bus.csv").read_bytes()
    code, out, err = fit(run, "--like", "open_bus_24v_60w")
    assert (code, out) == (2, "")
    assert "--replace" in err
    assert Path("parts/bus_converters/my_bus.csv").read_bytes() == before
    assert fit(run, "--like", "open_bus_24v_60w", "--replace")[0] == 0
    assert Path("parts/bus_converters/my_bus.csv").read_bytes() != before


def test_fit_refuses_with_reasons_and_writes_nothing(run: Run, points: Path) -> None:
    header = "input_voltage_v,output_voltage_v,current_a,efficiency\n"
    points.write_text(header + "48,12,a,95\n48,12,2,0\n", encoding="utf-8")
    code, out, err = fit(run)
    assert (code, out) == (2, "")
    assert "row 2, column current_a" in err
    assert "write 0.95" in err
    assert "row 3, column efficiency" in err
    assert "3 problems found" in err
    assert not Path("parts").exists()


def test_fit_refuses_a_range_nobody_measured(run: Run, points: Path) -> None:
    code, _, err = fit(run, "--input-v", "9", "36")
    assert code == 2
    assert "9 to 36 V is asked for, but 18 to 32 V were measured" in err
    code, out, _ = fit(run, "--input-v", "17.5", "33")
    assert code == 0
    assert "17.5 to 33 V" in out


def test_a_row_outside_a_catalogue_folder_says_how_it_is_loaded(run: Run, points: Path) -> None:
    words = ("fit", "points.csv", "--family", "bus_converters", "--name", "my_bus", "--out", "row.csv")
    code, out, _ = run(*words)
    assert code == 0
    assert "a folder named bus_converters" in out
    assert Path("row.csv").is_file()
    assert Path("sources.csv").is_file()
