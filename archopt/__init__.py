"""archopt: settle how one supply becomes all the rails of a board.

``archopt.load(path)`` reads a study, ``archopt.solve(study)`` searches it and returns a :class:`Front`,
``archopt.read(directory)`` reads a result back. Everything is imported on first use: the numerical packages
take a second to load, and asking for help must not.
"""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from archopt.inputs.load import LoadedStudy
    from archopt.present.front import Design, Front
    from archopt.workflow import load, solve

    __version__: str

__all__ = ["Design", "Front", "LoadedStudy", "__version__", "load", "read", "solve"]

_HOMES = {
    "Design": "archopt.present.front",
    "Front": "archopt.present.front",
    "LoadedStudy": "archopt.inputs.load",
    "load": "archopt.workflow",
    "solve": "archopt.workflow",
}


def read(directory: str | Path) -> Front:
    """Read back a result that ``solve`` wrote.

    Raises
    ------
    archopt.errors.OutputError : there is no result, it is not ours, or it is damaged.
    """
    from archopt.present.files import read as read_record
    from archopt.present.front import Front

    place = Path(directory)
    return Front(read_record(place), place)


def __getattr__(name: str) -> Any:
    """Import a public name on first use (PEP 562)."""
    if name == "__version__":
        from importlib.metadata import PackageNotFoundError, version

        try:
            return version("archopt")
        except PackageNotFoundError:  # run from a source tree that is not installed
            return "0+uninstalled"
    if name in _HOMES:
        from importlib import import_module

        value = getattr(import_module(_HOMES[name]), name)
        globals()[name] = value
        return value
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__() -> list[str]:
    return sorted({*globals(), *__all__})
