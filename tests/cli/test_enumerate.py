"""``archopt enumerate`` as a person uses it: a small space gone through, a large one bracketed."""

from __future__ import annotations

import csv
import json
from pathlib import Path

import pytest
from typer.testing import CliRunner

from archopt.cli import main
from tests.search.small_study import FEW_CHOICES, TWO_RAILS

FEWER = FEW_CHOICES.replace('["buck_25a_600k_bus_gate", "buck_20a_400k_bus_gate", "buck_20a_700k_bus_gate"]',
                            '"buck_20a_400k_bus_gate"').replace('[3, 4, 6]', '6')  # fmt: skip
WIDE = """
[choices]
max_buses = 1
direct = false
families = ["buck_stages", "bus_converters", "supervisors"]

[choices.pin]
"core.stage" = ["buck_25a_600k_bus_gate", "buck_20a_400k_bus_gate"]
"io.stage" = ["buck_15a_500k_bus_gate", "buck_20a_400k_bus_gate"]
"bus_a.control" = "fixed"
"""


def run(*words: str) -> int:
    """Run the command line and return its exit code."""
    with pytest.raises(SystemExit) as left:
        main(["enumerate", *words])
    code = left.value.code
    return code if isinstance(code, int) else 1


def written(folder: Path, text: str) -> Path:
    """Write a study."""
    path = folder / "study.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_a_small_space_is_gone_through(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    study, out = written(tmp_path, TWO_RAILS + FEWER), tmp_path / "proof"
    assert run(str(study), "--out", str(out), "--evaluations", "600", "--workers", "1") == 0
    said = capsys.readouterr()
    assert "different designs" in said.err
    assert "takes about" in said.err
    assert "The exact front has" in said.out
    summary = json.loads((out / "proof.json").read_text(encoding="utf-8"))
    known = summary["enumeration"]
    assert known["complete"]
    assert known["covered"] == known["of"] == summary["designs_possible"] <= summary["designs"]
    assert known["ruled_out"] + known["same_as_others"] + known["evaluated"] == known["covered"]
    assert 0.9 < summary["comparison"]["share"] <= 1.0
    with (out / "exact_front.csv").open(encoding="utf-8", newline="") as file:
        rows = list(csv.DictReader(file))
    assert len(rows) == known["exact_front"] > 3
    assert {row["core.stage"] for row in rows} == {"buck_20a_400k_bus_gate"}
    assert [float(row["energy_loss_kwh_per_year"]) for row in rows] == sorted(
        float(row["energy_loss_kwh_per_year"]) for row in rows
    )
    assert run(str(study), "--out", str(out)) == 2
    assert "--replace" in capsys.readouterr().err
    (out / "notes.txt").write_text("mine", encoding="utf-8")
    assert run(str(study), "--out", str(out), "--replace") == 2
    assert "notes.txt" in capsys.readouterr().err


def test_a_large_space_is_bracketed(tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    study, out = written(tmp_path, TWO_RAILS + WIDE), tmp_path / "proof"
    assert run(str(study), "--out", str(out), "--evaluations", "200", "--json") == 0
    said = capsys.readouterr()
    assert "bracketed" in said.err
    assert "Pins to one value each" in said.err
    summary = json.loads(said.out)
    assert summary["enumeration"] is None
    assert summary["pins_that_would_help"]
    assert 0.0 < summary["bound"]["hypervolume_share_reached"] <= 1.0
    assert (out / "bound.csv").exists()
    assert (out / "found_front.csv").exists()
    assert not (out / "exact_front.csv").exists()


def test_help_says_what_it_does() -> None:
    from archopt.cli import app

    said = CliRunner().invoke(app, ["enumerate", "--help"])
    assert said.exit_code == 0
    assert "going through every" in said.output
