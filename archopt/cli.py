"""The command line: thin words around the workflow; every error leaves as a sentence and an exit code.

Exit codes: 0 fine; 1 a fault of archopt; 2 bad input, bad usage or an unusable directory; 3 no design meets
every limit; 130 interrupted, with what was found kept.
"""

from __future__ import annotations

import io
import json
import os
import re
import signal
import sys
import time
from collections.abc import Callable, Iterator
from contextlib import contextmanager
from functools import wraps
from pathlib import Path
from types import FrameType
from typing import TYPE_CHECKING, Annotated, Any, ParamSpec

import typer

from archopt.errors import ArchoptError, InfeasibleError, InputError, OutputError

if TYPE_CHECKING:
    from archopt.present.front import Front

Words = ParamSpec("Words")

FINE, FAULT, BAD_INPUT, INFEASIBLE, INTERRUPTED = 0, 1, 2, 3, 130
DEBUG_VARIABLE = "ARCHOPT_DEBUG"
RUNS = Path("runs")
STOPPING = b"\nStopping; what was found so far is kept. Interrupt again to end at once.\n"

app = typer.Typer(
    name="archopt",
    add_completion=False,
    no_args_is_help=True,
    rich_markup_mode=None,
    pretty_exceptions_enable=False,
    context_settings={"help_option_names": ["-h", "--help"]},
)

StudyArgument = Annotated[Path, typer.Argument(metavar="STUDY", help="Study file (TOML).", show_default=False)]
JsonOption = Annotated[bool, typer.Option("--json", help="Print JSON for a machine instead of tables.")]


class StopRequest:
    """Asked by the search between generations; answers why to stop, or nothing.

    Parameters
    ----------
    seconds : time the search may take, None for no limit
    """

    def __init__(self, seconds: float | None = None) -> None:
        self.interrupted = False
        self._ends_s = None if seconds is None else time.monotonic() + seconds

    def __call__(self) -> str:
        """``interrupted``, ``time is up``, or nothing."""
        if self.interrupted:
            return "interrupted"
        if self._ends_s is not None and time.monotonic() >= self._ends_s:
            return "time is up"
        return ""

    @contextmanager
    def on_interrupt(self) -> Iterator[None]:
        """Take the first interrupt as a wish to stop and keep what there is; a second one ends at once."""

        def ask(number: int, frame: FrameType | None) -> None:
            if self.interrupted:
                raise KeyboardInterrupt
            self.interrupted = True
            os.write(2, STOPPING)  # not print: the handler may run in the middle of one

        try:
            before = signal.signal(signal.SIGINT, ask)
        except ValueError:  # not the main thread: whoever runs us there handles interrupts
            yield
            return
        try:
            yield
        finally:
            signal.signal(signal.SIGINT, before)


class ReaderGoneError(Exception):
    """Whoever read our output has seen enough, e.g. ``archopt show DIR | head``."""


def in_own_words(command: Callable[Words, None]) -> Callable[Words, None]:
    """Keep interrupts and closed pipes from the command-line library, which has codes of its own."""

    @wraps(command)
    def run(*arguments: Words.args, **options: Words.kwargs) -> None:
        try:
            command(*arguments, **options)
            sys.stdout.flush()
        except KeyboardInterrupt:
            raise typer.Abort from None
        except (ReaderGoneError, BrokenPipeError):
            raise ReaderGoneError from None

    return run


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


@app.command("new")
@in_own_words
def new_command(
    directory: Annotated[Path, typer.Argument(metavar="DIR", help="Directory to create.", show_default=False)],
) -> None:
    """Write a starter study to edit: a study file and a load profile."""
    from archopt.inputs.starter import write_starter

    paths = write_starter(directory)
    for path in paths:
        typer.echo(f"wrote {path}")
    typer.echo(f"next: archopt check {paths[0]}")


@app.command("check")
@in_own_words
def check_command(study: StudyArgument, as_json: JsonOption = False) -> None:
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
        print_check(console_for(), result)


