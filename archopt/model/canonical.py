"""The canonical form: two encodings of one physical design become one row; small misfits are repaired."""

from __future__ import annotations

import numpy as np

from archopt.model.parameters import FIXED_RATIO, LINEAR, BoolArray, IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_A, BUS_FIELDS, BUS_NAMES, FIXED, Designs


def canonical(problem: Problem, designs: Designs) -> Designs:
    """Return the designs with neutral choices set to one value and bus A carrying the larger rated power."""
    out = designs.copy()
    tidy_rails(problem, out)
    order_buses(problem, out)
    tidy_buses(problem, out)
    tidy_copper(problem, out)
    tidy_bias(problem, out)
    return out


def buses_used(designs: Designs) -> BoolArray:
    """Return which buses feed a rail, (P, 2)."""
    feed = designs.rail("feed")
    return np.stack([(feed == BUS_A).any(axis=1), (feed == BUS_A + 1).any(axis=1)], axis=1)


def tidy_rails(problem: Problem, designs: Designs) -> None:
    """One phase for linear regulators; no shedding of a single phase."""
    stage, phases, fewest = designs.rail("stage"), designs.rail("phases"), designs.rail("fewest")
    most = problem.phases_high[np.arange(stage.shape[1]), stage]
    phases[:] = np.clip(np.where(problem.stages.kind[stage] == LINEAR, 1, phases), 1, np.maximum(most, 1))
    fewest[:] = np.where(phases == 1, 0, fewest)


def bus_pinned(problem: Problem) -> bool:
    """Tell whether a pin names a bus, so that the two may not be exchanged."""
    names = problem.study.choices.pins
    return any(name.split(".")[0] in BUS_NAMES for name in names) or any(
        value in BUS_NAMES for name, values in names.items() if name.endswith(".feed") for value in values
    )


def order_buses(problem: Problem, designs: Designs) -> None:
    """Exchange the buses where bus B carries the larger rated power."""
    if bus_pinned(problem):
        return
    feed = designs.rail("feed")
    power = problem.rails.voltage_v * problem.states.rated_a
    carried = [np.where(feed == bus, power, 0.0).sum(axis=1) for bus in (BUS_A, BUS_A + 1)]
    swap = carried[1] > carried[0] * (1.0 + 1e-12)
    if not swap.any():
        return
    rows = designs.rows
    swapped = np.where(feed == BUS_A, BUS_A + 1, np.where(feed == BUS_A + 1, BUS_A, feed))
    rows[:, designs.layout.rail("feed")] = np.where(swap[:, None], swapped, feed)
    for field in BUS_FIELDS:
        columns = designs.layout.bus(field)
        pair = rows[:, columns]
        rows[:, columns] = np.where(swap[:, None], pair[:, ::-1], pair)


def tidy_buses(problem: Problem, designs: Designs) -> None:
    """Blank unused buses; complete used ones; keep limits around the nominal and inside the converter's range."""
    used = buses_used(designs)
    layout, rows = designs.layout, designs.rows
    converter = designs.bus("converter")
    for bus in range(2):
        options = problem.space.allowed[layout.bus("converter").start + bus]
        options = options[options > 0]
        if len(options):
            missing = used[:, bus] & (converter[:, bus] == 0)
            converter[missing, bus] = options[0]
    for field in BUS_FIELDS:
        columns = layout.bus(field)
        rows[:, columns] = np.where(used, rows[:, columns], 0)
    index = np.maximum(converter - 1, 0)
    table = problem.converters
    if not len(table.names):
        return
    tidy_dampers(problem, designs, used)
    count, fewest = designs.bus("count"), designs.bus("fewest")
    count[:] = np.where(used, np.clip(count, 1, table.max_parallel[index]), 0)
    fewest[:] = np.where(count <= 1, 0, fewest)
    nominal, control = designs.bus("nominal_v"), designs.bus("control")
    lower, upper = designs.bus("lower_v"), designs.bus("upper_v")
    low, high = converter_span(problem, index)
    sets = used & (table.kind[index] != FIXED_RATIO)
    pinned = {name.split(".")[-1] for name in problem.study.choices.pins if name.split(".")[0] in BUS_NAMES}
    for name, values in (("nominal_v", nominal), ("lower_v", lower), ("upper_v", upper)):
        if name not in pinned:
            values[:] = np.clip(values, low, high)
        values[:] = np.where(sets, values, 0)
    control[:] = np.where(sets, control, FIXED)
    fixed = control == FIXED
    least = np.minimum(np.minimum(lower, upper), nominal)
    most = np.maximum(np.maximum(lower, upper), nominal)
    lower[:], upper[:] = np.where(fixed, nominal, least), np.where(fixed, nominal, most)


