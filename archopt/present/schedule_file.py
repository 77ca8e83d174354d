"""Rows of plain data as a CSV file, e.g. a voltage schedule handed over."""

from __future__ import annotations

import csv
import io
from collections.abc import Sequence
from pathlib import Path

from archopt.errors import OutputError
from archopt.present.plain import significant
from archopt.present.record import Data

DIGITS = 6


def write_rows(rows: Sequence[Data], path: Path) -> None:
    """Write rows that have the same columns, numbers to six digits, nothing for None.

    Raises
    ------
    OutputError : there are no rows, or the file cannot be written
    """
    if not rows:
        raise OutputError(f"{path}: there is nothing to write")
    text = io.StringIO(newline="")
    writer = csv.DictWriter(text, fieldnames=list(rows[0]), lineterminator="\n")
    writer.writeheader()
    for row in rows:
        writer.writerow({name: cell(value) for name, value in row.items()})
    try:
        path.write_text(text.getvalue(), encoding="utf-8", newline="")
    except OSError as error:
        raise OutputError(f"{path}: cannot be written: {error.strerror or error}") from error


def cell(value: object) -> object:
    """A value as it stands in a cell."""
    if isinstance(value, float):
        return f"{significant(value, DIGITS):g}"
    return "" if value is None else value