@app.command("solve")
@in_own_words
def solve_command(
    study: StudyArgument,
    out: Annotated[
        Path | None,
        typer.Option("--out", "-o", metavar="DIR", help="Where the result goes. [default: runs/NAME]"),
    ] = None,
    seed: Annotated[
        int | None, typer.Option(min=0, metavar="N", help="Seed of the search. [default: the study's]")
    ] = None,
    evaluations: Annotated[
        int | None, typer.Option(min=1, metavar="N", help="Designs to try. [default: the study's]")
    ] = None,
    seconds: Annotated[float | None, typer.Option(min=1.0, metavar="S", help="End the search after S seconds.")] = None,
    quiet: Annotated[bool, typer.Option("--quiet", "-q", help="No progress, no tables; only the files.")] = False,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier result in DIR.")] = False,
    as_json: JsonOption = False,
) -> None:
    """Search all choices at once; print and write the front."""
    from archopt import workflow
    from archopt.present import files
    from archopt.present.front import Front
    from archopt.present.progress import SearchProgress
    from archopt.present.tables import console_for
    from archopt.present.terminal import print_front

    loaded = workflow.load(study)
    place = default_place(loaded.study.name) if out is None else out
    files.check_target(place, replace=replace)
    stop = StopRequest(seconds)
    planned = evaluations if evaluations is not None else loaded.study.search.evaluations
    progress = SearchProgress(console_for(sys.stderr), evaluations=planned, seconds=seconds, quiet=quiet)
    with stop.on_interrupt(), progress:
        front = workflow.solve(loaded, seed=seed, evaluations=evaluations, progress=progress, stop=stop)
    place = write_or_aside(front, place, replace=replace)
    if as_json:
        print_json({**Front(front.record, place).summary(), "directory": str(place)})
    elif quiet:
        typer.echo(str(place))
    else:
        print_front(console_for(), front.record, place)
    if front.record.run.get("interrupted"):
        raise typer.Exit(INTERRUPTED)


@app.command("show")
@in_own_words
def show_command(
    directory: Annotated[Path, typer.Argument(metavar="DIR", help="Directory of a result.", show_default=False)],
    design: Annotated[
        str | None,
        typer.Argument(metavar="DESIGN", help="Name (D007), number, mark (knee) or incumbent."),
    ] = None,
    schedule: Annotated[
        Path | None,
        typer.Option(metavar="FILE", help="Write the design's voltage schedule as CSV instead of printing it."),
    ] = None,
    as_json: JsonOption = False,
) -> None:
    """Print a result again, or explain one design of it."""
    from archopt.present import files
    from archopt.present.front import Front
    from archopt.present.tables import console_for, put
    from archopt.present.terminal import print_front

    front = Front(files.read(directory, archive=design is None), directory)
    if schedule is not None:
        if design is None:
            raise typer.BadParameter("name the design whose schedule is wanted", param_hint="--schedule")
        write_schedule(front, design, schedule)
        return
    if design is None:
        if as_json:
            print_json(front.summary())
        else:
            print_front(console_for(), front.record, directory)
        return
    chosen = front.design(design)
    if as_json:
        print_json(chosen.as_dict())
    else:
        put(console_for(), [chosen])


def write_schedule(front: Front, design: str, path: Path) -> None:
    """Write a design's voltage schedule as CSV and say so."""
    from archopt.present.schedule_file import write_rows
    from archopt.trade.schedule_rows import schedule_rows

    write_rows(schedule_rows(front.record.problem, front.design(design).data), path)
    typer.echo(f"wrote {path}")


@app.command("transient")
@in_own_words
def transient_command(
    directory: Annotated[Path, typer.Argument(metavar="DIR", help="Directory of a result.", show_default=False)],
    design: Annotated[
        str, typer.Argument(metavar="DESIGN", help="Name (D007), number, mark (knee) or incumbent.", show_default=False)
    ],
    rail: Annotated[str | None, typer.Option(metavar="RAIL", help="Look at one rail's step and release.")] = None,
    bus: Annotated[str | None, typer.Option(metavar="BUS", help="Look at bus_a or bus_b at its largest step.")] = None,
    before: Annotated[str | None, typer.Option("--from", metavar="STATE", help="State the load comes from.")] = None,
    after: Annotated[str | None, typer.Option("--to", metavar="STATE", help="State the load goes to.")] = None,
    png: Annotated[Path | None, typer.Option(metavar="FILE", help="Draw the waveforms into a picture too.")] = None,
    as_json: JsonOption = False,
) -> None:
    """Integrate a rail, a bus or a jump of a design in time.

    Prints the worst point against its closed form and limit.

    Without --rail or --bus everything on the bus jumps, from the band with the least room.
    """
    from archopt.present import files
    from archopt.present.front import Front
    from archopt.present.tables import console_for, put
    from archopt.present.waveform_view import view_sections, wave_view, write_png

    front = Front(files.read(directory, archive=False), directory)
    view = wave_view(front.record.problem, front.design(design).data, rail, bus, before, after)
    if png is not None:
        write_png(view, png)
    if as_json:
        print_json(view.as_dict())
        return
    put(console_for(), view_sections(view))
    if png is not None:
        typer.echo(f"wrote {png}")


