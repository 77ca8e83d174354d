"""Choice of the designs printed; every expected value follows from the definition by hand (closed form)."""

from __future__ import annotations

import pytest

from archopt.present.telling import close, energy_cost_front, even_spread, margin_steps, telling

NO_ROLES: list[list[str]] = []


def test_energy_cost_front_keeps_what_nothing_beats_in_both() -> None:
    loss = [10.0, 12.0, 11.0, 15.0, 10.0]
    cost = [50.0, 40.0, 60.0, 40.0, 50.0]
    assert energy_cost_front(loss, cost) == [0, 1]


@pytest.mark.parametrize(
    ("loss", "cost", "expected"),
    [([100.0, 101.9], [50.0, 52.4], True), ([100.0, 102.1], [50.0, 50.0], False),
     ([100.0, 100.0], [50.0, 52.6], False)],
)  # fmt: skip
def test_close_needs_both_two_percent_of_loss_and_five_of_cost(
    loss: list[float], cost: list[float], expected: bool
) -> None:
    assert close(loss, cost, 0, 1) is expected


def test_spread_takes_the_ends_then_the_middle() -> None:
    loss = [10.0 * 1.1**k for k in range(9)]
    cost = [100.0 / 1.2**k for k in range(9)]
    assert even_spread(loss, cost, [0], range(9), 2) == [8, 4]


def test_spread_stops_when_all_are_near_a_chosen_one() -> None:
    loss = [10.0, 10.1, 10.15, 20.0]
    cost = [100.0, 99.0, 98.0, 50.0]
    assert even_spread(loss, cost, [0], range(4), 10) == [3]


def test_at_most_twelve_and_the_marked_ones_first() -> None:
    loss = [10.0 * 1.05**k for k in range(60)]
    cost = [1000.0 / 1.08**k for k in range(60)]
    roles = [["least loss"], *[[] for _ in range(30)], ["knee"], *[[] for _ in range(27)], ["least cost"]]
    chosen = telling(loss, cost, roles)
    assert len(chosen.index) == 12
    assert {0, 31, 59} <= set(chosen.index)
    assert list(chosen.index) == sorted(chosen.index)
    assert all(chosen.on_front)
    gaps = [b - a for a, b in zip(chosen.index, chosen.index[1:], strict=False)]
    assert max(gaps) <= 2 * 60 / 11


def test_twins_are_merged_and_their_marks_handed_on() -> None:
    loss, cost = [10.0, 10.1, 20.0], [100.0, 98.0, 50.0]
    chosen = telling(loss, cost, [["least loss"], ["knee"], ["least cost"]])
    assert chosen.index == (0, 2)
    assert chosen.merged_roles == {0: [("knee", 1)]}
    assert chosen.merged == 1


def test_more_marks_than_places_keeps_the_extremes() -> None:
    count = 20
    loss = [10.0 * 1.1**k for k in range(count)]
    cost = [1000.0 / 1.1**k for k in range(count)]
    roles = [[f"best of topology {k}"] for k in range(count)]
    roles[7], roles[13], roles[19] = ["least loss"], ["knee"], ["least cost"]
    chosen = telling(loss, cost, roles, at_most=3)
    assert chosen.index == (7, 13, 19)


def test_topologies_leave_room_for_the_spread() -> None:
    loss = [10.0 * 1.1**k for k in range(30)]
    cost = [1000.0 / 1.1**k for k in range(30)]
    roles = [[f"best of topology {k}"] if k < 20 else [] for k in range(30)]
    roles[0], roles[1] = ["least loss"], ["knee"]
    chosen = telling(loss, cost, roles)
    assert len(chosen.index) == 12
    assert sum(1 for k in chosen.index if k < 8) >= 8
    assert max(chosen.index) == 29


def test_topologies_take_the_places_the_spread_leaves() -> None:
    loss = [10.0, 11.0, 12.0, 13.0, 14.0, 15.0, 16.0]
    cost = [10.0, 20.0, 30.0, 40.0, 50.0, 60.0, 70.0]
    roles = [["least loss"], *[[f"best of topology {k}"] for k in range(6)]]
    assert telling(loss, cost, roles, at_most=7).index == (0, 1, 2, 3, 4, 5, 6)


def test_each_cap_takes_the_least_lifetime_cost_that_meets_it() -> None:
    steps = margin_steps([98.0, 84.0, 60.0], [100.0, 110.0, 130.0], caps=(100, 90, 70, 50))
    assert [(step.cap_percent, step.index) for step in steps] == [(100, 0), (90, 1), (70, 2), (50, None)]


def test_an_empty_front_tells_nothing() -> None:
    assert telling([], [], NO_ROLES).index == ()
