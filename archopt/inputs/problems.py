"""Collecting what is wrong and what was assumed, in the words of the person who wrote the file."""

from __future__ import annotations

import difflib
from collections.abc import Callable, Collection, Mapping
from dataclasses import dataclass, field
from typing import Any, TypeVar

from pydantic import BaseModel, ValidationError

from archopt.errors import Problem
from archopt.inputs.resolved import Assumption

Model = TypeVar("Model", bound=BaseModel)
Value = TypeVar("Value")
Locate = Callable[[str], tuple[str, str]]
"""From a key to the file and the place in it, as the person wrote them."""

UNITS = {
    "a_per_us": "A/us", "v_per_ms": "V/ms", "m_s": "m/s", "k_per_w": "K/W", "per_kwh": "a kWh",
    "per_year": "a year", "percent": "%", "degc": "degC", "cm2": "cm2", "mm2": "mm2", "mm": "mm",
    "mohm": "mohm", "uf": "uF", "nh": "nH", "uh": "uH", "khz": "kHz", "ns": "ns", "us": "us", "ms": "ms",
    "ma": "mA", "mw": "mW", "nc": "nC", "oz": "oz", "v": "V", "a": "A", "w": "W", "k": "K",
}  # fmt: skip
THOUSANDTH = {"V": "mV", "A": "mA", "W": "mW"}
FORM = {
    "name": "of a name: letters a to z and A to Z, digits, _, + and -; a letter or digit first",
    "dated": "of a date: year-month-day as in 2026-01-31",
}


def unit_of(key: str) -> str:
    """Return the unit a key or column name ends in, empty when it has none."""
    return next((unit for suffix, unit in UNITS.items() if key.endswith(f"_{suffix}")), "")


def nearest(name: str, valid: Collection[str], many: int = 8) -> str:
    """Return a hint that names the nearest valid name, or what there is to choose from."""
    found = difflib.get_close_matches(name, list(valid), n=1, cutoff=0.6)
    if not found:
        lowered = {item.lower(): item for item in valid}
        found = [lowered[match] for match in difflib.get_close_matches(name.lower(), list(lowered), 1, 0.6)]
    if found:
        return f"did you mean '{found[0]}'?"
    names = sorted(valid)
    if not names:
        return "there is none to choose from"
    return f"there is {', '.join(names[:many])}" + (f" and {len(names) - many} more" if len(names) > many else "")


@dataclass
class Notebook:
    """Problems and assumptions met while reading one study.

    Parameters
    ----------
    file : path of the study file as the person wrote it
    """

    file: str
    problems: list[Problem] = field(default_factory=list)
    assumptions: list[Assumption] = field(default_factory=list)

    def problem(self, place: str, message: str, file: str | None = None) -> None:
        """Note one problem, in the study file unless another is named; the same problem is noted once."""
        found = Problem(self.file if file is None else file, place, message)
        if found not in self.problems:
            self.problems.append(found)

    def assume(self, place: str, value: object, reason: str) -> None:
        """Note one value nobody stated."""
        self.assumptions.append(Assumption(place, shown(value), reason))

    def take(self, place: str, stated: Value | None, default: Value, reason: str) -> Value:
        """Return the stated value, or the default after noting it as assumed."""
        if stated is not None:
            return stated
        self.assume(place, default, reason)
        return default


def shown(value: object) -> str:
    """Return a value as a person would write it."""
    if isinstance(value, bool):
        return "true" if value else "false"
    if isinstance(value, float):
        return f"{value:.6g}"
    if isinstance(value, (tuple, list)):
        return ", ".join(shown(item) for item in value)
    return str(value)


def brief(value: object) -> str:
    """Return a value as it was written, cut where it would fill the screen."""
    try:
        text = repr(value)
    except ValueError:  # whole numbers beyond what Python prints
        return "a number of thousands of digits"
    return text if len(text) <= 60 else f"{text[:50]}..."


