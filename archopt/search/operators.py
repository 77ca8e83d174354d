"""Typed variation on flat vectors: every kind of gene is crossed, mutated and repaired in its own way.

A genome is one row of float64; categories, integers and bits are held as whole numbers, never as strings.
All functions work on a whole population at once and take the random generator explicitly.
"""

from __future__ import annotations

from collections.abc import Sequence, Set
from dataclasses import dataclass
from typing import Any, Literal, get_args

import numpy as np
from numpy.typing import NDArray

from archopt.physics.arrays import BoolArray, FloatArray, IntArray

Kind = Literal["category", "integer", "real", "bit"]

# Rank of an individual no survival has ranked, an infeasible one: it loses to any ranked one.
UNRANKED = 2**31 - 1


@dataclass(frozen=True, slots=True)
class Gene:
    """One entry of the genome.

    Parameters
    ----------
    name : what the gene decides, unique in a genome
    kind : ``category`` (no order), ``integer`` (ordered), ``real`` or ``bit``
    low, high : both included; equal bounds pin the gene
    group : genes with the same non-empty group tend to be inherited together

    Raises
    ------
    ValueError : bounds that are not finite, reversed, or not whole where the kind is whole
    """

    name: str
    kind: Kind
    low: float
    high: float
    group: str = ""

    def __post_init__(self) -> None:
        if self.kind not in get_args(Kind):
            raise ValueError(f"gene {self.name}: unknown kind {self.kind!r}")
        if not (np.isfinite(self.low) and np.isfinite(self.high) and self.low <= self.high):
            raise ValueError(f"gene {self.name}: bounds {self.low}, {self.high} are not an interval")
        if self.kind != "real" and not (float(self.low).is_integer() and float(self.high).is_integer()):
            raise ValueError(f"gene {self.name}: a {self.kind} needs whole bounds")
        if self.kind == "bit" and not (self.low >= 0.0 and self.high <= 1.0):
            raise ValueError(f"gene {self.name}: a bit lies within 0 and 1")


