"""How phases and converters are shed, what spares must carry, and what a setting's accuracy costs."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

import numpy as np
import pytest
from equivalence.shipped import decided, evaluator_of, near_rows
from numpy.typing import NDArray

from archopt.inputs.parts import BuckStage
from archopt.model import decide as decisions
from archopt.model.board import DirectStages
from archopt.model.evaluator import Detail, evaluate_in
from archopt.model.hardware import setting_error_v, unpack
from archopt.model.parameters import FIXED_RATIO, REGULATED
from archopt.model.part_rows import IDEAL_SHEDDING, NO_SHEDDING, THRESHOLD_SHEDDING
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.model.stages import loop_bandwidth_rad_s
from archopt.model.states import ENERGY, FALLBACK, JUMP, MIX

STUDY = "telecom_six"
COUNT, SEED = 300, 11


def detail_of(problem: Problem, rows: NDArray[np.int64]) -> Detail:
    states = problem.states
    designs = Designs(problem.layout, rows)
    return evaluate_in(problem, states, designs, DirectStages(problem, states), exact=True, explain=True)


def with_derating(problem: Problem, **changes: Any) -> Problem:
    study = problem.study
    return replace(problem, study=replace(study, derating=replace(study.derating, **changes)))


def on_bus_a(problem: Problem, kind: int, count: int = 1) -> NDArray[np.int64]:
    """Return decided designs whose bus A has a converter of a kind, at least so many units."""
    rows = np.vstack([decided(STUDY, COUNT, SEED), evaluator_of(STUDY).decide(near_rows(
        problem, 200, np.random.default_rng(4)
    ))])  # fmt: skip
    designs = Designs(problem.layout, rows)
    converter = designs.bus("converter")[:, 0] - 1
    good = (converter >= 0) & (designs.bus("count")[:, 0] >= count)
    good &= problem.converters.kind[np.maximum(converter, 0)] == kind
    assert good.any()
    return rows[good]


def test_phases_run_as_each_part_can_shed() -> None:
    evaluator = evaluator_of(STUDY)
    problem, options = evaluator.problem, evaluator.options
    stages, mix = problem.stages, evaluator.states.mix_a
    seen = set()
    for o in range(len(options.stage)):
        stage, phases = int(options.stage[o]), int(options.phases[o])
        row = problem.catalogue.families["buck_stages"].get(stages.names[stage])
        if phases == 1 or not isinstance(row, BuckStage) or evaluator.states.mix_off[:, options.rail[o]].any():
            continue
        load, kind = mix[:, options.rail[o]], int(stages.shedding[stage])
        needed = np.clip(np.ceil(load / stages.phase_limit_a[stage] - 1e-9), 1, phases)
        seen.add((kind, int(options.fewest[o])))
        needed[evaluator.states.bands :] = phases  # all run at the fall-back
        if options.fewest[o] == 1 or row.shedding == "none":
            assert (options.run[o] == phases).all()
        elif row.shedding == "threshold":
            counted = np.ceil(load / (row.shed_share * row.phase_current_a) - 1e-9)
            assert (options.run[o] == np.clip(counted, needed, phases)).all()
        else:
            assert (options.run[o] >= needed).all()
    assert seen == {(kind, few) for kind in (IDEAL_SHEDDING, THRESHOLD_SHEDDING, NO_SHEDDING) for few in (0, 1)}


def test_a_folding_loop_slows_with_the_load() -> None:
    evaluator = evaluator_of(STUDY)
    stages = evaluator.problem.stages
    folds = stages.names.index("buck_10a_500k_fold_bus_gate")
    forced = stages.names.index("buck_10a_500k_bus_gate")
    load = np.array([0.0, 0.3, 0.6, 5.0])
    volts, output = np.full(4, 12.0), np.array(1.2)
    ours, plain = (loop_bandwidth_rad_s(stages, np.full(4, k), volts, output, load) for k in (folds, forced))
    assert (ours[:-1] < plain[:-1]).all()
    assert (np.diff(ours) > 0.0).all()
    assert ours[0] == pytest.approx(0.35 * plain[0], rel=1e-9)  # the row's share without load
    assert ours[-1] == pytest.approx(plain[-1], rel=1e-12)


def test_limits_see_both_ends_of_the_setting() -> None:
    problem = evaluator_of(STUDY).problem
    row = on_bus_a(problem, REGULATED)[:1]
    designs = Designs(problem.layout, row)
    hardware = unpack(problem, designs, problem.states)
    index = int(hardware.converter[0, 0])
    accuracy = float(problem.converters.accuracy[index])
    assert accuracy > 0.0
    states, set_v = problem.states, hardware.set_v[0, :, 0]
    band_v = hardware.band_v[0, 0, states.band]
    at_nominal = np.full(len(set_v), problem.grid_v[designs.bus("nominal_v")[0, 0]])
    for kind, nominal in ((MIX, band_v), (FALLBACK, at_nominal)):
        places = states.of_kind(kind)
        np.testing.assert_allclose(set_v[places[0::2]], nominal[places[0::2]] * (1 - accuracy), rtol=1e-12)
        np.testing.assert_allclose(set_v[places[1::2]], nominal[places[1::2]] * (1 + accuracy), rtol=1e-12)
    jump = states.of_kind(JUMP)
    np.testing.assert_allclose(set_v[jump], band_v[jump] * (1 - accuracy), rtol=1e-12)
    hours = states.hours > 0
    np.testing.assert_array_equal(set_v[hours], band_v[hours])


def test_a_coarse_setting_grid_adds_what_it_cannot_reach() -> None:
    problem = evaluator_of(STUDY).problem
    coarse = replace(problem.converters, setting_grid_v=np.full(len(problem.converters.names), 0.2))
    index = np.flatnonzero(problem.converters.kind == REGULATED)[:1]
    volts = np.array([9.25, 9.4])
    error = setting_error_v(replace(problem, converters=coarse), index, volts)
    accuracy = problem.converters.accuracy[index]
    np.testing.assert_allclose(error, accuracy * volts + [0.05, 0.0], rtol=1e-9, atol=1e-12)
    ratio = np.flatnonzero(problem.converters.kind == FIXED_RATIO)[:1]
    assert (setting_error_v(problem, ratio, volts) == 0.0).all()


def test_less_accuracy_leaves_fewer_legal_voltages(monkeypatch: pytest.MonkeyPatch) -> None:
    evaluator = evaluator_of(STUDY)
    problem = evaluator.problem
    rows = on_bus_a(problem, REGULATED)
    rows = rows[Designs(problem.layout, rows).bus("count")[:, 0] == 1]  # how many run is then no question
    found: list[NDArray[np.bool_]] = []
    original = decisions.legal_voltages

    def spy(*given: Any) -> NDArray[np.bool_]:
        legal = original(*given)
        found.append(legal)
        return legal

    monkeypatch.setattr(decisions, "legal_voltages", spy)
    for accuracy in (0.0, 0.04):
        table = replace(problem.converters, accuracy=np.full(len(problem.converters.names), accuracy))
        given = replace(problem, converters=table)
        decisions.decide_once(given, problem.states, evaluator.options, Designs(problem.layout, rows))
    exact, loose = found[0][:, 0], found[1][:, 0]
    assert exact.any()
    assert not (loose & ~exact).any()
    assert loose.sum() < exact.sum()


def test_the_converters_left_carry_everything() -> None:
    problem = evaluator_of(STUDY).problem
    spared = with_derating(problem, spare_converters=1)
    row = on_bus_a(problem, REGULATED, count=2)[:1]
    units = int(Designs(problem.layout, row).bus("count")[0, 0])
    assert units >= 2
    row = row.copy()
    running = Designs(problem.layout, row).running_converters
    running[:, 0] = units  # nothing shed
    all_well, one_failed = detail_of(problem, row), detail_of(spared, row)
    ratio = units / (units - 1)
    for limit in ("converter current", "converter power"):
        before, after = (d.ledger.worst[limit] for d in (all_well, one_failed))
        assert after.value[0] == pytest.approx(ratio * float(before.value[0]), rel=1e-9)
    before, after = (d.ledger.worst["start-up capacitance"] for d in (all_well, one_failed))
    assert after.bound[0] == pytest.approx(float(before.bound[0]) / ratio, rel=1e-9)
    hot, hotter = (float(d.ledger.worst["converter temperature"].value[0]) for d in (all_well, one_failed))
    assert hotter > hot + 0.2
    # the year is that of all units running
    assert one_failed.evaluation.objectives[0, 0] == pytest.approx(all_well.evaluation.objectives[0, 0], rel=1e-12)


def test_a_lone_converter_has_no_spare() -> None:
    problem = evaluator_of(STUDY).problem
    rows = on_bus_a(problem, REGULATED)
    lone = rows[Designs(problem.layout, rows).bus("count")[:, 0] == 1][:1]
    normal, spared = detail_of(problem, lone), detail_of(with_derating(problem, spare_converters=1), lone)
    before, after = (d.ledger.worst["converter current"] for d in (normal, spared))
    assert after.value[0] == pytest.approx(2.0 * float(before.value[0]), rel=1e-9)


def test_spares_are_not_counted_in_a_jump() -> None:
    problem = evaluator_of(STUDY).problem
    pair = on_bus_a(problem, REGULATED, count=2)[:1]
    all_of, spared = detail_of(problem, pair), detail_of(with_derating(problem, spare_converters=1), pair)
    limit = "jump survival: short-time current"
    running = all_of.hardware.units_band[0, 0]
    assert running.min() == 2
    before, after = (float(detail.ledger.worst[limit].bound[0]) for detail in (all_of, spared))
    assert after == pytest.approx(0.5 * before, rel=1e-9)


def test_a_shed_converter_must_wake_within_the_overload() -> None:
    problem = evaluator_of(STUDY).problem
    row = on_bus_a(problem, REGULATED, count=2)[:1].copy()
    running = Designs(problem.layout, row).running_converters
    units = int(Designs(problem.layout, row).bus("count")[0, 0])
    count = len(problem.converters.names)
    bound = {}
    for shed in (False, True):
        running[:, 0] = units
        if shed:
            running[:, 0, 0] = units - 1
        for wake_s in (1e-4, 10.0):
            table = replace(problem.converters, wakeup_s=np.full(count, wake_s), overload_a=np.full(count, 1e3))
            worst = detail_of(replace(problem, converters=table), row).ledger.worst["jump survival: short-time current"]
            bound[shed, wake_s] = float(worst.slack[0])
    assert bound[False, 1e-4] == pytest.approx(bound[False, 10.0], rel=1e-9)
    assert bound[True, 10.0] < bound[True, 1e-4]


@pytest.mark.parametrize("spares", [0, 1])
def test_a_fixed_ratio_sags_below_the_narrowest_input(spares: int) -> None:
    problem = evaluator_of(STUDY).problem
    derating = replace(problem.study.derating, spare_converters=spares)
    problem = replace(problem, study=replace(problem.study, derating=derating))
    row = on_bus_a(problem, FIXED_RATIO, 1 + spares)[:1]
    found = detail_of(problem, row)
    index = int(found.hardware.converter[0, 0])
    low = problem.states.of_kind(MIX)[0::2]
    units = found.hardware.units_running[0, low, 0]
    solution = found.solution
    ratio, ohm = float(problem.converters.ratio[index]), float(problem.converters.output_ohm[index])
    off = float(problem.converters.accuracy[index])
    assert off > 0.0
    left = np.maximum(units - spares, 0.5)
    expected = solution.node_v[0, low] * ratio * (1.0 - off) - ohm / left * solution.bus_a[0, low, 0]
    np.testing.assert_allclose(solution.bus_v[0, low, 0], expected, rtol=1e-9)
    assert (expected < ratio * problem.study.supply.low_v).all()
    high = problem.states.of_kind(MIX)[1::2]
    above = solution.node_v[0, high] * ratio * (1.0 + off) - ohm / units * solution.bus_a[0, high, 0]
    np.testing.assert_allclose(solution.bus_v[0, high, 0], above, rtol=1e-9)
    # a year is counted as the ratio is stated, with all that run
    counted = problem.states.of_kind(ENERGY)
    running = found.hardware.units_running[0, counted, 0]
    stated = solution.node_v[0, counted] * ratio - ohm / running * solution.bus_a[0, counted, 0]
    np.testing.assert_allclose(solution.bus_v[0, counted, 0], stated, rtol=1e-9)
    # the range check reads the sagged voltage, less the plane's drop
    rails = found.hardware.on_bus[0, 0]
    below = float((solution.stage_v[0, low][:, rails]).min())
    stages = problem.stages
    shut = np.where(np.isin(np.arange(len(stages.names)), found.hardware.stage[0][rails]), below + 0.1, 0.0)
    shut = np.maximum(stages.input_min_v, shut)
    shut = np.minimum(shut, stages.input_max_v)
    worst = detail_of(replace(problem, stages=replace(stages, input_min_v=shut)), row).ledger.worst["stage input range"]
    assert worst.slack[0] < 0.0
