"""Topologies that lost and the front of fixed-bus designs, on designs made by hand from the incumbent."""

from __future__ import annotations

import numpy as np
import pytest
from moocore import is_nondominated

from archopt.model.evaluator import Evaluator
from archopt.model.explain import explain_many, topology
from archopt.search.indicator import share
from archopt.trade.fixed_front import bus_is_fixed, equal_cost_percent, fixed_front
from archopt.trade.losing import by_group, losing
from archopt.trade.money import lifetime_costs

FOLLOW = {"bus_a.control": "follow_load", "bus_a.lower_v": "5.75", "bus_a.upper_v": "12"}
SECOND = {
    "aux_2v5.feed": "bus_b", "optics_3v3.feed": "bus_b", "bus_b.converter": "trim_bus_100w",
    "bus_b.count": "1", "bus_b.nominal_v": "12", "bus_b.lower_v": "12", "bus_b.upper_v": "12",
    "bus_b.bulk": "polymer_270u_16v_can", "bus_b.bulk_count": "4", "bus_b.pairs": "1",
    "bus_b.control": "fixed",
}  # fmt: skip


@pytest.fixture(scope="module")
def seen(telecom):
    """Five feasible designs of three topologies and one that is not feasible, decided and evaluated."""
    problem, row = telecom
    evaluator = Evaluator(problem)
    changes = [
        {}, {"bus_a.converter": "wide_bus_200w", "bus_a.nominal_v": "9"},
        {"bus_a.converter": "wide_bus_200w", **FOLLOW}, SECOND,
        {"bus_a.converter": "wide_bus_150w", **FOLLOW}, {**SECOND, "core.phases": "1"},
    ]  # fmt: skip
    rows = evaluator.decide(np.stack([problem.space.encode(change, row) for change in changes]))
    found = evaluator.evaluate(rows, exact=True)
    assert (found.violation[:5] == 0).all()
    assert found.violation[5] > 0
    return evaluator, rows, found


def test_losers_are_the_best_of_each_other_topology(seen) -> None:
    evaluator, rows, found = seen
    problem = evaluator.problem
    words = topology(problem, rows[:5])
    assert words == [
        "one bus, fixed", "one bus, fixed", "one bus, follows load", "two buses, fixed",
        "one bus, follows load",
    ]  # fmt: skip
    life = lifetime_costs(problem.study, found.objectives[:5])
    out = losing(evaluator, rows[:5], found.objectives[:5], names=["D001", "", "", "", ""])
    best = {word: min(life[k] for k in range(5) if words[k] == word) for word in words}
    order = sorted(best, key=best.__getitem__)
    assert [one["topology"] for one in out] == order[1:]
    for one in out:
        assert one["lifetime_cost"] == pytest.approx(best[one["topology"]], rel=1e-9)
        assert one["behind_by"] == pytest.approx(best[one["topology"]] - best[order[0]], rel=1e-6)
        assert one["limit"] is None
    names = {one["topology"]: one["best_design"]["design"] for one in out}
    assert names["two buses, fixed"] == "best of two buses, fixed"


def test_difference_by_mechanism_sums_to_the_difference_of_energy(seen) -> None:
    evaluator, rows, found = seen
    for one in losing(evaluator, rows[:5], found.objectives[:5]):
        total = sum(one["difference_by_mechanism"].values())
        assert total == pytest.approx(one["energy_more_kwh"], rel=1e-9, abs=1e-9)
        sizes = [abs(value) for value in one["difference_by_mechanism"].values()]
        assert sizes == sorted(sizes, reverse=True)


def test_groups_of_a_year_sum_to_its_energy_and_leave_nothing_unnamed(seen) -> None:
    evaluator, rows, _ = seen
    known = {
        "stage conduction", "stage switching", "inductor core", "gates", "controllers", "capacitors",
        "copper", "bus converter no-load", "bus converter conduction", "input path", "supervisor",
        "bus transitions",
    }  # fmt: skip
    for design in explain_many(evaluator, rows[[0, 2]]):
        groups = by_group(design["year_kwh"])
        energy = design["objectives"]["energy_loss_kwh_per_year"]
        assert sum(groups.values()) == pytest.approx(energy, rel=1e-9)
        assert set(groups) <= known
        converter = sum(design["year_kwh"]["bus_a converter"].values())
        both = groups["bus converter no-load"] + groups["bus converter conduction"]
        assert both == pytest.approx(converter, rel=1e-12)


def test_topology_without_a_feasible_design_names_the_limit_and_its_size(seen) -> None:
    evaluator, rows, found = seen
    infeasible = {
        "two buses, fixed": (rows[5], float(found.violation[5])),
        "one bus, fixed": (rows[5], 99.0),
    }
    out = losing(evaluator, rows[:3], found.objectives[:3], infeasible=infeasible)
    last = out[-1]
    assert [one["topology"] for one in out].count("one bus, fixed") <= 1
    assert last["topology"] == "two buses, fixed"
    assert last["best_design"] is None
    assert last["limit"]["limit"] == "stage current"
    assert "core" in last["limit"]["where"]
    assert last["limit"]["slack"] == pytest.approx(22.5 - 40.0, rel=1e-9), "40 A on one phase of 25 A at 90 %"


def test_nothing_seen_is_no_error(seen) -> None:
    evaluator, rows, found = seen
    assert losing(evaluator, rows[:0], found.objectives[:0]) == []
    assert len(losing(evaluator, rows[:0], found.objectives[:0], infeasible={"x": (rows[5], 1.0)})) == 1


def test_fixed_front_leaves_out_moving_buses(seen) -> None:
    evaluator, rows, found = seen
    problem = evaluator.problem
    assert bus_is_fixed(problem, rows[:5]).tolist() == [True, True, False, True, False]
    front = fixed_front(problem, rows[:5], found.objectives[:5])
    assert front.index.tolist() == [1, 0], "9 V loses less and costs more than 12 V; two buses give way in both"
    whole = found.objectives[:5][is_nondominated(found.objectives[:5])]
    assert front.hypervolume_share == pytest.approx(share(found.objectives[[1, 0]], whole), rel=1e-12)
    assert 0 < front.hypervolume_share < 1
    assert front.least_loss_kwh == (found.objectives[1, 0], found.objectives[:5, 0].min())


def test_no_fixed_design_gives_an_empty_front(seen) -> None:
    evaluator, rows, found = seen
    front = fixed_front(evaluator.problem, rows[[2, 4]], found.objectives[[2, 4]])
    assert len(front.index) == 0
    assert front.hypervolume_share == 0.0
    assert front.energy_more_percent is None


def test_energy_at_equal_cost_by_hand() -> None:
    """Front (10, 30), (20, 20), (40, 10); fixed (12, 30), (30, 15): 20 % at 30, 50 % at 20, none at 10."""
    fixed = np.array([[12.0, 30.0, 60.0], [30.0, 15.0, 60.0]])
    every = np.array([[10.0, 30.0, 60.0], [20.0, 20.0, 60.0], [40.0, 10.0, 60.0]])
    found = equal_cost_percent(fixed, np.vstack([every, fixed[:1]]))
    np.testing.assert_allclose(found, (20.0, 35.0, 50.0), rtol=1e-9)
