"""Hypervolume against values from outside, and the rule that ends a search."""

from __future__ import annotations

import numpy as np
import pytest
from moocore import hypervolume

from archopt.search.indicator import Scale, Stagnation, share


def test_hypervolume_of_the_published_four_points() -> None:
    """{(5,5),(4,6),(2,7),(7,4)} to (10,10) is 38: the example in the documentation of moocore."""
    points = np.array([[5.0, 5.0], [4.0, 6.0], [2.0, 7.0], [7.0, 4.0]])
    # a scale of ideal 0 and nadir 10/1.1 puts the reference point 1.1 at 10: the unit is 10/1.1 squared
    scale = Scale(np.zeros(2), np.full(2, 10.0 / 1.1))
    assert scale.hypervolume(points) * (10.0 / 1.1) ** 2 == pytest.approx(38.0, rel=1e-12)


def test_scaled_hypervolume_by_hand() -> None:
    """Closed form: corners (0,1), (1,0) and (0.5,0.5) to 1.1 cover 3 boxes less their overlaps."""
    front = np.array([[10.0, 400.0], [15.0, 300.0], [20.0, 200.0]])
    expected = 1.1 * 0.1 + 0.6 * 0.5 + 0.1 * 0.5
    assert Scale.of(front).hypervolume(front) == pytest.approx(expected, rel=1e-12)


def test_units_do_not_matter_and_points_beyond_the_reference_add_nothing() -> None:
    rng = np.random.default_rng(1)
    front = rng.random((50, 3)) + 1.0
    scale = Scale.of(front)
    factor, shift = np.array([1000.0, 1e-6, 7.0]), np.array([5.0, 3.0, -2.0])
    assert Scale.of(front * factor + shift).hypervolume(front * factor + shift) == pytest.approx(
        scale.hypervolume(front), rel=1e-6
    )
    beyond = scale.nadir + 0.11 * scale.width
    assert scale.hypervolume(beyond[None, :]) == 0.0
    assert scale.hypervolume(np.concatenate([front, beyond[None, :]])) == pytest.approx(
        scale.hypervolume(front), rel=1e-12
    )
    assert scale.hypervolume(np.zeros((0, 3))) == 0.0


def test_the_reference_point_is_tight() -> None:
    """Losing the middle of a front must show: ten widths away it is 0.993, at 1.1 it is 0.240."""
    x = np.linspace(0.0, 1.0, 201)
    reference = np.stack([x, 1.0 - np.sqrt(x)], axis=1)
    ends = reference[[0, -1]]
    loose = hypervolume(ends, [10.0, 10.0]) / hypervolume(reference, [10.0, 10.0])
    assert share(reference, reference) == pytest.approx(1.0, rel=1e-12)
    assert loose > 0.99
    # closed form: the corners leave 0.21 of 0.21 + 2/3, less what 201 points miss of the curve
    assert share(ends, reference) == pytest.approx(0.21 / (0.21 + 2.0 / 3.0), rel=0.01)


def test_a_constant_objective_is_scaled_by_its_own_size() -> None:
    front = np.array([[1.0, 2.0, 60.0], [2.0, 1.0, 60.0]])
    assert Scale.of(front).hypervolume(front) == pytest.approx((0.1 * 1.1 * 2 - 0.01) * 1.1, rel=1e-12)
    # 5 % more of the constant objective leaves 1.05 of the 1.1 above it
    assert share(front * [1.0, 1.0, 1.05], front) == pytest.approx(1.05 / 1.1, rel=1e-9)


def test_refuses_an_empty_or_broken_front() -> None:
    with pytest.raises(ValueError, match="finite"):
        Scale.of(np.zeros((0, 3)))
    with pytest.raises(ValueError, match="finite"):
        Scale.of(np.array([[1.0, np.nan]]))
    with pytest.raises(ValueError, match="finite"):
        Scale.of(np.array([[1.0, 2.0]])).hypervolume(np.array([[np.inf, 1.0]]))


def shrinking(generation: int, pace: float = 0.8) -> np.ndarray:
    """A convex front that closes in on (1, 1) geometrically; its ends stay where they are."""
    x = np.linspace(0.0, 1.0, 60)
    distance = pace**generation
    return np.concatenate(
        [[[1.0, 2.0], [2.0, 1.0]], np.stack([1.0 + x, 2.0 - x ** (0.2 + distance)], axis=1)]
    )


def test_goes_on_while_the_front_grows_and_stops_soon_after() -> None:
    rule = Stagnation(generations=10)
    stopped = next(generation for generation in range(200) if rule.update(shrinking(generation)))
    # growth over ten generations falls below a thousandth when 0.8^(g-10) is some thousandths
    assert 25 < stopped < 60
    volumes = rule.history
    assert volumes[-1] < volumes[-11] * 1.001
    assert volumes[-2] >= volumes[-12] * 1.001


def test_an_empty_archive_neither_stops_nor_fixes_the_scale() -> None:
    rule = Stagnation(generations=2, fix_after=3)
    assert not any(rule.update(np.zeros((0, 3))) for _ in range(50))
    assert rule.scale is None
    front = np.array([[1.0, 2.0], [2.0, 1.0]])
    assert [rule.update(front) for _ in range(5)] == [False, False, False, False, True]


def test_the_scale_does_not_follow_the_archive() -> None:
    rule = Stagnation(generations=100, fix_after=2)
    for generation in range(30):
        rule.update(shrinking(generation) * (1.0 + 0.9**generation))
    assert rule.scale is not None
    assert rule.scale.ideal == pytest.approx((shrinking(1) * 1.9).min(axis=0), rel=1e-12)


def test_a_loose_scale_is_fixed_anew_before_it_may_stop_the_search() -> None:
    """The first archive has an outlier a hundred times out; on its scale a whole front is one corner."""
    outlier = np.array([[0.5, 300.0], [300.0, 0.5]])
    rule = Stagnation(generations=5, fix_after=1)
    rule.update(np.concatenate([outlier, shrinking(0)]))
    stopped = next(generation for generation in range(1, 200) if rule.update(shrinking(generation, 0.9)))
    assert rule.scale is not None
    assert (rule.scale.width < 2.0).all()
    # the front's own end of growth, not that of the loose scale, decided
    assert stopped > 30


def test_a_restored_rule_decides_alike() -> None:
    whole = Stagnation(generations=8)
    parts = Stagnation(generations=8)
    for generation in range(100):
        stop = whole.update(shrinking(generation))
        again = Stagnation(generations=8)
        again.restore(parts.state())
        parts = again
        assert parts.update(shrinking(generation)) is stop
        assert parts.history.tobytes() == whole.history.tobytes()
        if stop:
            break
    else:
        pytest.fail("never stopped")


def test_refuses_a_rule_without_a_window() -> None:
    with pytest.raises(ValueError, match="positive"):
        Stagnation(generations=0)
