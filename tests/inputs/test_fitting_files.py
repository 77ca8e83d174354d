"""Reading measured points and writing a fitted row: every fault told, nothing overwritten, and a study takes it."""

from __future__ import annotations

import sys
from datetime import date
from pathlib import Path

import numpy as np
import pytest

sys.path.append(str(Path(__file__).parent))

from fitting_bench import SHARES, measure, write_points

from archopt.errors import InputError, OutputError
from archopt.inputs.load import load
from archopt.inputs.measured import loss_table, read_points, table_left_out_points
from archopt.inputs.measured_catalogue import read_catalogue
from archopt.inputs.measured_files import check_name, places, table_text, write_part
from archopt.inputs.starter import write_starter
from archopt.model.compiled import compile_study
from archopt.present.part_fitting import FitRequest, fit_to_files

HEADER = "input_voltage_v,output_voltage_v,current_a,efficiency\n"


def faults(path: Path, text: str) -> list[str]:
    path.write_text(text, encoding="utf-8")
    with pytest.raises(InputError) as refused:
        read_points(path)
    return [f"{problem.place}: {problem.message}" for problem in refused.value.problems]


def test_every_fault_of_the_points_is_told_at_once(tmp_path: Path) -> None:
    rows = "48,12,1,0.9\n48,12,two,0.9\n48,,3,0.9\n48,12,4,93.5\n48,12,5,0\n48,12,6,-0.2\n-48,12,7,nan\n48,12,0,0.9\n"
    said = faults(tmp_path / "points.csv", HEADER + rows + "48,12,9,1\n48,12,-1,0.9\n")
    for expected in (
        "row 3, column current_a: needs a number in A, found 'two'",
        "row 4, column output_voltage_v: needs a number in V, found an empty cell",
        "row 5, column efficiency: 93.5 is above 1; if 93.5 % was meant, write 0.935",
        "row 6, column efficiency: 0 is out of range; it must be at least 0.01 (no load: give loss_w instead)",
        "row 8, column input_voltage_v: -48 V is out of range; it must be above 0 and at most 1000 V",
        "row 8, column efficiency: 'nan' is not a finite number",
        "row 9, column current_a: is 0 A, where efficiency says nothing; give loss_w instead of efficiency",
        "row 10, column efficiency: is 1, no loss at all; nothing can be fitted to it",
        "row 11, column current_a: -1 A is out of range; it must be 0 to 10000 A",
    ):
        assert expected in said
    assert len(said) == 10


@pytest.mark.parametrize(
    ("text", "expected"),
    [
        ("input_voltage_v,output_voltage_v,current_a,loss_w\n48,12,1,-0.4\n", "-0.4 W is out of range"),
        ("input_voltage_v,current_a,loss_w\n48,1,0.4\n", "column output_voltage_v missing"),
        ("input_voltage_v,output_voltage_v,current_a\n48,12,1\n", "column efficiency (0 to 1) or loss_w missing"),
        ("input_voltage_v,output_voltage_v,current_a,efficiency,loss_w\n48,12,1,.9,1\n", "keep the one"),
        ("input_voltage,output_voltage_v,current_a,loss_w\n48,12,1,1\n", "did you mean 'input_voltage_v'"),
        (HEADER, "has no points below its header"),
        ("", "is empty"),
        (HEADER.replace("\n", ",temperature_degc\n") + "48,12,1,0.9,300\n", "300 degC is out of range"),
    ],
)
def test_faults_of_a_points_file(tmp_path: Path, text: str, expected: str) -> None:
    assert any(expected in fault for fault in faults(tmp_path / "points.csv", text))


def test_efficiency_and_loss_say_the_same_and_units_share_the_current(tmp_path: Path) -> None:
    (tmp_path / "a.csv").write_text(HEADER + "48,12,10,0.96\n", encoding="utf-8")
    (tmp_path / "b.csv").write_text(HEADER.replace("efficiency", "loss_w") + "48,12,10,5\n", encoding="utf-8")
    by_share, by_loss = read_points(tmp_path / "a.csv"), read_points(tmp_path / "b.csv", units=2)
    assert by_share.loss_w[0] == pytest.approx(5.0, rel=1e-12)  # closed form: 120 (1/0.96 - 1)
    assert (by_loss.loss_w[0], by_loss.current_a[0]) == (2.5, 5.0)


def request(tmp_path: Path, **changes: object) -> FitRequest:
    catalogue = read_catalogue()
    row = catalogue.families["bus_converters"]["open_bus_24v_120w"]
    points = measure(catalogue, row, [18, 24, 32], [6, 9, 12], [13 * share for share in SHARES], 0.0005)
    path = write_points(tmp_path / "points.csv", points)
    asked = FitRequest(path, "bus_converters", "measured_bus", tmp_path / "study" / "parts")
    return FitRequest(**{**{name: getattr(asked, name) for name in asked.__dataclass_fields__}, **changes})


