"""Variation by kind: what may change, by how much, and what is inherited together."""

from __future__ import annotations

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from archopt.search.operators import UNRANKED, Gene, Operators, reflect, tell_apart, tournament

GENES = (
    Gene("family", "category", 2, 6),
    Gene("count", "integer", 1, 32),
    Gene("price", "real", -3.0, 1.5),
    Gene("approved", "bit", 0, 1),
    Gene("pinned", "integer", 4, 4),
    Gene("pinned price", "real", 0.25, 0.25),
)


def legal(genomes: np.ndarray) -> bool:
    low = np.array([gene.low for gene in GENES])
    high = np.array([gene.high for gene in GENES])
    whole = genomes[:, [0, 1, 3, 4]]
    return bool(((genomes >= low) & (genomes <= high)).all() and (whole == np.rint(whole)).all())


@given(st.integers(0, 2**32 - 1), st.sampled_from([0.05, 0.5, 1.0]))
@settings(max_examples=50, deadline=None)
def test_every_operator_stays_legal(seed: int, rate: float) -> None:
    rng = np.random.default_rng(seed)
    operators = Operators(GENES, mutation_rate=rate)
    parents = operators.sample(40, rng)
    children = operators.mutate(operators.crossover(parents, parents[::-1], rng), rng)
    assert legal(parents)
    assert legal(children)
    assert (children[:, 4] == 4.0).all()
    assert (children[:, 5] == 0.25).all()


def test_sampling_reaches_every_value_alike() -> None:
    draws = Operators(GENES).sample(20_000, np.random.default_rng(0))
    for column, values in ((0, 5), (1, 32), (3, 2)):
        counts = np.unique(draws[:, column], return_counts=True)[1]
        assert len(counts) == values
        assert counts == pytest.approx(20_000 / values, rel=0.2)
    assert np.quantile(draws[:, 2], [0.25, 0.5, 0.75]) == pytest.approx([-1.875, -0.75, 0.375], rel=0.1)


def test_mutation_by_kind() -> None:
    operators = Operators(GENES, mutation_rate=1.0)
    before = np.tile([4.0, 16.0, -0.5, 1.0, 4.0, 0.25], (20_000, 1))
    after = operators.mutate(before, np.random.default_rng(3))
    family = np.unique(after[:, 0], return_counts=True)
    assert family[0].tolist() == [2.0, 3.0, 5.0, 6.0], "another category, never the same"
    assert family[1] == pytest.approx(5000, rel=0.06)
    step = np.abs(after[:, 1] - 16.0)
    # closed form: 3/4 geometric with 1/2 plus 1/4 of two in 32
    assert (step == 1).mean() == pytest.approx(0.75 * 0.5 + 0.25 * 2 / 32, rel=0.05)
    assert (step == 2).mean() == pytest.approx(0.75 * 0.25 + 0.25 * 2 / 32, rel=0.05)
    assert set(after[:, 1]) == set(range(1, 33))
    assert (after[:, 3] == 0.0).all()
    move = np.abs(after[:, 2] + 0.5) / 4.5
    assert np.median(move) == pytest.approx(10**-1.75 * 0.6, rel=0.35)
    assert move.min() < 1e-4
    assert move.max() > 0.5


def test_mutation_rate_is_kept_and_defaults_to_one_and_a_half_genes() -> None:
    genes = [Gene(f"g{i}", "bit", 0, 1) for i in range(50)] + [Gene("fixed", "bit", 1, 1)]
    rng = np.random.default_rng(9)
    zeros = np.zeros((4000, 51))
    changed = Operators(genes).mutate(zeros, rng)[:, :50].sum(axis=1)
    assert changed.mean() == pytest.approx(1.5, rel=0.05)
    assert Operators(genes, mutation_rate=0.2).mutate(zeros, rng)[:, :50].mean() == pytest.approx(
        0.2, rel=0.05
    )


def test_crossover_takes_each_gene_from_a_parent_and_groups_whole_half_of_the_time() -> None:
    genes = [Gene(f"a{i}", "real", 0, 1, group="a") for i in range(4)]
    genes += [Gene(f"b{i}", "real", 0, 1, group="b") for i in range(4)]
    operators = Operators(genes, crossover_share=1.0)
    first, second = np.zeros((20_000, 8)), np.ones((20_000, 8))
    child = operators.crossover(first, second, np.random.default_rng(4))
    assert set(np.unique(child)) == {0.0, 1.0}
    assert child.mean(axis=0) == pytest.approx(0.5, rel=0.03)
    whole = np.isin(child[:, :4].sum(axis=1), [0.0, 4.0])
    # closed form: whole half of the time, else by chance 2 in 16
    assert whole.mean() == pytest.approx(0.5 + 0.5 * 2 / 16, rel=0.03)
    both = whole & np.isin(child[:, 4:].sum(axis=1), [0.0, 4.0])
    assert both.mean() == pytest.approx(whole.mean() ** 2, rel=0.05), "groups are independent"
    ungrouped = Operators([Gene(f"g{i}", "real", 0, 1) for i in range(4)], crossover_share=1.0)
    apart = ungrouped.crossover(first[:, :4], second[:, :4], np.random.default_rng(4))
    assert np.isin(apart.sum(axis=1), [0.0, 4.0]).mean() == pytest.approx(2 / 16, rel=0.1)


