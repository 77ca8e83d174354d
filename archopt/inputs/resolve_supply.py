"""Supply, board, control and money of a study, with every value filled in."""

from __future__ import annotations

import math

from archopt.inputs.draft import Draft
from archopt.inputs.parts import BusConverter, InputPath
from archopt.inputs.problems import Notebook, nearest
from archopt.inputs.resolve_jumps import ResolvedJump
from archopt.inputs.resolved import (
    Board,
    Catalogue,
    Control,
    ControlKind,
    Derating,
    Economics,
    InputLevel,
    InputSupply,
    SearchBudget,
)
from archopt.inputs.study import InputTable

TOUCH_SAFE_V = 60.0  # IEC 62368-1 ES1 for DC, from memory
USUAL_INPUTS_V = (53.5, 54.0, 24.0, 12.0, 5.0)
CONTROL_KINDS: tuple[ControlKind, ...] = ("fixed", "two_levels", "follow_load")
PLAIN = "plain default"


def resolve_supply(
    draft: Draft, catalogue: Catalogue, forbidden: frozenset[str], power_w: float, hottest_degc: float,
    notebook: Notebook,
) -> InputSupply | None:  # fmt: skip
    """Return the supply, None when its range is not known.

    Parameters
    ----------
    forbidden : names of parts that may not be used
    power_w : all rails at their coincident maximum, W
    hottest_degc : hottest inlet air that the load states, degC; nan when it states none
    """
    table = draft.supply
    if table is None:
        return None
    if table.low_v > table.high_v:
        notebook.problem("input.low_v", f"{table.low_v:g} V is above input.high_v {table.high_v:g} V")
        return None
    nominal_v = _nominal(table, notebook)
    take = notebook.take
    inlet_degc = take("input.inlet_degc", table.inlet_degc, 40.0, "usual for equipment in a room")
    hottest = max(inlet_degc, hottest_degc) if math.isfinite(hottest_degc) else inlet_degc
    hottest_inlet = take("input.hottest_inlet_degc", table.hottest_inlet_degc, hottest, "hottest inlet stated")
    if hottest_inlet < hottest:
        message = f"{hottest_inlet:g} degC is below the {hottest:g} degC stated for the inlet or in the load"
        notebook.problem("input.hottest_inlet_degc", message)
    isolation = table.isolation
    if isolation is None:
        isolation = table.high_v > TOUCH_SAFE_V
        side = "above" if isolation else "not above"
        notebook.assume("input.isolation", isolation, f"highest input {table.high_v:g} V is {side} 60 V")
    return InputSupply(
        low_v=table.low_v,
        high_v=table.high_v,
        nominal_v=nominal_v,
        levels=_levels(table, nominal_v, notebook),
        inlet_degc=inlet_degc,
        hottest_inlet_degc=hottest_inlet,
        local_rise_k=take("input.local_rise_k", table.local_rise_k, 15.0, PLAIN),
        air_speed_m_s=take("input.air_speed_m_s", table.air_speed_m_s, 1.5, PLAIN),
        isolation=isolation,
        path=_path(table, catalogue, forbidden, power_w, notebook),
        **_filter(table, notebook),
    )


def _filter(table: InputTable, notebook: Notebook) -> dict[str, float]:
    """Return what stands behind the input path, as far as the study says."""
    if table.filter_capacitance_uf is None:
        for name in ("filter_esr_mohm", "filter_damper_uf", "filter_damper_mohm"):
            if getattr(table, name) is not None:
                notebook.problem(f"input.{name}", "is stated without filter_capacitance_uf")
        notebook.assume("input.filter_capacitance_uf", 0.0, "no filter stated: only the path's resistance is checked")
        return {}
    if (table.filter_damper_uf is None) != (table.filter_damper_mohm is None):
        missing = "filter_damper_mohm" if table.filter_damper_mohm is None else "filter_damper_uf"
        notebook.problem(f"input.{missing}", "a damping bank needs both its capacitance and its resistance")
    return {
        "filter_capacitance_uf": table.filter_capacitance_uf,
        "filter_esr_mohm": notebook.take("input.filter_esr_mohm", table.filter_esr_mohm, 0.0, "not stated"),
        "filter_damper_uf": table.filter_damper_uf or 0.0,
        "filter_damper_mohm": table.filter_damper_mohm or 0.0,
    }


