"""What a person allows, forbids, prefers and pins."""

from __future__ import annotations

from collections.abc import Sequence

from archopt.inputs.choice_names import STAGE_FAMILIES, ChoiceChecker, flatten
from archopt.inputs.draft import Draft
from archopt.inputs.problems import Notebook, nearest
from archopt.inputs.resolved import Catalogue, Choices

CHOOSABLE = ("bus_converters", *STAGE_FAMILIES, "supervisors", "bias_supplies")
INFRASTRUCTURE = ("inductors", "capacitors", "stacks", "copper_foils", "input_paths")


def allowed_families(draft: Draft, notebook: Notebook) -> tuple[str, ...]:
    """Return the families that may be used; those that are no choice are always among them."""
    table = draft.choices
    for key, names in (("families", table.families), ("forbidden_families", table.forbidden_families)):
        for name in names or ():
            if name not in CHOOSABLE:
                hint = nearest(name, CHOOSABLE)
                notebook.problem(f"choices.{key}", f"'{name}' is no family to allow or forbid; {hint}")
    allowed = notebook.take("choices.families", table.families, CHOOSABLE, "all")
    forbidden = table.forbidden_families or ()
    if not set(allowed) <= set(CHOOSABLE):
        allowed = CHOOSABLE  # so that nothing else is missed for want of parts
    return tuple(name for name in CHOOSABLE if name in allowed and name not in forbidden) + INFRASTRUCTURE


def forbidden_parts(draft: Draft, catalogue: Catalogue, families: Sequence[str], notebook: Notebook) -> tuple[str, ...]:
    """Return the names of all parts that may not be used.

    Those forbidden by name, those of a family of which other parts are listed in ``choices.parts``, and those
    of families that are not allowed.
    """
    table = draft.choices
    family_of = {name: family for family, parts in catalogue.families.items() for name in parts}
    lists = {
        "parts": table.parts,
        "forbidden_parts": table.forbidden_parts,
        "preferred_parts": table.preferred_parts,
    }
    for key, names in lists.items():
        for name in names or ():
            if name not in family_of:
                notebook.problem(f"choices.{key}", f"there is no part '{name}'; {nearest(name, list(family_of))}")
    only = set(table.parts or ())
    listed = {family_of[name] for name in only if name in family_of}
    forbidden = set(table.forbidden_parts or ())
    for name in sorted(forbidden & (only | set(table.preferred_parts or ()))):
        notebook.problem("choices.forbidden_parts", f"'{name}' is allowed or preferred as well; keep one")
    return tuple(
        name
        for name, family in family_of.items()
        if name in forbidden or (family in listed and name not in only) or family not in families
    )


def resolve_choices(
    draft: Draft,
    families: Sequence[str],
    forbidden: Sequence[str],
    checker: ChoiceChecker,
    notebook: Notebook,
) -> Choices:
    """Return the choices; pins that name nothing are noted."""
    table, take = draft.choices, notebook.take
    pins = flatten(table.pin or {}, "choices.pin", notebook)
    for name, values in pins.items():
        if not checker.check(name, values, "choices.pin", notebook):
            continue
        for value in values:
            if value in forbidden:
                notebook.problem(f"choices.pin.{name}", f"'{value}' is forbidden by families, parts or forbidden_parts")
    max_buses = take("choices.max_buses", table.max_buses, 2, "plain default")
    direct = take("choices.direct", table.direct, True, "plain default")
    if max_buses == 0 and not direct:
        notebook.problem("choices.direct", "false with max_buses = 0 leaves the rails without a feed")
    return Choices(
        families=tuple(families),
        forbidden_parts=tuple(forbidden),
        preferred_parts=table.preferred_parts or (),
        pins=pins,
        max_buses=max_buses,
        direct=direct,
    )