def test_a_share_of_children_has_one_parent() -> None:
    operators = Operators([Gene(f"g{i}", "bit", 0, 1) for i in range(40)], crossover_share=0.6)
    child = operators.crossover(np.zeros((5000, 40)), np.ones((5000, 40)), np.random.default_rng(4))
    assert (child.sum(axis=1) == 0.0).mean() == pytest.approx(0.4, rel=0.06)


def test_repair_rounds_clips_and_has_one_zero() -> None:
    operators = Operators(GENES)
    repaired = operators.repair(np.array([[9.0, 2.6, -9.0, -0.2, 7.0, 3.0]]))
    assert repaired.tolist() == [[6.0, 3.0, -3.0, 0.0, 4.0, 0.25]]
    assert repaired.tobytes() == operators.repair(np.abs(repaired) * [1, 1, -1, -1, 1, 1]).tobytes()
    with pytest.raises(ValueError, match="not finite"):
        operators.repair(np.full((1, 6), np.nan))
    with pytest.raises(ValueError, match="6 genes"):
        operators.repair(np.zeros((1, 5)))


@given(st.floats(-50, 50), st.floats(-5, 5), st.floats(0, 5))
def test_reflection_folds_like_mirrors(value: float, low: float, span: float) -> None:
    high = low + span
    expected = value
    for _ in range(100_000):  # mirror by mirror
        if expected < low:
            expected = 2.0 * low - expected
        elif expected > high:
            expected = 2.0 * high - expected
        else:
            break
        if span < 1e-3:
            expected = low
    got = reflect(np.array([value]), np.array([low]), np.array([high]))[0]
    assert low - 1e-9 <= got <= high + 1e-9
    if span >= 1e-3:
        assert got == pytest.approx(expected, rel=1e-9, abs=1e-9 * span + 1e-11)


def test_tournament_goes_by_violation_then_rank_then_crowding() -> None:
    violation = np.array([0.0, 0.0, 0.0, 2.0, 3.0, -1.0])
    rank = np.array([1, 0, 0, UNRANKED, UNRANKED, 0])
    crowding = np.array([9.0, 1.0, np.inf, 0.0, 5.0, 1.0])
    pairs = np.array([[0, 1], [1, 2], [3, 0], [4, 3], [5, 2]])
    rng = np.random.default_rng(0)
    for order in (pairs, pairs[:, ::-1]):
        assert tournament(order, violation, rank, crowding, rng).tolist() == [1, 2, 0, 3, 2]


def test_tournament_ties_are_a_fair_coin() -> None:
    equal = np.zeros(2)
    winner = tournament(
        np.tile([0, 1], (10_000, 1)), equal, np.zeros(2, dtype=np.int64), equal, np.random.default_rng(1)
    )
    assert winner.mean() == pytest.approx(0.5, rel=0.05)


def test_rows_are_told_apart_by_their_bytes() -> None:
    rows = np.array([[1.0, 2.0], [3.0, 4.0], [1.0, 2.0], [5.0, 6.0]])
    known = {rows[1].tobytes()}
    assert tell_apart(rows, known).tolist() == [True, False, False, True]
    assert known == {rows[1].tobytes()}


@pytest.mark.parametrize(
    ("gene", "message"),
    [
        (("x", "colour", 0, 1), "unknown kind"),
        (("x", "real", 1, 0), "not an interval"),
        (("x", "real", 0, np.inf), "not an interval"),
        (("x", "integer", 0, 1.5), "whole bounds"),
        (("x", "bit", 0, 2), "within 0 and 1"),
    ],
)
def test_refuses_impossible_genes(gene: tuple[str, str, float, float], message: str) -> None:
    with pytest.raises(ValueError, match=message):
        Gene(*gene)  # type: ignore[arg-type]


def test_refuses_an_empty_or_ambiguous_genome() -> None:
    with pytest.raises(ValueError, match="at least one"):
        Operators([])
    with pytest.raises(ValueError, match="unique"):
        Operators([Gene("x", "bit", 0, 1), Gene("x", "bit", 0, 1)])
