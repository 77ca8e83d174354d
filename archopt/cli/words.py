"""Arguments and options that several commands share, and the printing of JSON."""

from __future__ import annotations

import json
from pathlib import Path
from typing import Annotated

import typer

StudyArgument = Annotated[Path, typer.Argument(metavar="STUDY", help="Study file (TOML).", show_default=False)]
ResultArgument = Annotated[Path, typer.Argument(metavar="DIR", help="Directory of a result.", show_default=False)]
DesignArgument = Annotated[
    str, typer.Argument(metavar="DESIGN", help="Name (D007), number, mark (knee) or incumbent.", show_default=False)
]
JsonOption = Annotated[bool, typer.Option("--json", help="Print JSON for a machine instead of tables.")]


def print_json(value: object) -> None:
    """Print plain data as JSON on standard output."""
    typer.echo(json.dumps(value, allow_nan=False, indent=1))
