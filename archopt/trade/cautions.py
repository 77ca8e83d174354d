"""What a person must read before trusting or building a result, and what the model leaves out.

``cautions(problem, designs)`` returns the sentences that apply to the explained designs given;
``NOT_MODELLED`` lists what no number here covers.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from typing import Any

from archopt.inputs.parts import BusConverter, Part
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES
from archopt.model.states import ENERGY
from archopt.trade.leverage import catalogue_row

TOUCH_LIMIT_V = 60.0  # DC; common practice for extra-low voltage that needs no protection against touch
ENERGY_HAZARD_VA = 240.0  # common practice, at 2 V and above
HOT_SURFACE_DEGC = 70.0  # common practice for metal that is touched briefly
BUS_WORD = {"bus_a": "bus A", "bus_b": "bus B"}
UNPROVEN = ("invented", "memory")
PRICES_INVENTED = "prices invented"

NOT_MODELLED = (
    "the first droop inside the package, faster than any capacitor on the board",
    "electromagnetic emission, its filters and the noise of one rail on another",
    "the order of switching on and off, pre-biased outputs and soft start",
    "fault clearing: fuses, short-circuit currents, and what a failed stage does to its neighbours",
    "hold-up of the bus when the input fails",
    "the loop of a stage beyond its bandwidth and dead time; within its range it is taken as compensated",
    "heating of one part by another: every part sees the same local air",
    "ageing other than the end-of-life capacitance and resistance of capacitors",
)


def cautions(problem: Problem, designs: Sequence[Mapping[str, Any]]) -> list[str]:
    """Return the cautions that apply to a study and its explained designs.

    Parameters
    ----------
    designs : explained designs, as ``explain`` returns them; the published ones
    """
    sentences = [
        *touch(problem),
        *energy_hazard(problem, designs),
        *hot_parts(designs),
        ampacity(problem),
        *idle_load(problem),
        *unproven(problem, designs),
    ]
    return [sentence for sentence in sentences if sentence]


def touch(problem: Problem) -> Iterable[str]:
    """Yield the caution of an input that is not safe to touch."""
    high = problem.study.supply.high_v
    if high <= TOUCH_LIMIT_V:
        return
    isolation = (
        "the converters on offer are isolated, but what insulation they give is for their data sheets to say"
        if problem.study.supply.isolation
        else "the study does not ask for isolation, so every rail counts as connected to the input"
    )
    yield (
        f"The input reaches {high:g} V DC, above {TOUCH_LIMIT_V:g} V: it is not safe to touch."
        f" Insulation, clearances and creepage are not computed here; {isolation}."
        " Local codes apply, and work on it belongs to people licensed for it."
    )


def energy_hazard(problem: Problem, designs: Sequence[Mapping[str, Any]]) -> Iterable[str]:
    """Yield the caution of buses and inputs that can feed a fault with a lot of power."""
    worst: dict[str, tuple[float, float, float, str]] = {}
    for design in designs:
        for bus in BUS_NAMES:
            power_w, current_a = bus_supply(problem, design, bus)
            if power_w >= ENERGY_HAZARD_VA and power_w > worst.get(bus, (0.0, 0.0, 0.0, ""))[0]:
                volts = float(design["choices"][f"{bus}.nominal_v"])
                worst[bus] = (power_w, current_a, volts, str(design.get("design", "")))
    for bus, (power_w, current_a, volts, name) in worst.items():
        of = f" of {name}" if name else ""
        yield (
            f"The converters of {BUS_WORD[bus]}{of} can deliver about {power_w:.0f} W,"
            f" and {current_a:.0f} A for a short time, at about {volts:g} V:"
            f" from {ENERGY_HAZARD_VA:g} VA a tool or a ring across it can burn."
            " Guard it, and size fuses and copper for the fault, which is not computed here."
        )
    supply, limit_a = problem.study.supply, problem.path.limit_a / problem.study.derating.current
    if supply.high_v * limit_a >= ENERGY_HAZARD_VA:
        yield (
            f"The input path carries {limit_a:g} A at up to {supply.high_v:g} V,"
            f" about {supply.high_v * limit_a:.0f} VA, before its protection acts:"
            f" at or above {ENERGY_HAZARD_VA:g} VA treat it as an energy hazard."
        )


def bus_supply(problem: Problem, design: Mapping[str, Any], bus: str) -> tuple[float, float]:
    """Return the power, W, and short-time current, A, a bus can be fed with; 0 where none is."""
    choices = design["choices"]
    part = problem.catalogue.families["bus_converters"].get(str(choices.get(f"{bus}.converter", "none")))
    if not isinstance(part, BusConverter) or bus not in design["feeds"].values():
        return 0.0, 0.0
    count = int(choices[f"{bus}.count"])
    return count * part.max_power_w, count * max(part.overload_a, part.max_current_a)


def hot_parts(designs: Sequence[Mapping[str, Any]]) -> Iterable[str]:
    """Yield the caution of parts too hot to touch."""
    hot = [
        (float(entry["temperature_degc"]), in_words(str(entry["part"])), str(design.get("design", "")))
        for design in designs
        for entry in design.get("heat") or []
        if entry["temperature_degc"] > HOT_SURFACE_DEGC
    ]
    if not hot:
        return
    degc, part, name = max(hot)
    of = f" of {name}" if name else ""
    yield (
        f"Parts run hot: up to {degc:.0f} degC inside ({part}{of}) in the hottest state checked."
        f" Above {HOT_SURFACE_DEGC:g} degC a surface burns the hand;"
        " the surface is cooler than the inside by an amount not computed here."
    )


def in_words(part: str) -> str:
    """Return a part's name with the buses as a person says them."""
    for bus, word in BUS_WORD.items():
        part = part.replace(bus, word)
    return part


