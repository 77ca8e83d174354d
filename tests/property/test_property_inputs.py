"""Whatever a person types, a study loads or is refused with problems; it never breaks."""

from __future__ import annotations

import copy
import tempfile
from pathlib import Path
from typing import Any

from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st

from archopt.errors import InputError
from archopt.inputs.load import loaded_from
from archopt.inputs.problems import Notebook
from archopt.inputs.starter import PROFILE, STUDY
from archopt.inputs.study import TABLES
from archopt.inputs.study_load import RailRow, StateRow
from archopt.inputs.text_files import read_toml

KEYS = sorted({key for table in (*TABLES.values(), RailRow, StateRow) for key in table.model_fields})
ODD_VALUES: st.SearchStrategy[Any] = st.one_of(
    st.none(),
    st.booleans(),
    st.integers(-(10**400), 10**400),
    st.floats(allow_nan=True, allow_infinity=True),
    st.text(max_size=8),
    st.sampled_from(
        ["core", "io", "buck_6a_500k_mid_bus_gate", "none", "bus_a", "profile.csv", ".", "\0", "a" * 300]
    ),
    st.lists(
        st.one_of(
            st.text(max_size=4), st.integers(-2, 2), st.dictionaries(st.text(max_size=3), st.integers())
        )
    ),
    st.dictionaries(st.sampled_from(KEYS), st.one_of(st.integers(), st.text(max_size=4)), max_size=3),
)
TOPS = [*TABLES, "rails", "incumbent", "title", "name", "catalogue"]
CHANGES = st.lists(
    st.tuples(st.sampled_from(TOPS), st.sampled_from(KEYS), st.booleans(), ODD_VALUES), min_size=1, max_size=3
)


def _changed(content: dict[str, Any], changes: list[tuple[str, str, bool, Any]]) -> dict[str, Any]:
    """Return the content with keys set to odd values, in a table or in place of the table."""
    content = copy.deepcopy(content)
    for table, key, whole, value in changes:
        holder = content.get(table)
        row = holder[len(key) % len(holder)] if isinstance(holder, list) and holder else None
        if isinstance(row, dict) and not whole:
            row[key] = value
        elif isinstance(holder, dict) and not whole:
            holder[key] = value
        else:
            content[table] = value
    return content


@settings(max_examples=150, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
@given(changes=CHANGES)
def test_odd_values_never_break_the_reading(changes: list[tuple[str, str, bool, Any]]) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "study.toml"
        path.write_text(STUDY, encoding="utf-8")
        (Path(folder) / "profile.csv").write_text(PROFILE, encoding="utf-8")
        notebook = Notebook("study.toml")
        content = read_toml(path, "study.toml", notebook)
        assert content is not None
        try:
            loaded = loaded_from(_changed(content, changes), path, None, notebook)
        except InputError as error:
            told = error.problems
        else:
            assert loaded.study.load.hours.sum() <= 8784 * (1 + 1e-9)
            return
        assert told
        assert all(problem.message for problem in told)


@settings(max_examples=60, deadline=None, derandomize=True)
@given(text=st.one_of(st.text(max_size=60), st.binary(max_size=60)))
def test_any_file_is_read_or_refused(text: str | bytes) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "study.toml"
        path.write_bytes(text if isinstance(text, bytes) else text.encode("utf-8", "surrogatepass"))
        notebook = Notebook("study.toml")
        content = read_toml(path, "study.toml", notebook)
        assert (content is None) == bool(notebook.problems)


@settings(max_examples=60, deadline=None, derandomize=True, suppress_health_check=[HealthCheck.too_slow])
@given(
    rows=st.lists(st.lists(st.sampled_from(["", "1", "24", "-3", "nan", "x", '"', "1e999", "#"]), max_size=8))
)
def test_any_profile_is_read_or_refused(rows: list[list[str]]) -> None:
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / "study.toml"
        path.write_text(STUDY, encoding="utf-8")
        header = PROFILE.splitlines()[0]
        lines = [header, *(",".join(row) for row in rows)]
        (Path(folder) / "profile.csv").write_text("\n".join(lines), encoding="utf-8")
        notebook = Notebook("study.toml")
        content = read_toml(path, "study.toml", notebook)
        assert content is not None
        try:
            loaded_from(content, path, None, notebook)
        except InputError as error:
            told = error.problems
        else:
            return
        assert told
