"""What a person allows, forbids, prefers and pins, and today's design with its gaps filled."""

from __future__ import annotations

import math
from collections.abc import Sequence

from archopt.inputs.choice_names import BANK_COUNTS, BUSES, STAGE_FAMILIES, ChoiceChecker, flatten
from archopt.inputs.draft import Draft
from archopt.inputs.parts import BuckStage, BusConverter, Capacitor, LinearRegulator, SingleStage, Stack
from archopt.inputs.problems import Notebook, nearest
from archopt.inputs.resolved import Board, Catalogue, Choices, Control, Derating, Rail

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
    return tuple(name for name in CHOOSABLE if name in allowed and name not in forbidden) + INFRASTRUCTURE


def forbidden_parts(
    draft: Draft, catalogue: Catalogue, families: Sequence[str], notebook: Notebook
) -> tuple[str, ...]:
    """Return the names of all parts that may not be used.

    Those forbidden by name, those of a family of which other parts are listed in ``choices.parts``, and those of
    families that are not allowed.
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
                notebook.problem(
                    f"choices.{key}", f"there is no part '{name}'; {nearest(name, list(family_of))}"
                )
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
                notebook.problem(
                    f"choices.pin.{name}", f"'{value}' is forbidden by families, parts or forbidden_parts"
                )
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


def resolve_incumbent(
    draft: Draft, rails: Sequence[Rail], catalogue: Catalogue, board: Board | None, control: Control,
    derating: Derating, checker: ChoiceChecker, notebook: Notebook,
) -> dict[str, str] | None:  # fmt: skip
    """Return today's design with every choice given; what it leaves out is filled plainly and noted as assumed."""
    if draft.incumbent is None:
        return None
    stated: dict[str, str] = {}
    fine = True
    for name, values in flatten(draft.incumbent, "incumbent", notebook).items():
        if len(values) > 1:
            notebook.problem(f"incumbent.{name}", "is a list; today's design has one value")
            fine = False
        elif checker.check(name, values, "incumbent", notebook):
            stated[name] = values[0]
        else:
            fine = False
    wanted = [f"{rail.name}.stage" for rail in rails if not rail.tap_of]
    missing = [name for name in wanted if name not in stated and fine]
    for name in missing:
        notebook.problem(f"incumbent.{name}", "missing; today's design needs a stage for every rail")
    if not fine or missing:
        return None
    return _Filling(stated, rails, catalogue, board, control, derating, notebook).filled()


