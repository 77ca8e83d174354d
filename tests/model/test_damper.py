"""A damping bank on a bus: a choice with a canonical form, a price, and an effect on what limits the bus."""

from __future__ import annotations

import numpy as np
import pytest
from equivalence.reference import Reference
from equivalence.shipped import decided, evaluator_of, near_rows
from numpy.typing import NDArray

from archopt.model.canonical import canonical
from archopt.model.cost import count_pieces
from archopt.model.explain import part_uses
from archopt.model.limits import INDEX
from archopt.model.space import Designs
from archopt.search.local import Neighbours

STUDY = "telecom_six"


def rows_with(damper: int, count: int = 3) -> NDArray[np.int64]:
    """Return today's design, undecided, with one ceramic bulk bank and a damper on bus A."""
    problem = evaluator_of(STUDY).problem
    rows = near_rows(problem, 1, np.random.default_rng(0), redrawn=0.0)
    layout = problem.layout
    ceramic = np.flatnonzero(~problem.capacitors.lossy & problem.bulk_ok)[0]
    for field, value in (("bulk", ceramic), ("bulk_count", 5), ("damper", damper), ("damper_count", count)):
        rows[:, layout.bus(field).start] = value
    return rows


def lossy() -> NDArray[np.int64]:
    """Return the dampers on offer: polymer and electrolytic, rated for a bus."""
    problem = evaluator_of(STUDY).problem
    values = problem.space.allowed[problem.layout.bus("damper").start]
    assert values[0] == 0
    return values[1:]


def test_only_lossy_capacitors_damp() -> None:
    problem = evaluator_of(STUDY).problem
    kinds = {problem.catalogue.families["capacitors"][problem.capacitors.names[k - 1]].kind for k in lossy()}  # type: ignore[attr-defined]
    assert kinds == {"polymer", "electrolytic"}
    name = problem.space.describe(rows_with(int(lossy()[0]))[0])["bus_a.damper"]
    assert problem.space.value("bus_a.damper", name) == lossy()[0]
    assert problem.space.describe(rows_with(0)[0])["bus_a.damper"] == "none"


def test_without_a_damper_there_is_nothing_to_count() -> None:
    problem = evaluator_of(STUDY).problem
    several = np.concatenate([rows_with(0, count) for count in (0, 4, 9)])
    found = canonical(problem, Designs(problem.layout, several)).rows
    assert (found == found[0]).all()
    row = rows_with(int(lossy()[0]), 4)
    row[:, problem.layout.rail("feed")] = np.where(row[:, problem.layout.rail("feed")] == 1, 2, 0)
    rows = canonical(problem, Designs(problem.layout, row))
    assert (rows.bus("damper") * ~np.stack([(rows.rail("feed") == b).any(axis=1) for b in (1, 2)], axis=1) == 0).all()


def test_a_damper_is_bought_started_charged_and_told() -> None:
    evaluator = evaluator_of(STUDY)
    problem = evaluator.problem
    k = int(lossy()[0])
    rows = evaluator.decide(np.concatenate([rows_with(0), rows_with(k, 3)]))
    detail = evaluator.detail(rows, exact=True, explain=True)
    table, pieces = problem.capacitors, int(problem.bank_counts[3])
    more = np.diff(count_pieces(problem, Designs(problem.layout, rows)), axis=0)[0]
    assert more[table.part[k - 1]] == pieces
    assert more.sum() == pieces
    most_f = pieces * table.capacitance_f[k - 1] * (1.0 + table.tolerance[k - 1])
    assert np.diff(detail.hardware.bulk_nominal_f[:, 0])[0] == pytest.approx(most_f, rel=1e-12)
    started = detail.ledger.worst["start-up capacitance"].value
    assert started[1] - started[0] == pytest.approx(1e6 * most_f, rel=1e-9)
    assert float(np.diff(detail.evaluation.objectives[:, 1])[0]) > 0.0
    assert part_uses(problem, detail, 1)[int(table.part[k - 1])] == ["bus_a damping"]


def test_a_damper_steadies_a_bus_of_ceramic() -> None:
    """Stability and impedance margin rise with it, and the dip falls."""
    evaluator = evaluator_of(STUDY)
    rows = np.concatenate([rows_with(0), *(rows_with(int(k), 3) for k in lossy())])
    rows = evaluator.decide(rows)
    slack = evaluator.evaluate(rows, exact=True).slack
    for limit in ("stability", "impedance margin"):
        assert (slack[1:, INDEX[limit]] > slack[0, INDEX[limit]]).all(), limit
    assert slack[1:, INDEX["bus dip"]].max() > slack[0, INDEX["bus dip"]]


def test_damped_buses_equal_the_reference() -> None:
    evaluator = evaluator_of(STUDY)
    rows = decided(STUDY, 60, 31)
    damped = rows[(Designs(evaluator.problem.layout, rows).bus("damper") > 0).any(axis=1)][:3]
    detail = evaluator.detail(damped, exact=True)
    assert len(damped) == 3
    for p, row in enumerate(damped):
        reference = Reference(evaluator.problem, row)
        for bus in reference.buses:
            mine = detail.solution.dip_v[p, 0 if bus.name == "bus_a" else 1]
            np.testing.assert_allclose(mine, reference.dips_v[bus.name], rtol=1e-9)
        assert reference.cost() == pytest.approx(float(detail.evaluation.objectives[p, 1]), rel=1e-12)


def test_neighbours_try_dampers() -> None:
    problem = evaluator_of(STUDY).problem
    start = evaluator_of(STUDY).decide(rows_with(0))
    drawn = Neighbours(problem).draw(np.repeat(start, 400, axis=0), np.random.default_rng(1))
    found = np.unique(Designs(problem.layout, drawn).bus("damper")[:, 0])
    assert len(found) > 2
    assert np.isin(found, [0, *lossy()]).all()
