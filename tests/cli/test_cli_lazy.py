"""Asking for help or the version loads nothing heavy; the public names are there all the same."""

from __future__ import annotations

import json
import os
import subprocess
import sys
from pathlib import Path

import pytest

import archopt
from archopt.present import files
from archopt.present.record import FrontRecord

HEAVY = ("numpy", "scipy", "pandas", "pymoo", "moocore", "rich")

PROBE = """
import sys
from archopt.cli import main
try:
    main({words!r})
except SystemExit as left:
    code = left.code
print(code, [name for name in {heavy!r} if name in sys.modules], file=sys.stderr)
"""


@pytest.mark.parametrize(
    ("words", "said"),
    [(["--help"], "Commands:"), (["-h"], "solve"), (["solve", "--help"], "--evaluations"),
     (["--version"], f"archopt {archopt.__version__}")],
)  # fmt: skip
def test_help_loads_nothing_heavy(words: list[str], said: str) -> None:
    script = PROBE.format(words=words, heavy=HEAVY)
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert said in done.stdout
    assert done.stderr.strip() == "0 []"


def test_the_package_alone_loads_nothing_heavy() -> None:
    script = f"import sys, archopt; print([name for name in {HEAVY!r} if name in sys.modules])"
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"


def test_no_words_print_help_and_bad_usage_code() -> None:
    done = subprocess.run([sys.executable, "-m", "archopt"], capture_output=True, text=True, check=False)
    assert done.returncode == 2
    assert "Commands:" in done.stdout + done.stderr
    assert "completion" not in done.stdout + done.stderr


def test_a_reader_that_stops_early_is_no_fault(record: FrontRecord, tmp_path: Path) -> None:
    files.write(record, tmp_path / "a")
    show = [sys.executable, "-m", "archopt", "show", str(tmp_path / "a"), "--json"]
    with subprocess.Popen(show, stdout=subprocess.PIPE, stderr=subprocess.PIPE) as process:
        assert process.stdout is not None
        assert process.stderr is not None
        process.stdout.close()
        assert process.stderr.read() == b""
    assert process.returncode == 0


def test_names_the_terminal_cannot_show_are_no_fault(record: FrontRecord, tmp_path: Path) -> None:
    record.problem["study"]["title"] = "Gr\u00fcne Karte \u20ac"
    files.write(record, tmp_path / "a")
    for words in (["show", str(tmp_path / "a")], ["show", str(tmp_path / "a"), "--json"]):
        done = subprocess.run(
            [sys.executable, "-m", "archopt", *words],
            capture_output=True,
            text=True,
            check=False,
            env={**os.environ, "PYTHONIOENCODING": "ascii"},
        )
        assert (done.returncode, done.stderr) == (0, "")
    assert json.loads(done.stdout)["study"]["title"] == "Gr\u00fcne Karte \u20ac"


def test_public_names_are_imported_on_first_use(record: FrontRecord, tmp_path: Path) -> None:
    files.write(record, tmp_path / "a")
    front = archopt.read(str(tmp_path / "a"))
    assert isinstance(front, archopt.Front)
    assert isinstance(front.design(1), archopt.Design)
    assert front.record == record
    assert {"load", "solve", "read", "Front", "Design", "__version__"} <= set(dir(archopt))
    with pytest.raises(AttributeError, match="no attribute 'frob'"):
        _ = archopt.frob