class _Filling:
    """Fills the choices that today's design leaves out."""

    def __init__(
        self, stated: dict[str, str], rails: Sequence[Rail], catalogue: Catalogue, board: Board | None,
        control: Control, derating: Derating, notebook: Notebook,
    ) -> None:  # fmt: skip
        self._design = dict(stated)
        self._rails = rails
        self._families = catalogue.families
        self._board = board
        self._control = control
        self._derating = derating
        self._notebook = notebook

    def filled(self) -> dict[str, str]:
        """Return the whole design."""
        has_bus = self._design.get("bus_a.converter", "none") != "none"
        for rail in self._rails:
            if not rail.tap_of:
                self._fill_rail(rail, "bus_a" if has_bus else "input")
            self._fill(f"{rail.name}.pairs", "1", "one layer pair")
        power_w = sum(rail.voltage_v * rail.max_current_a for rail in self._rails) / 0.9
        for bus in BUSES:
            self._fill_bus(bus, power_w)
        self._fill_board()
        for bus in BUSES:
            self._check_bus(bus)
        return self._design

    def _fill(self, name: str, value: str, reason: str) -> str:
        if name not in self._design:
            self._design[name] = value
            self._notebook.assume(f"incumbent.{name}", value, reason)
        return self._design[name]

    def _fill_rail(self, rail: Rail, feed: str) -> None:
        name = rail.name
        self._fill(f"{name}.feed", feed, "the design's bus" if feed == "bus_a" else "no bus converter stated")
        stage = next(
            self._families[family][self._design[f"{name}.stage"]]
            for family in STAGE_FAMILIES
            if self._design[f"{name}.stage"] in self._families[family]
        )
        phases = 1
        if isinstance(stage, (BuckStage, SingleStage)):
            each = stage.phase_current_a * self._derating.current
            phases = min(stage.max_phases, max(1, math.ceil(rail.max_current_a / each - 1e-9)))
        self._fill(f"{name}.phases", str(phases), "fewest that carry its maximum")
        self._fill(f"{name}.fewest", "all", "phases are not shed unless stated")
        bank = self._fill(f"{name}.bank", self._largest(rail.capacitors), "largest of its capacitors")
        part = self._families["capacitors"][bank] if bank in self._families["capacitors"] else None
        least = 0.0
        if isinstance(stage, (BuckStage, SingleStage, LinearRegulator)):
            least = (
                stage.loop_min_uf * phases if not isinstance(stage, LinearRegulator) else stage.loop_min_uf
            )
        count = math.ceil(2 * least / part.capacitance_uf) if isinstance(part, Capacitor) else 1
        self._fill(
            f"{name}.bank_count", _bank_count(max(count, 4)), "twice the least its loop needs, at least four"
        )

    def _largest(self, names: Sequence[str]) -> str:
        parts = self._families["capacitors"]
        sizes = {
            name: part.capacitance_uf for name in names if isinstance(part := parts.get(name), Capacitor)
        }
        return max(sizes, key=lambda name: sizes[name]) if sizes else ""

    def _fill_bus(self, bus: str, power_w: float) -> None:
        used = any(self._design.get(f"{rail.name}.feed") == bus for rail in self._rails)
        converter = self._fill(f"{bus}.converter", "none", "no bus converter stated")
        if converter == "none" and used:
            self._notebook.problem(
                f"incumbent.{bus}.converter", f"missing; rails of today's design hang on {bus}"
            )
        part = self._families["bus_converters"].get(converter)
        nominal, count = self._control.habitual_v, 1
        if isinstance(part, BusConverter):
            nominal = part.output_nominal_v
            each = min(part.max_power_w, part.max_current_a * nominal) * self._derating.current
            count = min(part.max_parallel, max(1, math.ceil(power_w / each)))
        self._fill(f"{bus}.count", str(count), "fewest that carry the load")
        self._fill(f"{bus}.fewest", "all", "units are not shed unless stated")
        nominal_text = self._fill(f"{bus}.nominal_v", f"{nominal:g}", "the converter's nominal")
        self._fill(f"{bus}.control", "fixed", "today's bus is fixed unless stated")
        for end in ("lower_v", "upper_v"):
            self._fill(f"{bus}.{end}", nominal_text, "the nominal")
        bulk = [
            name
            for name, item in self._families["capacitors"].items()
            if isinstance(item, Capacitor)
            and item.rated_v * self._derating.voltage >= float(self._design[f"{bus}.upper_v"])
        ]
        self._fill(f"{bus}.bulk", self._largest(bulk), "largest that stands the bus voltage")
        self._fill(f"{bus}.bulk_count", "4", "plain default")
        self._fill(f"{bus}.pairs", "1", "one layer pair")

    def _check_bus(self, bus: str) -> None:
        lower, nominal, upper = (
            float(self._design[f"{bus}.{key}"]) for key in ("lower_v", "nominal_v", "upper_v")
        )
        if not lower <= nominal <= upper:
            message = f"{nominal:g} V is outside lower_v {lower:g} to upper_v {upper:g} V"
            self._notebook.problem(f"incumbent.{bus}.nominal_v", message)

    def _fill_board(self) -> None:
        stacks = self._families["stacks"]
        offered = [
            part
            for name, part in stacks.items()
            if isinstance(part, Stack) and (self._board is None or name in self._board.stacks)
        ]
        if offered:
            cheapest = min(offered, key=lambda part: (part.price_per_cm2, part.name))
            self._fill("board.stack", cheapest.name, "cheapest stack")
        stages = [
            self._families["buck_stages"].get(self._design.get(f"{rail.name}.stage", ""))
            for rail in self._rails
        ]
        needs_bias = any(isinstance(stage, BuckStage) and stage.gate_supply == "bias" for stage in stages)
        self._fill(
            "board.bias",
            self._cheapest("bias_supplies") if needs_bias else "none",
            "gate supply of its stages",
        )
        self._fill(
            "board.bias_feed", "input" if self._isolated_bias() else "bus_a", "where it may be fed from"
        )
        controlled = any(self._design.get(f"{bus}.control") not in {"fixed", None} for bus in BUSES)
        supervisor = self._cheapest("supervisors") if controlled else "none"
        self._fill("board.supervisor", supervisor, "bus control of the design")

    def _isolated_bias(self) -> bool:
        part = self._families["bias_supplies"].get(self._design["board.bias"])
        return part is None or bool(part.model_dump()["isolated"])

    def _cheapest(self, family: str) -> str:
        parts = self._families[family].values()
        return min(parts, key=lambda part: (part.price_1k, part.name)).name if parts else "none"


def _bank_count(count: int) -> str:
    """Return the least count of the list that is not below the one given."""
    return str(next((listed for listed in BANK_COUNTS if listed >= count), BANK_COUNTS[-1]))