def _nominal(table: InputTable, notebook: Notebook) -> float:
    """Return the usual input voltage."""
    if table.nominal_v is not None:
        if not table.low_v <= table.nominal_v <= table.high_v:
            message = f"{table.nominal_v:g} V is outside low_v {table.low_v:g} to high_v {table.high_v:g} V"
            notebook.problem("input.nominal_v", message)
        return table.nominal_v
    usual = USUAL_INPUTS_V if table.high_v > TOUCH_SAFE_V else USUAL_INPUTS_V[1:]
    inside = [voltage for voltage in usual if table.low_v <= voltage <= table.high_v]
    nominal_v = inside[0] if inside else (table.low_v + table.high_v) / 2
    return notebook.take("input.nominal_v", None, nominal_v, "usual within the range" if inside else "middle")


def _levels(table: InputTable, nominal_v: float, notebook: Notebook) -> tuple[InputLevel, ...]:
    """Return the input voltage distribution; shares sum to 1."""
    if table.levels is None:
        shares = {nominal_v: 0.95}
        for end in (table.low_v, table.high_v):
            shares[end] = shares.get(end, 0.0) + 0.025
        notebook.assume(
            "input.levels",
            [f"{v:g} V {share:.3g}" for v, share in shares.items()],
            "input stays at its usual voltage",
        )
        return tuple(InputLevel(voltage, share) for voltage, share in shares.items())
    for number, level in enumerate(table.levels, start=1):
        if not table.low_v <= level.voltage_v <= table.high_v:
            message = f"{level.voltage_v:g} V is outside low_v {table.low_v:g} to high_v {table.high_v:g} V"
            notebook.problem(f"input.levels[{number}].voltage_v", message)
    total = sum(level.share for level in table.levels)
    if abs(total - 1) > 1e-6:
        notebook.problem("input.levels", f"shares sum to {total:g}; they must sum to 1")
        return ()
    return tuple(InputLevel(level.voltage_v, level.share / total) for level in table.levels)


def _path(
    table: InputTable, catalogue: Catalogue, forbidden: frozenset[str], power_w: float, notebook: Notebook
) -> str:
    """Return the input path: the one stated, else the cheapest that is rated for the input."""
    paths = {
        name: part
        for name, part in catalogue.families["input_paths"].items()
        if isinstance(part, InputPath) and name not in forbidden
    }
    if table.path is not None:
        part = paths.get(table.path)
        if part is None:
            notebook.problem("input.path", f"there is no input path '{table.path}'; {nearest(table.path, list(paths))}")
        elif part.input_max_v < table.high_v:
            message = f"'{part.name}' is rated for {part.input_max_v:g} V, below high_v {table.high_v:g} V"
            notebook.problem("input.path", message)
        return table.path
    rated = sorted((part.price_1k, name) for name, part in paths.items() if part.input_max_v >= table.high_v)
    if not rated:
        highest = max((part.input_max_v for part in paths.values()), default=0.0)
        message = f"no input path is rated for high_v {table.high_v:g} V; the highest is rated for {highest:g} V"
        notebook.problem("input.high_v", message)
        return ""
    current_a = power_w / 0.85 / table.low_v
    enough = [name for _, name in rated if paths[name].max_current_a >= current_a]
    strongest = max((paths[name].max_current_a, name) for _, name in rated)[1]
    name = enough[0] if enough else strongest
    reason = f"cheapest for {current_a:.3g} A at {table.low_v:g} V" if enough else "largest current"
    return notebook.take("input.path", None, name, reason)


