"""A search put by and taken up again ends like one never stopped; a file that is not right is refused in words."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import numpy as np
import pytest

from archopt.errors import OutputError
from archopt.model.evaluator import Evaluator
from archopt.search import checkpoint
from archopt.search.checkpoint import Keeper
from archopt.search.driver import Search, crew_for, search
from archopt.search.outcome import SearchResult
from tests.search.small_study import FEW_CHOICES, TWO_RAILS, compiled

FACTS: checkpoint.Facts = {"seed": 3, "evaluations": 480, "study hash": "aa", "replicates": 1}
REACHED = {"evaluations": 120}


@pytest.fixture(scope="module")
def evaluator(tmp_path_factory: pytest.TempPathFactory) -> Evaluator:
    return compiled(tmp_path_factory.mktemp("few"), TWO_RAILS + FEW_CHOICES)


def through_a_file(state: checkpoint.State) -> dict[str, np.ndarray]:
    return checkpoint.unpack(checkpoint.pack(FACTS, REACHED, state)).state


def same(one: checkpoint.State, other: checkpoint.State) -> None:
    assert list(one) == list(other)
    for name, values in one.items():
        if name.endswith("spent_s"):
            continue
        assert values.dtype == other[name].dtype, name
        assert values.shape == other[name].shape, name
        assert values.tobytes() == other[name].tobytes(), name


@pytest.mark.parametrize("steps", [0, 5])
def test_a_search_goes_on_bit_for_bit(evaluator: Evaluator, steps: int) -> None:
    """Over a consolidation (every fourth), a fold (every third) and local search (every third) after the stop."""
    crew = crew_for(evaluator, 16)
    whole = Search(evaluator, population=16, seed=4, crew=crew)
    for _ in range(steps):
        whole.step()
    again = Search(evaluator, population=16, seed=4, crew=crew)
    again.restore(through_a_file(whole.state()))
    same(whole.state(), again.state())
    for _ in range(5):
        whole.step()
        again.step()
    same(whole.state(), again.state())


def result_bytes(found: SearchResult) -> list[bytes]:
    arrays = [found.rows, found.objectives, found.fixed_rows, found.fixed_objectives, found.history]
    kinds = [each for best in found.kinds.values() for each in (best.row, best.objectives)]
    return [values.tobytes() for values in (*arrays, *kinds)] + [
        repr((found.evaluations, found.feasible, found.generations, found.ended, found.excess)).encode()
    ]


def test_stopped_after_each_generation_it_ends_like_one_never_stopped(evaluator: Evaluator) -> None:
    settings: dict[str, Any] = {"evaluations": 240, "population": 16, "seed": 3, "stagnation_generations": 50}
    settings["crew"] = crew_for(evaluator, 16)
    never = search(evaluator, **settings)
    kept: list[dict[str, np.ndarray]] = []
    sittings = 0
    while True:
        found = search(
            evaluator, **settings, stop=lambda: True, resume=kept[-1] if kept else None,
            keep=lambda evaluations, state, *, at_once=False: kept.append(through_a_file(state())),
        )  # fmt: skip
        sittings += 1
        if found.ended != "stopped":
            break
    assert sittings == never.generations > 5
    assert result_bytes(found) == result_bytes(never)
    ended = search(evaluator, **settings, resume=kept[-1])
    assert result_bytes(ended) == result_bytes(never)


def test_a_search_that_had_settled_is_not_taken_further(evaluator: Evaluator) -> None:
    kept: list[dict[str, np.ndarray]] = []
    settings: dict[str, Any] = {"evaluations": 100_000, "population": 16, "seed": 3, "stagnation_generations": 2}
    found = search(
        evaluator, **settings, keep=lambda evaluations, state, *, at_once=False: kept.append(state())
    )
    assert found.ended == "no more growth"
    again = search(evaluator, **settings, resume=kept[-1])
    assert result_bytes(again) == result_bytes(found)


def test_another_problem_s_state_is_refused(evaluator: Evaluator) -> None:
    crew = crew_for(evaluator, 16)
    run = Search(evaluator, population=16, seed=4, crew=crew)
    run.step()
    state = run.state()
    other = state | {f"record.{name}": state[f"record.{name}"][:, 1:] for name in ("kind_rows", "least_row")}
    for changed in (other, state | {"engine.genomes": state["engine.genomes"][1:]}):
        again = Search(evaluator, population=16, seed=4, crew=crew)
        with pytest.raises(ValueError, match="fit"):
            again.restore(changed)
        whole = {f"search.{name}": values for name, values in changed.items()}
        with pytest.raises(OutputError, match="start afresh"):
            search(
                evaluator, evaluations=90, population=16, seed=4, stagnation_generations=9, crew=crew, resume=whole
            )


class Clock:
    """A clock that goes when told to."""

    def __init__(self) -> None:
        self.now = 100.0

    def __call__(self) -> float:
        return self.now


def state_of(number: int) -> checkpoint.State:
    return {"values": np.arange(number), "words": np.array(["a", "bb"]), "floats": np.array([0.1, np.inf, -0.0])}


def test_put_by_now_and_then_and_whole(tmp_path: Path) -> None:
    clock = Clock()
    place = tmp_path / "runs" / "it"
    keeper = Keeper(place, FACTS, every_s=5.0, clock=clock)
    assert not keeper.offer(REACHED, lambda: state_of(2))
    assert not place.exists()
    clock.now += 5.1
    assert keeper.offer(REACHED, lambda: state_of(3))
    assert not keeper.offer(REACHED, lambda: state_of(4))
    found = checkpoint.read(place)
    same(found.state, state_of(3))
    assert (found.facts, found.reached) == (FACTS, REACHED)
    assert keeper.offer(REACHED, lambda: state_of(5), at_once=True)
    assert len(checkpoint.read(place).state["values"]) == 5
    assert [entry.name for entry in place.iterdir()] == [checkpoint.NAME]
    checkpoint.forget(place)
    assert not place.exists()


def test_a_large_state_is_put_by_less_often(tmp_path: Path) -> None:
    clock = Clock()
    keeper = Keeper(tmp_path, FACTS, every_s=5.0, clock=clock)

    def slow() -> checkpoint.State:
        clock.now += 2.0
        return state_of(1)

    clock.now += 5.1
    assert keeper.offer(REACHED, slow)
    clock.now += 30.0
    assert not keeper.offer(REACHED, slow)
    clock.now += 11.0
    assert keeper.offer(REACHED, slow)


def test_what_cannot_be_written_is_said_and_stops_nothing(tmp_path: Path) -> None:
    (tmp_path / "file").write_text("in the way")
    keeper = Keeper(tmp_path / "file" / "it", FACTS)
    assert not keeper.offer(REACHED, lambda: state_of(1), at_once=True)
    assert "cannot be written" in keeper.trouble


@pytest.mark.parametrize("damage", ["cut", "turned", "text", "empty", "later"])
def test_a_damaged_file_is_refused_and_says_what_to_do(tmp_path: Path, damage: str) -> None:
    keeper = Keeper(tmp_path, FACTS)
    keeper.offer(REACHED, lambda: state_of(50), at_once=True)
    path = tmp_path / checkpoint.NAME
    good = path.read_bytes()
    middle = len(good) // 2
    path.write_bytes({
        "cut": good[:middle],
        "turned": good[:middle] + bytes([good[middle] ^ 1]) + good[middle + 1 :],
        "text": b"nothing of ours",
        "empty": b"",
        "later": good.replace(b"version 1", b"version 2", 1),
    }[damage])  # fmt: skip
    with pytest.raises(OutputError, match="--replace"):
        checkpoint.read(tmp_path)


def test_a_missing_file_is_said(tmp_path: Path) -> None:
    assert not checkpoint.is_there(tmp_path)
    with pytest.raises(OutputError, match="cannot be read"):
        checkpoint.read(tmp_path)


@pytest.mark.parametrize(
    ("change", "said"),
    [({"seed": 4}, "seed is 4, there it is 3"), ({"study hash": "bb"}, "the study has changed since"),
     ({"evaluations": 900}, "evaluations is 900, there it is 480")],
)  # fmt: skip
def test_another_run_s_state_is_refused_and_says_what_differs(
    tmp_path: Path, change: checkpoint.Facts, said: str
) -> None:
    Keeper(tmp_path, FACTS).offer(REACHED, lambda: state_of(1), at_once=True)
    found = checkpoint.read(tmp_path)
    found.check(FACTS, tmp_path)
    with pytest.raises(OutputError, match=said) as refused:
        found.check(FACTS | change, tmp_path)
    assert "--replace" in str(refused.value)
    assert checkpoint.told(found) == "seed 3, 120 of 480 designs tried"
