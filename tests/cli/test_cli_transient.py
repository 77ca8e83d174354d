"""``transient`` and the schedule handed over: from a result's files alone."""

from __future__ import annotations

import csv
import json
import subprocess
import sys
from collections.abc import Callable
from pathlib import Path

import pytest

from archopt.inputs.load import load
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.model.explain import explain_many
from archopt.present import files
from archopt.present.compiled_record import compiled_record
from archopt.present.record import FrontRecord
from archopt.present.waveform_view import columns
from archopt.trade.pinned import pinned_problem
from archopt.trade.schedules import best_schedule

Run = Callable[..., tuple[int, str, str]]
STUDY = Path(__file__).resolve().parents[2] / "studies" / "telecom_six" / "study.toml"
PNG_HEAD = b"\x89PNG\r\n\x1a\n"


@pytest.fixture(scope="module")
def place(tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A result of one design: the line card's hardware, its bus following the load."""
    loaded = load(STUDY)
    problem = compile_study(loaded.study, loaded.catalogue)
    row = incumbent_row(problem)
    assert row is not None
    row = problem.space.encode({"bus_a.converter": "wide_bus_150w"}, row)
    found = best_schedule(Evaluator(pinned_problem(problem, row)), row)
    design = {"design": "D001", "roles": ["knee"], **explain_many(Evaluator(problem), found.row[None])[0]}
    record = FrontRecord([design], [], compiled_record(problem, [design]), {"seed": 1})
    return files.write(record, tmp_path_factory.mktemp("result") / "front")


def test_a_jump_of_everything(run: Run, place: Path) -> None:
    code, out, err = run("transient", str(place), "knee")
    assert (code, err) == (0, "")
    assert "jump survival: stage input" in out
    assert "time, ms" in out
    assert "bus, V" in out
    assert max(map(len, out.splitlines())) < 160


def test_a_rail_meets_its_closed_form(run: Run, place: Path) -> None:
    shown = json.loads(run("transient", str(place), "1", "--rail", "core", "--json")[1])
    droop, release = shown["worst_points"]
    assert (droop["limit"], release["limit"]) == ("rail droop", "rail release")
    design = files.read(place).designs[0]
    core = next(row for row in design["tolerance"] if row["rail"] == "core")
    assert droop["closed"] == pytest.approx(100.0 * core["droop_mv"] / core["budget_mv"], rel=0.01)
    assert release["closed"] == pytest.approx(100.0 * core["release_mv"] / core["budget_mv"], rel=0.01)
    assert 0.3 * droop["closed"] < droop["value"] < 1.02 * droop["closed"]


def test_a_bus_between_states(run: Run, place: Path) -> None:
    code, out, _ = run("transient", str(place), "1", "--bus", "bus_a", "--from", "night at 36 V", "--to", "100 % load")
    assert code == 0
    assert "behind the input path" in out
    shown = json.loads(run("transient", str(place), "1", "--bus", "bus_a", "--json")[1])
    assert shown["worst_points"][0]["unit"] == "% of bus"


def test_a_picture(run: Run, place: Path, tmp_path: Path) -> None:
    picture = tmp_path / "wave.png"
    assert run("transient", str(place), "1", "--rail", "memory", "--png", str(picture))[0] == 0
    assert picture.read_bytes().startswith(PNG_HEAD)
    code, _, err = run("transient", str(place), "1", "--rail", "memory", "--png", str(tmp_path / "no" / "wave.png"))
    assert code == 2
    assert "cannot be written" in err


@pytest.mark.parametrize(
    ("words", "said"),
    [
        (("--rail", "cor"), "there is no rail 'cor': core"),
        (("--bus", "bus_b"), "there is no bus 'bus_b': bus_a"),
        (("--rail", "core", "--bus", "bus_a"), "a rail or a bus, not both"),
        (("--from", "night at 36 V"), "--from and --to"),
        (("--from", "dusk", "--to", "100 % load"), "there is no state 'dusk'"),
    ],
)
def test_what_is_not_there_is_said(run: Run, place: Path, words: tuple[str, ...], said: str) -> None:
    code, out, err = run("transient", str(place), "1", *words)
    assert (code, out) == (2, "")
    assert said in err


def test_a_result_without_its_problem_is_refused(run: Run, record: FrontRecord, tmp_path: Path) -> None:
    files.write(record, tmp_path / "bare")
    code, _, err = run("transient", str(tmp_path / "bare"), "1")
    assert code == 2
    assert "solve it again" in err


def test_the_schedule_is_handed_over(run: Run, place: Path, tmp_path: Path) -> None:
    target = tmp_path / "schedule.csv"
    assert run("show", str(place), "knee", "--schedule", str(target)) == (0, f"wrote {target}\n", "")
    with target.open(newline="") as file:
        rows = list(csv.DictReader(file))
    bands = files.read(place).designs[0]["bands"]
    assert [float(row["bus_a_v"]) for row in rows] == [band["volts"]["bus_a"] for band in bands]
    assert rows[-1]["raise_above_input_w"] == ""
    assert sum(float(row["saving_kwh_per_year"]) for row in rows) > 0.0
    assert run("show", str(place), "--schedule", str(target))[0] == 2


def test_a_drawing_keeps_the_worst_point() -> None:
    import numpy as np

    time_s = np.linspace(0.0, 1.0, 5000)
    values = np.where(np.abs(time_s - 0.371) < 2e-4, 0.2, 1.0)
    assert columns(time_s, values, 64)[1].min() == pytest.approx(0.2)


def test_only_pictures_load_the_plotting_library(place: Path) -> None:
    words = (
        "import sys\nfrom archopt.present.waveform_view import wave_view\nfrom archopt.present import files\n"
        "from pathlib import Path\n"
        f"record = files.read(Path({str(place)!r}))\nwave_view(record.problem, record.designs[0], rail='core')\n"
        "print('matplotlib' in sys.modules)"
    )
    done = subprocess.run([sys.executable, "-c", words], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "False"
