"""Copper as warm as its current makes it: by hand, against a root finder, monotone, and a size where it runs away."""

from __future__ import annotations

from dataclasses import replace
from functools import cache

import numpy as np
import pytest
from equivalence.shipped import decided, evaluator_of
from scipy.optimize import brentq, fsolve

from archopt.model.copper_heat import MOST_RISE_K, CopperHeat, rise_k
from archopt.model.evaluator import Detail, Evaluator
from archopt.model.hardware import unpack
from archopt.model.limits import INDEX
from archopt.model.parameters import FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.model.states import FALLBACK, MIX

NAME = "telecom_six"
RESISTIVITY_PER_K = 0.00393  # IEC 60028


def rows() -> IntArray:
    return decided(NAME, 120, 7)[-12:]


@cache
def detail() -> Detail:
    """Designs near today's, solved exactly."""
    return evaluator_of(NAME).detail(rows(), exact=True, explain=True)


def steady(problem: Problem) -> IntArray:
    return np.concatenate([problem.states.of_kind(MIX), problem.states.of_kind(FALLBACK)])


def warm(degc: FloatArray | float) -> FloatArray:
    return np.asarray(1.0 + RESISTIVITY_PER_K * (np.asarray(degc) - 20.0))


def test_a_pour_by_hand() -> None:
    # IPC-2221 turned round: dT = (I / (0.024 A^0.725))^(1 / 0.44), A in square mil of one layer, I shared by pairs
    problem, found = evaluator_of(NAME).problem, detail()
    solution, study = found.solution, problem.study
    hottest = study.supply.hottest_inlet_degc + study.supply.local_rise_k
    thickness = problem.stacks.thickness_m[found.hardware.stack]
    for p in (0, 5):
        pairs = found.designs.rail("pairs")[p]
        mil2 = problem.rails.copper_width_m * thickness[p] / 25.4e-6**2
        rise = (solution.current_a[p] / pairs / (0.024 * mil2**0.725)) ** (1.0 / 0.44)
        np.testing.assert_allclose(solution.pour_rise_k[p], rise, rtol=1e-9)
        degc = problem.states.ambient_degc[:, None] + np.minimum(rise, MOST_RISE_K)
        loop = 2.0 * problem.rails.squares * problem.sheet_ohm[found.hardware.stack[p]] / pairs
        loop = loop * warm(degc) / warm(hottest + study.board.copper_rise_k)
        np.testing.assert_allclose(solution.pour_ohm[p], loop, rtol=1e-9)
        np.testing.assert_allclose(solution.pour_w[p], solution.current_a[p] ** 2 * loop, rtol=1e-9)


@pytest.mark.parametrize("number", [0, 1, 2])
def test_a_plane_meets_a_scalar_root_finder(number: int) -> None:
    """Stage powers and bus held, the temperature of bus A is the root of one equation."""
    problem, found = evaluator_of(NAME).problem, detail()
    solution, hardware = found.solution, found.hardware
    sound = np.flatnonzero(hardware.on_bus[:, 0].any(axis=1) & (solution.plane_rise_k[..., 0].max(axis=1) < 100.0))
    p = int(sound[number])
    here, s = np.flatnonzero(hardware.on_bus[p, 0]), int(solution.plane_rise_k[p, :, 0].argmax())
    power, bus_v = solution.stage_in_w[p, s, here], float(solution.bus_v[p, s, 0])
    bias_a = float(solution.bus_a[p, s, 0] - (power / solution.stage_v[p, s, here]).sum())
    assert solution.plane_rise_k[p, s, 0] > 0.1
    squares = problem.bus_squares[0][np.ix_(here, here)]
    study = problem.study
    hottest = study.supply.hottest_inlet_degc + study.supply.local_rise_k + study.board.copper_rise_k
    width_mil2 = problem.planes.place_width_m[0, 0] * problem.stacks.thickness_m[hardware.stack[p]] / 25.4e-6**2
    pairs = int(found.designs.bus("pairs")[p, 0])

    def excess(rise: float) -> float:
        degc = float(problem.states.ambient_degc[s]) + rise
        ohm = float(hardware.plane_ohm[p, 0] * warm(degc) / warm(hottest))
        volts = fsolve(lambda v: bus_v - ohm * squares @ (power / v) - v, np.full(len(here), bus_v), xtol=1e-13)
        amps = float((power / volts).sum()) + bias_a
        return (amps / pairs / (0.024 * float(width_mil2) ** 0.725)) ** (1.0 / 0.44) - rise

    root = float(brentq(excess, 0.0, 140.0, xtol=1e-12))
    assert float(solution.plane_rise_k[p, s, 0]) == pytest.approx(root, rel=1e-7)


