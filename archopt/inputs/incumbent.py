"""Today's design, with every choice that it leaves out filled plainly and noted as assumed."""

from __future__ import annotations

import math
from collections.abc import Sequence

from archopt.inputs.choice_names import BANK_COUNTS, BUSES, STAGE_FAMILIES, ChoiceChecker, flatten
from archopt.inputs.draft import Draft
from archopt.inputs.parts import (
    BiasSupply,
    BuckStage,
    BusConverter,
    Capacitor,
    LinearRegulator,
    SingleStage,
    Stack,
)
from archopt.inputs.problems import Notebook
from archopt.inputs.resolved import Board, Catalogue, Control, Derating, InputSupply, Rail


def resolve_incumbent(
    draft: Draft, rails: Sequence[Rail], catalogue: Catalogue, board: Board | None,
    supply: InputSupply | None, control: Control, derating: Derating, checker: ChoiceChecker,
    notebook: Notebook,
) -> dict[str, str] | None:  # fmt: skip
    """Return today's design with every choice given; gaps are filled plainly and noted as assumed."""
    if draft.incumbent is None:
        return None
    stated: dict[str, str] = {}
    before = len(notebook.problems)
    flat = flatten(draft.incumbent, "incumbent", notebook)
    fine = len(notebook.problems) == before
    for name, values in flat.items():
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
    return _Filling(stated, rails, catalogue, board, supply, control, derating, notebook).filled()


class _Filling:
    """Fills the choices that today's design leaves out."""

    def __init__(
        self, stated: dict[str, str], rails: Sequence[Rail], catalogue: Catalogue, board: Board | None,
        supply: InputSupply | None, control: Control, derating: Derating, notebook: Notebook,
    ) -> None:  # fmt: skip
        self._design = dict(stated)
        self._rails = rails
        self._families = catalogue.families
        self._board = board
        self._supply = supply
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
        part = self._families["capacitors"].get(bank)
        least = 0.0
        if isinstance(stage, (BuckStage, SingleStage, LinearRegulator)):
            least = stage.loop_min_uf * phases if not isinstance(stage, LinearRegulator) else stage.loop_min_uf
        count = math.ceil(2 * least / part.capacitance_uf) if isinstance(part, Capacitor) else 1
        self._fill(f"{name}.bank_count", _bank_count(max(count, 4)), "twice the least its loop needs, at least four")

    def _largest(self, names: Sequence[str]) -> str:
        parts = self._families["capacitors"]
        sizes = {name: part.capacitance_uf for name in names if isinstance(part := parts.get(name), Capacitor)}
        return max(sizes, key=lambda name: sizes[name]) if sizes else ""

    def _fill_bus(self, bus: str, power_w: float) -> None:
        used = any(self._design.get(f"{rail.name}.feed") == bus for rail in self._rails)
        converter = self._fill(f"{bus}.converter", "none", "no bus converter stated")
        if converter == "none" and used:
            self._notebook.problem(f"incumbent.{bus}.converter", f"missing; rails of today's design hang on {bus}")
        if converter == "none":
            return  # the other choices of a bus that is not there are none
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
        if self._design[f"{bus}.converter"] == "none":
            return
        lower, nominal, upper = (float(self._design[f"{bus}.{key}"]) for key in ("lower_v", "nominal_v", "upper_v"))
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
        self._fill_bias()
        controlled = any(self._design.get(f"{bus}.control") not in {"fixed", None} for bus in BUSES)
        supervisor = self._cheapest("supervisors") if controlled else "none"
        self._fill("board.supervisor", supervisor, "bus control of the design")

    def _fill_bias(self) -> None:
        """Fill the bias supply and its feed: one that stands its feed and carries the gates of the stages."""
        power_w = self._gate_power_w()
        feeds = [stated] if (stated := self._design.get("board.bias_feed")) else ["bus_a", "input"]
        stated_bias = self._design.get("board.bias")
        offered = [part for part in self._families["bias_supplies"].values() if isinstance(part, BiasSupply)]
        if stated_bias is not None:
            offered = [part for part in offered if part.name == stated_bias]
        fitting = [
            (part.max_power_w < power_w, part.price_1k, part.name, feed)
            for part in offered
            for feed in feeds
            if self._stands(part, feed)
        ]
        best = min(fitting) if fitting and (power_w > 0 or stated_bias) else None
        self._fill("board.bias", best[2] if best else "none", "gate supply of its stages")
        self._fill("board.bias_feed", best[3] if best else "input", "where it may be fed from")

    def _gate_power_w(self) -> float:
        """Return the power of all gates that are driven from the separate bias, W."""
        power_w = 0.0
        for rail in self._rails:
            stage = self._families["buck_stages"].get(self._design.get(f"{rail.name}.stage", ""))
            if isinstance(stage, BuckStage) and stage.gate_supply == "bias":
                charge_c = (stage.high_side_gate_nc + stage.low_side_gate_nc) * 1e-9
                each_w = charge_c * stage.gate_v * stage.frequency_khz * 1e3
                power_w += each_w * float(self._design[f"{rail.name}.phases"])
        return power_w

    def _stands(self, part: BiasSupply, feed: str) -> bool:
        """Return whether a bias supply stands the voltage of its feed."""
        if feed == "bus_a":
            if self._design["bus_a.converter"] == "none":
                return False
            low_v, high_v = (float(self._design[f"bus_a.{key}"]) for key in ("lower_v", "upper_v"))
            return part.input_min_v <= low_v and part.input_max_v >= high_v
        supply = self._supply
        if supply is None or (supply.isolation and not part.isolated):
            return False
        return part.input_min_v <= supply.low_v and part.input_max_v >= supply.high_v

    def _cheapest(self, family: str) -> str:
        parts = self._families[family].values()
        return min(parts, key=lambda part: (part.price_1k, part.name)).name if parts else "none"


def _bank_count(count: int) -> str:
    """Return the least count of the list that is not below the one given."""
    return str(next((listed for listed in BANK_COUNTS if listed >= count), BANK_COUNTS[-1]))
