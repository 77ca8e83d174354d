"""The archive against exhaustive comparison, and the thinning against its declared resolution."""

from __future__ import annotations

import io
from itertools import pairwise

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from archopt.search.archive import Archive, significant


def plainly_nondominated(objectives: np.ndarray) -> np.ndarray:
    """Definition of dominance, one pair at a time."""
    no_worse = (objectives[None, :, :] <= objectives[:, None, :]).all(axis=2)
    better = (objectives[None, :, :] < objectives[:, None, :]).any(axis=2)
    return ~(no_worse & better).any(axis=1)


def plain_archive(rows: np.ndarray, objectives: np.ndarray) -> list[tuple[tuple[float, ...], tuple[int, ...]]]:
    """What an archive must hold, in its order: of equal objectives the lexicographically first row."""
    keep = plainly_nondominated(objectives)
    best: dict[tuple[float, ...], tuple[int, ...]] = {}
    for row, values in zip(rows[keep].tolist(), objectives[keep].tolist(), strict=True):
        key = tuple(values)
        best[key] = min(best.get(key, tuple(row)), tuple(row))
    return sorted(best.items())


def held(archive: Archive) -> list[tuple[tuple[float, ...], tuple[int, ...]]]:
    return [
        (tuple(values), tuple(row))
        for values, row in zip(archive.objectives.tolist(), archive.rows.tolist(), strict=True)
    ]


def front(count: int, seed: int, droops: int = 20) -> tuple[np.ndarray, np.ndarray]:
    """A broad made-up front of energy, cost and even droops from 62, and a row for each design."""
    rng = np.random.default_rng(seed)
    angle = np.abs(rng.standard_normal((count, 3)))
    angle /= np.linalg.norm(angle, axis=1)[:, None]
    bulge = 1.0 - angle
    objectives = np.stack(
        [
            200.0 * np.exp(1.2 * bulge[:, 0]),
            40.0 * np.exp(1.5 * bulge[:, 1]),
            60.0 + 2.0 * np.ceil(bulge[:, 2] * droops),
        ],
        axis=1,
    )
    return np.arange(count, dtype=np.int64)[:, None] * np.array([1, 3]), objectives


@given(
    st.lists(st.tuples(*[st.integers(0, 4)] * 3), min_size=1, max_size=40),
    st.integers(0, 2**32 - 1),
    st.integers(1, 9),
)
@settings(max_examples=150, deadline=None)
def test_holds_what_exhaustive_comparison_holds_in_any_order_and_batching(
    points: list[tuple[int, int, int]], seed: int, batch: int
) -> None:
    rng = np.random.default_rng(seed)
    objectives = np.array(points, dtype=float) + 1.0
    rows = np.stack([rng.permutation(len(points)), np.arange(len(points))], axis=1)
    order = rng.permutation(len(points))
    archive = Archive(2)
    for start in range(0, len(points), batch):
        part = order[start : start + batch]
        before = {tuple(row) for row in archive.rows.tolist()}
        new = archive.add(rows[part], objectives[part])
        assert new == len({tuple(row) for row in archive.rows.tolist()} - before)
    assert held(archive) == plain_archive(rows, objectives)


def test_a_change_to_what_was_read_does_not_reach_the_archive() -> None:
    archive = Archive(2)
    archive.add(np.array([[1, 2]]), np.ones((1, 3)))
    archive.rows[:] = 0
    archive.objectives[:] = 0.0
    assert archive.rows.tolist() == [[1, 2]]
    assert archive.objectives.tolist() == [[1.0, 1.0, 1.0]]


def test_large_batches_unread_match_one_batch() -> None:
    """More than may wait unsettled, with many equal objectives and rows let go along the way."""
    rows, objectives = front(30_000, 9, droops=4)
    objectives = np.stack([np.round(objectives[:, 0]), np.round(objectives[:, 1], 1), objectives[:, 2]], axis=1)
    rows = np.random.default_rng(1).permutation(rows)
    worse = objectives * 1.02
    whole, parts = Archive(2), Archive(2)
    whole.add(rows, objectives)
    parts.add(rows + 100_000, worse)
    for start in range(0, 30_000, 500):
        parts.add(rows[start : start + 500], objectives[start : start + 500])
    assert held(parts) == held(whole)
    assert parts.add(rows, objectives) == 0
    assert len(whole) > 300


def test_a_thousand_continuous_points_match_exhaustive_comparison() -> None:
    rng = np.random.default_rng(5)
    objectives = significant(rng.random((1000, 3)) + 0.5)
    rows = rng.integers(0, 1000, (1000, 4))
    archive = Archive(4)
    added = [archive.add(rows[i : i + 100], objectives[i : i + 100]) for i in range(0, 1000, 100)]
    assert held(archive) == plain_archive(rows, objectives)
    assert sum(added) >= len(archive) > 10


