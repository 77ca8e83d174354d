"""What a renderable looks like as plain text."""

from __future__ import annotations

from io import StringIO

from rich.console import Console, RenderableType


def plain_text(body: RenderableType, width: int = 220) -> str:
    """The lines of a body, without blanks at their ends."""
    buffer = StringIO()
    Console(
        file=buffer, width=width, no_color=True, color_system=None, force_terminal=False, highlight=False,
        emoji=False, markup=False, legacy_windows=False,
    ).print(body)  # fmt: skip
    return "\n".join(line.rstrip() for line in buffer.getvalue().splitlines()) + "\n"
