"""The files of a result: read back equal, the same bytes twice, whole or not at all, never over others."""

from __future__ import annotations

import csv
import dataclasses
import json
from pathlib import Path

import pytest

from archopt.errors import OutputError
from archopt.present import files
from archopt.present.record import FrontRecord


def front_table(directory: Path) -> list[dict[str, str]]:
    """``front.csv`` as any reader of CSV sees it."""
    with (directory / "front.csv").open(newline="") as file:
        return list(csv.DictReader(file))


def test_a_result_reads_back_as_written(record: FrontRecord, tmp_path: Path) -> None:
    files.write(record, tmp_path / "runs" / "a")
    back = files.read(tmp_path / "runs" / "a")
    assert back == record
    assert [row["core.stage"] for row in back.archive] == ["1200", "STAGE-40"]


def test_numbers_keep_twelve_digits_in_json_and_nine_in_csv(record: FrontRecord, tmp_path: Path) -> None:
    third = 1000.0 / 3.0
    record.designs[0]["objectives"]["energy_loss_kwh_per_year"] = third
    record.archive[0]["energy_loss_kwh_per_year"] = third
    files.write(record, tmp_path / "a")
    back = files.read(tmp_path / "a")
    assert back.designs[0]["objectives"]["energy_loss_kwh_per_year"] == pytest.approx(third, rel=1e-11)
    assert back.archive[0]["energy_loss_kwh_per_year"] == pytest.approx(third, rel=1e-8)
    first = front_table(tmp_path / "a")[0]
    assert first["energy_loss_kwh_per_year"] == "333.333333"


def test_not_finite_becomes_null_and_an_empty_cell(record: FrontRecord, tmp_path: Path) -> None:
    record.designs[0]["beside"]["payback_years"] = float("nan")
    files.write(record, tmp_path / "a")
    assert files.read(tmp_path / "a").designs[0]["beside"]["payback_years"] is None
    assert front_table(tmp_path / "a")[0]["payback_years"] == ""


def test_tables_do_not_depend_on_time_or_machine(record: FrontRecord) -> None:
    other_run = {"seed": 7, "counts": {"seconds": 99.0}, "processor": "another"}
    other = dataclasses.replace(record, run=other_run)
    one, two = files.file_contents(record), files.file_contents(other)
    assert one["run.json"] != two["run.json"]
    for name in ("front.csv", "archive.csv", "designs.json", "problem.json", "extras.json"):
        assert one[name] == two[name]
    assert b"\r" not in one["front.csv"]
    assert one["front.csv"].endswith(b"\n")


def test_front_table_is_pinned(record: FrontRecord) -> None:
    lines = files.file_contents(record)["front.csv"].decode().splitlines()
    assert lines[0].split(",")[:6] == [
        "design", "topology", "energy_loss_kwh_per_year", "cost_per_board", "worst_droop_percent",
        "worst_droop_exact_percent",
    ]  # fmt: skip
    assert lines[3] == (
        'D003,"one bus, follows load",63.072,80,84,83.45,BRICK-8,2,10,follow_load,8,12,,,,,,,S12-2x2oz,knee,'
        'rail droop,core,"band 2 worst mix, low input",16,%,3.6,7.2,14.4,18,588.672,177.13088,1.25,3120'
    )
    assert len(lines) == 1 + len(record.designs)


def test_an_earlier_result_stays_unless_replacing_is_asked(record: FrontRecord, tmp_path: Path) -> None:
    place = files.write(record, tmp_path / "a")
    before = (place / "run.json").read_bytes()
    changed = dataclasses.replace(record, run={"seed": 8})
    with pytest.raises(OutputError, match="--replace"):
        files.write(changed, place)
    assert (place / "run.json").read_bytes() == before
    files.write(changed, place, replace=True)
    assert files.read(place).run == {"seed": 8}
    assert [entry.name for entry in tmp_path.iterdir()] == ["a"]


def test_an_empty_directory_may_be_used(record: FrontRecord, tmp_path: Path) -> None:
    (tmp_path / "a").mkdir()
    files.write(record, tmp_path / "a")
    assert files.read(tmp_path / "a") == record


@pytest.mark.parametrize("replace", [False, True])
def test_foreign_directories_and_files_are_never_replaced(record: FrontRecord, tmp_path: Path, replace: bool) -> None:
    foreign = tmp_path / "photos"
    foreign.mkdir()
    (foreign / "cat.png").write_bytes(b"x")
    with pytest.raises(OutputError, match="no result of archopt"):
        files.write(record, foreign, replace=replace)
    assert (foreign / "cat.png").read_bytes() == b"x"
    (tmp_path / "file").write_text("x")
    with pytest.raises(OutputError, match="in the way"):
        files.write(record, tmp_path / "file", replace=replace)


