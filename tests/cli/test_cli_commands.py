"""The command line: exit codes, what goes to which stream, and the directories it writes."""

from __future__ import annotations

import dataclasses
import json
import os
import signal
from collections.abc import Callable
from pathlib import Path
from typing import Any

import pytest

from archopt.cli.solve import default_place
from archopt.cli.stopping import StopRequest
from archopt.errors import InfeasibleError, InputError, Problem
from archopt.present import files
from archopt.present.record import FrontRecord

Run = Callable[..., tuple[int, str, str]]
Workflow = Any  # the stand-in of conftest


def raising(error: BaseException) -> Callable[[], None]:
    def act() -> None:
        raise error

    return act


def test_solve_prints_the_front_and_writes_runs_name(workflow: Workflow, run: Run, record: FrontRecord) -> None:
    code, out, err = run("solve", "board.toml", "--seed", "5", "--evaluations", "200")
    assert code == 0
    assert "Energy against cost" in out
    assert "runs/synthetic/front.csv" in out
    assert err == ""
    assert workflow.asked["path"] == Path("board.toml")
    assert workflow.asked["seed"] == 5
    assert workflow.asked["evaluations"] == 200
    assert files.read(Path("runs/synthetic")) == record


def test_solve_quietly_prints_the_directory_alone(workflow: Workflow, run: Run) -> None:
    assert run("solve", "board.toml", "--out", "here/it", "--quiet") == (0, "here/it\n", "")
    assert (Path("here/it") / "front.csv").is_file()


def test_solve_for_a_machine_prints_json_alone(workflow: Workflow, run: Run) -> None:
    code, out, err = run("solve", "board.toml", "--json", "-o", "result")
    data = json.loads(out)
    assert (code, err) == (0, "")
    assert data["directory"] == "result"
    assert len(data["front"]) == 5


def test_the_directory_is_checked_before_the_search(workflow: Workflow, run: Run) -> None:
    run("solve", "board.toml")
    workflow.on_solve = raising(AssertionError("searched although the result has no place"))
    code, out, err = run("solve", "board.toml")
    assert code == 2
    assert out == ""
    assert "earlier result" in err
    assert "--replace" in err


def test_replace_replaces(workflow: Workflow, run: Run) -> None:
    run("solve", "board.toml")
    workflow.record = dataclasses.replace(workflow.record, run={"seed": 99})
    assert run("solve", "board.toml", "--replace")[0] == 0
    assert files.read(Path("runs/synthetic")).run == {"seed": 99}


def test_a_place_taken_during_the_search_costs_no_result(workflow: Workflow, run: Run, record: FrontRecord) -> None:
    workflow.on_solve = lambda: files.write(record, Path("runs/synthetic"))
    code, out, err = run("solve", "board.toml", "--quiet")
    assert (code, out) == (0, "runs/synthetic-2\n")
    assert "runs/synthetic-2 instead" in err
    assert files.read(Path("runs/synthetic-2")) == record


@pytest.mark.parametrize("command", ["solve", "check"])
def test_bad_input_prints_every_problem(workflow: Workflow, run: Run, command: str) -> None:
    problems = (
        Problem("board.toml", "rails.core.voltage_v", "900 is no rail voltage; did you mean 0.9?"),
        Problem("parts.csv", "row 7, column esr_mohm", "missing"),
    )
    workflow.on_load = raising(InputError(problems))
    code, out, err = run(command, "board.toml")
    assert (code, out) == (2, "")
    assert err.splitlines() == [
        "board.toml: rails.core.voltage_v: 900 is no rail voltage; did you mean 0.9?",
        "parts.csv: row 7, column esr_mohm: missing",
        "2 problems found; nothing was done.",
    ]


def test_no_feasible_design_names_the_limits(workflow: Workflow, run: Run) -> None:
    limits = ("rail droop at core: over by 12 %", "on-time at core: over by 20 ns")
    workflow.on_solve = raising(InfeasibleError("No design meets every limit.", limits))
    code, out, err = run("solve", "board.toml")
    assert (code, out) == (3, "")
    assert err.splitlines() == ["No design meets every limit.", *(f"- {limit}" for limit in limits)]
    assert not Path("runs").exists()


def test_a_fault_of_ours_is_short_and_says_where_to_report(workflow: Workflow, run: Run) -> None:
    workflow.on_solve = raising(ZeroDivisionError("division by zero"))
    code, out, err = run("solve", "board.toml")
    assert (code, out) == (1, "")
    assert err.startswith("A fault in archopt, not in your study: ZeroDivisionError: division by zero")
    assert "report" in err
    assert "Traceback" not in err


def test_the_details_of_a_fault_come_when_asked_for(workflow: Workflow, monkeypatch: pytest.MonkeyPatch) -> None:
    from archopt.cli import main

    workflow.on_solve = raising(ZeroDivisionError("division by zero"))
    monkeypatch.setenv("ARCHOPT_DEBUG", "1")
    with pytest.raises(ZeroDivisionError):
        main(["solve", "board.toml"])