def test_a_fitted_part_is_loaded_and_compiled_by_a_study(tmp_path: Path) -> None:
    study_path, _ = write_starter(tmp_path / "study")
    text = 'catalogue = "parts"\n' + study_path.read_text(encoding="utf-8")
    study_path.write_text(text + '\n[choices]\nparts = ["measured_bus"]\n', encoding="utf-8")
    result = fit_to_files(request(tmp_path, table=True))
    assert result.written[0] == tmp_path / "study" / "parts" / "bus_converters" / "measured_bus.csv"
    loaded = load(study_path)
    part = loaded.catalogue.families["bus_converters"]["measured_bus"]
    assert part == result.fitted.part
    source = loaded.catalogue.sources[part.source]
    assert (source.kind, source.dated) == ("measured", date.today().isoformat())
    problem = compile_study(loaded.study, loaded.catalogue)
    assert "measured_bus" in problem.converters.names
    assert (tmp_path / "study" / "parts" / "_measured" / "measured_bus.points.csv").is_file()


def test_nothing_is_overwritten_unasked_and_other_rows_stay(tmp_path: Path) -> None:
    file = tmp_path / "parts" / "bus_converters" / "own.csv"
    first = fit_to_files(request(tmp_path, out=file))
    fit_to_files(request(tmp_path, out=file, name="second_bus"))
    before = file.read_bytes()
    with pytest.raises(OutputError, match="has 'measured_bus' already"):
        fit_to_files(request(tmp_path, out=file))
    assert file.read_bytes() == before
    again = fit_to_files(request(tmp_path, out=file, like="open_bus_24v_60w", replace=True))
    rows = read_catalogue(tmp_path / "parts").families["bus_converters"]
    assert rows["measured_bus"] == again.fitted.part != first.fitted.part
    assert rows["second_bus"].name == "second_bus"
    assert (tmp_path / "parts" / "sources.csv").read_text(encoding="utf-8").count("measured_measured_bus,") == 1


def test_a_file_of_other_columns_is_left_alone(tmp_path: Path) -> None:
    file = tmp_path / "notes.csv"
    file.write_text("a,b\n1,2\n", encoding="utf-8")
    with pytest.raises(OutputError, match="other columns"):
        fit_to_files(request(tmp_path, out=file))
    assert file.read_text(encoding="utf-8") == "a,b\n1,2\n"


def test_names_no_study_could_carry_and_names_of_other_families_are_refused(tmp_path: Path) -> None:
    for name in ("", "a,b", "two words", "../up", "#note"):
        with pytest.raises(InputError, match="cannot be a part's name"):
            check_name(name, "points.csv")
    with pytest.raises(InputError, match="is the name of a part of capacitors"):
        fit_to_files(request(tmp_path, name="ceramic_22u_10v"))


def test_where_a_row_goes_decides_whether_a_study_loads_it(tmp_path: Path) -> None:
    assert places(tmp_path / "parts", "buck_stages", "x").row == tmp_path / "parts" / "buck_stages" / "x.csv"
    assert places(tmp_path / "buck_stages.csv", "buck_stages", "x").root == tmp_path
    assert places(tmp_path / "x.csv", "buck_stages", "x").root is None


def test_a_table_needs_every_combination(tmp_path: Path) -> None:
    catalogue = read_catalogue()
    row = catalogue.families["bus_converters"]["trim_bus_150w"]
    points = measure(catalogue, row, [36, 48, 75], [10, 12], [1.0, 4.0, 8.0, 12.0])
    table = loss_table(points)
    np.testing.assert_allclose(table.loss_w.reshape(-1), points.loss_w, rtol=1e-12)
    assert 0 < table_left_out_points(table) < 5
    write = write_points(tmp_path / "points.csv", points).read_text(encoding="utf-8").splitlines()
    (tmp_path / "points.csv").write_text("\n".join(write[:-1]) + "\n", encoding="utf-8")
    with pytest.raises(InputError, match=r"no point at 75 V in, 12 V out, 12 A"):
        loss_table(read_points(tmp_path / "points.csv"))


def test_an_existing_table_is_not_overwritten(tmp_path: Path) -> None:
    result = fit_to_files(request(tmp_path))
    table = loss_table(read_points(tmp_path / "points.csv"))
    place = result.places
    place.table.parent.mkdir(parents=True)
    place.table.write_text("mine", encoding="utf-8")
    part = result.fitted.part.model_copy(update={"name": "third", "source": "measured_third"})
    with pytest.raises(OutputError, match="is there already"):
        write_part(place, part, "title", date(2026, 1, 2), table)
    assert place.table.read_text(encoding="utf-8") == "mine"


def test_a_table_holds_for_one_local_air_and_says_which(tmp_path: Path) -> None:
    catalogue = read_catalogue()
    row = catalogue.families["bus_converters"]["trim_bus_150w"]
    warm = measure(catalogue, row, [36, 75], [12], [1.0, 4.0, 12.0], local_degc=(50.0,))
    text = table_text(loss_table(warm))
    (tmp_path / "table.csv").write_text(text, encoding="utf-8")
    again = read_points(tmp_path / "table.csv")
    np.testing.assert_allclose(again.loss_w, warm.loss_w, rtol=1e-5)
    np.testing.assert_allclose(again.temperature_degc, 50.0, rtol=1e-12)
    both = measure(catalogue, row, [36, 75], [12], [1.0, 4.0, 12.0], local_degc=(25.0, 50.0))
    with pytest.raises(InputError, match="runs from 25 to 50 degC"):
        loss_table(both)
