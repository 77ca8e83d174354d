"""A result in a directory: written whole or not at all, never over what is not ours, and read back."""

from __future__ import annotations

import csv
import hashlib
import io
import json
import os
import shutil
import tempfile
from collections.abc import Iterable
from fnmatch import fnmatchcase
from pathlib import Path
from typing import Any

from archopt.errors import OutputError
from archopt.present.plain import plain, plain_dict, significant
from archopt.present.record import Data, FrontRecord
from archopt.search import checkpoint

FORMAT = "archopt result"
FORMAT_VERSION = 2
CSV_DIGITS = 9
"""Significant digits of a number in a CSV file: results are the same bytes for the same study and seed."""

FRONT, ARCHIVE, PROBLEM = "front.csv", "archive.csv", "problem.json"
DESIGNS, RUN, EXTRAS = "designs.json", "run.json", "extras.json"
WRITTEN = (FRONT, ARCHIVE, PROBLEM, DESIGNS, EXTRAS, RUN)
ADDED_LATER = ("report.html", "copper_*.csv")
"""Files (patterns) other commands may add to a result; replacing the result may remove them."""

REMEDY = "restore it from a copy, or solve the study again"

EXTRA_FIELDS = (
    "incumbent", "baselines", "gains", "afresh", "losing", "leverage", "not_modelled", "cautions", "merged", "notes",
)  # fmt: skip


UNFINISHED = (checkpoint.NAME, checkpoint.PARTIAL)
"""What a run that is not finished puts by where its result will be."""


def check_target(directory: Path, *, replace: bool = False, go_on: bool = False) -> None:
    """Tell before a long search whether its result could be written; creates nothing.

    Parameters
    ----------
    directory : where the result shall be
    replace : an earlier result of ours there, or an unfinished run, may be replaced
    go_on : the unfinished run there, and what it had found when it was interrupted, may be replaced

    Raises
    ------
    OutputError : something is there that must not be replaced, or the place cannot be written.
    """
    target = _real(directory)
    if target == Path.cwd():
        raise OutputError(f"{directory}: results need a directory of their own, not the current one")
    if target.exists():
        if not target.is_dir():
            raise OutputError(f"{directory}: a file of that name is in the way")
        if {entry.name for entry in target.iterdir()} - {checkpoint.PARTIAL}:
            _refuse_unless_ours(directory, target)
            if not (replace or (go_on and checkpoint.is_there(target))):
                _refuse_ours(directory, target, go_on=go_on)
    parent = target.parent
    while not parent.exists():
        parent = parent.parent
    if not parent.is_dir() or not os.access(parent, os.W_OK | os.X_OK):
        raise OutputError(f"{directory}: cannot write in {parent}")


def write(
    record: FrontRecord, directory: Path, *, replace: bool = False, go_on: bool = False, unfinished: bool = False
) -> Path:
    """Write a result whole, or leave everything as it was.

    The files are written to a temporary directory beside the target, which then takes the target's name.
    An earlier result is moved aside first and removed only when the new one is in its place.

    Parameters
    ----------
    record : the result
    directory : the directory that shall hold it
    replace, go_on : as :func:`check_target`
    unfinished : keep beside the result what its run needs to go on; otherwise that goes

    Returns
    -------
    Path : the directory.

    Raises
    ------
    OutputError : as :func:`check_target`, or writing failed.
    """
    check_target(directory, replace=replace, go_on=go_on)
    target = _real(directory)
    contents = file_contents(record)
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        work = Path(tempfile.mkdtemp(prefix=f".{target.name}-", dir=target.parent))
    except OSError as error:
        raise OutputError(f"{directory}: cannot be written: {error.strerror or error}") from error
    try:
        fresh = work / "new"
        fresh.mkdir()  # with the rights the person's umask gives, not those of a temporary directory
        for name, content in contents.items():
            _write_through(fresh / name, content)
        if unfinished and checkpoint.is_there(target):
            _write_through(fresh / checkpoint.NAME, (target / checkpoint.NAME).read_bytes())
        _put_in_place(fresh, target, work / "earlier")
    except OSError as error:
        raise OutputError(f"{directory}: cannot be written: {error.strerror or error}") from error
    finally:
        if target.exists() or not (work / "earlier").exists():
            shutil.rmtree(work, ignore_errors=True)  # else it holds the only copy of the earlier result
    return directory


def free_sibling(directory: Path) -> Path:
    """A name beside a directory that nothing has yet: ``NAME-2``, ``NAME-3`` ..."""
    number = 2
    while (candidate := directory.with_name(f"{directory.name}-{number}")).exists():
        number += 1
    return candidate