def test_an_interrupt_keeps_what_was_found(workflow: Workflow, run: Run, record: FrontRecord) -> None:
    def interrupted() -> None:
        os.kill(os.getpid(), signal.SIGINT)
        assert workflow.asked["stop"]() == "interrupted"
        workflow.record = dataclasses.replace(record, run=record.run | {"interrupted": True})

    workflow.on_solve = interrupted
    before = signal.getsignal(signal.SIGINT)
    code, out, _ = run("solve", "board.toml")
    assert code == 130
    assert "interrupted; what was found until then is kept" in out
    assert files.read(Path("runs/synthetic")).run["interrupted"] is True
    assert signal.getsignal(signal.SIGINT) is before


def test_a_second_interrupt_ends_at_once(workflow: Workflow, run: Run) -> None:
    def twice() -> None:
        os.kill(os.getpid(), signal.SIGINT)
        os.kill(os.getpid(), signal.SIGINT)

    workflow.on_solve = twice
    code, _, err = run("solve", "board.toml")
    assert code == 130
    assert "Interrupted." in err
    assert not Path("runs").exists()


@pytest.mark.parametrize(
    ("name", "expected"),
    [("board_7", "board_7"), ("../../etc", "etc"), ("a board / rev. B", "a-board-rev.-B"), ("..", "study")],
)  # fmt: skip
def test_the_default_directory_stays_below_runs(name: str, expected: str) -> None:
    assert default_place(name) == Path("runs") / expected


def test_time_ends_a_search() -> None:
    assert StopRequest()() == ""
    assert StopRequest(3600.0)() == ""
    assert StopRequest(0.0)() == "time is up"


@pytest.mark.parametrize(
    "words",
    [("solve",), ("solve", "board.toml", "--seed", "many"), ("solve", "board.toml", "--evaluations", "0"),
     ("solve", "board.toml", "--colour", "red"), ("frobnicate",), ("show",)],
)  # fmt: skip
def test_bad_usage_is_exit_code_two(workflow: Workflow, run: Run, words: tuple[str, ...]) -> None:
    code, out, err = run(*words)
    assert (code, out) == (2, "")
    assert "Usage: archopt" in err
    assert "Error: " in err


def test_check_prints_what_was_understood(workflow: Workflow, run: Run) -> None:
    code, out, err = run("check", "board.toml")
    assert (code, err) == (0, "")
    assert "economics.cooling_overhead      1.4    common practice" in out
    code, out, _ = run("check", "board.toml", "--json")
    assert json.loads(out)["space"]["choices"] == 31


def test_show_prints_a_result_again_and_explains_a_design(workflow: Workflow, run: Run, record: FrontRecord) -> None:
    files.write(record, Path("result"))
    code, again, _ = run("show", "result")
    assert code == 0
    solved = run("solve", "board.toml", "-o", "resulu")[1]
    assert again == solved.replace("resulu", "result")
    code, out, _ = run("show", "result", "D003")
    assert code == 0
    assert out.startswith("Design D003 (knee)")
    assert out.isascii()
    assert all(line == line.rstrip() for line in out.splitlines())
    assert run("show", "result", "knee")[1] == out
    shown = json.loads(run("show", "result", "D003", "--json")[1])
    assert shown == shown | record.designs[2]
    assert len(json.loads(run("show", "result", "--json")[1])["front"]) == 5


def test_show_says_what_is_missing(workflow: Workflow, run: Run, record: FrontRecord) -> None:
    code, out, err = run("show", "nowhere")
    assert (code, out) == (2, "")
    assert err == "nowhere: there is no such directory\n"
    files.write(record, Path("result"))
    code, _, err = run("show", "result", "D099")
    assert code == 2
    assert "designs are D001 to D005" in err


def test_new_writes_a_study_and_never_over_one(workflow: Workflow, run: Run) -> None:
    code, out, err = run("new", "board")
    assert (code, err) == (0, "")
    assert out.splitlines()[-1] == "next: archopt check board/study.toml"
    before = Path("board/study.toml").read_bytes()
    assert len(before) > 500
    code, out, err = run("new", "board")
    assert (code, out) == (2, "")
    assert "is there already" in err
    assert Path("board/study.toml").read_bytes() == before


def test_baselines_are_searched_afresh_where_asked(workflow: Workflow, run: Run) -> None:
    assert run("solve", "board.toml", "-q", "-o", "plain")[0] == 0
    assert workflow.asked["afresh"] is False
    assert run("solve", "board.toml", "-q", "-o", "full", "--baselines", "full")[0] == 0
    assert workflow.asked["afresh"] is True
    code, _, err = run("solve", "board.toml", "--baselines", "full", "--seconds", "5")
    assert code == 2
    assert "need the same budget: give --evaluations, not --seconds" in err
    code, _, err = run("solve", "board.toml", "--baselines", "all")
    assert code == 2
    assert "full" in err


def test_the_help_says_what_searching_baselines_takes(run: Run) -> None:
    assert "five to six times as long" in " ".join(run("solve", "--help")[1].split())


def test_a_check_lists_everything_where_asked(workflow: Workflow, run: Run) -> None:
    workflow.record.problem["states"].append(
        {"state": "band 1 worst mix", "kind": "worst mix", "hours": 0.0, "input_v": 36.0, "load_w": 70.0}
    )
    short, long = run("check", "board.toml")[1], run("check", "board.toml", "--all")[1]
    assert "Looked at beside the year: 1 worst mix of a band (--all lists them)." in short
    assert "  band 1 worst mix" not in short
    assert "  band 1 worst mix" in long
