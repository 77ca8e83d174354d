"""The genetic loop: pymoo's NSGA-II or SMS-EMOA behind a plain ask and tell, with typed operators of our own.

pymoo keeps the population, selects parents and decides who survives; how genomes are sampled, crossed and
mutated is in :mod:`archopt.search.operators`. Nothing is shared with another engine: every pymoo object is
built here, its default termination, history and archive are off, and it draws from this engine's generator.
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any, Literal, get_args

import numpy as np
from numpy.typing import NDArray
from pymoo.algorithms.moo.nsga2 import NSGA2
from pymoo.algorithms.moo.sms import SMSEMOA, LeastHypervolumeContributionSurvival
from pymoo.config import Config
from pymoo.core.duplicate import NoDuplicateElimination
from pymoo.core.evaluator import Evaluator
from pymoo.core.individual import Individual, default_config
from pymoo.core.infill import InfillCriterion
from pymoo.core.initialization import Initialization
from pymoo.core.population import Population
from pymoo.core.problem import Problem
from pymoo.core.termination import NoTermination
from pymoo.operators.selection.tournament import TournamentSelection
from pymoo.operators.survival.rank_and_crowding import RankAndCrowding
from pymoo.operators.survival.rank_and_crowding.metrics import CrowdingDiversity, get_crowding_function

from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.archive import significant
from archopt.search.operators import UNRANKED, Gene, Operators, tell_apart, tournament

Method = Literal["crowding", "hypervolume"]

# Where its compiled parts are missing pymoo would say so on standard output, in the middle of what we print.
Config.warnings["not_compiled"] = False

# What pymoo keeps as attributes of an individual; everything else goes to its data.
_FIELDS = frozenset({"X", "F", "G", "H", "CV"})

# Rounds of mating before a population that cannot be filled with new genomes is topped up at random.
_MATING_ROUNDS = 8


class Engine:
    """An evolving population of genomes that is asked for candidates and told what they are worth.

    Parameters
    ----------
    genes : the genome, in column order
    population : genomes held, and genomes a batch; at least 4
    seed : of the one generator behind every random decision
    seeds : genomes to start from, shape (count, genes), repaired first, the rest drawn at random
    method : survival by rank and nearest-neighbour crowding, or by hypervolume contribution
    n_objectives : objectives told, at least 2
    mutation_rate : see :class:`archopt.search.operators.Operators`

    Raises
    ------
    ValueError : a population too small, or more seeds than it holds
    """

    def __init__(
        self,
        genes: Sequence[Gene],
        population: int,
        seed: int,
        seeds: FloatArray | None = None,
        method: Method = "crowding",
        n_objectives: int = 3,
        mutation_rate: float | None = None,
    ) -> None:
        if population < 4 or n_objectives < 2 or method not in get_args(Method):
            raise ValueError("an engine needs a population of 4, two objectives and a known method")
        self.operators = Operators(genes, mutation_rate=mutation_rate)
        first = np.zeros((0, self.operators.width)) if seeds is None else self.operators.repair(seeds)
        first = first[tell_apart(first, set())]
        if len(first) > population:
            raise ValueError(f"{len(first)} seeds do not fit a population of {population}")
        self.population = population
        self.method: Method = method
        self.n_objectives = n_objectives
        self.generation = 0
        self.evaluations = 0
        self._rng = np.random.default_rng(seed)
        self._pending: Any = None
        self._algorithm = self._build(first)

    def _build(self, seeds: FloatArray) -> Any:
        """A pymoo algorithm of our own making, drawing from this engine's generator."""
        shared = {
            "pop_size": self.population,
            "sampling": None,
            "selection": None,
            "crossover": None,
            "mutation": None,
            "mating": _TypedMating(self.operators),
            "eliminate_duplicates": NoDuplicateElimination(),  # the mating compares bytes itself
            "output": None,
            "evaluator": Evaluator(),
            "save_history": False,
        }
        algorithm: Any = (
            NSGA2(survival=RankAndCrowding(crowding_func=_NearestNeighbours()), **shared)
            if self.method == "crowding"
            else SMSEMOA(survival=LeastHypervolumeContributionSurvival(), **shared)
        )
        algorithm.initialization = _SeededInitialization(self.operators, seeds)
        algorithm.termination = NoTermination()
        algorithm._set_optimum = _no_optimum  # the archive knows the best designs; pymoo need not look
        problem = Problem(
            n_var=self.operators.width,
            n_obj=self.n_objectives,
            n_ieq_constr=1,
            xl=self.operators.low,
            xu=self.operators.high,
        )
        algorithm.setup(problem)
        algorithm.random_state = self._rng
        return algorithm

    def ask(self) -> FloatArray:
        """Genomes to evaluate next, shape (population, genes); the same again until they are told."""
        if self._pending is None:
            self._pending = self._algorithm.ask()
        return _column(self._pending, "X", (0, self.operators.width))

    def tell(self, objectives: FloatArray, violation: FloatArray, genomes: FloatArray | None = None) -> None:
        """Say what the genomes last asked for are worth; the population advances one generation.

        Parameters
        ----------
        objectives : to minimise, shape (population, n_objectives); ranked to 12 significant digits
        violation : summed normalised violation, shape (population,); feasible where zero or less
        genomes : what was really evaluated, where completion or repair changed it; inherited instead of the
            genomes asked for; shape (population, genes)

        Raises
        ------
        ValueError : nothing was asked, shapes that do not fit, or a number that is not finite
        """
        if self._pending is None:
            raise ValueError("ask before telling")
        values = np.asarray(objectives, dtype=np.float64)
        excess = np.asarray(violation, dtype=np.float64)
        if values.shape != (self.population, self.n_objectives) or excess.shape != (self.population,):
            raise ValueError(f"objectives {values.shape} and violation {excess.shape} do not fit the batch")
        if not (np.isfinite(values).all() and np.isfinite(excess).all()):
            raise ValueError("objectives and violations must be finite; state a failure as a large violation")
        if genomes is not None:
            repaired = self.operators.repair(genomes)
            if len(repaired) != self.population:
                raise ValueError(f"{len(repaired)} genomes do not fit a batch of {self.population}")
            self._pending.set("X", repaired)
        _write(self._pending, significant(values), excess)
        self._algorithm.tell(infills=self._pending)
        self._pending = None
        self.generation += 1
        self.evaluations += self.population

    def genomes(self) -> FloatArray:
        """Genomes of the surviving population, shape (population, genes); none before the first tell."""
        return _column(self._algorithm.pop, "X", (0, self.operators.width))

    def objectives(self) -> FloatArray:
        """Objectives of the surviving population, shape (population, n_objectives)."""
        return _column(self._algorithm.pop, "F", (0, self.n_objectives))

    def violation(self) -> FloatArray:
        """Violation of the surviving population, shape (population,)."""
        return _column(self._algorithm.pop, "G", (0, 1))[:, 0]

    def state(self) -> dict[str, NDArray[Any]]:
        """Everything needed to go on bit for bit, as plain arrays for :meth:`restore`.

        The order of the population, ranks and crowding are kept as they are: running the survival again on
        reading back would reorder the population and change every later draw.
        """
        rank, crowding = _standing(self._algorithm.pop)
        pending = np.zeros((0, self.operators.width)) if self._pending is None else self.ask()
        return {
            "genomes": self.genomes(),
            "objectives": self.objectives(),
            "violation": self.violation(),
            "rank": rank,
            "crowding": crowding,
            "pending": pending,
            "generator": generator_words(self._rng),
            "counters": np.array([self.generation, self.evaluations], dtype=np.int64),
        }

    def restore(self, state: Mapping[str, NDArray[Any]]) -> None:
        """Go on from a :meth:`state` of an engine with the same genes, population and method.

        Raises
        ------
        ValueError : arrays that do not fit this engine
        """
        genomes = np.asarray(state["genomes"], dtype=np.float64)
        pending = np.asarray(state["pending"], dtype=np.float64)
        counters = np.asarray(state["counters"], dtype=np.int64)
        held = self.population if counters[0] else 0
        if genomes.shape != (held, self.operators.width) or len(pending) not in {0, self.population}:
            raise ValueError(f"a state of {genomes.shape} genomes does not fit this engine")
        if np.shape(state["objectives"]) != (held, self.n_objectives):
            raise ValueError("the objectives of the state do not fit this engine")
        self.generation, self.evaluations = int(counters[0]), int(counters[1])
        self._rng = generator_from_words(state["generator"])
        algorithm = self._algorithm
        algorithm.random_state = self._rng
        algorithm.is_initialized = held > 0
        algorithm.n_iter = self.generation + 1
        algorithm.pop = _born(genomes) if held else Population.empty()
        if held:
            _write(algorithm.pop, np.asarray(state["objectives"]), np.asarray(state["violation"]))
            algorithm.pop.set("rank", [None if rank == UNRANKED else int(rank) for rank in state["rank"]])
            algorithm.pop.set("crowding", np.asarray(state["crowding"], dtype=np.float64))
        self._pending = _born(pending) if len(pending) else None


