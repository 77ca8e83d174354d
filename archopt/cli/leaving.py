"""How the program is left: every error as a sentence and an exit code.

Exit codes: 0 fine; 1 a fault of archopt; 2 bad input, bad usage or an unusable directory; 3 no design meets
every limit; 130 interrupted, with what was found kept.
"""

from __future__ import annotations

import os
import sys
from collections.abc import Callable
from functools import wraps
from typing import Any, ParamSpec

import typer

from archopt.errors import ArchoptError, InfeasibleError, InputError

Words = ParamSpec("Words")

FINE, FAULT, BAD_INPUT, INFEASIBLE, INTERRUPTED = 0, 1, 2, 3, 130
DEBUG_VARIABLE = "ARCHOPT_DEBUG"


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
