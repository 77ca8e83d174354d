"""Turn model objects into plain data that JSON holds: dicts, lists, text, numbers, true, false and null."""

from __future__ import annotations

import dataclasses
import math
from collections.abc import Iterable, Mapping
from pathlib import PurePath

Plain = None | bool | int | float | str | list["Plain"] | dict[str, "Plain"]

DIGITS = 12
"""Significant digits kept of a number in the JSON files: far below the 1e-9 that results are compared at."""


def significant(value: float, digits: int = DIGITS) -> float:
    """Round to a number of significant digits; negative zero becomes zero.

    Parameters
    ----------
    value : any finite number
    digits : significant digits kept
    """
    return float(f"{value:.{digits}g}") + 0.0


def plain(value: object) -> Plain:
    """Plain data of any value of the study, the model or numpy.

    Dataclasses and pydantic models become dicts of their fields, arrays become lists, paths become text, and
    numbers that are not finite become null (JSON has no other word for them).

    Raises
    ------
    TypeError : the value has no plain form; a fault of ours, never of the study.
    """
    kind = type(value)
    if kind is float:  # first what a result holds millions of
        return float(f"{value:.{DIGITS}g}") + 0.0 if math.isfinite(value) else None  # type: ignore[arg-type]
    if kind is dict:
        return {str(key): plain(entry) for key, entry in value.items()}  # type: ignore[attr-defined]
    if value is None or isinstance(value, bool | int | str):
        return value
    if isinstance(value, float):
        return significant(value) if math.isfinite(value) else None
    if isinstance(value, Mapping):
        return {str(key): plain(entry) for key, entry in value.items()}
    if dataclasses.is_dataclass(value) and not isinstance(value, type):
        return {field.name: plain(getattr(value, field.name)) for field in dataclasses.fields(value)}
    if hasattr(value, "model_dump"):  # a pydantic model, without importing pydantic
        return plain(value.model_dump())
    if hasattr(value, "tolist"):  # a numpy array or scalar, without importing numpy
        return plain(value.tolist())
    if isinstance(value, PurePath):
        return str(value)
    if isinstance(value, Iterable):
        entries = sorted(value, key=str) if isinstance(value, set | frozenset) else value
        return [plain(entry) for entry in entries]
    raise TypeError(f"no plain form of {type(value).__name__}")


def plain_dict(value: object) -> dict[str, Plain]:
    """Plain data of a value that becomes a dict.

    Raises
    ------
    TypeError : it becomes something else.
    """
    result = plain(value)
    if not isinstance(result, dict):
        raise TypeError(f"{type(value).__name__} is no dict in plain data")
    return result
