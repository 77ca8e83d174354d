"""``archopt check``: how a study is understood."""

from __future__ import annotations

from typing import Annotated

import typer

from archopt.cli.words import JsonOption, StudyArgument, print_json


def check_command(
    study: StudyArgument,
    everything: Annotated[
        bool, typer.Option("--all", help="List the states without hours too: worst mixes, jumps, shown loads.")
    ] = False,
    as_json: JsonOption = False,
) -> None:
    """Print how a study is understood; search nothing.

    Rails, load states, economics, every assumed value, the size of the space, cautions.
    """
    from archopt import workflow
    from archopt.present.plain import plain
    from archopt.present.tables import console_for
    from archopt.present.terminal import print_check

    result = workflow.check(workflow.load(study))
    if as_json:
        print_json(plain(result))
    else:
        print_check(console_for(), result, everything=everything)