class _SeededInitialization(Initialization):  # type: ignore[misc]  # pymoo is untyped
    """The seeds, then random genomes; repeats are drawn again where the space allows."""

    def __init__(self, operators: Operators, seeds: FloatArray) -> None:
        super().__init__(sampling=None)
        self._operators = operators
        self._seeds = seeds

    def do(
        self, problem: Any, n_samples: int, random_state: np.random.Generator | None = None, **kwargs: Any
    ) -> Any:
        if random_state is None:
            raise ValueError("initialisation needs the engine's generator")
        return _born(_filled(self._operators, self._seeds, set(), n_samples, random_state))


class _TypedMating(InfillCriterion):  # type: ignore[misc]  # pymoo is untyped
    """Tournament by pymoo, then our crossover and mutation on whole arrays; no genome repeats a parent."""

    def __init__(self, operators: Operators) -> None:
        super().__init__()
        self._operators = operators
        self._selection = TournamentSelection(func_comp=_compare, pressure=2)

    def do(
        self,
        problem: Any,
        pop: Any,
        n_offsprings: int,
        random_state: np.random.Generator | None = None,
        **kwargs: Any,
    ) -> Any:
        if random_state is None:
            raise ValueError("mating needs the engine's generator")
        parents = _column(pop, "X", (0, self._operators.width))
        known = {row.tobytes() for row in parents}
        children = np.zeros((0, self._operators.width))
        for _ in range(_MATING_ROUNDS):
            missing = n_offsprings - len(children)
            chosen = self._selection.do(problem, pop, missing, 2, to_pop=False, random_state=random_state)
            crossed = self._operators.crossover(parents[chosen[:, 0]], parents[chosen[:, 1]], random_state)
            mutated = self._operators.mutate(crossed, random_state)
            children = np.concatenate([children, mutated])
            children = children[tell_apart(children, known)]
            if len(children) == n_offsprings:
                break
        return _born(_filled(self._operators, children, known, n_offsprings, random_state))


