"""Roles, the knee, payback: small fronts drawn by hand; expected positions are read off the numbers."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest

from archopt.model.explain import beside
from archopt.trade.money import lifetime_costs, money_per_kwh, payback_years
from archopt.trade.roles import assign_roles, energy_cost_front, knee

#            energy  cost  droop
FRONT = np.array(
    [
        [100.0, 50.0, 90.0],
        [60.0, 60.0, 90.0],  # far below the chord
        [50.0, 80.0, 80.0],
        [45.0, 100.0, 70.0],
        [44.0, 150.0, 60.0],
        [58.0, 66.0, 104.0],  # beyond its droop budget
        [110.0, 55.0, 60.0],  # beaten in energy and cost, kept for its margin
    ]
)


def test_energy_cost_front_leaves_out_beaten_and_drooping_designs() -> None:
    assert energy_cost_front(FRONT).tolist() == [4, 3, 2, 1, 0]


def test_front_of_designs_all_beyond_the_droop_limit_is_still_a_front() -> None:
    assert energy_cost_front(FRONT + np.array([0.0, 0.0, 100.0])).tolist() == [4, 3, 2, 5, 1, 0]


def test_of_equal_designs_the_one_with_least_droop_stays() -> None:
    twins = np.array([[10.0, 5.0, 90.0], [10.0, 5.0, 80.0], [10.0, 5.0, 80.0]])
    assert energy_cost_front(twins).tolist() == [1]


def test_knee_is_farthest_below_the_chord() -> None:
    """By hand: ideal (44, 50), nadir (100, 150); 1 - e - c is 0.614, 0.593, 0.482 for designs 1, 2, 3."""
    assert knee(FRONT) == 1
    below = 1 - (FRONT[[1, 2, 3], 0] - 44) / 56 - (FRONT[[1, 2, 3], 1] - 50) / 100
    np.testing.assert_allclose(below, [0.6142857, 0.5928571, 0.4821429], rtol=1e-6)


def test_knee_does_not_move_when_units_change() -> None:
    """Closed form: normalised by ideal and nadir, the distance is invariant to scale and shift of an axis."""
    rng = np.random.default_rng(3)
    x = np.sort(rng.uniform(1, 2, 40))
    front = np.stack([x, 1 / x**3, np.full(40, 80.0)], axis=1)
    first = knee(front)
    assert knee(front * np.array([7.0, 0.01, 1.0]) + np.array([3.0, 5.0, 0.0])) == first


@pytest.mark.parametrize("count", [1, 2])
def test_knee_of_one_or_two_designs_is_the_least_loss(count: int) -> None:
    assert knee(FRONT[[2, 1]][:count]) == 0


def test_no_design_is_refused() -> None:
    with pytest.raises(ValueError, match="no design"):
        knee(np.zeros((0, 3)))


def test_roles_mark_ends_knee_margin_and_the_best_of_each_topology() -> None:
    topologies = ["fixed", "fixed", "moving", "moving", "moving", "moving", "fixed"]
    lifetime = FRONT[:, 1] + FRONT[:, 0] * 1.5
    roles = assign_roles(FRONT, topologies, lifetime)
    assert roles[4] == ["least loss", "most margin"]
    assert roles[0] == ["least cost"]
    assert roles[1] == ["knee", "least lifetime cost", "best of fixed"]
    assert roles[5] == ["best of moving"], "153 over its life"
    assert roles[6] == [], "as much margin as design 4, at a higher lifetime cost"
    assert sum(len(names) for names in roles) == 7


def test_most_margin_goes_to_the_cheapest_over_its_life() -> None:
    """Margin below 60 % buys nothing, so many share it; 110 x 1.5 + 55 is more than 44 x 1.5 + 150."""
    roles = assign_roles(FRONT, ["any"] * 7, FRONT[:, 1] + FRONT[:, 0] * 1.5)
    assert "most margin" in roles[4]
    roles = assign_roles(FRONT, ["any"] * 7, FRONT[:, 1] + FRONT[:, 0] * 0.1)
    assert roles[6] == ["most margin"]


def test_roles_of_lists_of_unequal_length_are_refused() -> None:
    with pytest.raises(ValueError, match="equal length"):
        assign_roles(FRONT, ["one"], FRONT[:, 0])
    assert assign_roles(np.zeros((0, 3)), [], np.zeros(0)) == []


def test_lifetime_cost_is_the_explained_designs(telecom) -> None:
    """The same number by the model's own path, to rounding."""
    problem, _ = telecom
    study = problem.study
    expected = beside(problem, 85.0, 101.0, problem.states)
    got = lifetime_costs(study, np.array([[85.0, 101.0, 90.0]]))[0]
    np.testing.assert_allclose(got, expected["lifetime_cost"], rtol=1e-12)
    np.testing.assert_allclose(85.0 * money_per_kwh(study), expected["energy_cost_per_year"], rtol=1e-12)


def test_payback_by_hand(telecom) -> None:
    """Closed form: 0.19 a kWh / 0.95 = 0.2; 10 kWh saved is 2 a year, 5 more is paid back in 2.5 years."""
    economics = replace(
        telecom[0].study.economics, energy_price_per_kwh=0.19, cooling_overhead=1.0, upstream_efficiency=0.95
    )
    study = replace(telecom[0].study, economics=economics)
    designs = np.array(
        [
            [90.0, 55.0, 90.0],  # saves 10, costs 5 more
            [90.0, 45.0, 90.0],  # saves and costs less
            [110.0, 40.0, 90.0],  # loses more
            [100.0, 50.0, 60.0],  # the same
        ]
    )
    reference = np.array([100.0, 50.0, 80.0])
    got = payback_years(study, designs, reference)
    assert got[0] == pytest.approx(2.5, rel=1e-12)
    assert got[1:] == [0.0, None, None]
    assert payback_years(study, designs, None) == [None] * 4
