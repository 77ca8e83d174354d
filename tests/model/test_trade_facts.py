"""Facts of the trade about the bus voltage (common practice, no source), on a pinned board of six rails.

The shipped catalogue is taken as it is; these tests say whether it behaves as boards do.
"""

from __future__ import annotations

from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
from numpy.typing import NDArray
from scipy.optimize import minimize_scalar

from archopt.inputs.load import load
from archopt.model.board import DirectStages, solve
from archopt.model.compiled import incumbent_row
from archopt.model.hardware import unpack
from archopt.model.problem import Problem, compile_problem
from archopt.model.space import Designs
from archopt.model.states import ENERGY, reduce_load

LOADS = (0.2, 1.0 / 3.0, 0.45, 0.6, 0.8, 1.0)
INPUTS = (36.0, 53.5, 75.0)
HABIT_V = 12.0
RAILS = (
    # name, volts, amps, stage, phases, bank
    ("core", 0.9, 40.0, "buck_25a_600k_bus_gate", 2, "polymer_560u_2v5_can"),
    ("serdes", 1.0, 15.0, "buck_20a_700k_bus_gate", 1, "polymer_820u_2v5_can"),
    ("memory", 1.2, 15.0, "buck_20a_700k_bus_gate", 1, "polymer_560u_2v5_can"),
    ("logic", 1.8, 11.0, "buck_15a_500k_bus_gate", 1, "polymer_560u_2v5_can"),
    ("optics", 3.3, 9.0, "buck_15a_500k_mid_bus_gate", 1, "polymer_560u_6v3_can"),
    ("aux", 2.5, 4.5, "buck_6a_500k_mid_bus_gate", 1, "polymer_560u_6v3_can"),
)
HEAD = """\
name = "pinned_six"
title = "Pinned board of six rails"
[input]
low_v = 36.0
high_v = 75.0
nominal_v = 53.5
[board]
area_cm2 = 300.0
stacks = ["8_layers_2_pairs_1_oz"]
bus_shared_squares = 1.5
bus_own_squares = 1.5
bus_area_cm2 = 60.0
[load]
coincidence = 1.0
growth_percent = 0.0
"""
BUS = """\
"bus_a.converter" = "wide_bus_150w"
"bus_a.count" = 1
"bus_a.fewest" = "all"
"bus_a.nominal_v" = 12.0
"bus_a.control" = "fixed"
"bus_a.bulk" = "polymer_270u_16v_can"
"bus_a.bulk_count" = 4
"bus_a.pairs" = 1
"bus_b.converter" = "none"
"board.stack" = "8_layers_2_pairs_1_oz"
"board.bias" = "none"
"board.supervisor" = "none"
"""


def study_text(input_v: float) -> str:
    """Return the study in which every load lasts as long, at one input voltage."""
    parts = [HEAD.replace("[board]", f"levels = [{{ voltage_v = {input_v}, share = 1.0 }}]\n[board]")]
    parts += [
        f'[[load.states]]\nname = "at {share:.3f}"\nhours = 1000.0\nutilisation = {share}\n' for share in LOADS
    ]
    parts += [f'[[rails]]\nname = "{name}"\nvoltage_v = {v}\nmax_current_a = {a}\n' for name, v, a, *_ in RAILS]
    parts.append("[incumbent]\n")
    for name, _, _, stage, phases, bank in RAILS:
        chosen = {"feed": "bus_a", "stage": stage, "fewest": "all", "bank": bank}
        parts += [f'"{name}.{key}" = "{value}"\n' for key, value in chosen.items()]
        parts += [f'"{name}.{key}" = {value}\n' for key, value in (("phases", phases), ("bank_count", 2), ("pairs", 1))]
    return "".join(parts) + BUS


@pytest.fixture(scope="module")
def problems(tmp_path_factory: pytest.TempPathFactory) -> dict[float, Problem]:
    folder: Path = tmp_path_factory.mktemp("pinned")
    found = {}
    for input_v in INPUTS:
        file = folder / f"at_{input_v:g}.toml"
        file.write_text(study_text(input_v), encoding="utf-8")
        loaded = load(file)
        found[input_v] = compile_problem(loaded.study, loaded.catalogue, reduce_load(loaded.study))
    return found


def loss_w(problem: Problem, bus_v: float) -> NDArray[np.float64]:
    """Return the board's loss at each load with the bus at a voltage, by direct physics, W."""
    at_v = replace(problem, grid_v=np.array([bus_v]))
    row = incumbent_row(problem)
    assert row is not None
    designs = Designs(problem.layout, row[None].copy())
    for field in ("nominal_v", "lower_v", "upper_v"):
        designs.bus(field)[:] = 0
    layout, bands = problem.layout, problem.layout.bands
    designs.rows[:, layout.volts] = 0
    designs.rows[:, layout.running_converters] = np.repeat(designs.bus("count"), bands, axis=1)
    designs.rows[:, layout.running_phases] = np.repeat(designs.rail("phases"), bands, axis=1)
    hardware = unpack(at_v, designs, at_v.states)
    solution = solve(at_v, at_v.states, hardware, DirectStages(at_v, at_v.states), exact=True)
    return solution.loss_w[0, at_v.states.of_kind(ENERGY)]


