"""The public front and design, the record they stand on, and the progress line."""

from __future__ import annotations

import dataclasses
import json
from dataclasses import dataclass
from io import StringIO
from pathlib import Path

import numpy as np
import pytest
from rich.console import Console

from archopt.errors import OutputError
from archopt.present.front import Front
from archopt.present.plain import plain, plain_dict
from archopt.present.progress import SearchProgress, said_line
from archopt.present.record import FrontRecord, summary


def test_table_is_a_data_frame_of_the_front(record: FrontRecord) -> None:
    frame = Front(record).table()
    assert list(frame.index) == ["D001", "D002", "D003", "D004", "D005"]
    assert frame.loc["D003", "energy_loss_kwh_per_year"] == pytest.approx(63.072, rel=1e-12)
    assert frame.loc["D005", "bus_a_control"] == "fixed"
    assert Front(dataclasses.replace(record, designs=[])).table().empty


@pytest.mark.parametrize("wanted", [3, "3", "D003", "d3", "knee", "Knee"])
def test_a_design_is_found_by_number_name_or_mark(record: FrontRecord, wanted: int | str) -> None:
    design = Front(record).design(wanted)
    assert design.name == "D003"
    assert design.roles == ("knee",)
    assert design.cost_per_board == pytest.approx(80.0, rel=1e-12)
    assert design.choices["core.stage"] == "STAGE-40"


def test_an_unknown_design_names_those_there_are(record: FrontRecord) -> None:
    with pytest.raises(OutputError, match=r"D001 to D005; or ask for .*knee.*incumbent"):
        Front(record).design("D017")
    with pytest.raises(OutputError, match="no design 0"):
        Front(record).design(0)


def test_the_incumbent_is_a_design_too(record: FrontRecord) -> None:
    front = Front(record)
    assert front.incumbent is not None
    assert front.design("incumbent").data == front.incumbent.data
    assert Front(dataclasses.replace(record, incumbent=None)).incumbent is None
    with pytest.raises(OutputError, match=r"the study has no \[incumbent\].*D001 to D005"):
        Front(dataclasses.replace(record, incumbent=None)).design("incumbent")


def test_telling_and_length(record: FrontRecord) -> None:
    front = Front(record)
    assert len(front) == 5
    assert [design.name for design in front.telling()] == ["D001", "D003", "D004", "D005"]
    assert [design.name for design in front] == [row["design"] for row in record.front]


def test_notebook_tables_escape_what_people_wrote(record: FrontRecord) -> None:
    record.designs[0]["topology"] = "<b>one & only</b>"
    for page in (Front(record)._repr_html_(), Front(record).design(1)._repr_html_()):
        assert "&lt;b&gt;one &amp; only&lt;/b&gt;" in page
        assert "<b>" not in page


def test_summary_is_json_and_holds_no_states(record: FrontRecord) -> None:
    text = json.dumps(plain(summary(record)), allow_nan=False)
    data = json.loads(text)
    assert [row["design"] for row in data["front"]] == ["D001", "D002", "D003", "D004", "D005"]
    assert data["incumbent"]["violated"][0]["limit"] == "rail droop"
    assert data["losing"][0]["best_design"]["design"] == "best of two buses"
    assert '"states"' not in text


def test_plain_data_of_model_objects() -> None:
    @dataclass
    class Thing:
        path: Path
        values: np.ndarray
        names: frozenset[str]
        scalar: np.float64

    data = plain_dict(Thing(Path("a/b"), np.array([[1.0, np.inf]]), frozenset({"b", "a"}), np.float64(-0.0)))
    assert data == {"path": "a/b", "values": [[1.0, None]], "names": ["a", "b"], "scalar": 0.0}
    assert json.dumps(data["scalar"]) == "0.0"
    with pytest.raises(TypeError, match="object"):
        plain(object())


def test_progress_draws_on_a_terminal_only() -> None:
    for terminal, quiet, expected in ((True, False, True), (True, True, False), (False, False, False)):
        buffer = StringIO()
        console = Console(file=buffer, force_terminal=terminal, width=120)
        with SearchProgress(console, evaluations=1000, quiet=quiet) as progress:
            progress(generation=3, evaluations=250, feasible=200, hypervolume=0.8125)
        assert ("250 designs tried" in buffer.getvalue()) is expected
        assert bool(buffer.getvalue()) is expected


def test_progress_share_is_of_the_nearer_end() -> None:
    progress = SearchProgress(Console(file=StringIO()), evaluations=1000, seconds=100.0)
    assert progress.share(250, 10.0) == pytest.approx(0.25, rel=1e-12)
    assert progress.share(250, 60.0) == pytest.approx(0.6, rel=1e-12)
    assert progress.share(5000, 60.0) == 1.0
    assert said_line(3, 250, 200, 0.8125, 90.4) == (
        "generation 3, 250 designs tried, 200 feasible, hypervolume 0.8125, at most 1:30 of search left"
    )


def test_time_left_is_to_the_nearer_end() -> None:
    by_designs = SearchProgress(Console(file=StringIO()), evaluations=1000)
    assert by_designs.left_s(90.0, 30.0) == 90.0
    assert by_designs.left_s(None, 30.0) is None
    by_both = SearchProgress(Console(file=StringIO()), evaluations=1000, seconds=100.0)
    assert by_both.left_s(90.0, 30.0) == pytest.approx(70.0, rel=1e-12)
    assert by_both.left_s(20.0, 30.0) == 20.0
    assert by_both.left_s(None, 130.0) == 0.0


def test_a_front_writes_itself(record: FrontRecord, tmp_path: Path) -> None:
    front = Front(record)
    assert front.write(tmp_path / "a") == front.directory == tmp_path / "a"
    assert (tmp_path / "a" / "designs.json").is_file()
    with pytest.raises(OutputError, match="earlier result"):
        front.write(tmp_path / "a")
    front.write(tmp_path / "a", replace=True)
