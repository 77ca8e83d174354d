"""The exceptions of archopt: one small tree, one class a stage; the command line maps class to exit code."""

from __future__ import annotations

from collections.abc import Iterable
from dataclasses import dataclass


@dataclass(frozen=True)
class Problem:
    """One thing wrong with what a person wrote.

    Parameters
    ----------
    file : path of the file as the person wrote it
    place : where in the file, e.g. ``rails.core.voltage_v`` or ``row 7, column esr_mohm``
    message : what is wrong and what would be right
    """

    file: str
    place: str
    message: str

    def __str__(self) -> str:
        return f"{self.file}: {self.place}: {self.message}" if self.place else f"{self.file}: {self.message}"


class ArchoptError(Exception):
    """Base of every error raised on purpose."""

    exit_code = 1


class InputError(ArchoptError):
    """What a person wrote cannot be used; carries every problem found, not only the first."""

    exit_code = 2

    def __init__(self, problems: Iterable[Problem]) -> None:
        self.problems: tuple[Problem, ...] = tuple(problems)
        super().__init__("\n".join(str(problem) for problem in self.problems))


class InfeasibleError(ArchoptError):
    """No design meets every limit; ``limits`` names those no design could meet and by how much."""

    exit_code = 3

    def __init__(self, message: str, limits: tuple[str, ...] = ()) -> None:
        self.limits = limits
        super().__init__(message)


class OutputError(ArchoptError):
    """Results cannot be written or read back where the person asked."""

    exit_code = 2