VOLTS = np.arange(5.75, 13.01, 0.05)


@pytest.fixture(scope="module")
def sweep(problems: dict[float, Problem]) -> dict[float, NDArray[np.float64]]:
    """Return, per input voltage, losses over bus voltage (rows) and load (columns), W."""
    return {key: np.array([loss_w(problem, float(v)) for v in VOLTS]) for key, problem in problems.items()}


def at_load(share: float) -> int:
    return LOADS.index(share)


def best_v(losses: NDArray[np.float64], load: int) -> float:
    return float(VOLTS[losses[:, load].argmin()])


def saving_w(losses: NDArray[np.float64], load: int) -> float:
    """Return what the best bus saves against 12 V, W."""
    habit = int(np.abs(VOLTS - HABIT_V).argmin())
    return float(losses[habit, load] - losses[:, load].min())


def test_the_fixture_is_the_board_described(problems: dict[float, Problem]) -> None:
    problem = problems[53.5]
    useful = problem.states.useful_w[problem.states.of_kind(ENERGY)]
    assert useful[-1] == pytest.approx(130.0, rel=0.02)
    assert problem.rails.voltage_v.max() <= 3.3
    assert problem.study.supply.isolation
    share = problem.rails.voltage_v * problem.states.rated_a
    share = share / share.sum()
    loop_ohm = 2.0 * problem.sheet_ohm[0] * share @ problem.bus_squares[0] @ share
    assert 3e-3 <= loop_ohm <= 5e-3


@pytest.mark.parametrize("input_v", INPUTS)
def test_at_a_third_of_the_load_a_low_bus_saves_a_watt_or_more(
    sweep: dict[float, NDArray[np.float64]], input_v: float
) -> None:
    third = at_load(1.0 / 3.0)
    assert best_v(sweep[input_v], third) <= 7.5
    assert 1.0 <= saving_w(sweep[input_v], third) <= 4.0


@pytest.mark.parametrize("input_v", INPUTS)
def test_at_sixty_percent_the_gain_is_small(sweep: dict[float, NDArray[np.float64]], input_v: float) -> None:
    assert 0.1 <= saving_w(sweep[input_v], at_load(0.6)) <= 1.0


@pytest.mark.parametrize("input_v", INPUTS)
def test_at_eighty_percent_twelve_volts_lie_in_the_flat_band(
    sweep: dict[float, NDArray[np.float64]], input_v: float
) -> None:
    losses = sweep[input_v][:, at_load(0.8)]
    flat = VOLTS[losses <= 1.01 * losses.min()]
    assert flat[0] <= HABIT_V <= flat[-1]


@pytest.mark.parametrize("input_v", INPUTS)
def test_the_best_voltage_rises_with_the_load(sweep: dict[float, NDArray[np.float64]], input_v: float) -> None:
    best = [best_v(sweep[input_v], column) for column in range(len(LOADS))]
    assert best == sorted(best)
    assert best[-1] - best[1] > 3.0


def test_the_input_voltage_hardly_moves_it(sweep: dict[float, NDArray[np.float64]]) -> None:
    """Over an input that doubles the best bus moves by a tenth of what the load moves it by."""
    for column in range(len(LOADS)):
        best = [best_v(sweep[input_v], column) for input_v in INPUTS]
        assert max(best) - min(best) <= 0.6
    by_load = [best_v(sweep[53.5], at_load(share)) for share in (1.0 / 3.0, 1.0)]
    by_input = [best_v(sweep[input_v], at_load(0.6)) for input_v in INPUTS]
    assert max(by_input) - min(by_input) <= 0.1 * (by_load[1] - by_load[0])


@pytest.mark.parametrize("share", [1.0 / 3.0, 0.6, 0.8])
def test_a_minimiser_over_direct_physics_agrees(
    problems: dict[float, Problem], sweep: dict[float, NDArray[np.float64]], share: float
) -> None:
    """scipy's bounded scalar minimiser, which knows nothing of grids, finds the same voltage and loss."""
    load = at_load(share)
    found = minimize_scalar(
        lambda volts: float(loss_w(problems[53.5], float(volts))[load]), bounds=(5.6, 13.2), method="bounded",
        options={"xatol": 1e-3},
    )  # fmt: skip
    assert found.success
    assert found.x == pytest.approx(best_v(sweep[53.5], load), abs=0.06)
    assert found.fun == pytest.approx(sweep[53.5][:, load].min(), rel=1e-4)