class _NearestNeighbours(CrowdingDiversity):  # type: ignore[misc]  # pymoo is untyped
    """pymoo's nearest-neighbour crowding over the objectives that differ at all.

    A front often has one droop only; pymoo's uncompiled version then divides nothing by nothing.
    """

    def __init__(self) -> None:
        self._measure = get_crowding_function("mnn")

    def _do(self, front: FloatArray, n_remove: int = 0) -> Any:
        differs = np.ptp(front, axis=0) > 0.0
        # fewer than two differing objectives leave one design of a front, whatever its columns
        return self._measure.do(front[:, differs] if differs.sum() >= 2 else front, n_remove=n_remove)


def _no_optimum() -> None:
    """Stand in for pymoo's search of its population for the optimum after every generation."""


def _filled(
    operators: Operators, genomes: FloatArray, known: set[bytes], count: int, rng: np.random.Generator
) -> FloatArray:
    """Genomes topped up at random to ``count``, shape (count, genes).

    New genomes are preferred; in a space too small for them repeats fill the batch, whose shape is fixed.
    """
    if len(genomes) >= count:
        return genomes[:count]
    drawn = np.concatenate([genomes, operators.sample(2 * count, rng)])
    fresh = tell_apart(drawn, known)
    fresh[: len(genomes)] = True
    order = np.argsort(~fresh, kind="stable")
    return drawn[order[:count]]


