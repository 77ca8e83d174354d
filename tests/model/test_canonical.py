"""Two encodings of one physical design become one row; deciding and tidying twice change nothing."""

from __future__ import annotations

import numpy as np
import pytest
from equivalence.shipped import STUDIES, decided, evaluator_of

from archopt.model.canonical import canonical
from archopt.model.space import BUS_A, BUS_FIELDS, PARENT, Designs

COUNT, SEED = 300, 11


@pytest.mark.parametrize("name", STUDIES)
def test_canonical_is_idempotent_and_keeps_decided_rows(name: str) -> None:
    evaluator = evaluator_of(name)
    problem = evaluator.problem
    rows = decided(name, COUNT, SEED)
    once = canonical(problem, Designs(problem.layout, rows))
    np.testing.assert_array_equal(once.rows, rows)
    loose = np.random.default_rng(9).permuted(rows, axis=0)
    first = canonical(problem, Designs(problem.layout, loose))
    np.testing.assert_array_equal(canonical(problem, first).rows, first.rows)


@pytest.mark.parametrize("name", STUDIES)
def test_deciding_twice_changes_nothing(name: str) -> None:
    evaluator = evaluator_of(name)
    rows = decided(name, COUNT, SEED)
    np.testing.assert_array_equal(evaluator.decide(rows), rows)


@pytest.mark.parametrize("name", STUDIES)
def test_a_design_does_not_depend_on_its_company(name: str) -> None:
    evaluator = evaluator_of(name)
    rows = decided(name, COUNT, SEED)
    for p in (0, 120, 299):
        np.testing.assert_array_equal(evaluator.decide(rows[p : p + 1])[0], rows[p])


@pytest.mark.parametrize("name", STUDIES)
def test_exchanging_the_buses_gives_the_same_row(name: str) -> None:
    evaluator = evaluator_of(name)
    layout = evaluator.problem.layout
    rows = decided(name, COUNT, SEED)
    designs = Designs(layout, rows)
    # a bias supply may hang on bus A only, so it cannot be exchanged with it
    movable = (designs.board("bias_feed") == 0) & (designs.rail("feed") == BUS_A).any(axis=1)
    rated = evaluator.problem.rails.voltage_v * evaluator.states.rated_a
    carried = [np.where(designs.rail("feed") == bus, rated, 0.0).sum(axis=1) for bus in (1, 2)]
    movable &= carried[0] > carried[1] * (1 + 1e-9)
    assert movable.sum() > 20
    swapped = rows[movable].copy()
    feed = swapped[:, layout.rail("feed")]
    swapped[:, layout.rail("feed")] = np.where(feed == 1, 2, np.where(feed == 2, 1, feed))
    for field in BUS_FIELDS:
        swapped[:, layout.bus(field)] = swapped[:, layout.bus(field)][:, ::-1]
    np.testing.assert_array_equal(evaluator.decide(swapped), rows[movable])


def neutral_columns(evaluator_name: str, row: np.ndarray) -> list[int]:
    """Return the columns of a row that have no effect."""
    problem = evaluator_of(evaluator_name).problem
    layout = problem.layout
    designs = Designs(layout, row[None])
    found: list[int] = []
    for bus in range(2):
        columns = {field: layout.bus(field).start + bus for field in BUS_FIELDS}
        if not (designs.rail("feed")[0] == BUS_A + bus).any():
            found += columns.values()
            continue
        if problem.converters.kind[row[columns["converter"]] - 1] == 1:  # fixed ratio: its voltage is no choice
            found += [columns[field] for field in ("nominal_v", "control", "lower_v", "upper_v")]
        elif row[columns["control"]] == 0:
            found += [columns["lower_v"], columns["upper_v"]]
        if row[columns["count"]] == 1:
            found.append(columns["fewest"])
    for r in range(layout.rails):
        if designs.rail("phases")[0, r] == 1:
            found.append(layout.rail("fewest").start + r)
    if designs.board("bias")[0] == 0:
        found += [layout.board("bias_feed")]
        found.append(layout.board("bias"))
    if designs.board("supervisor")[0] == 0:
        found.append(layout.board("supervisor"))
    return found


@pytest.mark.parametrize("name", STUDIES)
def test_genes_without_effect_change_neither_row_nor_objectives(name: str) -> None:
    evaluator = evaluator_of(name)
    space = evaluator.problem.space
    rng = np.random.default_rng(5)
    changed, kept = [], []
    for row in decided(name, COUNT, SEED)[::5]:
        other = row.copy()
        for column in neutral_columns(name, row):
            other[column] = rng.choice(space.allowed[column])
        if not (other == row).all():
            changed.append(other)
            kept.append(row)
    assert len(changed) > 40
    again = evaluator.decide(np.array(changed))
    np.testing.assert_array_equal(again, np.array(kept))
    np.testing.assert_array_equal(
        evaluator.evaluate(again).objectives, evaluator.evaluate(np.array(kept)).objectives
    )


@pytest.mark.parametrize("name", STUDIES)
def test_bus_a_carries_the_larger_power(name: str) -> None:
    evaluator = evaluator_of(name)
    problem = evaluator.problem
    feed = Designs(problem.layout, decided(name, COUNT, SEED)).rail("feed")
    rated = problem.rails.voltage_v * evaluator.states.rated_a
    first, second = (np.where(feed == bus, rated, 0.0).sum(axis=1) for bus in (1, 2))
    assert (first >= second * (1 - 1e-9)).all()
    assert (feed < PARENT + problem.layout.rails).all()