def test_more_pairs_are_cooler_and_lose_less() -> None:
    problem = evaluator_of(NAME).problem
    row = np.repeat(rows()[:1], 3, axis=0)
    designs = Designs(problem.layout, row)
    for field in (designs.rail("pairs"), designs.bus("pairs")):
        field[:] = np.arange(1, 4)[:, None]
    solution = Evaluator.detail(evaluator_of(NAME), row, exact=True).solution
    for rise, watts in (
        (solution.pour_rise_k, solution.pour_w),
        (solution.plane_rise_k[..., :1], solution.plane_w[..., :1]),
    ):
        on = watts[0] > 0.0
        assert on.any()
        assert (np.diff(rise, axis=0)[:, on] < 0.0).all()
        assert (np.diff(watts, axis=0)[:, on] < 0.0).all()


def test_what_is_decided_by_is_never_too_cold() -> None:
    """Where copper keeps its limit its resistance is at most that of the schedule: the safe side."""
    problem, found = evaluator_of(NAME).problem, detail()
    kept = found.solution.pour_rise_k <= problem.study.board.copper_rise_k
    share = found.solution.pour_ohm / found.hardware.pour_ohm[:, None, :]
    assert kept.any()
    assert (share[kept] <= 1.0 + 1e-12).all()


def test_the_fast_path_is_as_warm() -> None:
    """One pass late is near enough: the plane's rise within a tenth of a kelvin or two per cent."""
    found = evaluator_of(NAME).detail(rows(), exact=False)
    fast, exact = found.solution, detail().solution
    runs = found.evaluation.slack[:, INDEX["stage input range"]] >= 0.0  # beyond it the tables hold no loss
    permitted = exact.plane_rise_k <= evaluator_of(NAME).problem.study.board.copper_rise_k
    sound = runs[:, None, None] & permitted & (exact.plane_w > 0.0)
    assert sound.sum() > 100
    np.testing.assert_allclose(fast.plane_rise_k[sound], exact.plane_rise_k[sound], rtol=2e-2, atol=0.1)
    np.testing.assert_allclose(fast.plane_w[sound], exact.plane_w[sound], rtol=1e-2)


@pytest.mark.parametrize("exact", [False, True])
def test_running_away_has_a_size(exact: bool) -> None:
    """Planes as narrow as a hair: finite figures, a drop and a rise far beyond their limits, no exception."""
    problem = evaluator_of(NAME).problem
    planes = replace(problem.planes, squares=problem.planes.squares * 300.0, place_width_m=np.full((2, 1), 1e-4))
    evaluator = Evaluator(replace(problem, planes=planes))
    fed = (Designs(problem.layout, rows()).rail("feed") == 1).any(axis=1)
    found = evaluator.detail(rows()[fed], exact=exact, explain=True)
    rise = found.ledger.worst["copper temperature rise"]
    assert np.isfinite(found.evaluation.objectives).all()
    assert np.isfinite(found.evaluation.slack).all()
    assert (rise.value > 1000.0).all()
    assert (found.evaluation.slack[:, INDEX["copper temperature rise"]] < -100.0).all()
    assert rise.where is not None
    assert rise.where[0].startswith("bus_a plane; ")


def test_rise_and_ampacity_are_one_limit() -> None:
    problem, found = evaluator_of(NAME).problem, detail()
    amps, rise = (found.ledger.worst[name] for name in ("copper ampacity", "copper temperature rise"))
    assert amps.where == rise.where
    np.testing.assert_allclose(rise.value, rise_k(problem, amps.value / amps.bound), rtol=1e-9)
    assert ((amps.slack < 0.0) == (rise.slack < 0.0)).all()


def test_resistance_stops_following_where_copper_is_gone() -> None:
    problem = evaluator_of(NAME).problem
    hardware = unpack(problem, Designs(problem.layout, rows()), problem.states)
    heat = CopperHeat(problem, problem.states, hardware)
    count = len(problem.states.hours)
    most, far = (heat.factor(np.full((1, count, 1), rise)) for rise in (MOST_RISE_K, 1e6))
    np.testing.assert_array_equal(most, far)
    np.testing.assert_allclose(most[0, :, 0] - heat.cold, MOST_RISE_K * heat.per_k, rtol=1e-12)
