"""The catalogue without a study: the one that comes with archopt, and a folder of own parts over it."""

from __future__ import annotations

from pathlib import Path

from archopt.errors import InputError
from archopt.inputs.catalogue import load_catalogue
from archopt.inputs.problems import Notebook
from archopt.inputs.resolved import Catalogue


def read_catalogue(own: Path | None = None) -> Catalogue:
    """Return the catalogue of archopt with the rows of a folder of own parts overriding or added.

    Raises
    ------
    InputError : with every fault of every row
    """
    notebook = Notebook("" if own is None else str(own))
    catalogue = load_catalogue(None, own, notebook.file, notebook)
    if notebook.problems:
        raise InputError(notebook.problems)
    return catalogue
