"""Rails fed from other rails: a parent carries its children in every state, check, step and loss."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from pathlib import Path
from tempfile import TemporaryDirectory

import numpy as np
import pytest
from equivalence.reference import Reference
from equivalence.shipped import evaluator_of
from numpy.typing import NDArray

from archopt.inputs.load import load
from archopt.model.board import DirectStages
from archopt.model.bus_power import bus_sums
from archopt.model.compiled import compile_study
from archopt.model.evaluator import Detail, Evaluator, evaluate_in
from archopt.model.loss_lists import all_losses
from archopt.model.options import option_index
from archopt.model.parameters import LINEAR
from archopt.model.problem import compile_problem
from archopt.model.space import PARENT, Designs
from archopt.model.states import JUMP, MIX

STUDY = """\
[input]
low_v = 36
high_v = 75
[board]
area_cm2 = 300
[choices]
direct = false
max_buses = 1
[choices.pin]
"bus_a.converter" = "wide_bus_150w"
"bus_a.control" = "fixed"
"bus_a.nominal_v" = 9.5
"io.stage" = "buck_10a_500k_mid_bus_gate"
"io.phases" = 2
"sensor.stage" = "linear_1a"
"clock.stage" = ["linear_1a5_low", "buck_3a_1000k_bus_gate"]
[[rails]]
name = "io"
voltage_v = 3.3
max_current_a = 5
[[rails]]
name = "sensor"
voltage_v = 2.5
max_current_a = 0.6
parents = ["io"]
linear_only = true
[[rails]]
name = "clock"
voltage_v = 1.8
max_current_a = 0.9
parents = ["io"]
[[rails]]
name = "logic"
voltage_v = 1.2
max_current_a = 6
"""


@cache
def evaluator() -> Evaluator:
    with TemporaryDirectory() as place:
        path = Path(place) / "study.toml"
        path.write_text(STUDY)
        loaded = load(path)
    return Evaluator(compile_study(loaded.study, loaded.catalogue))


def row(feeds: dict[str, str]) -> NDArray[np.int64]:
    """Return the decided design with these feeds, linear regulators where a rail allows one, else what fits."""
    problem = evaluator().problem
    layout, space = problem.layout, problem.space
    out = np.array([values[0] for values in space.allowed] + [0] * (layout.width - len(space.allowed)))
    names = problem.rails.names
    for r, name in enumerate(names):
        feed = feeds.get(name, "bus_a")
        choice = 1 if feed == "bus_a" else PARENT + names.index(feed)
        stages = [s for s in space.allowed[layout.rail("stage").start + r] if problem.feed_ok[r, s, choice]]
        linear = [s for s in stages if problem.stages.kind[s] == LINEAR]
        stage = (linear or stages)[0]
        out[layout.rail("stage").start + r] = stage
        out[layout.rail("feed").start + r] = choice
        if name != "io":
            out[layout.rail("phases").start + r] = problem.phases_low[r, stage]
        banks = np.flatnonzero(problem.capacitor_ok[r])
        out[layout.rail("bank").start + r] = banks[-1]
        out[layout.rail("bank_count").start + r] = 2
    out[layout.bus("bulk").start] = np.flatnonzero(problem.bulk_ok)[-1]
    out[layout.bus("bulk_count").start] = 3
    out[layout.bus("pairs").start] = 1
    return evaluator().decide(out[None])[0]


CASCADE = {"sensor": "io", "clock": "io"}


def detail(feeds: dict[str, str]) -> Detail:
    return evaluator().detail(row(feeds)[None], exact=True, explain=True)


def test_children_may_choose_among_allowed_parents_only() -> None:
    problem = evaluator().problem
    io, sensor, clock, logic = (problem.rails.names.index(name) for name in ("io", "sensor", "clock", "logic"))
    assert problem.feed_ok[sensor, :, PARENT + io].any()
    assert problem.feed_ok[clock, :, PARENT + io].any()
    assert not problem.feed_ok[logic, :, PARENT:].any()
    assert not problem.feed_ok[:, :, PARENT + logic].any()


def test_linear_only_is_honoured() -> None:
    problem = evaluator().problem
    sensor = problem.rails.names.index("sensor")
    assert (problem.stages.kind[problem.stage_ok[sensor]] == LINEAR).all()
    assert problem.stage_ok[sensor].any()


def test_power_balances_with_two_children() -> None:
    problem = evaluator().problem
    found = detail(CASCADE)
    listed = sum(sum(parts.values()) for parts in all_losses(problem, found)[0].values())
    error = np.abs(found.solution.loss_w[0] - listed) / found.solution.input_w[0]
    assert error.max() < 1e-9


def test_everything_equals_the_reference() -> None:
    decided = row(CASCADE)
    reference = Reference(evaluator().problem, decided)
    found = detail(CASCADE)
    assert "parent fed" in reference.kinds()
    assert found.evaluation.objectives[0, 0] == pytest.approx(reference.energy_kwh(), rel=1e-9)
    assert found.evaluation.droop_exact[0] == pytest.approx(reference.droop_percent(), rel=1e-9)
    np.testing.assert_allclose(found.solution.dip_v[0, 0], reference.dips_v["bus_a"], rtol=1e-9)


def test_the_parent_carries_its_children() -> None:
    problem = evaluator().problem
    names = problem.rails.names
    io = names.index("io")
    alone, cascade = detail({}), detail(CASCADE)
    children = [names.index("sensor"), names.index("clock")]
    drawn_a = cascade.solution.stage_in_w[0][:, children].sum(axis=1) / 3.3
    carried = cascade.solution.current_a[0, :, io] - alone.solution.current_a[0, :, io]
    np.testing.assert_allclose(carried, drawn_a, rtol=1e-9)
    assert (drawn_a > 0.0).all()
    # more current: more loss, less room for current and temperature
    assert (cascade.solution.stage_loss_w[0, :, io] > alone.solution.stage_loss_w[0, :, io]).all()


def test_the_parents_limits_count_its_children() -> None:
    """With the parent's limit between its own and the family's current only the cascade breaks it."""
    problem = evaluator().problem
    io = problem.rails.names.index("io")
    stage = int(detail({}).hardware.stage[0, io])
    limits = problem.stages.phase_limit_a.copy()
    own_a = float(problem.rails.max_a[io]) / 2
    limits[stage] = 1.02 * own_a
    tight = replace(problem, stages=replace(problem.stages, phase_limit_a=limits))
    slack = {}
    for label, feeds in (("alone", {}), ("cascade", CASCADE)):
        designs = Designs(problem.layout, row(feeds)[None])
        physics = DirectStages(tight, problem.states)
        found = evaluate_in(tight, problem.states, designs, physics, exact=True, explain=True)
        worst = found.ledger.worst["stage current"]
        slack[label] = float(worst.slack[0])
        if label == "cascade":
            assert worst.where is not None
            assert worst.where[0].startswith("io")
    assert slack["alone"] > 0.0 > slack["cascade"]


def test_a_childs_step_steps_its_parent_and_its_bus() -> None:
    problem = evaluator().problem
    names = problem.rails.names
    io, clock = names.index("io"), names.index("clock")
    # a large step of a child on a light parent decides the parent's droop
    big = problem.rails.step_a.copy()
    big[clock] = 20.0
    jumpy = replace(problem, rails=replace(problem.rails, step_a=big))
    droop, step_w = {}, {}
    for label, feeds in (("alone", {"sensor": "io"}), ("cascade", CASCADE)):
        designs = Designs(problem.layout, row(feeds)[None])
        for kind, of in (("as stated", problem), ("jumpy", jumpy)):
            found = evaluate_in(of, problem.states, designs, DirectStages(of, problem.states), exact=True)
            droop[label, kind] = float(found.droop.droop_v[0, io].max())
            step_w[label, kind] = float(found.solution.step_w[0, 0].max())
    assert droop["cascade", "jumpy"] > 1.5 * droop["cascade", "as stated"]
    assert droop["alone", "jumpy"] == pytest.approx(droop["alone", "as stated"], rel=1e-9)
    # and reaches the bus, with the parent's loss on top
    assert step_w["cascade", "jumpy"] > 20.0 * 1.8
    assert step_w["cascade", "as stated"] < 20.0 * 1.8


def test_the_schedule_counts_what_children_draw() -> None:
    """Tables give the bus's mix and jump power with children to within a few percent of direct physics."""
    problem, options = evaluator().problem, evaluator().options
    decided = Designs(problem.layout, row(CASCADE)[None])
    option = option_index(
        options, decided.rail("stage"), decided.rail("phases"), decided.rail("fewest"), problem.phases_high
    )
    found = detail(CASCADE)
    sums = bus_sums(problem, options, option, found.hardware)
    places = np.append(decided.volts[0, 0], decided.bus("nominal_v")[0, 0])  # the fall-back last
    childless = replace(found.hardware, parent=np.full_like(decided.rail("feed"), -1))
    alone = bus_sums(problem, options, option, childless)
    for kind, tabled in ((problem.states.of_kind(MIX)[0::2], sums[1]), (problem.states.of_kind(JUMP), sums[2])):
        exact = found.solution.stage_in_w[0][kind][:, found.hardware.on_bus[0, 0]].sum(axis=1)
        read = np.array([tabled[0, 0, band, places[band]] for band in problem.states.band[kind]])
        np.testing.assert_allclose(read, exact, rtol=0.03)
        assert (read > 1.1 * np.array([alone[1][0, 0, b, places[b]] for b in problem.states.band[kind]])).all()


def test_a_rail_that_is_off_feeds_nobody_who_is_on() -> None:
    problem = evaluator_of("industrial_ten").problem
    states, names = problem.states, problem.rails.names
    child, parent = names.index("clock_1v1"), names.index("logic_1v8")
    assert problem.feed_ok[child, :, PARENT + parent].any()
    for together in (True, False):
        off = states.off.copy()
        off[0, parent], off[0, child] = True, together
        changed = compile_problem(problem.study, problem.catalogue, replace(states, off=off))
        assert changed.feed_ok[child, :, PARENT + parent].any() == together
