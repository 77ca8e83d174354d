"""``archopt new``: a starter study."""

from __future__ import annotations

from pathlib import Path
from typing import Annotated

import typer


def new_command(
    directory: Annotated[Path, typer.Argument(metavar="DIR", help="Directory to create.", show_default=False)],
) -> None:
    """Write a starter study to edit: a study file and a load profile."""
    from archopt.inputs.starter import write_starter

    paths = write_starter(directory)
    for path in paths:
        typer.echo(f"wrote {path}")
    typer.echo(f"next: archopt check {paths[0]}")
