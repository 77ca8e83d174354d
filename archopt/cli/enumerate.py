"""``archopt enumerate``: go through every design of a small space, or bracket the front of a large one."""

from __future__ import annotations

import sys
from pathlib import Path
from typing import TYPE_CHECKING, Annotated

import typer

from archopt.cli.leaving import INFEASIBLE, INTERRUPTED
from archopt.cli.solve import default_place
from archopt.cli.stopping import StopRequest
from archopt.cli.words import JsonOption, StudyArgument, print_json

if TYPE_CHECKING:
    from archopt.proof.answer import Room
    from archopt.proof.enumerate import Enumeration


def enumerate_command(
    study: StudyArgument,
    out: Annotated[
        Path | None,
        typer.Option("--out", "-o", metavar="DIR", help="Where the files go. [default: runs/NAME-proof]"),
    ] = None,
    seed: Annotated[
        int | None, typer.Option(min=0, metavar="N", help="Seed of the search. [default: the study's]")
    ] = None,
    evaluations: Annotated[
        int | None, typer.Option(min=1, metavar="N", help="Designs the search may try. [default: the study's]")
    ] = None,
    workers: Annotated[
        int | None,
        typer.Option(min=1, max=64, metavar="N", help="Processes to work with. [default: the processors, 4 at most]"),
    ] = None,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier proof in DIR.")] = False,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress; only the outcome.")] = False,
    as_json: JsonOption = False,
) -> None:
    """Tell how good the search's front is, by going through every design.

    A space too large for that, after pins and forbidden parts, is bracketed: no feasible design lies below the bound
    written. An interrupt keeps what was gone through, a fair part of every kind of design.
    """
    from archopt import workflow
    from archopt.model.compiled import compile_study, incumbent_row
    from archopt.model.evaluator import Evaluator
    from archopt.present import proof_view
    from archopt.present.plain import plain
    from archopt.present.tables import console_for
    from archopt.proof.answer import Budget, put_to_proof
    from archopt.search.workers import default_workers

    loaded = workflow.load(study)
    wanted = loaded.study.search
    place = default_place(loaded.study.name + "-proof") if out is None else out
    proof_view.prepare(place, replace=replace)
    evaluator = Evaluator(compile_study(loaded.study, loaded.catalogue))
    today = incumbent_row(evaluator.problem)
    tries = wanted.evaluations if evaluations is None else evaluations
    budget = Budget(
        evaluations=tries,
        population=wanted.population,
        seed=wanted.seed if seed is None else seed,
        stagnation_generations=wanted.stagnation_generations,
        polish=workflow.POLISH_SHARE * tries if tries >= workflow.LEAST_POLISHED else 0,
    )
    stop = StopRequest()
    errors = console_for(sys.stderr)

    def estimated(room: Room, seconds: float) -> None:
        if not quiet:
            errors.print("\n".join(proof_view.size_lines(room, seconds)))

    def covered(known: Enumeration) -> None:
        if not quiet and errors.is_terminal:
            errors.print(f"\r{proof_view.progress_line(known)}   ", end="")

    with stop.on_interrupt():
        proof = put_to_proof(
            evaluator,
            budget,
            seeds_rows=None if today is None else today[None],
            workers=default_workers() if workers is None else workers,
            estimated=estimated,
            covered=covered,
            stop=lambda: bool(stop()),
        )
    proof_view.write_proof(evaluator.problem, proof, place)
    if as_json:
        print_json(plain({**proof_view.summary(proof), "directory": str(place)}))
    else:
        proof_view.print_proof(console_for(), proof, place)
    if stop.interrupted:
        raise typer.Exit(INTERRUPTED)
    exact = proof.enumeration
    if exact is not None and exact.complete and not len(exact.rows):
        raise typer.Exit(INFEASIBLE)