def test_a_row_is_held_once_and_counts_once() -> None:
    archive = Archive(2)
    row = np.array([[4, 7]])
    assert archive.add(np.repeat(row, 3, axis=0), np.full((3, 3), 2.0)) == 1
    assert archive.add(row, np.array([[2.0, 2.0, 2.0]])) == 0
    assert archive.add(row, np.array([[1.0, 3.0, 2.0]])) == 0, "first objectives of a row stand"
    assert archive.add(np.array([[1, 1], [1, 1]]), np.array([[1.0, 3.0, 1.0], [3.0, 1.0, 1.0]])) == 1
    assert len(archive) == 2


def test_rows_follow_their_objectives_while_whole_fronts_are_replaced() -> None:
    rows, objectives = front(6000, 5)
    archive = Archive(2)
    for generation in range(6):
        archive.add(rows + 10_000 * generation, objectives * 0.9**generation)
        alone = Archive(2)
        alone.add(rows + 10_000 * generation, objectives * 0.9**generation)
        assert len(alone) > 1000
        assert held(archive) == held(alone)


@pytest.mark.parametrize("read_between", [False, True])
def test_a_dominated_row_may_come_back_only_as_dominated(read_between: bool) -> None:
    archive = Archive(1)
    archive.add(np.array([[1]]), np.array([[2.0, 2.0, 2.0]]))
    if read_between:
        assert len(archive) == 1
    archive.add(np.array([[2]]), np.array([[1.0, 1.0, 1.0]]))
    assert archive.rows.tolist() == [[2]]
    assert archive.add(np.array([[1]]), np.array([[2.0, 2.0, 2.0]])) == 0
    assert archive.add(np.array([[1]]), np.array([[0.5, 2.0, 2.0]])) == 1


def test_a_difference_beyond_the_twelfth_digit_decides_nothing() -> None:
    archive = Archive(1)
    archive.add(np.array([[5]]), np.array([[1.0, 2.0, 3.0]]))
    assert archive.add(np.array([[9]]), np.array([[1.0 - 1e-14, 2.0, 3.0]])) == 0
    assert archive.add(np.array([[2]]), np.array([[1.0 + 1e-14, 2.0, 3.0]])) == 1, "the first row of equals"
    assert archive.rows.tolist() == [[2]]
    assert archive.add(np.array([[9]]), np.array([[1.0 - 1e-10, 2.0, 3.0]])) == 1


@pytest.mark.parametrize("bad", [np.nan, np.inf, -np.inf])
def test_refuses_what_is_not_finite(bad: float) -> None:
    archive = Archive(1)
    with pytest.raises(ValueError, match="finite"):
        archive.add(np.array([[1]]), np.array([[1.0, bad, 1.0]]))


def test_refuses_shapes_and_kinds_that_do_not_fit() -> None:
    archive = Archive(2)
    with pytest.raises(ValueError, match="columns"):
        archive.add(np.array([[1]]), np.ones((1, 3)))
    with pytest.raises(ValueError, match="do not fit"):
        archive.add(np.array([[1, 2]]), np.ones((2, 3)))
    with pytest.raises(ValueError, match="whole"):
        archive.add(np.array([[1.0, 2.0]]), np.ones((1, 3)))  # type: ignore[arg-type]
    assert archive.add(np.zeros((0, 2), dtype=np.int64), np.zeros((0, 3))) == 0


def test_state_passes_through_a_file_unchanged() -> None:
    archive = Archive(2)
    archive.add(*front(800, 1))
    stored = io.BytesIO()
    np.savez(stored, **archive.state())
    stored.seek(0)
    again = Archive.from_state(np.load(stored))
    assert again.rows.tobytes() == archive.rows.tobytes()
    assert again.objectives.tobytes() == archive.objectives.tobytes()
    assert again.add(archive.rows, archive.objectives) == 0
    broken = archive.state()
    broken["objectives"][0] += 1000.0
    with pytest.raises(ValueError, match="not that of an archive"):
        Archive.from_state(broken)


@given(st.floats(allow_nan=False, allow_infinity=False, min_value=-1e280, max_value=1e280))
@settings(max_examples=300, deadline=None)
def test_rounding_to_significant_digits_is_close_and_final(value: float) -> None:
    rounded = significant(np.array([value]))
    assert significant(rounded).tobytes() == rounded.tobytes()
    assert rounded[0] == pytest.approx(value, rel=5.01e-12, abs=0.0)
    assert abs(value) > 1e-280 or rounded[0] == value
    assert not np.signbit(significant(np.array([-0.0]))[0])


