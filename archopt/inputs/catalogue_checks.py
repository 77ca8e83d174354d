"""What must hold between the numbers of one catalogue row, and between rows."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from itertools import pairwise

from archopt.inputs.parts import BuckStage, BusConverter, Capacitor, Part, SingleStage, Stack
from archopt.inputs.problems import Notebook, nearest, unit_of

LEAST_GATE_V = 4.5  # what drives logic-level switches on fully (common practice)
PRICES = ("price_100", "price_1k", "price_10k", "price_100k")
ORDERED = (
    ("input_min_v", "input_max_v"), ("output_min_v", "output_max_v"), ("loop_min_uf", "loop_max_uf"),
    ("finished_um", "nominal_um"), ("max_current_a", "overload_a"),
)  # fmt: skip


def check_family(part: Part, file: str, line: int, notebook: Notebook) -> None:
    """Note contradictions between the numbers of one row."""
    values = part.model_dump()

    def note(column: str, message: str) -> None:
        notebook.problem(f"row {line}, column {column}", message, file)

    for fewer, more in pairwise(PRICES):
        if values[more] > values[fewer]:
            note(more, f"{values[more]:g} is above {fewer} {values[fewer]:g}; more pieces never cost more each")
    for low, high in ORDERED:
        if low in values and high in values and values[low] > values[high]:
            unit = unit_of(low)
            note(low, f"{values[low]:g} {unit} is above {high} {values[high]:g} {unit}")
    if isinstance(part, (BusConverter, SingleStage)):
        for side in ("input", "output"):
            low, at, high = (values[f"{side}_{which}_v"] for which in ("min", "nominal", "max"))
            if not low <= at <= high:
                note(
                    f"{side}_nominal_v",
                    f"{at:g} V is outside {side}_min_v {low:g} to {side}_max_v {high:g} V",
                )
    if isinstance(part, BusConverter):
        _check_converter(part, note)
    if isinstance(part, BuckStage):
        _check_buck(part, note)
    if isinstance(part, Stack) and part.layers < 2 * part.pairs:
        note("layers", f"{part.layers} layers cannot hold {part.pairs} pairs")


def _check_buck(part: BuckStage, note: Callable[[str, str], None]) -> None:
    """Note what contradicts the gate supply and the light load of a buck stage."""
    if part.gate_supply == "output" and part.output_min_v < LEAST_GATE_V:
        note(
            "gate_supply",
            f"gates need {LEAST_GATE_V:g} V from the output, output_min_v is {part.output_min_v:g} V",
        )
    if part.light_load == "emulation" and part.gate_supply == "bias":
        why = "what a separate bias delivers is counted at frequency_khz, which emulation leaves at light load"
        note("light_load", f"emulation needs a gate supply from input or output, else write forced: {why}")
    if part.fold_floor_khz > part.frequency_khz:
        note("fold_floor_khz", f"{part.fold_floor_khz:g} kHz is above frequency_khz {part.frequency_khz:g} kHz")


def _check_converter(part: BusConverter, note: Callable[[str, str], None]) -> None:
    """Note what contradicts the kind of a bus converter."""
    if part.kind == "fixed_ratio" and part.ratio == 0:
        note("ratio", "a fixed-ratio converter needs its ratio above 0")
    if part.kind != "fixed_ratio" and part.ratio != 0:
        note("ratio", f"is 0 for a {part.kind} converter, found {part.ratio:g}")
    if part.kind == "non_isolated" and part.isolated:
        note("isolated", "is false for a non_isolated converter")


def check_parts(
    families: Mapping[str, Mapping[str, Part]], sources: Mapping[str, object],
    place_of: Mapping[str, tuple[str, int]], notebook: Notebook,
) -> None:  # fmt: skip
    """Note rows that name a row of another table that is not there."""
    weights = {f"{foil.model_dump()['copper_oz']:g}" for foil in families["copper_foils"].values()}
    inductors = families["inductors"]
    for parts in families.values():
        for part in parts.values():
            file, line = place_of[part.name]
            if part.source not in sources:
                hint = nearest(part.source, list(sources))
                notebook.problem(f"row {line}, column source", f"'{part.source}' is not in sources.csv; {hint}", file)
            if isinstance(part, BuckStage) and part.inductor not in inductors and part.inductor not in place_of:
                hint = nearest(part.inductor, list(inductors))
                message = f"'{part.inductor}' is not in inductors; {hint}"
                notebook.problem(f"row {line}, column inductor", message, file)
            if isinstance(part, Stack) and f"{part.copper_oz:g}" not in weights:
                hint = nearest(f"{part.copper_oz:g}", sorted(weights))
                message = f"{part.copper_oz:g} oz is not in copper_foils; {hint}"
                notebook.problem(f"row {line}, column copper_oz", message, file)


def voltage_fits(part: Capacitor, voltage_v: float, derating: float) -> bool:
    """Return whether a capacitor's derated voltage covers the voltage (V) across it."""
    return part.rated_v * derating >= voltage_v * (1 - 1e-9)