def explain(error: Mapping[str, Any], key: str, model: type[BaseModel]) -> str:
    """Return one pydantic error in plain words: what is wrong and what would be right."""
    kind, given, context = error["type"], error["input"], error.get("ctx", {})
    unit = unit_of(key)
    amount = f"{shown(given)} {unit}".strip()
    if kind == "missing":
        described = model.model_fields[key].description if key in model.model_fields else ""
        return f"missing; it is the {described}" if described else "missing"
    if kind == "extra_forbidden":
        return f"unknown; {nearest(key, list(model.model_fields), many=40)}"
    if kind == "finite_number" or shown(given).strip().lower().lstrip("+-") in {"nan", "inf", "infinity"}:
        return f"{amount} is not a finite number"
    if kind in {"greater_than", "greater_than_equal", "less_than", "less_than_equal"}:
        symbol = next(name for name in ("gt", "ge", "lt", "le") if name in context)
        words = {"gt": "above", "ge": "at least", "lt": "below", "le": "at most"}[symbol]
        text = f"{amount} is out of range; it must be {words} {context[symbol]:g} {unit}".rstrip()
        smaller = THOUSANDTH.get(unit)
        if symbol in {"lt", "le"} and smaller and isinstance(given, (int, float)):
            in_range = given / 1000 <= context[symbol]
            text += f"; if {given:g} {smaller} was meant, write {given / 1000:g}" if in_range else ""
        return text
    if kind in {"float_type", "float_parsing", "int_type", "int_parsing", "int_from_float"}:
        whole = "whole " if kind.startswith("int") else ""
        return f"needs a {whole}number{f' in {unit}' if unit else ''}, found {brief(given)}"
    if kind in {"bool_type", "bool_parsing"}:
        return f"needs true or false, found {brief(given)}"
    if kind == "string_type":
        return f"needs text in quotes, found {brief(given)}"
    if kind in {"tuple_type", "list_type"}:
        return f"needs a list in square brackets, found {brief(given)}"
    if kind in {"model_type", "model_attributes_type", "dict_type"}:
        return f"needs a table, found {brief(given)}"
    if kind == "literal_error":
        allowed = context["expected"].replace("'", "")
        return f"{brief(given)} is not one of {allowed}"
    if kind == "value_error":
        return str(context["error"])
    if kind == "too_short" and "min_length" in context:
        count = context.get("actual_length", 0)
        return f"needs at least {context['min_length']} entries, found {count}"
    if kind == "string_too_short":
        return "is empty"
    if kind == "string_pattern_mismatch":
        return f"{brief(given)} does not have the form {FORM.get(key, context['pattern'])}"
    return f"{error['msg'][:1].lower()}{error['msg'][1:]}, found {brief(given)}"


def validated(model: type[Model], raw: Mapping[str, Any], locate: Locate, notebook: Notebook) -> Model | None:
    """Return the model, noting every problem; offending keys are left out so that later checks still run.

    Returns None when what is left cannot stand without a key that is missing or wrong.
    """
    values = dict(raw)
    for _ in range(2):
        try:
            return model.model_validate(values)
        except ValidationError as failure:
            errors = failure.errors(include_url=False)
            _note(errors, model, locate, notebook, first=values.keys() == raw.keys())
            for error in errors:
                if error["loc"]:
                    values.pop(str(error["loc"][0]), None)
    return None


def _note(errors: list[Any], model: type[BaseModel], locate: Locate, notebook: Notebook, first: bool) -> None:
    """Note errors; on the second round a key that is missing was left out by us and is known already."""
    if not first:
        return
    deep = {error["loc"][0] for error in errors if len(error["loc"]) > 1}
    for error in errors:
        loc = [str(item) for item in error["loc"]]
        if len(loc) == 1 and loc[0] in deep:
            continue  # follows from a fault inside it, which is told
        key = loc[0] if loc else ""
        file, place = locate(".".join(loc))
        notebook.problem(place, explain(error, key if len(loc) <= 1 else loc[-1], model), file)
