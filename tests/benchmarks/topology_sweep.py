"""Sweep energy price and input range over the shipped studies: which topologies stand on the energy-cost fronts.

Run from the repository as ``python -m tests.benchmarks.topology_sweep --evaluations 1500``. Every case is a
shipped study with its energy price scaled and its input range exchanged, searched afresh. One table tells of
each topology on how many energy-cost fronts it stands (droop within its budget), and where it is absent how far
its best design lies behind the best of all over the board's life, or that none met every limit.
"""

from __future__ import annotations

import argparse
import statistics
import sys
from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from pathlib import Path

from archopt.errors import InfeasibleError, InputError
from archopt.inputs.load import LoadedStudy, load
from archopt.inputs.overlay import overlay
from archopt.model.compiled import compile_study, incumbent_row
from archopt.model.evaluator import Evaluator
from archopt.model.explain import topology
from archopt.model.parameters import IntArray
from archopt.model.problem import Problem
from archopt.search.driver import search
from archopt.search.published import publish
from archopt.trade.answers import everything_kept
from archopt.trade.losing import losing
from archopt.trade.money import lifetime_costs
from archopt.trade.roles import energy_cost_front

FOLDER = Path(__file__).resolve().parents[2] / "studies"
PRICES = (0.25, 1.0, 4.0)
WIDE_48V = {"input.low_v": 36.0, "input.high_v": 75.0, "input.nominal_v": 53.5}
NARROW_48V = {"input.low_v": 40.0, "input.high_v": 60.0, "input.nominal_v": 54.0}
# a 24 V supply held within a tenth, its distribution the default one
HELD_24V = {"input.low_v": 21.6, "input.high_v": 26.4, "input.nominal_v": 24.0, "input.levels": None}
AS_SHIPPED: dict[str, object] = {}
RANGES: Mapping[str, tuple[Mapping[str, object], ...]] = {
    "telecom_six": (AS_SHIPPED, NARROW_48V),
    "industrial_ten": (AS_SHIPPED, HELD_24V),
    "compute_sixteen": (AS_SHIPPED, WIDE_48V),
}


@dataclass(frozen=True)
class Case:
    """One study at one price and input range, and what its search found.

    front : topology -> designs on the energy-cost front; winner : topology of least lifetime cost and that cost;
    behind : topology -> lifetime cost behind the winner, None where no design of it met every limit
    """

    study: str
    price: float
    input_range: str
    front: Counter[str] = field(default_factory=Counter)
    winner: tuple[str, float] = ("", 0.0)
    behind: Mapping[str, float | None] = field(default_factory=dict)


def compiled(loaded: LoadedStudy, changes: Mapping[str, object]) -> tuple[Problem, IntArray | None]:
    """Return the changed study compiled, and today's design; it is left out where its parts no longer fit."""
    other = overlay(loaded, changes)
    try:
        problem = compile_study(other.study, other.catalogue)
        return problem, incumbent_row(problem)
    except InputError:
        without = overlay(other, {"incumbent": None})
        return compile_study(without.study, without.catalogue), None


def solve(study: str, price: float, supply: Mapping[str, object], evaluations: int, seed: int) -> Case:
    """Search one case and question what was found."""
    loaded = load(FOLDER / study / "study.toml")
    per_kwh = loaded.study.economics.energy_price_per_kwh * price
    problem, today = compiled(loaded, {"economics.energy_price_per_kwh": per_kwh, **supply})
    evaluator = Evaluator(problem)
    given = problem.study.supply
    input_range = f"{given.low_v:g} to {given.high_v:g} V"
    found = search(
        evaluator,
        evaluations=evaluations,
        population=problem.study.search.population,
        seed=seed,
        stagnation_generations=problem.study.search.stagnation_generations,
        seeds_rows=None if today is None else today[None],
    )
    try:
        published = publish(evaluator, found)
    except InfeasibleError as error:
        print(f"{study}, {input_range}, price x{price:g}: {error}", file=sys.stderr)
        return Case(study, price, input_range)
    words = topology(problem, published.rows)
    rows, objectives = everything_kept(found)
    nearest = {name: (kind.row, kind.violation) for name, kind in found.kinds.items() if kind.violation > 0}
    life = lifetime_costs(problem.study, objectives)
    best = int(life.argmin())
    return Case(
        study=study,
        price=price,
        input_range=input_range,
        front=Counter(words[k] for k in energy_cost_front(published.objectives)),
        winner=(topology(problem, rows[best])[0], float(life[best])),
        behind={row["topology"]: row["behind_by"] for row in losing(evaluator, rows, objectives, infeasible=nearest)},
    )