def file_contents(record: FrontRecord) -> dict[str, bytes]:
    """The bytes of every file of a result. ``run.json`` is last and carries the digest of each other file."""
    archive: list[Data] = [plain_dict(row) for row in record.archive]
    extras: Data = {name: getattr(record, name) for name in EXTRA_FIELDS}
    extras["archive_numbers"] = _number_columns(archive)
    contents = {
        FRONT: csv_bytes(record.front),
        ARCHIVE: csv_bytes(archive),
        PROBLEM: _json_bytes(record.problem),
        DESIGNS: _json_lines(record.designs),
        EXTRAS: _json_bytes(extras),
    }
    digests = {name: hashlib.sha256(content).hexdigest() for name, content in contents.items()}
    head = {"format": FORMAT, "format_version": FORMAT_VERSION, "files": digests}
    contents[RUN] = _json_bytes({**head, "run": record.run})
    return contents


def csv_bytes(rows: list[Data]) -> bytes:
    """A table as CSV: nine significant digits, line feeds, empty cells where there is nothing."""
    columns = list(dict.fromkeys(column for row in rows for column in row))
    buffer = io.StringIO(newline="")
    writer = csv.writer(buffer, lineterminator="\n")
    if columns:
        writer.writerow(columns)
    writer.writerows([cell_text(row.get(column)) for column in columns] for row in rows)
    return buffer.getvalue().encode()


def cell_text(value: object) -> str:
    """One cell: nine significant digits, ``yes`` and ``no``, nothing for none."""
    entry = plain(value)
    if entry is None:
        return ""
    if isinstance(entry, bool):
        return "yes" if entry else "no"
    if isinstance(entry, float):
        return f"{significant(entry, CSV_DIGITS):.{CSV_DIGITS}g}"
    if isinstance(entry, list | dict):
        return json.dumps(entry, ensure_ascii=False)
    return str(entry)


def read(directory: Path, *, archive: bool = True) -> FrontRecord:
    """Read a result back.

    Parameters
    ----------
    directory : as :func:`write` left it
    archive : whether to read the archive too, which may be long; explaining designs does not need it

    Raises
    ------
    OutputError : there is no result, it is not ours, of a later version, or damaged; the message says which.
    """
    if directory.is_file():
        raise OutputError(f"{directory}: is a file; the directory that holds a result is wanted")
    if not directory.is_dir():
        raise OutputError(f"{directory}: there is no such directory")
    head = _head(directory)
    digests = head.get("files")
    if not isinstance(digests, dict):
        raise OutputError(f"{directory / RUN}: damaged: it does not list the files; {REMEDY}")
    problem = _json_file(directory / PROBLEM, digests, dict)
    designs = _json_file(directory / DESIGNS, digests, list)
    extras = {"afresh": {}, **_json_file(directory / EXTRAS, digests, dict)}  # earlier results lack it
    run = head.get("run")
    if not isinstance(run, dict) or not all(name in extras for name in EXTRA_FIELDS):
        raise OutputError(f"{directory}: damaged: parts of the result are missing; {REMEDY}")
    numbers = {str(name) for name in extras.get("archive_numbers") or []}
    rows = _csv_rows(_bytes_of(directory / ARCHIVE, digests), numbers) if archive else []
    fields = {name: extras[name] for name in EXTRA_FIELDS}
    return FrontRecord(designs=designs, archive=rows, problem=problem, run=run, **fields)


def is_ours(directory: Path) -> bool:
    """Whether a directory holds a result of ours, whole or damaged."""
    try:
        _head(directory)
    except OutputError:
        return False
    return True


def _refuse_ours(shown: Path, target: Path, *, go_on: bool) -> None:
    """Say what of ours is in the way, and what can be done about it."""
    if not checkpoint.is_there(target):
        nothing = "; it holds no unfinished run to go on with" if go_on else ""
        raise OutputError(
            f"{shown} holds an earlier result{nothing}: choose another directory or replace it (--replace)"
        )
    found = checkpoint.read(target)
    raise OutputError(
        f"{shown} holds an unfinished run ({checkpoint.told(found)}): go on with it (--resume),"
        " or start afresh (--replace)"
    )


def _refuse_unless_ours(shown: Path, target: Path) -> None:
    there = sorted(entry.name for entry in target.iterdir())
    if set(there) <= set(UNFINISHED):
        return
    if not is_ours(target):
        if RUN in there:
            raise OutputError(
                f"{shown} holds a {RUN} that does not read as one of archopt, damaged or of something else;"
                " move it away, or choose another directory"
            )
        raise OutputError(f"{shown} holds something that is no result of archopt; choose another directory")
    ours = (*WRITTEN, *UNFINISHED, *ADDED_LATER)
    foreign = [name for name in there if not any(fnmatchcase(name, pattern) for pattern in ours)]
    if foreign:
        names = ", ".join(foreign[:5])
        raise OutputError(f"{shown} also holds {names}, not written by archopt; move it away first")


