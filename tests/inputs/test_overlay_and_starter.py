"""A study with changed values, the starter study, and what is read is what was written."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import numpy as np
import pytest

from archopt.errors import InputError, OutputError
from archopt.inputs.load import load
from archopt.inputs.overlay import overlay
from archopt.inputs.starter import write_starter

if TYPE_CHECKING:
    from conftest import Desk


def test_overlay_changes_only_what_is_named(desk: Desk) -> None:
    loaded = desk.load()
    changed = overlay(loaded, {"economics.energy_price_per_kwh": 0.3, "rails.core.max_current_a": 40})
    assert changed.study.economics.energy_price_per_kwh == 0.3
    assert changed.study.rails[0].max_current_a == 40
    assert changed.study.rails[0].step_a == 20  # its default follows
    assert changed.study.rails[1] == loaded.study.rails[1]
    assert loaded.study.economics.energy_price_per_kwh == 0.15
    assert changed.study.study_hash != loaded.study.study_hash
    places = {item.place for item in changed.study.assumed}
    assert "economics.energy_price_per_kwh" not in places


def test_overlay_of_nothing_is_the_same_study(desk: Desk) -> None:
    loaded = desk.load()
    same = overlay(loaded, {}).study
    assert same.study_hash == loaded.study.study_hash
    assert same.rails == loaded.study.rails
    np.testing.assert_array_equal(same.load.current_a, loaded.study.load.current_a)


def test_overlay_reaches_rows_pins_and_all_rails(desk: Desk, study_text: str) -> None:
    states = "[[load.states]]\nname = 'idle'\nhours = 100\nutilisation = 0.1\n"
    loaded = desk.load(study_text + states)
    changed = overlay(
        loaded,
        {
            "load.states.idle.hours": np.float64(2000.0),
            "rails.*.tolerance_percent": 6,
            "choices.pin.core.stage": "stage_40",
            "choices.pin.bus_a.control": ("fixed", "two_levels"),
            "board.stacks": ("two_pairs",),
        },
    ).study
    assert changed.load.hours.tolist() == [2000.0]
    assert [rail.tolerance_percent for rail in changed.rails] == [6, 6]
    assert changed.choices.pins == {"core.stage": ("stage_40",), "bus_a.control": ("fixed", "two_levels")}
    assert changed.board.stacks == ("two_pairs",)


def test_overlay_of_rails_in_a_csv(desk: Desk, study_text: str) -> None:
    desk.write(
        "rails.csv",
        "name,voltage_v,max_current_a,capacitors\ncore,0.9,50,\nio,3.3,6,ceramic_100;polymer_330\n",
    )
    loaded = desk.load('rails = "rails.csv"\n' + study_text.split("[[rails]]", 1)[0])
    assert loaded.study.rails[1].capacitors == ("ceramic_100", "polymer_330")
    assert overlay(loaded, {"rails.io.max_current_a": 5}).study.rails[1].max_current_a == 5


@pytest.mark.parametrize(
    ("changes", "told"),
    [
        ({"rails.cor.max_current_a": 5}, "rails.cor: there is no 'cor'; did you mean 'core'?"),
        (
            {"economics.energy_price": 5},
            "economics.energy_price: unknown; did you mean 'energy_price_per_kwh'?",
        ),
        ({"economics.energy_price_per_kwh": -1}, "economics.energy_price_per_kwh: -1"),
        ({"input.low_v.deep": 5}, "is no place in the study"),
    ],
)
def test_overlay_faults(desk: Desk, changes: dict[str, object], told: str) -> None:
    loaded = desk.load()
    with pytest.raises(InputError) as caught:
        overlay(loaded, changes)
    assert told in str(caught.value)


def test_overlay_takes_a_value_away(desk: Desk, study_text: str) -> None:
    loaded = desk.load(study_text + "[economics]\nlife_years = 3\n")
    assert overlay(loaded, {"economics.life_years": None}).study.economics.life_years == 7


def test_starter_loads_and_is_never_written_over(tmp_path: Path) -> None:
    study_file, profile_file = write_starter(tmp_path / "new" / "here")
    assert 30 <= len(study_file.read_text().splitlines()) <= 45
    study = load(study_file).study
    assert len(study.rails) == 6
    assert study.load.series
    assert profile_file.is_file()
    assert study.load.hours.sum() == pytest.approx(8760, rel=1e-9)
    assert study.load.off.any()
    with pytest.raises(OutputError, match="is there already"):
        write_starter(tmp_path / "new" / "here")
    profile_file.unlink()
    with pytest.raises(OutputError, match="is there already"):
        write_starter(tmp_path / "new" / "here")
    assert not profile_file.exists()


def test_starter_cannot_be_written_into_a_file(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("x")
    with pytest.raises(OutputError, match="cannot be written"):
        write_starter(tmp_path / "file" / "folder")
    with pytest.raises(OutputError, match="a file of that name is in the way"):
        write_starter(tmp_path / "file")


def test_same_bytes_same_hash(desk: Desk, study_text: str) -> None:
    first, second = desk.load(study_text), desk.load(study_text)
    assert first.study.study_hash == second.study.study_hash
    assert first.catalogue.content_hash == second.catalogue.content_hash
    assert first.study.stated["input"] == {"low_v": 36, "high_v": 75}
    assert desk.load(study_text + "# a comment\n").study.study_hash == first.study.study_hash
