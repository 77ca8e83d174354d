"""``copper`` from a result's files alone, and ``floorplan`` from a study."""

from __future__ import annotations

import csv
import json
import shutil
from collections.abc import Callable
from pathlib import Path

import pytest

from archopt.inputs.load import load
from archopt.model.compiled import incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.model.explain import explain_many
from archopt.model.problem import compile_problem
from archopt.model.states import reduce_load
from archopt.present import files
from archopt.present.compiled_record import compiled_record
from archopt.present.record import FrontRecord

Run = Callable[..., tuple[int, str, str]]
STUDIES = Path(__file__).resolve().parents[2] / "studies"
COMPUTE = STUDIES / "compute_sixteen" / "study.toml"
PNG_HEAD = b"\x89PNG\r\n\x1a\n"


@pytest.fixture(scope="module")
def result(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A result of one design, the compute node as it is today, its floorplan in the files."""
    loaded = load(COMPUTE)
    problem = compile_problem(loaded.study, loaded.catalogue, reduce_load(loaded.study))
    row = incumbent_row(problem)
    assert row is not None
    evaluator = Evaluator(problem)
    design = {"design": "D001", "roles": ["knee"], **explain_many(evaluator, evaluator.decide(row[None]))[0]}
    record = FrontRecord([design], [], compiled_record(problem, [design]), {"seed": 1})
    return files.write(record, tmp_path_factory.mktemp("copper") / "front")


@pytest.fixture
def place(result: Path, tmp_path: Path) -> Path:
    """A copy of the result for one test to write beside."""
    return Path(shutil.copytree(result, tmp_path / "front"))


def test_copper_of_a_design(run: Run, place: Path) -> None:
    code, out, err = run("copper", str(place), "knee")
    assert (code, err) == (0, "")
    for words in ("Copper of D001", "copper weight, oz", "One more pair of each net", "storage_5v", "months"):
        assert words in out
    assert "14_layers_4_pairs_2_oz of the same weight holds this design too and costs 26 EUR less" in out
    with (place / "copper_D001.csv").open() as stream:
        rows = list(csv.DictReader(stream))
    objectives = json.loads((place / "designs.json").read_text())[0]["objectives"]
    here = [row for row in rows if row["this_design"] == "yes"]
    assert len(here) == 18
    for row in here:
        assert float(row["loss_kwh_per_year"]) == pytest.approx(objectives["energy_loss_kwh_per_year"], rel=1e-6)
        assert float(row["cost_per_board"]) == pytest.approx(objectives["cost_per_board"], rel=1e-6)


def test_one_net_and_json(run: Run, place: Path) -> None:
    code, out, _ = run("copper", str(place), "D001", "--net", "bus_a")
    assert code == 0
    assert "Pairs of bus_a" in out
    assert "serdes" not in out
    again = ("--reoptimise", "--evaluations", "64")
    code, out, _ = run("copper", str(place), "D001", "--net", "bus_a", "--replace", *again, "--json")
    assert code == 0
    said = json.loads(out)
    assert said["csv"].endswith("copper_D001.csv")
    assert said["reoptimised"] is True
    assert {point["sweep"] for point in said["points"]} == {"copper weight", "bus_a"}


def test_an_earlier_csv_is_not_overwritten_unasked(run: Run, place: Path) -> None:
    (place / "copper_D001.csv").write_text("mine")
    code, out, err = run("copper", str(place), "D001")
    assert (code, out) == (2, "")
    assert "copper_D001.csv is there already" in err
    assert (place / "copper_D001.csv").read_text() == "mine"
    assert run("copper", str(place), "D001", "--replace")[0] == 0
    assert (place / "copper_D001.csv").read_text() != "mine"


def test_a_result_with_a_copper_table_may_still_be_replaced(run: Run, place: Path) -> None:
    assert run("copper", str(place), "D001", "--net", "core_west")[0] == 0
    files.check_target(place, replace=True)


@pytest.mark.parametrize(
    ("words", "wanted"),
    [
        (("D009",), "no design 'D009'"),
        (("knee", "--net", "bus_b"), "the design has no net 'bus_b'"),
        (("knee", "--net", "cor_west"), "did you mean 'core_west'?"),
    ],
)
def test_what_is_not_there_is_named(run: Run, place: Path, words: tuple[str, ...], wanted: str) -> None:
    code, out, err = run("copper", str(place), *words)
    assert (code, out) == (2, "")
    assert wanted in err
    assert not list(place.glob("copper_*"))


def test_a_floorplan_is_drawn(run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    code, out, err = run("floorplan", str(COMPUTE))
    assert (code, err) == (0, "")
    assert (tmp_path / "compute_sixteen_floorplan.png").read_bytes().startswith(PNG_HEAD)
    assert "farthest, squares" in out
    bus = next(line.split() for line in out.splitlines() if line.split()[:1] == ["bus_a"])
    assert bus[4] == "storage_5v"
    # the I of copper less the slot: 380 x 40 + 40 x 170 + 380 x 30 - 60 x 8 mm2, found to a tenth of a per cent
    assert float(bus[5]) == pytest.approx(329.2, rel=1e-3)


@pytest.mark.parametrize("words", [("--net", "bus_a"), ("--net", "core_west", "--density")])
def test_fields_of_a_net_are_drawn(run: Run, tmp_path: Path, words: tuple[str, ...]) -> None:
    picture = tmp_path / "net.svg"
    code, _, err = run("floorplan", str(COMPUTE), *words, "--out", str(picture))
    assert (code, err) == (0, "")
    text = picture.read_text()
    assert "<svg" in text
    assert "<image" in text


def test_bad_wishes_for_a_picture(run: Run, tmp_path: Path) -> None:
    picture = tmp_path / "there.png"
    picture.write_text("mine")
    for words, wanted in (
        (("--out", str(picture)), "is there already"),
        (("--out", str(tmp_path / "board.txt")), "a picture ends in .png, .svg, .pdf"),
        (("--out", str(tmp_path / "a.png"), "--net", "bus_c"), "the floorplan draws no net 'bus_c'"),
        (("--out", str(tmp_path / "no" / "a.png")), "cannot be written"),
    ):
        code, out, err = run("floorplan", str(COMPUTE), *words)
        assert (code, out) == (2, ""), words
        assert wanted in err
    assert picture.read_text() == "mine"


def test_a_study_without_floorplan_says_so(run: Run, tmp_path: Path) -> None:
    code, _, err = run("floorplan", str(STUDIES / "telecom_six" / "study.toml"), "--out", str(tmp_path / "a.png"))
    assert code == 2
    assert "the study has no floorplan" in err
