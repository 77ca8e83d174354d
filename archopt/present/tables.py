"""Tables and headings in one sober look: aligned columns, no frames, the same words piped or on a screen."""

from __future__ import annotations

import sys
import textwrap
from collections.abc import Iterable, Sequence
from typing import IO

from rich.cells import cell_len
from rich.console import Console, ConsoleOptions, RenderableType
from rich.measure import Measurement
from rich.padding import Padding
from rich.table import Table
from rich.text import Text

PLAIN_WIDTH = 220
"""Columns of text when the output is no terminal: wide enough that few tables wrap."""
GAP = 2
STACKED_WIDTH = 6


def console_for(stream: IO[str] | None = None) -> Console:
    """A console on a stream: as wide as the terminal, or plain and wide without colour when it is none."""
    target = sys.stdout if stream is None else stream
    if target.isatty():
        return Console(file=target, highlight=False, emoji=False, markup=False)
    return Console(
        file=target, width=PLAIN_WIDTH, no_color=True, color_system=None, force_terminal=False,
        highlight=False, emoji=False, markup=False, legacy_windows=False, soft_wrap=False,
    )  # fmt: skip


class WordTable:
    """A table without frame that fits its width: where it does not, headings stack before words wrap.

    Parameters
    ----------
    columns : headings
    rows : cells, one text a column
    left : headings of the columns that hold words, set to the left; the others hold numbers, never broken
    """

    def __init__(self, columns: Sequence[str], rows: Iterable[Sequence[str]], left: Sequence[str] = ()) -> None:
        self.columns = tuple(columns)
        self.rows = [tuple(row) for row in rows]
        self.left = frozenset(left)

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> Iterable[RenderableType]:
        """Draw it, stacking the headings of numbers where they do not fit side by side."""
        heads = self.columns
        if self._natural_width() > options.max_width:
            heads = tuple(self._stacked(at) for at in range(len(self.columns)))
        result = Table(box=None, pad_edge=False, padding=(0, GAP, 0, 0), header_style="bold", show_edge=False)
        for name, head in zip(self.columns, heads, strict=True):
            words = name in self.left
            result.add_column(
                Text(head), justify="left" if words else "right", no_wrap=not words, overflow="fold"
            )  # fmt: skip
        for row in self.rows:
            result.add_row(*(Text(cell) for cell in row))
        yield result

    def __rich_measure__(self, console: Console, options: ConsoleOptions) -> Measurement:
        """As wide as it needs, or as there is room."""
        width = min(self._natural_width(), options.max_width)
        return Measurement(width, width)

    def _natural_width(self) -> int:
        widths = (max(len(name), self._cell_width(at)) for at, name in enumerate(self.columns))
        return sum(width + GAP for width in widths)

    def _cell_width(self, at: int) -> int:
        return max((cell_len(row[at]) for row in self.rows), default=0)

    def _stacked(self, at: int) -> str:
        name = self.columns[at]
        if name in self.left:
            return name
        width = max(STACKED_WIDTH, self._cell_width(at), *map(len, name.split()))
        return "\n".join(textwrap.wrap(name, width, break_on_hyphens=False)) or name


class HangingLines:
    """Indented lines; one that is too long goes on below itself, further in."""

    def __init__(self, lines: Iterable[str]) -> None:
        self.lines = tuple(lines)

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> Iterable[RenderableType]:
        """Draw each line, wrapped below its own indent."""
        for line in self.lines:
            inward = " " * (len(line) - len(line.lstrip()) + 6)
            for part in textwrap.wrap(line, max(options.max_width, 24), subsequent_indent=inward):
                yield Text(part, no_wrap=True)


def table(columns: Sequence[str], rows: Iterable[Sequence[str]], left: Sequence[str] = ()) -> WordTable:
    """A :class:`WordTable`: numbers to the right, the columns named in ``left`` to the left."""
    return WordTable(columns, rows, left)


def heading(text: str) -> Text:
    """A heading of a section."""
    return Text(text, style="bold")


def section(title: str, *bodies: RenderableType) -> Iterable[RenderableType]:
    """A heading, its bodies indented by two, and an empty line."""
    yield heading(title)
    for body in bodies:
        yield indented(body)
    yield Text("")


def indented(body: RenderableType) -> RenderableType:
    """A body two columns in."""
    return Padding(Text(body) if isinstance(body, str) else body, (0, 0, 0, 2), expand=False)


def pairs(rows: Iterable[tuple[str, str]]) -> Table:
    """Words and their values in two columns."""
    result = Table(box=None, pad_edge=False, padding=(0, 2, 0, 0), show_header=False, show_edge=False)
    result.add_column(justify="left", no_wrap=True)
    result.add_column(justify="left", overflow="fold")
    for word, value in rows:
        result.add_row(Text(word), Text(value))
    return result


def put(console: Console, bodies: Iterable[RenderableType]) -> None:
    """Print bodies one after another; piped, without blanks at the ends of lines."""
    if console.is_terminal:
        for body in bodies:
            console.print(body)
        return
    with console.capture() as captured:
        for body in bodies:
            console.print(body)
    console.file.write("".join(f"{line.rstrip()}\n" for line in captured.get().splitlines()))
    console.file.flush()