def table(cases: Sequence[Case], prices: Sequence[float]) -> list[str]:
    """Return one line a topology, most frequent on the fronts first."""
    solved = [case for case in cases if case.front]
    names = {name for case in solved for name in (*case.front, *case.behind, case.winner[0])}
    stands = {name: sum(name in case.front for case in solved) for name in names}
    of_price = {price: [case for case in solved if case.price == price] for price in prices}
    heads = "".join(f"{f'x{price:g}':>9}" for price in prices)
    lines = [
        f"{len(solved)} of {len(cases)} cases solved; energy price scaled as headed; absent: on no energy-cost front",
        f"{'topology':46}{heads}{'designs':>9}{'best life':>10}{'absent':>8}{'behind %':>18}{'behind':>18}{'never':>7}",
    ]
    for name in sorted(names, key=lambda name: (-stands[name], name)):
        counts = "".join(
            f"{f'{sum(name in case.front for case in here)} of {len(here)}':>9}" for here in of_price.values()
        )
        whole = sum(case.front.total() for case in solved)
        share = sum(case.front[name] for case in solved) / whole if whole else 0.0
        wins = sum(case.winner[0] == name for case in solved)
        absent = [case for case in solved if name not in case.front and case.behind.get(name) is not None]
        money = [float(case.behind[name] or 0.0) for case in absent]
        percent = [100.0 * more / case.winner[1] for more, case in zip(money, absent, strict=True)]
        never = sum(name in case.behind and case.behind[name] is None for case in solved)
        lines.append(
            f"{name:46}{counts}{share:9.0%}{wins:10}{len(absent):8}{spread(percent):>18}{spread(money):>18}{never:7}"
        )
    return [
        *lines,
        "designs: share of all designs on the fronts; best life: cases where it has the least lifetime cost;",
        "absent, behind: cases where it met every limit off the front, and what its best design costs more over the",
        "life than the best of all, median (least to most), in % of that and in currency; never: no limit-meeting one",
    ]


def spread(values: Sequence[float]) -> str:
    """Return median and range in one cell."""
    if not values:
        return "-"
    return f"{statistics.median(values):.0f} ({min(values):.0f} to {max(values):.0f})"


def told(case: Case) -> str:
    """Return one case in a line."""
    on = ", ".join(f"{name} {count}" for name, count in case.front.most_common()) or "no design"
    return f"{case.study}, {case.input_range}, price x{case.price:g}: {on}; least lifetime cost: {case.winner[0]}"


def main() -> None:
    """Sweep and print."""
    asked = argparse.ArgumentParser(description=__doc__)
    asked.add_argument("--evaluations", type=int, default=4_000, help="designs tried in each case")
    asked.add_argument("--seed", type=int, default=1)
    asked.add_argument("--studies", default=",".join(RANGES), help="names, separated by commas")
    asked.add_argument("--prices", default=",".join(f"{price:g}" for price in PRICES), help="factors on energy")
    given = asked.parse_args()
    prices = [float(price) for price in given.prices.split(",")]
    cases = []
    for study in given.studies.split(","):
        for supply in RANGES[study]:
            for price in prices:
                cases.append(solve(study, price, supply, given.evaluations, given.seed))
                print(told(cases[-1]), file=sys.stderr, flush=True)
    print("\n".join(table(cases, prices)))


if __name__ == "__main__":
    main()
