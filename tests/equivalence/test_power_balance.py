"""Input power equals useful power and every listed loss, in every state; nothing is lost or counted twice."""

from __future__ import annotations

import numpy as np
import pytest

from archopt.model.evaluator import Detail, Evaluator
from archopt.model.loss_lists import all_losses
from equivalence.shipped import STUDIES, decided, evaluator_of

BALANCE = 1e-9
COUNT = 30
SEED = 31


def useful_w(evaluator: Evaluator, detail: Detail, p: int, s: int) -> float:
    """Return what reaches the loads: rail voltage less the drop of an unsensed pour, times the load's current.

    Taps lie behind the stage they tap; their series resistance lowers what they deliver.
    """
    states, rails = evaluator.states, evaluator.problem.rails
    total = 0.0
    for r, volts in enumerate(rails.voltage_v):
        total += float(volts * states.current_a[s, r])
        if not rails.remote_sense[r]:
            total -= float(detail.solution.current_a[p, s, r] ** 2 * detail.solution.pour_ohm[p, s, r])
    return total - float(states.tap_w[s])


@pytest.mark.parametrize("name", STUDIES)
def test_input_is_useful_power_and_listed_losses(name: str) -> None:
    evaluator = evaluator_of(name)
    detail = evaluator.detail(decided(name, COUNT, SEED)[::3], exact=True)
    input_w = detail.solution.input_w
    for p, parts in enumerate(all_losses(evaluator.problem, detail)):
        listed = sum(np.asarray(watts) for mechanisms in parts.values() for watts in mechanisms.values())
        out = np.array([useful_w(evaluator, detail, p, s) for s in range(input_w.shape[1])])
        assert (np.abs(out + listed - input_w[p]) <= BALANCE * input_w[p]).all(), p


@pytest.mark.parametrize("name", STUDIES)
def test_no_listed_loss_is_negative_or_empty(name: str) -> None:
    evaluator = evaluator_of(name)
    detail = evaluator.detail(decided(name, COUNT, SEED)[::3], exact=True)
    for parts in all_losses(evaluator.problem, detail):
        for part, mechanisms in parts.items():
            for mechanism, watts in mechanisms.items():
                assert (np.asarray(watts) >= -1e-9).all(), (part, mechanism)


@pytest.mark.parametrize("name", STUDIES)
def test_loss_of_a_state_is_input_less_useful(name: str) -> None:
    evaluator = evaluator_of(name)
    detail = evaluator.detail(decided(name, COUNT, SEED)[::3], exact=True)
    solution = detail.solution
    for p in range(len(solution.input_w)):
        for s in range(len(evaluator.states.name)):
            expected = solution.input_w[p, s] - useful_w(evaluator, detail, p, s)
            assert solution.loss_w[p, s] == pytest.approx(expected, rel=1e-9)


@pytest.mark.parametrize("name", STUDIES)
def test_copper_between_bus_and_stages_takes_what_the_drops_say(name: str) -> None:
    """The sum of each stage's drop times its current is the loss of the plane, whatever the matrix."""
    evaluator = evaluator_of(name)
    detail = evaluator.detail(decided(name, COUNT, SEED)[::3], exact=True)
    solution, hardware = detail.solution, detail.hardware
    amps = solution.stage_in_w / solution.stage_v
    for bus in range(2):
        on = hardware.on_bus[:, bus, None, :] & ~evaluator.states.off
        floor = solution.stage_v > 0.31 * solution.bus_v[..., bus : bus + 1]
        whole = (floor | ~on).all(axis=2)
        drop_w = np.where(on, (solution.bus_v[..., bus : bus + 1] - solution.stage_v) * amps, 0.0).sum(axis=2)
        np.testing.assert_allclose(drop_w[whole], solution.plane_w[..., bus][whole], rtol=1e-6, atol=1e-9)