def tidy_dampers(problem: Problem, designs: Designs, used: BoolArray) -> None:
    """Give a bus in use a damping bank on offer; where it has none, there is nothing to count."""
    damper, count = designs.bus("damper"), designs.bus("damper_count")
    for bus in range(2):
        for values, field in ((damper, "damper"), (count, "damper_count")):
            options = problem.space.allowed[designs.layout.bus(field).start + bus]
            if len(options):
                other = used[:, bus] & ~np.isin(values[:, bus], options)
                values[other, bus] = options[0]
    count[:] = np.where(damper > 0, count, 0)


def converter_span(problem: Problem, index: IntArray) -> tuple[IntArray, IntArray]:
    """Return the lowest and highest grid index inside each converter's output range."""
    grid, table = problem.grid_v, problem.converters
    low = np.searchsorted(grid, table.output_min_v[index] - 1e-9)
    high = np.searchsorted(grid, table.output_max_v[index] + 1e-9) - 1
    last = len(grid) - 1
    low = np.clip(low, 0, last)
    return low, np.clip(high, low, last)


def tidy_copper(problem: Problem, designs: Designs) -> None:
    """No net takes more pairs than the stack has."""
    pairs = problem.stacks.pairs[designs.board("stack")][:, None]
    rail, bus = designs.rail("pairs"), designs.bus("pairs")
    rail[:] = np.clip(rail, 1, pairs)
    bus[:] = np.where(buses_used(designs), np.clip(bus, 1, pairs), 0)


def tidy_bias(problem: Problem, designs: Designs) -> None:
    """Drop a bias supply nobody needs; where one is needed and none chosen take the first that fits."""
    layout, rows = designs.layout, designs.rows
    needs = problem.stages.bias_fed[designs.rail("stage")].any(axis=1)
    column, feed_column = layout.board("bias"), layout.board("bias_feed")
    table = problem.biases
    if not len(table.names):
        rows[:, column] = rows[:, feed_column] = 0
        return
    on_bus_a = buses_used(designs)[:, 0]
    supply = problem.study.supply
    from_input = (table.input_min_v <= supply.low_v) & (table.input_max_v >= supply.high_v)
    from_input &= table.isolated | (not supply.isolation)
    low = problem.grid_v[designs.bus("lower_v")[:, 0]]
    high = problem.grid_v[designs.bus("upper_v")[:, 0]]
    if len(problem.converters.names):
        converter = np.maximum(designs.bus("converter")[:, 0] - 1, 0)
        follows = (problem.converters.kind[converter] == FIXED_RATIO) & on_bus_a
        ratio = problem.converters.ratio[converter]
        low, high = np.where(follows, ratio * supply.low_v, low), np.where(follows, ratio * supply.high_v, high)
    from_bus = (table.input_min_v <= 0.95 * low[:, None]) & (table.input_max_v >= high[:, None])
    from_bus &= on_bus_a[:, None]
    options = problem.space.allowed[column]
    offered = np.isin(np.arange(len(table.names)) + 1, options)
    feeds = problem.space.allowed[feed_column]
    chosen, feed = rows[:, column], rows[:, feed_column]
    fits = np.stack(
        [
            from_input[None, :] & offered & (0 in feeds) & np.ones_like(from_bus),
            from_bus & offered & (1 in feeds),
        ],
        axis=2,
    )  # (P, biases, 2)
    every = np.arange(len(rows))
    good = (chosen > 0) & fits[every, np.maximum(chosen - 1, 0), np.minimum(feed, 1)]
    flat = fits.reshape(len(rows), -1)
    first = flat.argmax(axis=1)
    found = flat.any(axis=1)
    rows[:, column] = np.where(needs, np.where(good | ~found, chosen, first // 2 + 1), 0)
    rows[:, feed_column] = np.where(needs, np.where(good | ~found, feed, first % 2), 0)