def resolve_board(draft: Draft, catalogue: Catalogue, forbidden: frozenset[str], notebook: Notebook) -> Board | None:
    """Return the board, None when its area is not known."""
    table, limits, take = draft.board, draft.limits, notebook.take
    if table is None:
        return None
    offered = [name for name in catalogue.families["stacks"] if name not in forbidden]
    stacks = table.stacks
    if stacks is None:
        stacks = take("board.stacks", None, tuple(offered), "all of the catalogue")
    for name in stacks:
        if name not in offered:
            notebook.problem("board.stacks", f"there is no stack '{name}'; {nearest(name, offered)}")
    bus_area = take("board.bus_area_cm2", table.bus_area_cm2, 0.25 * table.area_cm2, "a quarter of the board")
    if bus_area > table.area_cm2:
        notebook.problem("board.bus_area_cm2", f"{bus_area:g} cm2 is above the board's {table.area_cm2:g} cm2")
    return Board(
        area_cm2=table.area_cm2,
        usable_copper_share=take("board.usable_copper_share", table.usable_copper_share, 0.7, PLAIN),
        stacks=stacks,
        bus_shared_squares=take("board.bus_shared_squares", table.bus_shared_squares, 3.0, PLAIN),
        bus_own_squares=take("board.bus_own_squares", table.bus_own_squares, 3.0, PLAIN),
        bus_area_cm2=bus_area,
        bus_drop_budget_percent=take("limits.bus_drop_budget_percent", limits.bus_drop_budget_percent, 3.0, PLAIN),
        copper_rise_k=take("limits.copper_rise_k", limits.copper_rise_k, 20.0, "most in a warm box"),
        max_pairs_per_net=take("board.max_pairs_per_net", table.max_pairs_per_net, 4, PLAIN),
        area_cap_cm2=math.inf if limits.area_cap_cm2 is None else limits.area_cap_cm2,
        cost_cap=math.inf if limits.cost_cap is None else limits.cost_cap,
    )


def resolve_control(
    draft: Draft, catalogue: Catalogue, forbidden: frozenset[str], series: bool, jump: ResolvedJump, notebook: Notebook
) -> Control:
    """Return how the bus may be controlled; its range is what the converters offered can make."""
    table, limits, take = draft.control, draft.limits, notebook.take
    lowest, highest = _bus_range(draft, catalogue, forbidden)
    grid_v = take("control.grid_v", table.grid_v, 0.25, PLAIN)
    low_v = take("control.bus_min_v", table.bus_min_v, math.ceil(lowest / grid_v - 1e-9) * grid_v, "converters offered")
    high_v = take(
        "control.bus_max_v",
        table.bus_max_v,
        math.floor(highest / grid_v + 1e-9) * grid_v,
        "converters offered",
    )
    if low_v > high_v:
        notebook.problem("control.bus_min_v", f"{low_v:g} V is above bus_max_v {high_v:g} V")
    habit = 12.0 if low_v <= 12.0 <= high_v else low_v + math.floor((high_v - low_v) / 2 / grid_v) * grid_v
    habitual_v = take("control.habitual_v", table.habitual_v, habit, "taken out of habit")
    if low_v <= high_v and not low_v <= habitual_v <= high_v:
        notebook.problem("control.habitual_v", f"{habitual_v:g} V is outside the bus range {low_v:g} to {high_v:g} V")
    transitions = table.transitions_per_day
    if transitions is None:
        transitions = math.nan if series else 24.0
        notebook.assume("control.transitions_per_day", "from the load series" if series else 24, PLAIN)
    return Control(
        kinds=take("control.kinds", table.kinds, CONTROL_KINDS, "all"),
        grid_v=grid_v,
        bus_min_v=low_v,
        bus_max_v=high_v,
        habitual_v=habitual_v,
        jump_percent=jump.percent,
        hysteresis_percent=take("control.hysteresis_percent", table.hysteresis_percent, 5.0, PLAIN),
        response_ms=take("control.response_ms", table.response_ms, 20.0, PLAIN),
        bus_dip_percent=take("limits.bus_dip_percent", limits.bus_dip_percent, 10.0, PLAIN),
        stability_margin=take("limits.stability_margin", limits.stability_margin, 1.5, PLAIN),
        transitions_per_day=transitions,
        dwell_s=take("control.dwell_s", table.dwell_s, 0.0, PLAIN),
        deadband_v=take("control.deadband_v", table.deadband_v, 0.0, PLAIN),
        jumps=jump.listed,
    )  # fmt: skip


