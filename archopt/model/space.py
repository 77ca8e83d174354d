"""The decision space: what a design row holds, the names of its choices, and its canonical form.

A design row is a vector of small integers: every choice of a design and the decisions stored with it (bus
voltage, running converters and running phases of each band). Columns are laid out by :class:`Layout`.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np

from archopt.model.parameters import FloatArray, IntArray

INPUT, BUS_A, BUS_B, PARENT = 0, 1, 2, 3
FIXED, TWO_LEVELS, FOLLOW = 0, 1, 2
CONTROL_NAMES = ("fixed", "two_levels", "follow_load")
FEWEST_NAMES = ("one", "all")
BUS_NAMES = ("bus_a", "bus_b")
BANK_COUNTS = (1, 2, 3, 4, 6, 8, 10, 12, 16, 20, 24, 32)

RAIL_FIELDS = ("feed", "stage", "phases", "fewest", "bank", "bank_count", "pairs")
BUS_FIELDS = (
    "converter", "count", "fewest", "nominal_v", "control", "lower_v", "upper_v", "bulk", "bulk_count", "pairs",
    "damper", "damper_count",
)  # fmt: skip
BOARD_FIELDS = ("stack", "bias", "bias_feed", "supervisor")


@dataclass(frozen=True)
class Layout:
    """Where each choice stands in a design row of ``rails`` rails and ``bands`` bands."""

    rails: int
    bands: int

    def rail(self, field: str) -> slice:
        """Return the columns of one rail choice, a column a rail."""
        k = RAIL_FIELDS.index(field)
        return slice(k * self.rails, (k + 1) * self.rails)

    def bus(self, field: str) -> slice:
        """Return the columns of one bus choice, a column a bus."""
        start = len(RAIL_FIELDS) * self.rails + 2 * BUS_FIELDS.index(field)
        return slice(start, start + 2)

    def board(self, field: str) -> int:
        """Return the column of one board choice."""
        return len(RAIL_FIELDS) * self.rails + 2 * len(BUS_FIELDS) + BOARD_FIELDS.index(field)

    @cached_property
    def choices(self) -> int:
        """Number of columns that are choices; stored decisions follow."""
        return len(RAIL_FIELDS) * self.rails + 2 * len(BUS_FIELDS) + len(BOARD_FIELDS)

    @cached_property
    def volts(self) -> slice:
        """Columns of the schedule: bus A's bands, then bus B's; indices of the voltage grid."""
        return slice(self.choices, self.choices + 2 * self.bands)

    @cached_property
    def running_converters(self) -> slice:
        """Columns of running converters: bus A's bands, then bus B's."""
        return slice(self.volts.stop, self.volts.stop + 2 * self.bands)

    @cached_property
    def running_phases(self) -> slice:
        """Columns of running phases: rail by rail, its bands."""
        stop = self.running_converters.stop
        return slice(stop, stop + self.rails * self.bands)

    @cached_property
    def width(self) -> int:
        """Number of columns."""
        return int(self.running_phases.stop)


class Designs:
    """P design rows with their choices as named views (P, R), (P, 2) or (P,); writing a view writes the row."""

    def __init__(self, layout: Layout, rows: IntArray) -> None:
        self.layout = layout
        self.rows = rows

    def __len__(self) -> int:
        return len(self.rows)

    def rail(self, field: str) -> IntArray:
        """Return a rail choice, (P, R)."""
        return self.rows[:, self.layout.rail(field)]

    def bus(self, field: str) -> IntArray:
        """Return a bus choice, (P, 2)."""
        return self.rows[:, self.layout.bus(field)]

    def board(self, field: str) -> IntArray:
        """Return a board choice, (P,)."""
        return self.rows[:, self.layout.board(field)]

    @property
    def volts(self) -> IntArray:
        """Schedule as grid indices, (P, 2, B)."""
        return self.rows[:, self.layout.volts].reshape(len(self.rows), 2, self.layout.bands)

    @property
    def running_converters(self) -> IntArray:
        """Converters running, (P, 2, B)."""
        return self.rows[:, self.layout.running_converters].reshape(len(self.rows), 2, self.layout.bands)

    @property
    def running_phases(self) -> IntArray:
        """Phases running, (P, R, B)."""
        return self.rows[:, self.layout.running_phases].reshape(len(self.rows), self.layout.rails, self.layout.bands)

    def copy(self) -> Designs:
        """Return a copy that shares nothing."""
        return Designs(self.layout, self.rows.copy())

    def take(self, index: IntArray) -> Designs:
        """Return some of the designs, copied."""
        return Designs(self.layout, self.rows[index])


@dataclass(frozen=True)
class Space:
    """What every column of a design row may hold, and the names of the values.

    allowed : column -> sorted values; names : column -> choice name;
    values : column -> value names by value (for values that are numbers, their text).
    """

    layout: Layout
    rail_names: tuple[str, ...]
    grid_v: FloatArray
    allowed: tuple[IntArray, ...]
    names: tuple[str, ...]
    values: tuple[dict[int, str], ...]

    def describe(self, row: IntArray) -> dict[str, str]:
        """Return choice name -> value name of one design row."""
        return {
            name: self.values[column].get(int(row[column]), str(int(row[column])))
            for column, name in enumerate(self.names)
        }

    def encode(self, choices: dict[str, str], start: IntArray) -> IntArray:
        """Return a design row with named choices set on top of ``start``.

        Raises
        ------
        KeyError
            with the choice's or value's name when it is not of this space.
        """
        row = start.copy()
        for name, value in choices.items():
            row[self.column(name)] = self.value(name, value)
        return row

    def column(self, name: str) -> int:
        """Return the column of a choice by its name; KeyError when unknown."""
        try:
            return self.names.index(name)
        except ValueError:
            raise KeyError(name) from None

    def value(self, name: str, text: str) -> int:
        """Return the value of a choice by its name; numbers match by value; KeyError when unknown."""
        column = self.column(name)
        for value, label in self.values[column].items():
            if label == text:
                return value
        try:
            number = float(text)
        except ValueError:
            raise KeyError(text) from None
        numeric = {value: float(label) for value, label in self.values[column].items() if is_number(label)}
        for value, there in numeric.items():
            if abs(there - number) <= 1e-9 * max(1.0, abs(number)):
                return value
        raise KeyError(text)

    @cached_property
    def log10_size(self) -> float:
        """Size of the space as a power of ten: the product of allowed values (neutral choices counted)."""
        return float(sum(np.log10(max(len(values), 1)) for values in self.allowed))


def is_number(text: str) -> bool:
    """Tell whether a text reads as a number."""
    try:
        float(text)
    except ValueError:
        return False
    return True


def choice_names(rail_names: tuple[str, ...]) -> tuple[str, ...]:
    """Return the names of a row's choices in column order."""
    return (
        *(f"{rail}.{field}" for field in RAIL_FIELDS for rail in rail_names),
        *(f"{bus}.{field}" for field in BUS_FIELDS for bus in BUS_NAMES),
        *(f"board.{field}" for field in BOARD_FIELDS),
    )
