"""A line chart of characters: curves over one axis, both axes labelled; plain text on any terminal."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass
from itertools import pairwise

MARKS = "abcdefgh"
SEVERAL = "*"
"""Where two curves fall on one character."""
STEPS = (1.0, 2.0, 2.5, 5.0, 10.0)


@dataclass(frozen=True)
class Curve:
    """One curve: its words in the legend and its points; nan where there is none."""

    words: str
    x: Sequence[float]
    y: Sequence[float]


def round_ticks(low: float, high: float, most: int) -> list[float]:
    """Round numbers from at or below ``low`` to at or above ``high``, at most ``most`` and at least two."""
    span = high - low if high > low else max(abs(high), 1.0) * 0.01
    power = 10.0 ** math.floor(math.log10(span / most))
    for factor in (*STEPS, *(10 * step for step in STEPS)):
        step = factor * power
        first, last = math.floor(low / step + 1e-9), math.ceil(high / step - 1e-9)
        if last - first + 1 <= most:
            break
    last = max(last, first + 1)
    return [step * at for at in range(first, last + 1)]


def chart_lines(
    curves: Sequence[Curve], x_words: str, y_words: str, width: int = 60, height: int = 15
) -> list[str]:
    """Lines of text of a chart, its legend below.

    Parameters
    ----------
    curves : at most eight, with a letter each
    x_words, y_words : what the axes are, with unit
    width, height : characters of the drawing, the axes outside of it
    """
    points = [(x, y) for curve in curves for x, y in zip(curve.x, curve.y, strict=True) if math.isfinite(y)]
    if not points:
        return ["nothing to draw"]
    x_ticks = round_ticks(min(x for x, _ in points), max(x for x, _ in points), 7)
    y_ticks = round_ticks(min(y for _, y in points), max(y for _, y in points), 6)
    grid = [[" "] * width for _ in range(height)]
    for mark, curve in zip(MARKS, curves, strict=False):
        _draw(grid, mark, curve, (x_ticks[0], x_ticks[-1]), (y_ticks[0], y_ticks[-1]))
    labels = {_at(tick, y_ticks[0], y_ticks[-1], height): f"{tick:.6g}" for tick in y_ticks}
    margin = max(len(label) for label in labels.values())
    lines = [y_words]
    for row in range(height):
        level = height - 1 - row
        label = labels.get(level, "")
        lines.append(f"{label:>{margin}} {'+' if label else '|'}{''.join(grid[row])}".rstrip())
    axis, below = ["-"] * width, [" "] * (width + 8)
    for tick in x_ticks:
        at = _at(tick, x_ticks[0], x_ticks[-1], width)
        axis[at] = "+"
        text = f"{tick:.6g}"
        start = max(at - len(text) // 2, 0)
        if below[max(start - 1, 0) : start + len(text)] == [" "] * (start + len(text) - max(start - 1, 0)):
            below[start : start + len(text)] = text
    indent = " " * (margin + 2)
    lines += [f"{indent[:-1]}+{''.join(axis)}", (indent + "".join(below)).rstrip()]
    lines += [f"{indent}{x_words:^{width}}".rstrip()]
    lines += [f"{indent}{mark}  {curve.words}" for mark, curve in zip(MARKS, curves, strict=False)]
    if any(SEVERAL in row for row in grid):
        lines.append(f"{indent}{SEVERAL}  several of them")
    return lines


def _at(value: float, low: float, high: float, count: int) -> int:
    """The character, counted from the low end, that a value falls on."""
    return min(max(round((value - low) / (high - low) * (count - 1)), 0), count - 1)


def _draw(
    grid: list[list[str]], mark: str, curve: Curve, x_range: tuple[float, float], y_range: tuple[float, float]
) -> None:
    """Put the mark of one curve into every column it passes, straight between its points."""
    height, width = len(grid), len(grid[0])
    points = [(x, y) for x, y in sorted(zip(curve.x, curve.y, strict=True)) if math.isfinite(y)]
    for column in range(width):
        x = x_range[0] + (x_range[1] - x_range[0]) * column / (width - 1)
        y = _between(points, x, 0.5 * (x_range[1] - x_range[0]) / (width - 1))
        if y is None:
            continue
        row = height - 1 - _at(y, *y_range, height)
        grid[row][column] = mark if grid[row][column] in {" ", mark} else SEVERAL


def _between(points: Sequence[tuple[float, float]], x: float, half: float) -> float | None:
    """The curve's value at x, none more than half a column beyond its ends."""
    if not points or x < points[0][0] - half or x > points[-1][0] + half:
        return None
    for (x0, y0), (x1, y1) in pairwise(points):
        if x <= x1:
            return y0 if x <= x0 else y0 + (y1 - y0) * (x - x0) / (x1 - x0)
    return points[-1][1]