def _real(directory: Path) -> Path:
    return Path(os.path.realpath(directory))


def _put_in_place(fresh: Path, target: Path, aside: Path) -> None:
    """Give a finished directory its name; an earlier one goes aside, and comes back when that fails."""
    if not target.exists():
        fresh.rename(target)
        return
    target.rename(aside)
    try:
        fresh.rename(target)
    except OSError:
        aside.rename(target)
        raise


def _write_through(path: Path, content: bytes) -> None:
    with path.open("wb") as file:
        file.write(content)
        file.flush()
        os.fsync(file.fileno())


def _json_bytes(value: object) -> bytes:
    return (json.dumps(plain(value), ensure_ascii=False, allow_nan=False, indent=1) + "\n").encode()


def _json_lines(rows: Iterable[Data]) -> bytes:
    """A JSON list with one entry a line: compact, and one design can be found by eye."""
    lines = [
        json.dumps(plain(row), ensure_ascii=False, allow_nan=False, separators=(",", ":")) for row in rows
    ]  # fmt: skip
    return ("[\n" + ",\n".join(lines) + "\n]\n").encode() if lines else b"[]\n"


def _number_columns(rows: list[Data]) -> list[str]:
    """Columns that hold numbers only, so that a part named ``1200`` stays a name when read back."""
    columns = dict.fromkeys(column for row in rows for column in row)
    return [
        column for column in columns
        if all(
            isinstance(row.get(column), int | float) and not isinstance(row.get(column), bool)
            for row in rows if row.get(column) is not None
        )
    ]  # fmt: skip


def _head(directory: Path) -> Data:
    """``run.json`` of a directory, when it is ours and of a version we read."""
    path = directory / RUN
    if not path.is_file():
        raise OutputError(f"{directory}: holds no result of archopt ({RUN} is missing)")
    try:
        content = path.read_bytes()
    except OSError as error:
        raise OutputError(f"{path}: cannot be read: {error.strerror or error}") from error
    try:
        head = json.loads(content)
    except ValueError as error:
        raise OutputError(f"{path}: damaged: {broken_json(content, error)}; {REMEDY}") from error
    if not isinstance(head, dict) or head.get("format") != FORMAT:
        raise OutputError(f"{directory}: holds no result of archopt ({RUN} is of something else)")
    version = head.get("format_version")
    if version != FORMAT_VERSION:
        raise OutputError(
            f"{directory}: written in version {version} of the result files; this archopt reads {FORMAT_VERSION}"
        )
    return head


def broken_json(content: bytes, error: ValueError) -> str:
    """What is wrong with a JSON file, and in which line, as far as that can be told."""
    if not content.strip():
        return "it is empty"
    if isinstance(error, json.JSONDecodeError):
        if error.pos >= len(content.decode(errors="replace").rstrip()) or "Unterminated" in error.msg:
            return f"it ends in the middle of line {error.lineno}"
        return f"no JSON from line {error.lineno}, column {error.colno} on"
    return "it is no text"


def _bytes_of(path: Path, digests: dict[str, object]) -> bytes:
    try:
        content = path.read_bytes()
    except OSError as error:
        raise OutputError(f"{path}: cannot be read: {error.strerror or error}") from error
    if hashlib.sha256(content).hexdigest() != digests.get(path.name):
        raise OutputError(f"{path}: damaged, or changed after it was written; {REMEDY}")
    return content


def _json_file(path: Path, digests: dict[str, object], kind: type) -> Any:
    try:
        value = json.loads(_bytes_of(path, digests))
    except ValueError as error:
        raise OutputError(f"{path}: damaged: {error}; {REMEDY}") from error
    if not isinstance(value, kind):
        raise OutputError(f"{path}: damaged: not what this file holds; {REMEDY}")
    return value


def _csv_rows(content: bytes, numbers: set[str]) -> list[Data]:
    return [
        {name: _cell_value(text, name in numbers) for name, text in row.items()}
        for row in csv.DictReader(io.StringIO(content.decode(), newline=""))
    ]


def _cell_value(text: str, is_number: bool) -> int | float | str | None:
    if text == "":
        return None
    if not is_number:
        return text
    try:
        return int(text)
    except ValueError:
        return float(text)
