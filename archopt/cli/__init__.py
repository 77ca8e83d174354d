"""The command line: thin words around the workflow, a module a command.

A command imports what it needs when it runs: asking for help must not load the numerical packages.
"""

from __future__ import annotations

import io
import sys
from collections.abc import Callable
from typing import Annotated

import typer

from archopt.cli import check, copper, fit, floorplan, leaving, new, parts, show, solve, transient
from archopt.cli import enumerate as enumeration

COMMANDS: dict[str, Callable[..., None]] = {
    "new": new.new_command,
    "check": check.check_command,
    "solve": solve.solve_command,
    "enumerate": enumeration.enumerate_command,
    "show": show.show_command,
    "transient": transient.transient_command,
    "copper": copper.copper_command,
    "floorplan": floorplan.floorplan_command,
    "parts": parts.parts_command,
    "fit": fit.fit_command,
}
"""Commands in the order the help lists them."""

app = typer.Typer(
    name="archopt",
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)


def print_version(wanted: bool) -> None:
    """Print the version and stop, when asked."""
    if wanted:
        import archopt

        typer.echo(f"archopt {archopt.__version__}")
        raise typer.Exit


@app.callback()
def start(
    version: Annotated[
        bool,
        typer.Option("--version", help="Print the version and stop.", callback=print_version, is_eager=True),
    ] = False,
) -> None:
    """Settle how one supply becomes all the rails of a board.

    Bus topology, converters, bus voltage, copper and capacitance are chosen together and shown as a Pareto
    front of energy, cost and droop.
    """


for name, command in COMMANDS.items():
    app.command(name)(leaving.in_own_words(command))


def main(arguments: list[str] | None = None) -> None:
    """Run the command line and leave with its exit code.

    Parameters
    ----------
    arguments : words after the program's name; those of the process when None
    """
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")  # a name the terminal cannot show is no reason to fail
    sys.exit(leaving.guarded(lambda: app(args=arguments, prog_name="archopt", standalone_mode=False)))


__all__ = ["COMMANDS", "app", "main"]
