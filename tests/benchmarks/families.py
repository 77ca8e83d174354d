"""Which families and rows of the catalogue the published fronts of the shipped studies use, and which they never do.

Run from the repository as ``python -m tests.benchmarks.families``; ``--results DIR ...`` reads result directories,
named as the studies they are of, instead of solving; ``--evaluations 800`` tries the command. A family or row that
every design uses may be a free lunch, one that none does may be useless: the table says where to look.
"""

from __future__ import annotations

import argparse
import json
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from pathlib import Path
from typing import Any

from archopt import workflow
from archopt.inputs.parts import BuckStage, BusConverter, Capacitor, Part
from archopt.inputs.resolved import Catalogue
from archopt.model.compiled import compile_study
from archopt.model.problem import Problem

FOLDER = Path(__file__).resolve().parents[2] / "studies"
STUDIES = ("telecom_six", "industrial_ten", "compute_sixteen")
CONVERTERS = {
    "regulated": "bus converter, regulated isolated", "fixed_ratio": "bus converter, fixed ratio",
    "non_isolated": "bus converter, non-isolated",
}  # fmt: skip
PLAIN = {
    "single_stages": "single stage", "linear_regulators": "linear regulator", "bias_supplies": "bias supply",
    "supervisors": "supervisor", "stacks": "board stack",
}  # fmt: skip
Uses = dict[str, Counter[str]]  # by family: how many designs use each row


def family_of(catalogue: Catalogue, part: Part, bulk: bool) -> str:
    """Return the family a row is counted in: buck stages by their table, converters and capacitors by their kind."""
    if isinstance(part, BuckStage):
        return f"buck stage, {Path(catalogue.file_of[part.name]).stem.replace('_', ' ')}"
    if isinstance(part, BusConverter):
        return CONVERTERS[part.kind]
    if isinstance(part, Capacitor):
        return f"{'bulk' if bulk else 'output'} bank, {part.kind}"
    return PLAIN[part.family]


def rows_by_name(catalogue: Catalogue) -> dict[str, Part]:
    """Return every row of the families that are counted, by name."""
    wanted = (*PLAIN, "buck_stages", "bus_converters", "capacitors")
    return {name: part for family in wanted for name, part in catalogue.families[family].items()}


def used_rows(design: Mapping[str, Any]) -> set[tuple[str, bool]]:
    """Return the names a design's choices hold, and whether as a bulk bank; those of unused buses left out."""
    fed = set(design["feeds"].values())
    found = set()
    for choice, value in design["choices"].items():
        owner, _, what = choice.partition(".")
        if owner not in ("bus_a", "bus_b") or owner in fed:
            found.add((str(value), what == "bulk"))
    return found


def uses(catalogue: Catalogue, designs: Iterable[Mapping[str, Any]]) -> tuple[Uses, Counter[str]]:
    """Return how many designs use each row of each family, and how many use the family at all."""
    rows = rows_by_name(catalogue)
    by_row: Uses = {}
    by_family: Counter[str] = Counter()
    for design in designs:
        families = set()
        for name, bulk in used_rows(design):
            if name in rows:
                family = family_of(catalogue, rows[name], bulk)
                by_row.setdefault(family, Counter())[name] += 1
                families.add(family)
        by_family.update(families)
    return by_row, by_family


def offered(problem: Problem) -> set[tuple[str, bool]]:
    """Return the names of the rows a design of the study could use, and whether as a bulk bank."""
    stages = [problem.stages.names[k] for k in problem.feed_ok.any(axis=(0, 2)).nonzero()[0]]
    output = [problem.capacitors.names[k] for k in problem.capacitor_ok.any(axis=0).nonzero()[0]]
    bulk = [problem.capacitors.names[k] for k in problem.bulk_ok.nonzero()[0]]
    boards = (*problem.biases.names, *problem.supervisors.names, *problem.stacks.names)
    buses = problem.converters.names if problem.study.choices.max_buses else ()
    return {(name, False) for name in (*stages, *output, *boards, *buses)} | {(name, True) for name in bulk}


def lines(catalogue: Catalogue, problem: Problem, designs: Sequence[Mapping[str, Any]]) -> list[str]:
    """Return one line a family: designs that use it, the share of each row, the rows never used."""
    by_row, by_family = uses(catalogue, designs)
    rows = rows_by_name(catalogue)
    families: dict[str, set[str]] = {}
    for name, bulk in sorted(offered(problem)):
        families.setdefault(family_of(catalogue, rows[name], bulk), set()).add(name)
    count = len(designs)
    out = []
    for family in sorted(families):
        used = by_row.get(family, Counter())
        shares = ", ".join(f"{name} {100 * n / count:.0f} %" for name, n in used.most_common())
        never = ", ".join(sorted(families[family] - set(used)))
        out.append(f"  {family}: {by_family[family]} of {count} designs")
        out += [f"      used   {shares}"] if shares else []
        out += [f"      never  {never}"] if never else []
    feeds = [set(design["feeds"].values()) for design in designs]
    out.append(f"  two buses: {sum({'bus_a', 'bus_b'} <= fed for fed in feeds)} of {count} designs")
    out.append(f"  straight from the input: {sum('input' in fed for fed in feeds)} of {count} designs")
    cascades = sum(bool(fed - {"input", "bus_a", "bus_b"}) for fed in feeds)
    out.append(f"  a rail from a rail: {cascades} of {count} designs")
    return out


def solved(study: str, evaluations: int | None, results: Sequence[Path]) -> list[Mapping[str, Any]]:
    """Return the published designs of a study: of a result directory of its name where given, else solved."""
    for place in results:
        if place.name == study:
            return list(json.loads((place / "designs.json").read_text(encoding="utf-8")))
    loaded = workflow.load(FOLDER / study / "study.toml")
    return list(workflow.solve(loaded, evaluations=evaluations).record.designs)


def main() -> None:
    """Print the table of every study."""
    parser = argparse.ArgumentParser(description=__doc__)
    parser.add_argument("--results", nargs="*", type=Path, default=[])
    parser.add_argument("--evaluations", type=int, default=None)
    parser.add_argument("--studies", nargs="*", default=list(STUDIES))
    given = parser.parse_args()
    for study in given.studies:
        loaded = workflow.load(FOLDER / study / "study.toml")
        problem = compile_study(loaded.study, loaded.catalogue)
        print(study)
        print("\n".join(lines(loaded.catalogue, problem, solved(study, given.evaluations, given.results))))


if __name__ == "__main__":
    main()