class Operators:
    """Sampling, crossover, mutation and repair of populations of one genome.

    Parameters
    ----------
    genes : the genome, in column order
    crossover_share : share of children that have two parents; the others start as a copy of the first
    mutation_rate : chance that a free gene of a child is mutated; None means 1.5 / (number of free genes)
    """

    def __init__(
        self, genes: Sequence[Gene], crossover_share: float = 0.9, mutation_rate: float | None = None
    ) -> None:
        if not genes:
            raise ValueError("a genome needs at least one gene")
        names = [gene.name for gene in genes]
        if len(set(names)) != len(names):
            raise ValueError("gene names must be unique")
        self.genes = tuple(genes)
        self.low: FloatArray = np.array([gene.low for gene in genes], dtype=np.float64)
        self.high: FloatArray = np.array([gene.high for gene in genes], dtype=np.float64)
        kinds = np.array([gene.kind for gene in genes])
        self.real: BoolArray = kinds == "real"
        self._category: BoolArray = kinds == "category"
        self._integer: BoolArray = kinds == "integer"
        self._bit: BoolArray = kinds == "bit"
        self.free: BoolArray = self.high > self.low
        # a gene without a group is a group of its own, so one coin a group is one coin a gene for it
        labels = [gene.group or f"\0{gene.name}" for gene in genes]
        order = {label: index for index, label in enumerate(dict.fromkeys(labels))}
        self.group: IntArray = np.array([order[label] for label in labels], dtype=np.int64)
        self.crossover_share = crossover_share
        free = max(int(self.free.sum()), 1)
        self.mutation_rate = min(1.0, 1.5 / free) if mutation_rate is None else mutation_rate

    @property
    def width(self) -> int:
        """Number of genes."""
        return len(self.genes)

    def sample(self, count: int, rng: np.random.Generator) -> FloatArray:
        """Uniform random genomes, shape (count, genes)."""
        unit = rng.random((count, self.width))
        span = self.high - self.low
        whole = self.low + np.floor(unit * (span + 1.0))
        return self.repair(np.where(self.real, self.low + unit * span, whole))

    def repair(self, genomes: FloatArray) -> FloatArray:
        """Genomes clipped to their bounds and rounded where the kind is whole; shape kept, always a copy.

        Raises
        ------
        ValueError : wrong width, or a value that is not finite
        """
        values = np.asarray(genomes, dtype=np.float64)
        if values.ndim != 2 or values.shape[1] != self.width:
            raise ValueError(f"expected genomes of {self.width} genes, got shape {values.shape}")
        if not np.isfinite(values).all():
            raise ValueError("a genome holds a value that is not finite")
        # adding zero turns -0.0 into 0.0: genomes are compared by their bytes
        return np.clip(np.where(self.real, values, np.rint(values)), self.low, self.high) + 0.0

    def crossover(self, first: FloatArray, second: FloatArray, rng: np.random.Generator) -> FloatArray:
        """One child a pair by uniform crossover, shapes (pairs, genes).

        For each child and group a fair coin decides whether the group is inherited whole or gene by gene.
        """
        count = len(first)
        groups = int(self.group.max()) + 1
        by_gene = rng.random((count, self.width)) < 0.5
        by_group = (rng.random((count, groups)) < 0.5)[:, self.group]
        together = (rng.random((count, groups)) < 0.5)[:, self.group]
        crossed = rng.random((count, 1)) < self.crossover_share
        take_second = np.where(together, by_group, by_gene) & crossed
        return np.where(take_second, second, first)

    def mutate(self, genomes: FloatArray, rng: np.random.Generator) -> FloatArray:
        """Mutated copies, shape (count, genes); a child may also come through unchanged."""
        hit = (rng.random(genomes.shape) < self.mutation_rate) & self.free
        child = genomes.copy()
        self._mutate_category(child, hit & self._category, rng)
        self._mutate_integer(child, hit & self._integer, rng)
        self._mutate_real(child, hit & self.real, rng)
        flip = hit & self._bit
        child[flip] = 1.0 - child[flip]
        return self.repair(child)

    def _mutate_category(self, child: FloatArray, hit: BoolArray, rng: np.random.Generator) -> None:
        """Replace by another value, each of the others equally likely."""
        column = np.nonzero(hit)[1]
        low, count = self.low[column], self.high[column] - self.low[column] + 1.0
        step = 1.0 + np.floor(rng.random(len(column)) * (count - 1.0))
        child[hit] = low + np.mod(child[hit] - low + step, count)

    def _mutate_integer(self, child: FloatArray, hit: BoolArray, rng: np.random.Generator) -> None:
        """Three times in four a geometric step (1, 2, 3, ...) either way, else uniform."""
        column = np.nonzero(hit)[1]
        low, high = self.low[column], self.high[column]
        size = rng.geometric(0.5, len(column)) * np.where(rng.random(len(column)) < 0.5, -1.0, 1.0)
        anywhere = low + np.floor(rng.random(len(column)) * (high - low + 1.0))
        near = rng.random(len(column)) < 0.75
        child[hit] = np.where(near, reflect(child[hit] + size, low, high), anywhere)

    def _mutate_real(self, child: FloatArray, hit: BoolArray, rng: np.random.Generator) -> None:
        """Add a Gaussian step whose size is itself drawn, 0.1 % to 30 % of the range, and reflect it."""
        column = np.nonzero(hit)[1]
        low, high = self.low[column], self.high[column]
        size = 10.0 ** rng.uniform(-3.0, -0.5, len(column))
        child[hit] = reflect(child[hit] + rng.standard_normal(len(column)) * size * (high - low), low, high)


def reflect(values: FloatArray, low: FloatArray, high: FloatArray) -> FloatArray:
    """Values folded back into [low, high] as by mirrors at both ends; all of one shape."""
    span = high - low
    safe = np.where(span > 0.0, span, 1.0)
    folded = np.mod(values - low, 2.0 * safe)
    return np.where(span > 0.0, low + np.minimum(folded, 2.0 * safe - folded), low)


def tournament(
    pairs: IntArray,
    violation: FloatArray,
    rank: IntArray,
    crowding: FloatArray,
    rng: np.random.Generator,
) -> IntArray:
    """Winner of each pair: less violation, then lower rank, then more crowding distance, then a fair coin.

    Parameters
    ----------
    pairs : indices into the population, shape (pairs, 2)
    violation, rank, crowding : shape (population,)
    rng : decides ties

    Returns
    -------
    IntArray : indices of the winners, shape (pairs,)

    Source: constrained binary tournament of NSGA-II (Deb and others, 2002).
    """
    first, second = pairs[:, 0], pairs[:, 1]
    coin = rng.random(len(pairs)) < 0.5
    keys = (np.maximum(violation, 0.0), rank, -crowding)
    winner = np.where(coin, first, second)
    for key in reversed(keys):
        winner = np.where(key[first] < key[second], first, np.where(key[first] > key[second], second, winner))
    return winner


def tell_apart(rows: NDArray[Any], known: Set[bytes]) -> BoolArray:
    """True for each row whose bytes are neither in ``known`` nor seen earlier in the batch; shape (rows,)."""
    seen: set[bytes] = set()
    fresh = np.zeros(len(rows), dtype=np.bool_)
    for index, row in enumerate(np.ascontiguousarray(rows)):
        key = row.tobytes()
        if key not in known and key not in seen:
            seen.add(key)
            fresh[index] = True
    return fresh