def _bus_range(draft: Draft, catalogue: Catalogue, forbidden: frozenset[str]) -> tuple[float, float]:
    """Return lowest and highest output of the bus converters offered (settable ones where there are any)."""
    converters = [
        part
        for name, part in catalogue.families["bus_converters"].items()
        if isinstance(part, BusConverter) and name not in forbidden
    ]
    if draft.supply is not None:
        low_v, high_v = draft.supply.low_v, draft.supply.high_v
        fitting = [part for part in converters if part.input_min_v <= low_v and part.input_max_v >= high_v]
        converters = fitting or converters
    settable = [part for part in converters if part.kind != "fixed_ratio"] or converters
    lowest = min((part.output_min_v for part in settable), default=5.0)
    highest = max((part.output_max_v for part in settable), default=15.0)
    return lowest, highest


def resolve_derating(draft: Draft, notebook: Notebook) -> Derating:
    """Return the engineering margins."""
    table, take = draft.derating, notebook.take
    return Derating(
        current=take("derating.current", table.current, 0.8, "common practice"),
        voltage=take("derating.voltage", table.voltage, 0.8, "common practice"),
        junction_degc=take("derating.junction_degc", table.junction_degc, 110.0, "common practice"),
        capacitance_end_of_life=take("derating.capacitance_end_of_life", table.capacitance_end_of_life, 0.8, PLAIN),
        esr_end_of_life=take("derating.esr_end_of_life", table.esr_end_of_life, 1.5, PLAIN),
        min_on_ns=take("derating.min_on_ns", table.min_on_ns, 50.0, "common practice"),
        spare_converters=take("derating.spare_converters", table.spare_converters, 0, "no redundancy asked"),
    )


def resolve_economics(draft: Draft, notebook: Notebook) -> Economics:
    """Return money, energy and carbon."""
    table, take = draft.economics, notebook.take
    return Economics(
        boards_per_year=take("economics.boards_per_year", table.boards_per_year, 1000.0, PLAIN),
        new_part_cost=take("economics.new_part_cost", table.new_part_cost, 5000.0, PLAIN),
        placement_cost=take("economics.placement_cost", table.placement_cost, 0.02, PLAIN),
        energy_price_per_kwh=take("economics.energy_price_per_kwh", table.energy_price_per_kwh, 0.15, PLAIN),
        carbon_kg_per_kwh=take("economics.carbon_kg_per_kwh", table.carbon_kg_per_kwh, 0.4, PLAIN),
        cooling_overhead=take("economics.cooling_overhead", table.cooling_overhead, 1.4, PLAIN),
        upstream_efficiency=take("economics.upstream_efficiency", table.upstream_efficiency, 0.95, PLAIN),
        life_years=take("economics.life_years", table.life_years, 7.0, PLAIN),
        currency=take("economics.currency", table.currency, "EUR", PLAIN),
    )


def resolve_search(draft: Draft, notebook: Notebook) -> SearchBudget:
    """Return how long to search."""
    table, take = draft.search, notebook.take
    return SearchBudget(
        evaluations=take("search.evaluations", table.evaluations, 20_000, PLAIN),
        population=take("search.population", table.population, 80, PLAIN),
        seed=take("search.seed", table.seed, 1, PLAIN),
        stagnation_generations=take("search.stagnation_generations", table.stagnation_generations, 40, PLAIN),
    )