def test_rounding_agrees_with_decimal_printing() -> None:
    """Printing with 12 digits is independent; 1e-9 to 1e9, where the powers of ten used are exact."""
    rng = np.random.default_rng(2)
    values = rng.lognormal(0.0, 5.0, 5000) * rng.choice([-1.0, 1.0], 5000)
    assert significant(values).tolist() == [float(f"{value:.11e}") for value in values]


def test_thinning_covers_the_archive_to_the_declared_resolution() -> None:
    archive = Archive(2)
    archive.add(*front(6000, 3))
    result = archive.thinning(limit=100_000, energy_resolution=0.02, cost_resolution=0.03, droop_step=2.0)
    assert (result.energy_resolution, result.cost_resolution, result.droop_step) == (0.02, 0.03, 2.0)
    every, kept = archive.objectives, archive.objectives[result.indices]
    assert 100 < len(kept) < 0.7 * len(every)
    gap = np.abs(np.log(every[:, None, :2]) - np.log(kept[None, :, :2]))
    near = (gap <= np.log1p([0.02, 0.03])).all(axis=2) & (every[:, None, 2] == kept[None, :, 2])
    assert near.any(axis=1).all(), "every design has a kept one of its droop within one box"
    box = np.floor((np.log(kept[:, :2]) - np.log(every[:, :2].min(axis=0))) / np.log1p([0.02, 0.03]))
    boxes = np.unique(np.column_stack([box, kept[:, 2]]), axis=0)
    assert len(kept) - len(boxes) <= 2, "one a box, but for extremes that share one"


def test_thinning_fits_the_limit_keeps_extremes_and_every_droop() -> None:
    archive = Archive(2)
    archive.add(*front(20_000, 4))
    sizes = []
    for limit in (400, 100, 40, 3):
        result = archive.thinning(limit=limit)
        kept = archive.objectives[result.indices]
        assert len(kept) <= limit
        assert (kept.min(axis=0) == archive.objectives.min(axis=0)).all()
        assert (np.diff(result.indices) > 0).all()
        sizes.append(len(kept))
        if limit >= 40:
            assert result.droop_step == 2.0
            assert set(kept[:, 2]) == set(archive.objectives[:, 2])
    assert sizes[0] > 300
    assert all(larger >= smaller for larger, smaller in pairwise(sizes))


def test_thinning_prefers_what_stays_on_the_front_when_more_droop_is_admitted() -> None:
    """Two designs share a box: the one beaten in energy and cost by a droopier design goes.

    It goes although it is the nearer to the corner of the box.
    """
    archive = Archive(1)
    rows = np.arange(6)[:, None]
    objectives = np.array(
        [
            [50.0, 300.0, 80.0],
            [300.0, 20.0, 80.0],
            [100.000, 100.150, 60.0],
            [100.010, 100.090, 60.0],
            [100.005, 100.085, 70.0],
            [500.0, 500.0, 58.0],  # the least droop, so that no extreme is among the others
        ]
    )
    archive.add(rows, objectives)
    kept = archive.rows[archive.thin()][:, 0].tolist()
    assert len(archive) == 6
    assert 2 in kept
    assert 3 not in kept


def test_thinning_keeps_all_of_a_sparse_archive_and_does_not_depend_on_the_order() -> None:
    rows, objectives = front(60, 6)
    first, second = Archive(2), Archive(2)
    first.add(rows, objectives)
    second.add(rows[::-1], objectives[::-1])
    assert len(first.thin(energy_resolution=1e-9, cost_resolution=1e-9)) == len(first)
    assert first.thin(limit=9).tolist() == second.thin(limit=9).tolist()
    assert len(Archive(2).thin()) == 0


def test_thinning_is_final() -> None:
    archive = Archive(2)
    archive.add(*front(5000, 8))
    result = archive.thinning(limit=100_000, energy_resolution=0.02, cost_resolution=0.02)
    again = Archive(2)
    again.add(archive.rows[result.indices], archive.objectives[result.indices])
    assert len(again.thin(100_000, 0.02, 0.02)) == len(again)


def test_thinning_refuses_what_it_is_not_declared_for() -> None:
    archive = Archive(1)
    with pytest.raises(ValueError, match="limit of 3"):
        archive.thin(limit=2)
    with pytest.raises(ValueError, match="positive widths"):
        archive.thin(energy_resolution=0.0)
    archive.add(np.array([[1]]), np.array([[-1.0, 1.0, 60.0]]))
    with pytest.raises(ValueError, match="must be positive"):
        archive.thin()
    with pytest.raises(ValueError, match="energy, cost and droop"):
        Archive(1, 2).thin()