def ampacity(problem: Problem) -> str:
    """Return the caution of the current limits of copper."""
    rise = problem.study.board.copper_rise_k
    return (
        f"Current limits of copper are estimates for a rise of {rise:g} K, in the form of IPC-2221 for single"
        " traces in still air: planes, neighbouring heat and air flow move them either way."
    )


def idle_load(problem: Problem) -> Iterable[str]:
    """Yield the caution of rails that draw nothing in any hour of the year: a load forgotten looks the same."""
    states = problem.states
    energy = states.of_kind(ENERGY)
    drawn_a = states.current_a[energy][states.hours[energy] > 0]
    idle = [name for r, name in enumerate(problem.rails.names) if not (drawn_a[:, r] > 0).any()]
    if not idle:
        return
    if len(idle) == len(problem.rails.names):
        yield (
            "No rail draws anything in any hour of the year: the energy is that of an idle board. Cost, droop and"
            " limits still come from the rails' maxima."
        )
        return
    word = "rail draws" if len(idle) == 1 else "rails draw"
    yield (
        f"{len(idle)} {word} nothing in any hour of the year ({', '.join(idle[:4])}"
        f"{f' and {len(idle) - 4} more' if len(idle) > 4 else ''}): the energy is chosen without them."
    )


def unproven(problem: Problem, designs: Sequence[Mapping[str, Any]]) -> Iterable[str]:
    """Yield the caution of parts whose numbers nobody has measured or published."""
    catalogue = problem.catalogue
    used: dict[str, Part] = {}
    for design in designs:
        for entry in design.get("parts") or []:
            used[str(entry["part"])] = catalogue_row(catalogue, str(entry["family"]), str(entry["part"]))
    sources = {name: catalogue.sources.get(part.source) for name, part in used.items()}
    poor = sorted(name for name, source in sources.items() if source is None or source.kind in UNPROVEN)
    if poor:
        more = f" and {len(poor) - 4} more" if len(poor) > 4 else ""
        yield (
            f"{len(poor)} of {len(used)} part numbers used carry invented or remembered numbers"
            f" ({', '.join(poor[:4])}{more}): put measured parts in their place before deciding on them."
        )
    priced = [name for name, source in sources.items() if source and PRICES_INVENTED in source.title.lower()]
    if priced:
        yield (
            f"The sources of {len(priced)} of {len(used)} part numbers used say that their prices are"
            " invented: costs show how designs compare, not what a board will cost."
        )
