from __future__ import annotations

import sys
import types
from collections.abc import Callable
from dataclasses import dataclass, field
from pathlib import Path
from typing import Any

import pytest

sys.path.append(str(Path(__file__).parents[1] / "present"))

from synthetic_result import record as make_record

from archopt.present.front import Front
from archopt.present.record import CheckResult, FrontRecord


@pytest.fixture
def record() -> FrontRecord:
    return make_record()


@dataclass
class Workflow:
    """Stands in for the workflow: what it was asked, and what it does when solving."""

    record: FrontRecord
    asked: dict[str, Any] = field(default_factory=dict)
    on_load: Callable[[], object] = lambda: None
    on_solve: Callable[[], object] = lambda: None

    def load(self, path: Path) -> Any:
        self.asked["path"] = path
        self.on_load()
        search = types.SimpleNamespace(evaluations=1000)
        return types.SimpleNamespace(study=types.SimpleNamespace(name="synthetic", search=search))

    def check(self, loaded: Any) -> CheckResult:
        return CheckResult(self.record.problem, space={"choices": 31}, power={"coincident_w": 103.0})

    def solve(self, loaded: Any, **words: Any) -> Front:
        self.asked |= words
        self.on_solve()
        return Front(self.record)


@pytest.fixture
def workflow(record: FrontRecord, monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Workflow:
    """A workflow that searches nothing, in place of the real one; the current directory is an empty one."""
    import archopt

    stand_in = Workflow(record)
    module = types.ModuleType("archopt.workflow")
    for name in ("load", "check", "solve"):
        setattr(module, name, getattr(stand_in, name))
    monkeypatch.setitem(sys.modules, "archopt.workflow", module)
    monkeypatch.setattr(archopt, "workflow", module, raising=False)
    monkeypatch.chdir(tmp_path)
    return stand_in


@pytest.fixture
def run(capsys: pytest.CaptureFixture[str]) -> Callable[..., tuple[int, str, str]]:
    """Run the command line; exit code, standard output, standard error."""
    from archopt.cli import main

    def call(*words: str) -> tuple[int, str, str]:
        with pytest.raises(SystemExit) as left:
            main(list(words))
        captured = capsys.readouterr()
        assert isinstance(left.value.code, int)
        return left.value.code, captured.out, captured.err

    return call
