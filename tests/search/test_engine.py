"""The loop itself: same seed same bytes, nothing shared, going on from a state, and what it refuses."""

from __future__ import annotations

import hashlib
import io
import os
import subprocess
import sys

import numpy as np
import pytest
from pymoo.functions import FunctionLoader
from pymoo.operators.survival.rank_and_crowding import RankAndCrowding

from archopt.search.archive import significant
from archopt.search.engine import Engine, Method, generator_from_words, generator_words
from archopt.search.operators import Gene

GENES = tuple(
    Gene(f"{kind}{i}", kind, 0, 1 if kind in {"bit", "real"} else 7, group=f"rail {i}")
    for i in range(5)
    for kind in ("category", "integer", "real", "bit")
)
METHODS: tuple[Method, ...] = ("crowding", "hypervolume")


def evaluate(genomes: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """Three conflicting objectives, the third in even steps, and a limit that bites about half the time."""
    weight = np.cos(np.arange(genomes.shape[1] * 2)).reshape(-1, 2)
    first, second = (genomes @ weight).T
    spread = (genomes**2).sum(axis=1)
    objectives = np.stack(
        [50.0 + first, 90.0 - first + second, 60.0 + 2.0 * np.ceil(5.0 - second + 0.02 * spread)], axis=1
    )
    return objectives, np.maximum(0.0, 5.0 - genomes[:, 1])


def step(engine: Engine) -> bytes:
    genomes = engine.ask()
    engine.tell(*evaluate(genomes))
    return genomes.tobytes()


def digest(engine: Engine, generations: int) -> str:
    """What an engine asks over some generations, and where it ends."""
    asked = hashlib.sha256(b"".join(step(engine) for _ in range(generations)))
    asked.update(engine.genomes().tobytes() + engine.objectives().tobytes() + engine.violation().tobytes())
    return asked.hexdigest()


@pytest.mark.parametrize("method", METHODS)
def test_same_seed_same_bytes_and_engines_share_nothing(method: Method) -> None:
    alone = digest(Engine(GENES, 24, 7, method=method), 20)
    other = digest(Engine(GENES, 24, 8, method=method), 20)
    assert alone != other
    first, second = Engine(GENES, 24, 7, method=method), Engine(GENES, 24, 8, method=method)
    np.random.seed(0)  # noqa: NPY002 - the global generator must not matter
    asked: tuple[list[bytes], list[bytes]] = ([], [])
    for _ in range(20):
        asked[0].append(step(first))
        np.random.random(5)  # noqa: NPY002
        asked[1].append(step(second))
    for engine, steps, expected in ((first, asked[0], alone), (second, asked[1], other)):
        found = hashlib.sha256(b"".join(steps))
        found.update(
            engine.genomes().tobytes() + engine.objectives().tobytes() + engine.violation().tobytes()
        )
        assert found.hexdigest() == expected


PROGRAM = """
import sys
import numpy as np
from archopt.search.archive import significant
from archopt.search.engine import Engine
from archopt.search.archive import Archive
from archopt.search.indicator import Scale, Stagnation
from archopt.search.operators import Gene
import hashlib
genes = [Gene(f"g{i}", "integer", 0, 9) for i in range(6)]
engine = Engine(genes, 16, 3)
found = hashlib.sha256()
for _ in range(15):
    x = engine.ask()
    found.update(x.tobytes())
    engine.tell(np.stack([x.sum(1), (9 - x).sum(1) + (x == 3).sum(1), x[:, 0]], 1), 4.0 - x[:, 1])
print(found.hexdigest(), "matplotlib" in sys.modules, "numba" in sys.modules)
"""


def test_another_process_asks_the_same_and_never_loads_matplotlib() -> None:
    outputs = set()
    for salt in ("1", "2"):
        environment = os.environ | {"PYTHONHASHSEED": salt}
        done = subprocess.run(
            [sys.executable, "-c", PROGRAM], env=environment, capture_output=True, text=True, check=True
        )
        outputs.add(done.stdout)
    assert len(outputs) == 1
    assert outputs.pop().split()[1:] == ["False", "False"]


@pytest.mark.parametrize("method", METHODS)
@pytest.mark.parametrize("told", [0, 1, 9])
@pytest.mark.parametrize("asked", [False, True])
def test_goes_on_bit_for_bit_from_a_stored_state(method: Method, told: int, asked: bool) -> None:
    whole = Engine(GENES, 20, 5, method=method)
    for _ in range(told):
        step(whole)
    if asked:
        whole.ask()
    stored = io.BytesIO()
    np.savez(stored, **whole.state())
    stored.seek(0)
    again = Engine(GENES, 20, 999, method=method)
    again.restore(np.load(stored))
    assert (again.generation, again.evaluations) == (told, told * 20)
    assert digest(again, 12) == digest(whole, 12)


def test_the_state_holds_infeasible_members_and_their_order() -> None:
    engine = Engine(GENES, 20, 5)
    step(engine)
    state = engine.state()
    infeasible = state["violation"] > 0.0
    assert 0 < infeasible.sum() < 20
    assert (np.diff(infeasible.astype(int)) >= 0).all(), "feasible first"
    assert (np.diff(state["violation"][infeasible]) >= 0.0).all()
    assert (state["rank"][~infeasible] < 20).all()
    assert (state["rank"][infeasible] > 10**9).all()


def test_the_survivors_are_those_of_constrained_dominance() -> None:
    """Checked from the definition: no survivor is dominated by a feasible design that was let go."""
    engine = Engine(GENES, 20, 1)
    for _ in range(6):
        before = (engine.objectives(), engine.violation())
        genomes = engine.ask()
        told = evaluate(genomes)
        engine.tell(*told)
        every = np.concatenate([before[0], significant(told[0])])
        feasible = every[np.concatenate([before[1], told[1]]) <= 0.0]
        after = engine.objectives()[engine.violation() <= 0.0]
        assert len(after) == min(len(feasible), 20)
        rank_zero = engine.state()["rank"][: len(after)] == 0
        dominated = (
            (feasible[None] <= after[:, None]).all(axis=2) & (feasible[None] < after[:, None]).any(axis=2)
        ).any(axis=1)
        assert not dominated[rank_zero].any()
        assert dominated[~rank_zero].all()
        assert (after.min(axis=0) == feasible.min(axis=0)).all(), "extremes survive"


def test_survival_is_the_librarys_own(monkeypatch: pytest.MonkeyPatch) -> None:
    calls: list[int] = []
    original = RankAndCrowding._do

    def counted(
        self: RankAndCrowding, problem: object, pop: object, *args: object, **kwargs: object
    ) -> object:
        calls.append(len(pop))  # type: ignore[arg-type]
        return original(self, problem, pop, *args, **kwargs)

    monkeypatch.setattr(RankAndCrowding, "_do", counted)
    engine = Engine([Gene("a", "real", 0, 1), Gene("b", "real", 0, 1)], 8, 1, n_objectives=2)
    for _ in range(3):
        engine.tell(engine.ask(), np.zeros(8))
    assert calls == [8, 16, 16]


def test_crowding_is_the_product_of_the_nearest_neighbours_distances() -> None:
    """From the definition: squared distances to as many neighbours as objectives, extremes infinite."""
    engine = Engine([Gene(f"x{i}", "real", 0, 1) for i in range(3)], 40, 1)
    directions = np.abs(np.random.default_rng(1).standard_normal((40, 3)))
    front = directions / np.linalg.norm(directions, axis=1)[:, None] * [1.0, 30.0, 500.0]
    engine.ask()
    engine.tell(front, np.zeros(40))
    objectives, crowding = engine.objectives(), engine.state()["crowding"]
    scaled = (objectives - objectives.min(axis=0)) / np.ptp(objectives, axis=0)
    squared = np.sort(((scaled[:, None] - scaled[None]) ** 2).sum(axis=2), axis=1)
    expected = squared[:, 1:4].prod(axis=1)
    expected[np.concatenate([objectives.argmin(axis=0), objectives.argmax(axis=0)])] = np.inf
    assert crowding == pytest.approx(expected, rel=1e-9)


def test_seeds_come_first_repaired_and_once() -> None:
    seeds = np.array([[1.0] * 20, [1.0] * 20, [9.4] * 20])
    first = Engine(GENES, 10, 1, seeds=seeds).ask()
    repaired = np.array([gene.high for gene in GENES])
    assert first[0].tolist() == [1.0] * 20
    assert first[1].tolist() == repaired.tolist()
    assert len(np.unique(first, axis=0)) == 10
    with pytest.raises(ValueError, match="do not fit a population"):
        Engine(GENES, 4, 1, seeds=np.eye(5, 20))


def test_no_child_repeats_a_parent_or_a_sibling() -> None:
    engine = Engine([Gene(f"g{i}", "integer", 0, 3) for i in range(5)], 30, 2, n_objectives=2)
    for _ in range(8):
        genomes = engine.ask()
        parents = {row.tobytes() for row in engine.genomes()}
        assert len({row.tobytes() for row in genomes} - parents) == 30
        engine.tell(np.stack([genomes.sum(axis=1), -genomes[:, 0]], axis=1), np.zeros(30))


def test_a_space_smaller_than_the_population_still_fills_every_batch() -> None:
    engine = Engine([Gene("a", "bit", 0, 1), Gene("b", "category", 0, 2)], 16, 2, n_objectives=2)
    for _ in range(5):
        genomes = engine.ask()
        assert genomes.shape == (16, 2)
        engine.tell(np.stack([genomes[:, 1], -genomes[:, 0]], axis=1), np.zeros(16))
    best = engine.objectives()[engine.state()["rank"] == 0]
    assert np.unique(best, axis=0).tolist() == [[0.0, -1.0]]


def test_completed_genomes_are_inherited() -> None:
    engine = Engine([Gene(f"g{i}", "bit", 0, 1) for i in range(12)], 12, 3, n_objectives=2)
    for _ in range(4):
        genomes = engine.ask()
        completed = genomes.copy()
        completed[:, :6] = 1.0
        engine.tell(np.stack([genomes[:, 6:].sum(axis=1), -genomes[:, 6]], axis=1), np.zeros(12), completed)
        assert (engine.genomes()[:, :6] == 1.0).all()


def test_asking_twice_gives_the_same_batch() -> None:
    engine = Engine(GENES, 8, 1)
    first = engine.ask()
    first[:] = -1.0
    assert (engine.ask() >= 0.0).all()
    assert engine.ask().tobytes() == engine.ask().tobytes()


def test_nothing_in_the_library_ends_the_search() -> None:
    """A constant problem, past the thousand generations after which the library's own rule would stop."""
    engine = Engine([Gene("a", "real", 0, 1)], 4, 1, n_objectives=2)
    for _ in range(1200):
        assert engine.ask().shape == (4, 1)
        engine.tell(np.ones((4, 2)), np.zeros(4))
    assert engine.generation == 1200


def test_pymoo_without_its_compiled_parts_works_and_stays_silent(
    monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """Also on a front with one droop only, where its own fallback would divide by zero."""
    monkeypatch.setattr("pymoo.functions.is_compiled", lambda: False)
    monkeypatch.setattr(FunctionLoader, "_FunctionLoader__instance", None)
    engine = Engine(GENES, 20, 4)
    for _ in range(10):
        objectives, violation = evaluate(engine.ask())
        engine.tell(objectives * [1.0, 1.0, 0.0] + [0.0, 0.0, 60.0], violation)
    crowding = engine.state()["crowding"]
    assert not FunctionLoader.get_instance().is_compiled
    assert not np.isnan(crowding).any()
    assert (np.isfinite(crowding) & (crowding > 0.0)).any()
    assert capsys.readouterr().out == ""


@pytest.mark.parametrize("method", METHODS)
def test_a_constant_objective_and_all_infeasible_batches_are_ordinary(method: Method) -> None:
    engine = Engine(GENES, 20, 1, method=method)
    for generation in range(6):
        objectives, violation = evaluate(engine.ask())
        objectives[:, 2] = 60.0
        engine.tell(objectives, violation + (1.0 if generation < 3 else 0.0))
    assert np.isfinite(engine.objectives()).all()
    assert not np.isnan(engine.state()["crowding"]).any()


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_refuses_numbers_that_are_not_finite(bad: float) -> None:
    engine = Engine(GENES, 8, 1)
    objectives, violation = evaluate(engine.ask())
    broken = objectives.copy()
    broken[3, 1] = bad
    with pytest.raises(ValueError, match="finite"):
        engine.tell(broken, violation)
    with pytest.raises(ValueError, match="finite"):
        engine.tell(objectives, np.where(np.arange(8) == 2, bad, violation))
    engine.tell(objectives, violation)  # a refusal leaves the engine as it was


def test_refuses_misuse() -> None:
    engine = Engine(GENES, 8, 1)
    with pytest.raises(ValueError, match="ask before"):
        engine.tell(np.ones((8, 3)), np.zeros(8))
    engine.ask()
    with pytest.raises(ValueError, match="do not fit the batch"):
        engine.tell(np.ones((7, 3)), np.zeros(7))
    with pytest.raises(ValueError, match="population of 4"):
        Engine(GENES, 3, 1)
    other = Engine(GENES, 12, 1)
    step(other)
    with pytest.raises(ValueError, match="does not fit"):
        engine.restore(other.state())


def test_generator_words_continue_the_stream() -> None:
    rng = np.random.default_rng(3)
    rng.integers(0, 9, 3, dtype=np.int32)  # leaves half a word behind
    again = generator_from_words(generator_words(rng))
    assert (
        again.integers(0, 2**31, 7, dtype=np.int32).tolist()
        == rng.integers(0, 2**31, 7, dtype=np.int32).tolist()
    )
    assert again.random(9).tobytes() == rng.random(9).tobytes()
