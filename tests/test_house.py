"""The house: who may import whom, what stands at the root, and that the start is light."""

from __future__ import annotations

import ast
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).resolve().parent.parent
PACKAGE = ROOT / "archopt"
FLOORS = ("physics", "inputs", "model", "search", "proof", "trade", "present", "workflow", "cli")
ANYWHERE = ("errors",)
TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "archopt", "catalog", "tests", "studies"}
GROUND_FLOOR_PACKAGES = {"numpy", "scipy", "archopt", "__future__", *sys.stdlib_module_names}


def room(path: Path) -> str:
    relative = path.relative_to(PACKAGE)
    return relative.parts[0] if len(relative.parts) > 1 else relative.stem


def imported(path: Path) -> set[str]:
    names: set[str] = set()
    for node in ast.walk(ast.parse(path.read_text(encoding="utf-8"))):
        if isinstance(node, ast.Import):
            names |= {alias.name for alias in node.names}
        elif isinstance(node, ast.ImportFrom) and node.module:
            names.add(node.module)
            names |= {f"{node.module}.{alias.name}" for alias in node.names}
    return names


MODULES = sorted(PACKAGE.rglob("*.py"))


@pytest.mark.parametrize("path", MODULES, ids=lambda path: str(path.relative_to(PACKAGE)))
def test_a_lower_floor_never_imports_a_higher(path: Path) -> None:
    here = room(path)
    if here not in FLOORS:
        return
    above = set(FLOORS[FLOORS.index(here) + 1 :])
    reached = {name.split(".")[1] for name in imported(path) if name.startswith("archopt.")}
    assert not reached & above, f"{here} reaches up to {sorted(reached & above)}"


@pytest.mark.parametrize("path", sorted((PACKAGE / "physics").glob("*.py")), ids=lambda path: path.name)
def test_physics_stands_on_numpy_and_scipy_alone(path: Path) -> None:
    outside = {name.split(".")[0] for name in imported(path)} - GROUND_FLOOR_PACKAGES
    assert not outside
    assert not {name for name in imported(path) if name.startswith("archopt.") and ".physics" not in name}


def test_every_module_belongs_to_a_floor() -> None:
    rooms = {room(path) for path in MODULES}
    assert rooms <= {*FLOORS, *ANYWHERE, "__init__", "__main__"}


def test_no_module_has_a_name_that_says_nothing() -> None:
    assert not {path.stem for path in MODULES} & {"utils", "helpers", "common", "misc"}


def test_nothing_unexpected_stands_at_the_root() -> None:
    listed = subprocess.run(["git", "ls-files"], cwd=ROOT, capture_output=True, text=True, check=False)
    tracked = {line.split("/")[0] for line in listed.stdout.splitlines()}
    assert {name for name in tracked if not name.startswith(".")} <= TOP_LEVEL


def test_help_loads_nothing_heavy() -> None:
    script = (
        "import sys\n"
        "from typer.testing import CliRunner\n"
        "from archopt.cli import app\n"
        "result = CliRunner().invoke(app, ['--help'])\n"
        "assert result.exit_code == 0, result.output\n"
        "heavy = {'numpy', 'scipy', 'pandas', 'pymoo', 'moocore', 'matplotlib', 'pydantic'} & set(sys.modules)\n"
        "sys.exit(f'loaded: {sorted(heavy)}' if heavy else 0)\n"
    )
    done = subprocess.run([sys.executable, "-c", script], capture_output=True, text=True, check=False)
    assert done.returncode == 0, done.stderr
