"""A stored reference front is read back as written, and refused when it or its problem is another."""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest

from archopt.model.evaluator import Evaluator
from archopt.search.driver import search
from tests.benchmarks import reference_fronts
from tests.benchmarks.reference_fronts import StaleError, read, reference, written
from tests.search.small_study import FEW_CHOICES, TWO_RAILS, compiled


@pytest.fixture(scope="module")
def pinned(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    return compiled(tmp_path_factory.mktemp("pinned"), TWO_RAILS + FEW_CHOICES)


def test_a_stored_front_is_read_back_and_refused_when_stale(
    pinned: Evaluator, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    found = search(pinned, evaluations=100, population=24, seed=1, stagnation_generations=50)
    text = written(pinned.problem, found.rows, found.objectives)
    objectives, choices, sampled = read(text, pinned.problem)
    assert np.allclose(objectives, found.objectives, rtol=1e-8)
    assert choices.shape == (len(sampled), pinned.problem.layout.choices)
    monkeypatch.setattr(reference_fronts, "FOLDER", tmp_path)
    (tmp_path / "pinned.csv").write_text(text, encoding="ascii")
    assert np.array_equal(reference("pinned", pinned), objectives)
    place = text.index(".", text.index("\n", text.index("energy")))
    changed = text[: place + 1] + ("1" if text[place + 1] != "1" else "2") + text[place + 2 :]
    with pytest.raises(StaleError, match="was changed"):
        read(changed, pinned.problem)
    study = replace(pinned.problem.study, study_hash="of another study")
    with pytest.raises(StaleError, match="another problem"):
        read(text, replace(pinned.problem, study=study))
    (tmp_path / "pinned.csv").write_text(
        written(pinned.problem, found.rows, found.objectives * 1.001), encoding="ascii"
    )
    with pytest.raises(StaleError, match="other numbers"):
        reference("pinned", pinned)
