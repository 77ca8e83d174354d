"""The states of a check: the year listed, the others counted or listed; the jumps a study lists."""

from __future__ import annotations

from dataclasses import replace
from io import StringIO

from archopt.present.record import CheckResult, Data, FrontRecord
from archopt.present.state_tables import beside_the_year
from archopt.present.tables import console_for
from archopt.present.terminal import print_check


def state(name: str, kind: str, hours: float, load_w: float) -> Data:
    return {"state": name, "kind": kind, "hours": hours, "input_v": 54.0, "load_w": load_w}


STATES = [
    state("night at 54 V", "energy", 6000.0, 40.0), state("day at 54 V", "energy", 2760.0, 90.0),
    state("band 1 worst mix, low input", "worst mix", 0.0, 50.0),
    state("band 2 worst mix, low input", "worst mix", 0.0, 95.0),
    state("band 1 after jump, low input", "after jump", 0.0, 95.0), state("30 % load", "shown load", 0.0, 30.0),
]  # fmt: skip


def check_text(record: FrontRecord, *, everything: bool) -> str:
    problem = {**record.problem, "states": STATES}
    control = {
        **problem["study"]["control"],
        "jumps": [
            {"before": "night", "after": "day", "announced": True},
            {"before": "day", "after": "night", "announced": False},
        ],
    }
    problem["study"] = {**problem["study"], "control": control}
    buffer = StringIO()
    print_check(console_for(buffer), replace(CheckResult(problem), cautions=[]), everything=everything)
    return buffer.getvalue()


def test_states_without_hours_are_counted_by_what_they_are() -> None:
    assert beside_the_year(STATES) == "2 worst mixes of a band, 1 after a jump, 1 load shown for its watts"
    assert beside_the_year(STATES[:2]) == ""


def test_a_check_lists_the_year_and_everything_where_asked(record: FrontRecord) -> None:
    short, long = (check_text(record, everything=everything) for everything in (False, True))
    assert "Looked at beside the year: 2 worst mixes of a band" in short
    assert "band 1 worst mix, low input" not in short
    assert "Looked at beside the year" not in long
    for entry in STATES:
        assert str(entry["state"]).removesuffix(" at 54 V") in long


def test_announced_and_unannounced_jumps_stand_apart(record: FrontRecord) -> None:
    lines = check_text(record, everything=False).splitlines()
    at = lines.index("Jumps")
    assert [line.split() for line in lines[at + 2 : at + 4]] == [
        ["night", "day", "40.0", "90.0", "announced"], ["day", "night", "90.0", "40.0", "unannounced"],
    ]  # fmt: skip
    control = next(line for line in lines if line.startswith("  bus control"))
    assert "1 unannounced and 1 announced jumps between listed states" in control