def test_notes_put_into_a_result_are_not_thrown_away(record: FrontRecord, tmp_path: Path) -> None:
    place = files.write(record, tmp_path / "a")
    (place / "notes.txt").write_text("why we chose D003")
    with pytest.raises(OutputError, match=r"notes\.txt"):
        files.write(record, place, replace=True)
    assert (place / "notes.txt").exists()


def test_the_current_directory_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.chdir(tmp_path)
    with pytest.raises(OutputError, match="directory of their own"):
        files.check_target(Path())


def test_a_failed_write_leaves_everything_as_it_was(
    record: FrontRecord, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    place = files.write(record, tmp_path / "a")
    before = {entry.name: entry.read_bytes() for entry in place.iterdir()}
    written = files._write_through

    def full_disk(path: Path, content: bytes) -> None:
        if path.name == "designs.json":
            raise OSError(28, "No space left on device")
        written(path, content)

    monkeypatch.setattr(files, "_write_through", full_disk)
    changed = dataclasses.replace(record, run={"seed": 8})
    with pytest.raises(OutputError, match="No space left"):
        files.write(changed, place, replace=True)
    with pytest.raises(OutputError, match="No space left"):
        files.write(changed, tmp_path / "b")
    assert {entry.name: entry.read_bytes() for entry in place.iterdir()} == before
    assert [entry.name for entry in tmp_path.iterdir()] == ["a"]


def test_the_earlier_result_returns_when_the_new_one_cannot_take_its_place(
    record: FrontRecord, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    place = files.write(record, tmp_path / "a")
    rename = Path.rename

    def refuse_new(self: Path, target: Path) -> Path:
        if self.name == "new":
            raise OSError(13, "Permission denied")
        return rename(self, target)

    monkeypatch.setattr(Path, "rename", refuse_new)
    with pytest.raises(OutputError, match="Permission denied"):
        files.write(dataclasses.replace(record, run={"seed": 8}), place, replace=True)
    assert files.read(place) == record


def test_a_place_below_a_file_is_refused_before_anything_runs(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("x")
    with pytest.raises(OutputError, match="cannot write"):
        files.check_target(tmp_path / "file" / "deeper" / "a")
    files.check_target(tmp_path / "not" / "yet" / "there")
    assert [entry.name for entry in tmp_path.iterdir()] == ["file"]


@pytest.mark.parametrize("name", ["problem.json", "designs.json", "extras.json", "archive.csv"])
def test_missing_and_damaged_files_are_named(record: FrontRecord, tmp_path: Path, name: str) -> None:
    place = files.write(record, tmp_path / "a")
    content = (place / name).read_bytes()
    (place / name).write_bytes(content[: len(content) // 2])
    with pytest.raises(OutputError, match=f"{name}: damaged"):
        files.read(place)
    (place / name).unlink()
    with pytest.raises(OutputError, match=f"{name}: cannot be read"):
        files.read(place)


def test_what_is_no_result_is_said_plainly(record: FrontRecord, tmp_path: Path) -> None:
    with pytest.raises(OutputError, match="no such directory"):
        files.read(tmp_path / "nowhere")
    with pytest.raises(OutputError, match=r"run\.json is missing"):
        files.read(tmp_path)
    (tmp_path / "run.json").write_text("{}")
    with pytest.raises(OutputError, match="something else"):
        files.read(tmp_path)
    with pytest.raises(OutputError, match="is a file; the directory"):
        files.read(tmp_path / "run.json")
    for content, said in (
        (b"", "it is empty"), (b'{"format": "archopt res', "it ends in the middle of line 1"),
        (b'{\n"format" "x"\n}', "no JSON from line 2, column 10 on"), (b"\x80\x81", "it is no text"),
    ):  # fmt: skip
        (tmp_path / "run.json").write_bytes(content)
        with pytest.raises(OutputError, match=rf"run\.json: damaged: {said}.*; restore it from a copy, or solve"):
            files.read(tmp_path)
    with pytest.raises(OutputError, match=r"run\.json that does not read as one of archopt"):
        files.check_target(tmp_path, replace=True)
    (tmp_path / "run.json").unlink()
    place = files.write(record, tmp_path / "a")
    head = json.loads((place / "run.json").read_text())
    (place / "run.json").write_text(json.dumps(head | {"format_version": 99}))
    with pytest.raises(OutputError, match="version 99"):
        files.read(place)


def test_the_archive_may_be_left_unread(record: FrontRecord, tmp_path: Path) -> None:
    place = files.write(record, tmp_path / "a")
    (place / "archive.csv").unlink()
    assert files.read(place, archive=False).designs == record.designs


def test_a_free_name_is_found_beside(tmp_path: Path) -> None:
    (tmp_path / "a-2").mkdir()
    assert files.free_sibling(tmp_path / "a") == tmp_path / "a-3"