@app.command("copper")
@in_own_words
def copper_command(
    directory: Annotated[Path, typer.Argument(metavar="DIR", help="Directory of a result.", show_default=False)],
    design: Annotated[
        str, typer.Argument(metavar="DESIGN", help="Name (D007), number, mark (knee) or incumbent.", show_default=False)
    ],
    net: Annotated[str | None, typer.Option(metavar="NET", help="Only this net: bus_a, bus_b or a rail.")] = None,
    reoptimise: Annotated[
        bool, typer.Option("--reoptimise", help="With each weight share the pairs of the pours out anew.")
    ] = False,
    replace: Annotated[bool, typer.Option("--replace", help="Replace an earlier CSV of this design.")] = False,
    as_json: JsonOption = False,
) -> None:
    """Ask what more or less copper of a design is worth.

    Sweeps weight and layer pairs: loss, cost, drop, heat, months to break even.

    Everything else stays as the design has it. The points are written to copper_DESIGN.csv in DIR.
    """
    from archopt.present import files
    from archopt.present.copper_view import CopperRequest, ask_copper, copper_sections, write_copper
    from archopt.present.front import Front
    from archopt.present.tables import console_for, put

    front = Front(files.read(directory, archive=False), directory)
    answer, place = ask_copper(front, CopperRequest(directory, design, net, reoptimise, replace))
    write_copper(answer, place)
    if as_json:
        print_json({**answer.as_dict(), "csv": str(place)})
        return
    put(console_for(), copper_sections(answer, front.record.currency))
    typer.echo(f"wrote {place}")


@app.command("floorplan")
@in_own_words
def floorplan_command(
    study: StudyArgument,
    net: Annotated[
        str | None, typer.Option(metavar="NET", help="Draw this net's drop: bus_a, bus_b or a rail.")
    ] = None,
    density: Annotated[bool, typer.Option("--density", help="Draw current density rather than drop.")] = False,
    bus_v: Annotated[
        float | None, typer.Option("--bus-v", min=1.0, metavar="V", help="Bus voltage. [default: the habitual one]")
    ] = None,
    out: Annotated[
        Path | None, typer.Option("--out", "-o", metavar="FILE", help="PNG, SVG or PDF. [default: NAME_floorplan.png]")
    ] = None,
    replace: Annotated[bool, typer.Option("--replace", help="Replace the picture if it is there.")] = False,
) -> None:
    """Draw a floorplan; for one net its drop or density.

    Prints what the solved copper of every net amounts to.
    """
    from archopt import workflow
    from archopt.present.floorplan_view import draw_floorplan, floorplan_sections, picture_place
    from archopt.present.tables import console_for, put

    loaded = workflow.load(study)
    place = picture_place(loaded.study, out, net, density=density, replace=replace)
    draw_floorplan(loaded.study, loaded.catalogue, place, net, density=density, bus_v=bus_v)
    put(console_for(), floorplan_sections(loaded.study))
    typer.echo(f"wrote {place}")


@app.command("parts")
@in_own_words
def parts_command(
    family: Annotated[str | None, typer.Argument(metavar="FAMILY", help="Family of parts, or a part.")] = None,
    name: Annotated[str | None, typer.Argument(metavar="NAME", help="Part to show.")] = None,
    study: Annotated[
        Path | None, typer.Option("--study", metavar="STUDY", help="Count in the study's own parts.")
    ] = None,
    columns: Annotated[bool, typer.Option("--columns", help="Explain the columns of the family.")] = False,
    input_v: Annotated[float | None, typer.Option("--input-v", metavar="V", help="Takes this input voltage.")] = None,
    output_v: Annotated[float | None, typer.Option("--output-v", metavar="V", help="Makes this output.")] = None,
    current_a: Annotated[float | None, typer.Option("--current-a", metavar="A", help="Rated for this.")] = None,
    as_json: JsonOption = False,
) -> None:
    """Browse the catalogue: families, rows, one part.

    For one part the voltages choose where its efficiency is shown.
    """
    from archopt.inputs.measured_catalogue import read_catalogue, study_catalogue
    from archopt.present.part_view import browse
    from archopt.present.tables import console_for, put

    catalogue, own = (read_catalogue(), None) if study is None else study_catalogue(study)
    wanted = {"input_v": input_v, "output_v": output_v, "current_a": current_a}
    answer = browse(catalogue, family, name, columns=columns, own=own, **wanted)
    if as_json:
        print_json(answer.data())
    else:
        put(console_for(), answer.sections())


