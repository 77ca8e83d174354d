"""The catalogue to look at: the one that comes with archopt, and a folder of own parts over it."""

from __future__ import annotations

from pathlib import Path

from archopt.errors import InputError
from archopt.inputs.catalogue import load_catalogue
from archopt.inputs.load import load
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


def study_catalogue(study: Path) -> tuple[Catalogue, Path | None]:
    """Return the catalogue a study uses and its folder of own parts, None when it names none.

    Raises
    ------
    InputError : with every problem of the study
    """
    loaded = load(study)
    stated = loaded.study.stated.get("catalogue")
    return loaded.catalogue, None if stated is None else study.parent / str(stated)
