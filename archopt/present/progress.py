"""How far a search has come, on a terminal; nothing at all when quiet or piped."""

from __future__ import annotations

import time
from types import TracebackType
from typing import Self

from rich.console import Console
from rich.progress import Progress, TextColumn

from archopt.present.amounts import number


class SearchProgress:
    """Called by the search after each generation; a context that draws one line on a terminal.

    Parameters
    ----------
    console : where to draw, usually standard error
    evaluations : designs the search may try, None where time alone ends it
    seconds : the time it may take, None where the designs tried end it
    quiet : draw nothing
    """

    def __init__(
        self,
        console: Console,
        *,
        evaluations: int | None = None,
        seconds: float | None = None,
        quiet: bool = False,
    ) -> None:
        self.evaluations = evaluations
        self.seconds = seconds
        self.visible = console.is_terminal and not quiet
        self._began_s = time.monotonic()
        self._line = Progress(
            TextColumn("{task.description} {task.percentage:.0f} %  {task.fields[said]}"),
            console=console,
            transient=True,
            disable=not self.visible,
        )
        self._task = self._line.add_task("starting", total=1.0, said="")

    def __enter__(self) -> Self:
        self._line.start()
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        self._line.stop()

    def __call__(
        self,
        *,
        stage: str = "search",
        generation: int | None = None,
        evaluations: int | None = None,
        feasible: int | None = None,
        hypervolume: float | None = None,
        seconds_left: float | None = None,
    ) -> None:
        """Tell how far the search is.

        Parameters
        ----------
        stage : what is being done, in a word or two
        generation, evaluations, feasible : counts so far
        hypervolume : of the archive, as a share of the box it is measured in
        seconds_left : until the designs to try are tried; a search that stops growing ends before
        """
        passed_s = time.monotonic() - self._began_s
        if evaluations is None:
            self._line.update(self._task, description=f"searched; {stage}", completed=1.0, said="")
            return
        share = self.share(evaluations, passed_s)
        left = self.left_s(seconds_left, passed_s)
        said = said_line(generation, evaluations, feasible, hypervolume, left)
        self._line.update(self._task, description=stage, completed=share, said=said)

    def left_s(self, seconds_left: float | None, passed_s: float) -> float | None:
        """Seconds the search may take at most: until its designs are tried or its time is up."""
        if self.seconds is None:
            return seconds_left
        by_time = max(self.seconds - passed_s, 0.0)
        return by_time if seconds_left is None else min(by_time, seconds_left)

    def share(self, evaluations: int | None, passed_s: float) -> float:
        """The share of the budget used, whichever of designs and time is nearer its end."""
        shares = [0.0]
        if self.evaluations and evaluations is not None:
            shares.append(evaluations / self.evaluations)
        if self.seconds:
            shares.append(passed_s / self.seconds)
        return min(max(shares), 1.0)


def said_line(
    generation: int | None,
    evaluations: int | None,
    feasible: int | None,
    hypervolume: float | None,
    remaining_s: float | None,
) -> str:
    """What stands behind the share; a hypervolume of zero has no scale yet and is not said."""
    words = []
    if generation is not None:
        words.append(f"generation {number(generation, 9)}")
    if evaluations is not None:
        words.append(f"{number(evaluations, 9)} designs tried")
    if feasible is not None:
        words.append(f"{number(feasible, 9)} feasible")
    if hypervolume:
        words.append(f"hypervolume {hypervolume:.4f}")
    if remaining_s is not None:
        minutes, seconds = divmod(round(remaining_s), 60)
        words.append(f"at most {minutes}:{seconds:02d} of search left")
    return ", ".join(words)
