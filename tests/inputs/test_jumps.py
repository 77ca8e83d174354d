"""What the load may do at once: a percentage, the load profile's own rises, or jumps between listed states."""

from __future__ import annotations

from dataclasses import replace
from itertools import pairwise
from pathlib import Path
from shutil import copytree

import numpy as np
import pytest

from archopt.inputs.load import LoadedStudy, load
from archopt.inputs.overlay import overlay
from archopt.inputs.resolve_jumps import largest_rise_percent
from archopt.inputs.resolved import Jump
from archopt.model.states import JUMP, reduce_load

STUDIES = Path(__file__).resolve().parents[2] / "studies"
PERCENT = "control.largest_unannounced_jump_percent"


def written(tmp_path: Path, text: str, name: str = "telecom_six") -> Path:
    """A shipped study with its stated jump exchanged for other keys."""
    place = tmp_path / name
    copytree(STUDIES / name, place)
    stated = (place / "study.toml").read_text(encoding="utf-8")
    key = PERCENT.split(".")[1]
    kept = [text if line.startswith(key) else line for line in stated.splitlines()]
    if not any(line.startswith(key) for line in stated.splitlines()):
        kept.insert(kept.index("[control]") + 1, text)
    (place / "study.toml").write_text("\n".join(kept) + "\n", encoding="utf-8")
    return place / "study.toml"


LISTED = """
[[control.jumps]]
before = "night"
after = "evening"

[[control.jumps]]
before = "night"
after = "test at full load"
announced = true

[[control.jumps]]
before = "day"
after = "busy hour"
"""


def listed(tmp_path: Path) -> LoadedStudy:
    place = written(tmp_path, "")
    text = place.read_text(encoding="utf-8").replace("\n[derating]", LISTED + "\n[derating]")
    place.write_text(text, encoding="utf-8")
    return load(place)


def test_listed_jumps_stand_instead_of_a_percentage(tmp_path: Path) -> None:
    study = listed(tmp_path).study
    assert study.control.jumps[1] == Jump("night", "test at full load", True)
    states = reduce_load(study)
    place = {name.split(" at ")[0]: k for k, name in enumerate(states.name)}
    night, day, evening, busy = (place[name] for name in ("night", "day", "evening", "busy hour"))
    after = states.after_a
    np.testing.assert_allclose(
        after[states.band[night]], np.maximum(states.mix_a[states.band[night]], states.current_a[evening]), rtol=1e-12
    )
    assert (after[states.band[day]] >= states.current_a[busy] - 1e-12).all()
    untouched = states.band[busy]
    np.testing.assert_allclose(after[untouched], states.mix_a[untouched], rtol=1e-12)
    jump = states.of_kind(JUMP)
    np.testing.assert_allclose(states.current_a[jump], after, rtol=1e-12)


def test_a_rail_that_is_off_wakes_up_in_the_state_jumped_to(tmp_path: Path) -> None:
    study = listed(tmp_path).study
    off = study.load.off.copy()
    off[0, 1] = True  # serdes, at night
    amps = np.where(off, 0.0, study.load.current_a)
    states = reduce_load(replace(study, load=replace(study.load, off=off, current_a=amps)))
    night = int(states.band[[name.startswith("night") for name in states.name].index(True)])
    assert states.mix_off[night, 1]
    assert states.after_a[night, 1] > 0
    assert not states.off[states.of_kind(JUMP)[night], 1]


def test_the_largest_rise_of_a_profile(tmp_path: Path) -> None:
    loaded = load(STUDIES / "compute_sixteen" / "study.toml")
    study = loaded.study
    volts = np.array([rail.voltage_v for rail in study.rails])
    power_w = study.load.current_a @ volts
    rated_w = sum(r.voltage_v * r.max_current_a for r in study.rails) * study.coincidence
    expected = 100.0 * max(b - a for a, b in pairwise(power_w)) / rated_w
    assert largest_rise_percent(study.rails, study.load, study.coincidence) == pytest.approx(expected, rel=1e-12)
    assert 0.0 < expected < 100.0
    changed = load(written(tmp_path, "jumps_from_series = true", "compute_sixteen")).study
    assert changed.control.jump_percent == pytest.approx(expected, rel=1e-12)
    assert any(a.place == PERCENT and "profile" in a.reason for a in changed.assumed)


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("largest_unannounced_jump_percent = 30.0\njumps_from_series = true", "two ways"),
        ("jumps_from_series = true", "needs a load profile"),
        ('jumps = [{ before = "night", after = "dawn" }]', "no state 'dawn'"),
        ('jumps = [{ before = "night" }]', "after"),
    ],
)
def test_what_cannot_be_is_said(tmp_path: Path, text: str, said: str) -> None:
    with pytest.raises(Exception, match=said):
        load(written(tmp_path, text))


def test_overlay_keeps_the_percentage(tmp_path: Path) -> None:
    loaded = load(written(tmp_path, "largest_unannounced_jump_percent = 40.0"))
    assert overlay(loaded, {PERCENT: 25.0}).study.control.jump_percent == 25.0
