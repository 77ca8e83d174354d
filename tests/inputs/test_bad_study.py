"""What a person may write wrong in a study is told in one error, with its place and what would be right."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

import pytest

from archopt.errors import InputError
from archopt.inputs.load import load

if TYPE_CHECKING:
    from conftest import Desk


def changed(text: str, old: str, new: str) -> str:
    assert old in text
    return text.replace(old, new, 1)


def only(problems: list[str], *words: str) -> None:
    """Check that there is one problem and that it says all the words."""
    assert len(problems) == 1, problems
    for word in words:
        assert word in problems[0], problems[0]


def test_missing_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match=r"absent\.toml: no such file"):
        load(tmp_path / "absent.toml")


def test_folder_instead_of_file(tmp_path: Path) -> None:
    with pytest.raises(InputError, match="is a folder"):
        load(tmp_path)


def test_broken_toml_names_the_line(desk: Desk, study_text: str) -> None:
    only(
        desk.problems(changed(study_text, "high_v = 75", "high_v = 75 V")),
        "line 3",
        "is not TOML",
        "high_v = 75 V",
    )


def test_not_utf8(desk: Desk) -> None:
    (desk.folder / "study.toml").write_bytes(b'title = "\xff"\n')
    with pytest.raises(InputError, match="not UTF-8"):
        load(desk.folder / "study.toml", desk.catalogue)


def test_byte_order_mark_is_no_fault(desk: Desk, study_text: str) -> None:
    assert desk.load("\ufeff" + study_text).study.supply.low_v == 36


@pytest.mark.parametrize(
    ("old", "new", "words"),
    [
        ("low_v = 36", "low_v = 36\nhi_v = 3", ("input.hi_v: unknown", "did you mean 'high_v'?")),
        ("[board]", "[economy]\n[board]", ("economy: unknown", "did you mean 'economics'?")),
        ("voltage_v = 0.9", "voltage_v = 900", ("rails.core.voltage_v", "at most 60 V", "write 0.9")),
        (
            "voltage_v = 3.3",
            "voltage_v = 8500",
            ("rails.io.voltage_v: 8500 V is out of range", "at most 60 V"),
        ),
        ("voltage_v = 3.3", "voltage_v = -3.3", ("rails.io.voltage_v: -3.3 V", "at least 0.3 V")),
        ("max_current_a = 6", "max_current_a = nan", ("rails.io.max_current_a", "not a finite number")),
        ("max_current_a = 6", "max_current_a = inf", ("rails.io.max_current_a",)),
        ("max_current_a = 6", "max_current_a = -6", ("rails.io.max_current_a", "above 0 A")),
        ("max_current_a = 6", 'max_current_a = "6 A"', ("needs a number in A, found '6 A'",)),
        ("max_current_a = 6", "max_current_a = true", ("needs a number in A",)),
        ("max_current_a = 6", "", ("rails.io.max_current_a: missing", "most the load draws")),
        ('name = "io"', 'name = "core"', ("there are two rails 'core'",)),
        ('name = "io"', 'name = "bus_a"', ("rails.bus_a.name", "take another")),
        ('name = "io"', 'name = "3.3 V"', ("does not have the form of a name: letters",)),
        (
            'name = "io"',
            'name = "io"\ncapacitors = ["ceramic_10"]',
            ("no capacitor 'ceramic_10'", "'ceramic_100'"),
        ),
        ('name = "io"', 'name = "io"\nparents = ["cor"]', ("no rail 'cor'", "did you mean 'core'?")),
        (
            'name = "io"',
            'name = "io"\nparents = ["core"]',
            ("'core' has 0.9 V, not above this rail's 3.3 V",),
        ),
        ('name = "io"', 'name = "io"\ntap_of = "core"', ("a tap's is equal",)),
        ('name = "io"', 'name = "io"\nstep_a = 7', ("rails.io.step_a: 7 A is above max_current_a 6 A",)),
        ('name = "io"', 'name = "io"\ntolerance_percent = 2', ("leave -0.10 % (-3.3 mV)", "set point 1 %")),
        ('name = "core"', 'name = "core"\ntolerance_percent = 1.4', ("leave -0.10 %", "ripple 0.5 %")),
        ("voltage_v = 3.3", "voltage_v = 7.5", ("no allowed stage makes 7.5 V", "0.6 to 5.5 V")),
        (
            "max_current_a = 50",
            "max_current_a = 90",
            ("need 103.5 A", "stage_40, carries 64 A after derating"),
        ),
        ("low_v = 36", "low_v = 36\npath = 'path_40'", ("input.path", "rated for 40 V, below high_v 75 V")),
        ("low_v = 36", "low_v = 36\npath = 'path_8'", ("no input path 'path_8'", "did you mean 'path_80'?")),
        ("low_v = 36", "low_v = 80", ("input.low_v: 80 V is above input.high_v 75 V",)),
        ("high_v = 75", "high_v = 78", ("no allowed converter stands 36 to 78 V",)),
        ("low_v = 36", "low_v = 36\nnominal_v = 24", ("input.nominal_v: 24 V is outside",)),
        ("area_cm2 = 300", "area_cm2 = 300\nstacks = ['six']", ("no stack 'six'",)),
        ("[board]", "[choices]\nforbidden_parts = ['bus_20']\n[board]", ("no part 'bus_20'", "'bus_200'")),
        ("[board]", "[choices]\nfamilies = ['bucks']\n[board]", ("'bucks' is no family",)),
        (
            "[board]",
            "[choices]\npin = { 'core.stage' = 'stage_4' }\n[board]",
            ("choices.pin.core.stage", "'stage_40'"),
        ),
        (
            "[board]",
            "[choices]\npin = { 'cor.stage' = 'stage_40' }\n[board]",
            ("no rail or bus 'cor'", "'core'"),
        ),
        (
            "[board]",
            "[choices]\npin = { 'core.stages' = 'stage_40' }\n[board]",
            ("no choice 'stages'", "'stage'"),
        ),
        ("[board]", "[choices]\npin = { 'core.phases' = 0 }\n[board]", ("no whole number from 1 to 16",)),
        ("[board]", "[choices]\nmax_buses = 0\ndirect = false\n[board]", ("without a feed",)),
        (
            "[board]",
            "[incumbent]\n[incumbent.core]\nstage = 'stage_41'\n[board]",
            ("no stage 'stage_41'", "'stage_40'"),
        ),
        ("[board]", "[incumbent]\n'core.stage' = 'stage_40'\n[board]", ("incumbent.io.stage: missing",)),
        ("[board]", "[control]\nkinds = ['follows']\n[board]", ("control.kinds", "follow_load")),
        ("[board]", "[load]\ncovers = 'year'\n[board]", ("load.covers: needs a profile or states",)),
        ("[board]", "[load]\nprofile = 'gone.csv'\n[board]", ("gone.csv: no such file",)),
        ("[board]", "catalogue = 'x'\n[board]", ("input.catalogue: unknown",)),
    ],
)
def test_one_fault_is_one_problem(
    desk: Desk, study_text: str, old: str, new: str, words: tuple[str, ...]
) -> None:
    problems = desk.problems(changed(study_text, old, new))
    if "no allowed converter" in words[0]:
        problems = [problem for problem in problems if "path" not in problem]
    only(problems, *words)


def test_isolation_impossible(desk: Desk, study_text: str) -> None:
    desk.part("bus_converters", "bus_200", isolated="false")
    text = changed(study_text, "[board]", "[choices]\nforbidden_families = ['single_stages']\n[board]")
    only(desk.problems(text), "input.isolation", "no allowed converter that stands 36 to 75 V isolates")


def test_input_above_every_path(desk: Desk, study_text: str) -> None:
    problems = desk.problems(changed(study_text, "high_v = 75", "high_v = 90"))
    assert any(
        "no input path is rated for high_v 90 V; the highest is rated for 80 V" in item for item in problems
    )


def test_levels_must_sum_to_one(desk: Desk, study_text: str) -> None:
    levels = "levels = [{ voltage_v = 48, share = 0.5 }, { voltage_v = 54, share = 0.4 }]"
    only(desk.problems(changed(study_text, "low_v = 36", f"low_v = 36\n{levels}")), "shares sum to 0.9")


def test_unnamed_study_folder_of_parts(desk: Desk, study_text: str) -> None:
    only(desk.problems("catalogue = 'mine'\n" + study_text), "there is no folder mine")


def test_no_supervisor_for_a_bus_that_moves(desk: Desk, study_text: str) -> None:
    text = changed(
        study_text,
        "[board]",
        "[control]\nkinds = ['follow_load']\n[choices]\nforbidden_families = ['supervisors']\n[board]",
    )
    only(desk.problems(text), "control.kinds", "a supervisor is needed")


def test_rails_csv_faults_name_row_and_column(desk: Desk, study_text: str) -> None:
    desk.write(
        "rails.csv", "name,voltage_v,max_current_a,remote\ncore,0.9,fifty,\nio,3.3,6,\nio,1.8,2,\nx,1.8,,\n"
    )
    problems = desk.problems('rails = "rails.csv"\n' + study_text.split("[[rails]]", 1)[0])
    assert problems == [
        "rails.csv: row 1, column remote: unknown; did you mean 'remote_sense'?",
        "rails.csv: row 2, column max_current_a: needs a number in A, found 'fifty'",
        "rails.csv: row 4, column name: there are two rails 'io'; names are unique",
        "rails.csv: row 5, column max_current_a: missing; it is the most the load draws",
    ]


def test_ten_problems_of_four_files_in_one_error(desk: Desk, study_text: str) -> None:
    desk.write("load.csv", "hours,core_a,io_a\n4000,ten,1\n4760,10,-1\n")
    desk.part("capacitors", "ceramic_100", esr_mohm="low", price_1k=3)
    desk.part("stacks", "two_pairs", copper_oz=3)
    text = changed(study_text, "high_v = 75", "high_v = 75\ninlet_degc = 300")
    text = changed(text, "area_cm2 = 300", "area_cm2 = 300\nlayers = 6")
    text = changed(text, "voltage_v = 3.3", "voltage_v = 3.3\ntolerance_percent = 1")
    text = changed(text, 'name = "core"', 'name = "core"\nparents = ["aux"]')
    text += "[load]\nprofile = 'load.csv'\ncoincidence = 1.5\n[economics]\nlife_years = -1\n"
    problems = desk.problems(text)
    for words in (
        "study.toml: input.inlet_degc: 300 degC is out of range",
        "study.toml: board.layers: unknown",
        "study.toml: rails.io.tolerance_percent: the +-1 % leave",
        "study.toml: rails.core.parents: there is no rail 'aux'",
        "study.toml: load.coincidence: 1.5 is out of range",
        "study.toml: economics.life_years: -1 is out of range",
        "load.csv: row 2, column core_a: needs a number, found 'ten'",
        "load.csv: row 3, column io_a: -1 is negative",
        "catalogue/capacitors/rows.csv: row 2, column esr_mohm: needs a number in mohm, found 'low'",
        "catalogue/stacks/rows.csv: row 2, column copper_oz: 3 oz is not in copper_foils",
    ):
        assert any(problem.startswith(words) for problem in problems), (words, problems)
    assert len(problems) == 10, problems
