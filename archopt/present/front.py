"""The public front and design: a result that renders itself in a terminal, a notebook or a data frame."""

from __future__ import annotations

from collections.abc import Iterator
from functools import cached_property
from html import escape
from pathlib import Path
from typing import TYPE_CHECKING

from rich.console import Console, ConsoleOptions, RenderableType

from archopt.errors import OutputError
from archopt.present.explanation import explanation
from archopt.present.files import write
from archopt.present.overview import telling_of
from archopt.present.plain import plain_dict
from archopt.present.record import Data, FrontRecord, find_design, front_row, front_rows, summary
from archopt.present.terminal import record_sections

if TYPE_CHECKING:
    import pandas as pd

TRADE_NAMES = {
    "design": "design", "energy_loss_kwh_per_year": "kWh a year", "cost_per_board": "cost",
    "worst_droop_percent": "droop, % of budget", "topology": "topology", "bus_a_nominal_v": "bus A V",
    "bus_b_nominal_v": "bus B V", "lifetime_cost": "life cost", "roles": "marked as",
}  # fmt: skip


class Design:
    """One design of a front, explained.

    Parameters
    ----------
    data : one entry of ``designs.json``
    problem : ``problem.json``, for rails and currency
    """

    def __init__(self, data: Data, problem: Data) -> None:
        self.data = data
        self.problem = problem

    @property
    def name(self) -> str:
        """``D001`` and so on."""
        return str(self.data["design"])

    @property
    def roles(self) -> tuple[str, ...]:
        """What it is marked for, e.g. ``knee``."""
        return tuple(str(role) for role in self.data.get("roles") or [])

    @property
    def choices(self) -> dict[str, object]:
        """Every choice by name, the names a study pins."""
        return dict(self.data.get("choices") or {})

    @property
    def energy_loss_kwh_per_year(self) -> float:
        """Energy lost from board input to rails, kWh a year."""
        return float(self.data["objectives"]["energy_loss_kwh_per_year"])

    @property
    def cost_per_board(self) -> float:
        """Cost of one board, in the study's currency."""
        return float(self.data["objectives"]["cost_per_board"])

    @property
    def worst_droop_percent(self) -> float:
        """Worst rail's droop or release, percent of its own budget, as the objective counts it."""
        return float(self.data["objectives"]["worst_droop_percent"])

    def as_dict(self) -> dict[str, object]:
        """The explanation as plain data."""
        return dict(plain_dict(self.data))

    def __repr__(self) -> str:
        return (
            f"<Design {self.name}: {self.energy_loss_kwh_per_year:.4g} kWh a year,"
            f" cost {self.cost_per_board:.4g}, droop {self.worst_droop_percent:.3g} %>"
        )

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> Iterator[RenderableType]:
        """Print the explanation, stage by stage."""
        yield from explanation(self.data, self.problem)

    def _repr_html_(self) -> str:
        row = front_row(self.data)
        lines = "".join(f"<tr><th>{escape(k)}</th><td>{_cell(v)}</td></tr>" for k, v in row.items())
        return f"<table>{lines}</table>"


class Front:
    """A whole result: the designs nothing beats, and everything said beside them.

    Parameters
    ----------
    record : the plain data of the result
    directory : where its files are, when they are written
    """

    def __init__(self, record: FrontRecord, directory: Path | None = None) -> None:
        self.record = record
        self.directory = directory

    @cached_property
    def designs(self) -> tuple[Design, ...]:
        """Every published design, least loss first."""
        return tuple(Design(data, self.record.problem) for data in self.record.designs)

    @property
    def incumbent(self) -> Design | None:
        """Today's design, when the study gives one."""
        data = self.record.incumbent
        return None if data is None else Design(data, self.record.problem)

    def __len__(self) -> int:
        return len(self.record.designs)

    def __iter__(self) -> Iterator[Design]:
        return iter(self.designs)

    def __repr__(self) -> str:
        return f"<Front of {len(self)} designs for {self.record.study.get('name', 'a study')}>"

    def table(self) -> pd.DataFrame:
        """The front as a data frame, one design a row, the columns of ``front.csv``, indexed by name."""
        import pandas as pd  # noqa: PLC0415 - a second to load, and most uses never ask for it

        if not self.record.designs:
            return pd.DataFrame(index=pd.Index([], name="design"))
        return pd.DataFrame(self.record.front).set_index("design")

    def design(self, wanted: int | str) -> Design:
        """One design, by number (1 is the first), name (``D007``), role (``knee``), or ``incumbent``.

        Raises
        ------
        OutputError : there is no such design; the message says which there are.
        """
        data = find_design(self.record.designs, self.record.incumbent, wanted)
        if data is None and str(wanted).strip().lower() == "incumbent":
            raise OutputError(f"the study has no [incumbent], so no design of today is here: {self._names()}")
        if data is None:
            raise OutputError(f"no design {wanted!r} in this front: {self._names()}")
        return Design(data, self.record.problem)

    def telling(self, at_most: int = 12) -> tuple[Design, ...]:
        """The designs worth a look first: the marked ones and an even spread, near twins left out."""
        return tuple(self.designs[position] for position in telling_of(self.record.designs, at_most).index)

    def write(self, directory: str | Path, *, replace: bool = False) -> Path:
        """Write the result to a directory, whole or not at all; an earlier result only with ``replace``.

        Raises
        ------
        OutputError : the directory cannot be written or holds something else.
        """
        self.directory = write(self.record, Path(directory), replace=replace)
        return self.directory

    def summary(self) -> dict[str, object]:
        """The result for a machine, without the states of each design."""
        return dict(plain_dict(summary(self.record)))

    def __rich_console__(self, console: Console, options: ConsoleOptions) -> Iterator[RenderableType]:
        """Print the result as ``solve`` does."""
        yield from record_sections(self.record, options.max_width, self.directory)

    def _repr_html_(self) -> str:
        chosen = [design.data for design in self.telling()] if len(self) else []
        head = "".join(f"<th>{escape(name)}</th>" for name in TRADE_NAMES.values())
        body = "".join(
            "<tr>" + "".join(f"<td>{_cell(row[key])}</td>" for key in TRADE_NAMES) + "</tr>"
            for row in front_rows(chosen)
        )
        note = f"{len(chosen)} of {len(self)} designs"
        return f"<table><thead><tr>{head}</tr></thead><tbody>{body}</tbody></table><p>{note}</p>"

    def _names(self) -> str:
        if not self.record.designs:
            return "it has none"
        names = [str(design["design"]) for design in self.record.designs]
        roles = sorted({str(role) for design in self.record.designs for role in design.get("roles") or []})
        text = f"{names[0]} to {names[-1]}" if len(names) > 1 else names[0]
        more = [*roles, *(["incumbent"] if self.record.incumbent is not None else [])]
        return f"designs are {text}" + (f"; or ask for {' / '.join(more)}" if more else "")


def _cell(value: object) -> str:
    if value is None:
        return ""
    return escape(f"{value:.5g}" if isinstance(value, float) else str(value))