@app.command("fit")
@in_own_words
def fit_command(
    points: Annotated[Path, typer.Argument(metavar="POINTS", help="Measured points (CSV).", show_default=False)],
    family: Annotated[
        str, typer.Option(metavar="FAMILY", help="bus_converters, single_stages or buck_stages.", show_default=False)
    ],
    name: Annotated[str, typer.Option(metavar="NAME", help="Name of the new part.", show_default=False)],
    out: Annotated[
        Path, typer.Option(metavar="PART", help="CSV for its row, or a folder of own parts.", show_default=False)
    ],
    like: Annotated[
        str | None, typer.Option(metavar="PART", help="Part that gives what was not measured. [default: the nearest]")
    ] = None,
    input_v: Annotated[
        tuple[float, float] | None,
        typer.Option("--input-v", metavar="LOW HIGH", help="Input range of the row. [default: as measured]"),
    ] = None,
    output_v: Annotated[
        tuple[float, float] | None,
        typer.Option("--output-v", metavar="LOW HIGH", help="Output range of the row. [default: as measured]"),
    ] = None,
    units: Annotated[int, typer.Option(min=1, metavar="N", help="Units or phases that shared the current.")] = 1,
    table: Annotated[bool, typer.Option("--table", help="Keep the points as a loss table beside the row.")] = False,
    seed: Annotated[int, typer.Option(min=0, metavar="N", help="Seed of the points left out in turn.")] = 1,
    replace: Annotated[bool, typer.Option("--replace", help="Replace the part if it is there.")] = False,
    as_json: JsonOption = False,
) -> None:
    """Fit measured efficiency or loss to a catalogue row.

    POINTS has input_voltage_v, output_voltage_v, current_a, efficiency (0 to 1) or loss_w, and may have
    temperature_degc, the local air.
    """
    from archopt.present.fit_report import fit_sections
    from archopt.present.part_fitting import FitRequest, fit_to_files
    from archopt.present.tables import console_for, put

    asked = FitRequest(points, family, name, out, like, input_v, output_v, units, table, replace, seed)
    result = fit_to_files(asked)
    if as_json:
        print_json(result.as_dict())
    else:
        put(console_for(), fit_sections(result.fitted, result.written, result.places.root))


def default_place(name: str) -> Path:
    """``runs/NAME``, the name made fit for a directory: a study may be called anything."""
    return RUNS / (re.sub(r"[^\w.+-]+", "-", name).strip("-.") or "study")


def write_or_aside(front: Front, place: Path, *, replace: bool) -> Path:
    """Write a result; if its place was taken while the search ran, write beside it rather than lose it."""
    from archopt.present import files

    try:
        return files.write(front.record, place, replace=replace)
    except OutputError as error:
        beside = files.free_sibling(place)
        print(f"{error}\nWriting the result to {beside} instead.", file=sys.stderr)
        return files.write(front.record, beside)


def print_json(value: object) -> None:
    """Print plain data as JSON on standard output."""
    typer.echo(json.dumps(value, allow_nan=False, indent=1))


def main(arguments: list[str] | None = None) -> None:
    """Run the command line and leave with its exit code.

    Parameters
    ----------
    arguments : words after the program's name; those of the process when None
    """
    for stream in (sys.stdout, sys.stderr):
        if isinstance(stream, io.TextIOWrapper):
            stream.reconfigure(errors="replace")  # a name the terminal cannot show is no reason to fail
    sys.exit(guarded(lambda: app(args=arguments, prog_name="archopt", standalone_mode=False)))


def guarded(work: Callable[[], Any]) -> int:
    """Run and turn whatever happens into an exit code, with sentences on standard error."""
    try:
        code = work()
        sys.stdout.flush()
    except InputError as error:
        count = len(error.problems)
        print("\n".join(str(problem) for problem in error.problems), file=sys.stderr)
        print(f"{count} problem{'' if count == 1 else 's'} found; nothing was done.", file=sys.stderr)
        return error.exit_code
    except InfeasibleError as error:
        print(error, file=sys.stderr)
        for limit in error.limits:
            print(f"- {limit}", file=sys.stderr)
        return error.exit_code
    except ArchoptError as error:
        print(error, file=sys.stderr)
        return error.exit_code
    except (KeyboardInterrupt, typer.Abort):
        print("Interrupted.", file=sys.stderr)
        return INTERRUPTED
    except (ReaderGoneError, BrokenPipeError):
        # The reader has seen enough; keep the interpreter from complaining when it closes the stream.
        os.dup2(os.open(os.devnull, os.O_WRONLY), sys.stdout.fileno())
        return FINE
    except Exception as error:
        if isinstance(error, typer.BadParameter.__mro__[1]) and hasattr(error, "show"):
            error.show()
            return BAD_INPUT
        return report_fault(error)
    return code if isinstance(code, int) else FINE


def report_fault(error: Exception) -> int:
    """Say that the fault is ours and how to report it; the traceback only when asked for."""
    if os.environ.get(DEBUG_VARIABLE) == "1":
        raise error
    print(
        f"A fault in archopt, not in your study: {type(error).__name__}: {error}\n"
        f"Please report it to the maintainers of archopt with the study file; {DEBUG_VARIABLE}=1 prints"
        " the details to send along.",
        file=sys.stderr,
    )
    return FAULT
