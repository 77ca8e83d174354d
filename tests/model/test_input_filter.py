"""The input filter against the negative input resistance of all converters, where the study says what it is."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from equivalence.shipped import decided, evaluator_of

from archopt.model.board import DirectStages
from archopt.model.bus_stability import input_peak_ohm
from archopt.model.evaluator import Detail, evaluate_in
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.model.states import FALLBACK, JUMP, MIX
from archopt.physics.averaged_bus import BusCircuit, bus_eigenvalues
from archopt.physics.bus_network import stable_conductance_s

STUDY = "telecom_six"
LIMIT = "input impedance margin"


def with_filter(**filter_: float) -> Problem:
    problem = evaluator_of(STUDY).problem
    supply = replace(problem.study.supply, **filter_)
    return replace(problem, study=replace(problem.study, supply=supply))


def detail_of(problem: Problem) -> Detail:
    designs = Designs(problem.layout, decided(STUDY, 30, 11)[-3:])
    stages = DirectStages(problem, problem.states)
    return evaluate_in(problem, problem.states, designs, stages, exact=True, explain=True)


def swept_ohm(problem: Problem) -> float:
    """Return the largest impedance by a fine sweep of R + sL beside C with its resistance and the damping bank."""
    supply, path = problem.study.supply, problem.path
    w = np.geomspace(1e2, 1e9, 200001)
    admittance = 1.0 / (path.resistance_ohm + 1j * w * path.inductance_h)
    admittance += 1.0 / (supply.filter_esr_mohm * 1e-3 + 1.0 / (1j * w * supply.filter_capacitance_uf * 1e-6))
    if supply.filter_damper_uf:
        lossy = supply.filter_damper_mohm * 1e-3 + 1.0 / (1j * w * supply.filter_damper_uf * 1e-6)
        admittance += 1.0 / lossy
    return max(float(np.abs(1.0 / admittance).max()), path.resistance_ohm)


@pytest.mark.parametrize(
    "filter_",
    [
        {"filter_capacitance_uf": 4.7, "filter_esr_mohm": 2.0},
        {"filter_capacitance_uf": 22.0, "filter_esr_mohm": 60.0},
        {"filter_capacitance_uf": 4.7, "filter_esr_mohm": 2.0, "filter_damper_uf": 47.0, "filter_damper_mohm": 400.0},
    ],
)
def test_margin_of_a_stated_filter(filter_: dict[str, float]) -> None:
    """20 log10 of V^2/P over the peak, the least of all states with the most load; never at light load."""
    problem = with_filter(**filter_)
    detail = detail_of(problem)
    states, solution = problem.states, detail.solution
    peak = swept_ohm(problem)
    assert input_peak_ohm(problem) == pytest.approx(peak, rel=5e-3)
    heavy = np.concatenate([states.of_kind(kind) for kind in (MIX, JUMP, FALLBACK)])
    drawn_w = (solution.input_w - solution.path_w)[:, heavy]
    margin = 20.0 * np.log10(solution.node_v[:, heavy] ** 2 / drawn_w / peak)
    worst = detail.ledger.worst[LIMIT]
    np.testing.assert_allclose(worst.value, margin.min(axis=1), atol=0.05)
    assert worst.where is not None
    assert all("low input" in where for where in worst.where)


def test_a_filter_without_loss_is_refused_and_its_damping_bank_mends_it() -> None:
    bare = {"filter_capacitance_uf": 1.0, "filter_esr_mohm": 1.0}
    refused, mended, unsaid = (
        detail_of(with_filter(**filter_)).ledger.worst[LIMIT].slack
        for filter_ in (bare, {**bare, "filter_damper_uf": 10.0, "filter_damper_mohm": 1200.0}, {})
    )
    assert (mended > refused + 10.0).all()
    assert (unsaid > mended).all()


def test_a_filter_with_margin_is_stable_in_every_mode() -> None:
    """Eigenvalues of the filter with a constant-power load: below the impedance limit every mode decays."""
    problem = with_filter(
        filter_capacitance_uf=4.7, filter_esr_mohm=2.0, filter_damper_uf=22.0, filter_damper_mohm=500.0
    )
    path, low_v = problem.path, problem.study.supply.low_v
    circuit = BusCircuit(
        low_v, 4.7e-6, 2e-3, 1e-8, 0.0, 0.0, path.resistance_ohm, path.inductance_h, follows=False, damper_f=22e-6,
        damper_ohm=0.5,
    )  # fmt: skip
    within_w = low_v**2 / input_peak_ohm(problem)
    assert bus_eigenvalues(circuit, 0.999 * within_w)[0] < 0.0
    most_s = stable_conductance_s(path.resistance_ohm, path.inductance_h, 4.7e-6, 22e-6, 0.5)
    assert float(most_s) * low_v**2 >= 0.99 * within_w  # which leaves the 2 mohm out
