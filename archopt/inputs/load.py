"""Loading a study: everything a person wrote, read and checked together, faults told once."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Any

from archopt.errors import InputError
from archopt.inputs.catalogue import load_catalogue
from archopt.inputs.draft import read_draft
from archopt.inputs.problems import Notebook
from archopt.inputs.resolve import resolve
from archopt.inputs.resolved import Catalogue, ResolvedStudy
from archopt.inputs.text_files import read_toml


@dataclass(frozen=True)
class LoadedStudy:
    """A study with every value filled in, the parts it may use, and the catalogue folder they came from.

    catalogue_root is None for the catalogue that comes with archopt.
    """

    study: ResolvedStudy
    catalogue: Catalogue
    catalogue_root: Path | None = None


def load(path: str | Path, catalogue_root: Path | None = None) -> LoadedStudy:
    """Return the study of a TOML file and the catalogue it uses.

    Parameters
    ----------
    path : the study file; files it names are found from its folder
    catalogue_root : another base catalogue folder than the one that comes with archopt

    Raises
    ------
    InputError : with every problem of study, rails, profile and catalogue together
    """
    notebook = Notebook(str(path))
    content = read_toml(Path(path), str(path), notebook)
    if content is None:
        raise InputError(notebook.problems)
    return loaded_from(content, Path(path), catalogue_root, notebook)


def loaded_from(content: Mapping[str, Any], path: Path, catalogue_root: Path | None, notebook: Notebook) -> LoadedStudy:
    """Return the study of a file's content, as if it were read from the path.

    Raises
    ------
    InputError : with every problem
    """
    draft = read_draft(dict(content), path, notebook)
    own = None if draft.catalogue is None else draft.folder / draft.catalogue
    catalogue = load_catalogue(catalogue_root, own, draft.catalogue or "", notebook)
    study = resolve(draft, catalogue, notebook)
    if notebook.problems or study is None:
        raise InputError(notebook.problems)
    return LoadedStudy(study, catalogue, catalogue_root)