def _compare(pop: Any, pairs: IntArray, random_state: np.random.Generator, **kwargs: Any) -> IntArray:
    """Winners of pymoo's pairs, shape (pairs, 1)."""
    rank, crowding = _standing(pop)
    violation = _column(pop, "G", (0, 1))[:, 0]
    return tournament(pairs, violation, rank, crowding, random_state)[:, None]


def _standing(pop: Any) -> tuple[IntArray, FloatArray]:
    """Rank and crowding of a population, shape (N,) each; UNRANKED and 0 where no survival set them."""
    held = [] if pop is None else [individual.data for individual in pop]
    ranks = [data.get("rank") for data in held]
    crowdings = [data.get("crowding") for data in held]
    rank = np.array([UNRANKED if value is None else value for value in ranks], dtype=np.int64)
    crowding = np.array([0.0 if value is None else value for value in crowdings], dtype=np.float64)
    return rank, crowding


def _column(pop: Any, name: str, empty: tuple[int, int]) -> FloatArray:
    """Vectors the individuals hold under a name, shape (N, width); ``empty`` for no population."""
    if pop is None or not len(pop):
        return np.zeros(empty)
    return np.array([getattr(individual, name) for individual in pop], dtype=np.float64)


class _Candidate(Individual):  # type: ignore[misc]  # pymoo is untyped
    """An individual whose attributes are looked up once, not probed first: half of pymoo's own time."""

    def get(self, *keys: str) -> Any:
        found = [self.data[key] if key in self.data else getattr(self, key, None) for key in keys]
        return found[0] if len(keys) == 1 else tuple(found)

    def set(self, key: str, value: object) -> Any:
        if key in _FIELDS:
            setattr(self, key, value)
        else:
            self.data[key] = value
        return self


def _born(genomes: FloatArray) -> Any:
    """A population of genomes not yet evaluated, sharing one settings dictionary."""
    settings = default_config()
    return Population([_Candidate(config=settings, X=genome) for genome in genomes.copy()])


def _write(pop: Any, objectives: FloatArray, violation: FloatArray) -> None:
    """Set objectives and violation; CV as well, which pymoo would otherwise work out one design at a time."""
    column = np.array(violation, dtype=np.float64)[:, None]
    values = np.array(objectives, dtype=np.float64)
    for individual, f, g, cv in zip(pop, values, column, np.maximum(column, 0.0), strict=True):
        individual.F, individual.G, individual.CV = f, g, cv


def generator_words(rng: np.random.Generator) -> NDArray[np.uint64]:
    """The state of a PCG64 generator as six 64-bit words."""
    state: Any = rng.bit_generator.state
    inner = state["state"]
    mask = (1 << 64) - 1
    words = [inner["state"] >> 64, inner["state"] & mask, inner["inc"] >> 64, inner["inc"] & mask]
    return np.array([*words, state["has_uint32"], state["uinteger"]], dtype=np.uint64)


def generator_from_words(words: NDArray[Any]) -> np.random.Generator:
    """A PCG64 generator in the state :func:`generator_words` gave."""
    high, low, step_high, step_low, has_half, half = (int(word) for word in np.asarray(words))
    rng = np.random.Generator(np.random.PCG64(0))
    rng.bit_generator.state = {
        "bit_generator": "PCG64",
        "state": {"state": high << 64 | low, "inc": step_high << 64 | step_low},
        "has_uint32": has_half,
        "uinteger": half,
    }
    return rng
