"""Numbers as a board designer writes them: three or four digits, unit behind, a dash for none."""

from __future__ import annotations

import math

NONE = "-"


def number(value: object, digits: int = 4) -> str:
    """A number to so many significant digits without exponent, thousands apart; a dash for none."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return NONE if value is None else str(value)
    if not math.isfinite(value):
        return NONE
    if value == 0:
        return "0"
    whole_digits = math.floor(math.log10(abs(value))) + 1
    decimals = min(max(digits - whole_digits, 0), 9)
    text = f"{value:,.{decimals}f}"
    text = text.rstrip("0").rstrip(".") if "." in text else text
    return "0" if text == "-0" else text


def fixed(value: object, decimals: int = 1) -> str:
    """A number with fixed decimals, for columns that are read downwards; a dash where there is none."""
    if isinstance(value, bool) or not isinstance(value, int | float):
        return NONE if value is None else str(value)
    if not math.isfinite(value):
        return NONE
    text = f"{value:,.{decimals}f}"
    return text.removeprefix("-") if float(text.replace(",", "")) == 0 else text


def signed(value: object, decimals: int = 1) -> str:
    """A difference, its sign always written."""
    text = fixed(value, decimals)
    if isinstance(value, int | float) and text != NONE and not text.startswith("-"):
        return f"+{text}"
    return text


def with_unit(value: object, unit: str, digits: int = 4) -> str:
    """A number and its unit; percent and kelvin too keep a space."""
    text = number(value, digits)
    return text if text == NONE or not unit else f"{text} {unit}"


def money(value: object, currency: str, decimals: int = 2) -> str:
    """An amount of the study's currency."""
    text = fixed(value, decimals)
    return text if text == NONE or not currency else f"{text} {currency}"


def times(count: object, name: object) -> str:
    """``2 x name``, or the name alone for one."""
    return str(name) if count in (None, 1, "1") else f"{count} x {name}"


def mechanism_word(name: object) -> str:
    """A loss mechanism in words: ``dead_time_w`` is dead time."""
    return str(name).removesuffix("_w").replace("_", " ")


def place_word(name: object) -> str:
    """A place on the board in words: ``bus_a plane`` is bus A plane."""
    return NONE if name in (None, "") else str(name).replace("bus_a", "bus A").replace("bus_b", "bus B")


def of(value: object, key: str) -> object:
    """An entry of a dict that may be missing or no dict at all."""
    return value.get(key) if isinstance(value, dict) else None


def real(value: object, otherwise: float = math.nan) -> float:
    """A number of plain data as float, where null and missing become ``otherwise``."""
    return float(value) if isinstance(value, int | float) and not isinstance(value, bool) else otherwise


def counted(count: int, one: str, many: str = "") -> str:
    """``1 rail``, ``12 rails``."""
    return f"{count:,} {one if count == 1 else many or one + 's'}"
