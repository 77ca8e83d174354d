"""From measured points to a solved board: ``fit --table``, a study that uses the part, its result and what it shows."""

from __future__ import annotations

import json
import sys
from collections.abc import Callable
from pathlib import Path

import numpy as np
import pytest

sys.path += [str(Path(__file__).parents[1] / "inputs"), str(Path(__file__).parents[1])]

from equivalence.from_files import FromFiles
from fitting_bench import SHARES, loss_w, measure

from archopt.inputs.measured_catalogue import read_catalogue

Run = Callable[..., tuple[int, str, str]]
STUDY = """\
name = "bench"
catalogue = "parts"
[input]
low_v = 20
high_v = 30
[board]
area_cm2 = 150
stacks = ["6_layers_1_pair_2_oz"]
[control]
bus_min_v = 7
bus_max_v = 11
[choices]
direct = false
max_buses = 1
[choices.pin]
"bus_a.converter" = "my_bus"
[[rails]]
name = "core"
voltage_v = 1.0
max_current_a = 15
squares = 0.4
copper_width_mm = 60
copper_area_cm2 = 15
[[rails]]
name = "io"
voltage_v = 3.3
max_current_a = 5
squares = 1.0
copper_width_mm = 40
copper_area_cm2 = 10
"""


@pytest.fixture
def solved(run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.chdir(tmp_path)
    catalogue = read_catalogue()
    row = catalogue.families["bus_converters"]["open_bus_24v_120w"]
    amps = 13.0 * np.array([1e-6, 0.01, 0.03, *SHARES])
    points = measure(catalogue, row, [19.5, 24, 31], [6.9, 9, 11.1], amps, 0.0)
    lines = ["input_voltage_v,output_voltage_v,current_a,loss_w"]
    columns = (points.input_v, points.output_v, points.current_a, loss_w(catalogue, row, points))
    lines += [",".join(f"{value:.6g}" for value in at) for at in zip(*columns, strict=True)]
    (tmp_path / "points.csv").write_text("\n".join(lines) + "\n", encoding="utf-8")
    words = ("fit", "points.csv", "--family", "bus_converters", "--name", "my_bus", "--out", "parts", "--table")
    code, out, err = run(*words, "--like", "open_bus_24v_120w")
    assert (code, err) == (0, "")
    assert "a search reads the table, never beyond it" in out
    (tmp_path / "study.toml").write_text(STUDY, encoding="utf-8")
    code, _, err = run("solve", "study.toml", "--out", "result", "--evaluations", "200", "--quiet")
    assert (code, err) == (0, ""), err
    return tmp_path / "result"


def test_a_fitted_table_is_what_the_solve_reads(run: Run, solved: Path) -> None:
    problem = json.loads((solved / "problem.json").read_text(encoding="utf-8"))
    designs = json.loads((solved / "designs.json").read_text(encoding="utf-8"))
    table = problem["measured"]["my_bus"]
    assert np.array(table["loss_w"]).shape == (3, 3, 10)
    assert problem["parts"]["bus_converters"]["my_bus"]["measured_points"] == "_measured/my_bus.points.csv"
    for design in (designs[0], designs[-1]):
        assert list(design["year_kwh"]["bus_a converter"]) == ["measured"]
        assert "measured range" in {limit["limit"] for limit in design["limits"]}
        again = FromFiles(problem, design)
        assert again.energy_kwh() == pytest.approx(design["objectives"]["energy_loss_kwh_per_year"], rel=1e-9)
    changed = json.loads(json.dumps(problem))
    changed["measured"]["my_bus"]["loss_w"] = (1.1 * np.array(table["loss_w"])).tolist()
    more = FromFiles(changed, designs[0]).energy_kwh() / designs[0]["objectives"]["energy_loss_kwh_per_year"]
    assert 1.01 < more < 1.1
    code, out, err = run("show", str(solved), "knee")
    assert (code, err) == (0, "")
    assert "measured" in out
    code, _, err = run("transient", str(solved), "knee")
    assert (code, err) == (0, "")
    code, _, err = run("copper", str(solved), "knee")
    assert (code, err) == (0, "")
