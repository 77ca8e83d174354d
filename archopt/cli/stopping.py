"""Ending a search early without losing what it found: an interrupt, or time that is up."""

from __future__ import annotations

import os
import signal
import time
from collections.abc import Iterator
from contextlib import contextmanager
from types import FrameType

STOPPING = b"\nStopping; what was found so far is kept. Interrupt again to end at once.\n"


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
