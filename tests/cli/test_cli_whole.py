"""The whole way with nothing stood in: new, check, solve, show; the same seed writes the same front."""

from __future__ import annotations

import csv
import json
from collections.abc import Callable
from pathlib import Path

import pytest

from archopt.present import files
from archopt.present.losses import year_kwh

Run = Callable[..., tuple[int, str, str]]


def test_the_whole_way(run: Run, tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    assert run("new", "board")[0] == 0
    code, out, err = run("check", "board/study.toml")
    assert (code, err) == (0, "")
    assert "Space to search" in out
    solve = ("solve", "board/study.toml", "--evaluations", "200", "--seed", "3")
    code, out, err = run(*solve, "-o", "one")
    assert (code, err) == (0, "")
    assert "What droop margin costs" in out
    assert run(*solve, "-o", "two", "--quiet") == (0, "two\n", "")
    for name in ("front.csv", "archive.csv", "designs.json"):
        assert (Path("one") / name).read_bytes() == (Path("two") / name).read_bytes()
    with (Path("one") / "front.csv").open(newline="") as file:
        front = list(csv.DictReader(file))
    losses = [float(row["energy_loss_kwh_per_year"]) for row in front]
    assert losses == sorted(losses)
    assert run("show", "one", "D001")[1].startswith("Design D001")
    shown = json.loads(run("show", "one", "1", "--json")[1])
    assert shown["objectives"]["energy_loss_kwh_per_year"] == pytest.approx(losses[0], rel=1e-8)


def test_every_published_design_accounts_for_its_objectives(run: Run, tmp_path: Path) -> None:
    place = tmp_path / "result"
    run("new", str(tmp_path / "board"))
    run("solve", str(tmp_path / "board" / "study.toml"), "--evaluations", "200", "-q", "-o", str(place))
    designs = files.read(place).designs
    assert designs
    for design in designs:
        objectives = design["objectives"]
        assert sum(year_kwh(design).values()) == pytest.approx(objectives["energy_loss_kwh_per_year"], rel=1e-9)
        assert sum(design["cost"].values()) == pytest.approx(objectives["cost_per_board"], rel=1e-9)
        for state in design["states"]:
            assert state["input_w"] == pytest.approx(state["load_w"] + state["loss_w"], rel=1e-9)
            if "losses" in state:
                listed = sum(sum(parts.values()) for parts in state["losses"].values())
                assert listed == pytest.approx(state["loss_w"], rel=1e-9)
