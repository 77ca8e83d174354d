"""Input power equals useful power and every listed loss, in every state; nothing is lost or counted twice."""

from __future__ import annotations

import numpy as np
import pytest

from archopt.model.evaluator import Detail, Evaluator
from archopt.model.explain import year_by_mechanism
from archopt.model.loss_lists import all_losses
from archopt.model.parameters import FIXED_RATIO
from archopt.model.space import Designs
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


@pytest.mark.parametrize("name", STUDIES)
def test_the_year_balances_with_what_moving_the_buses_takes(name: str) -> None:
    """Input energy of every state with hours and of every move of a bus is load plus all that is listed for the year.

    A move upwards takes C (V2^2 - V1^2) / 2, C of all that hangs on the bus new and at the top of its tolerance.
    """
    evaluator = evaluator_of(name)
    states, problem = evaluator.states, evaluator.problem
    rows = decided(name, COUNT, SEED)
    designs = Designs(problem.layout, rows)
    moving = np.flatnonzero((np.diff(designs.volts, axis=2) > 0).any(axis=(1, 2)))[:6]
    detail = evaluator.detail(rows[moving], exact=True)
    table, counts = problem.capacitors, states.transitions_per_year
    hours = np.where(np.isin(np.arange(len(states.hours)), states.with_hours), states.hours, 0.0)
    assert float(hours.sum()) == pytest.approx(float(states.hours.sum()), rel=1e-12)
    moved = 0.0
    for p, parts in enumerate(all_losses(problem, detail)):
        joule, one = 0.0, designs.rows[moving[p]]
        choice = Designs(problem.layout, one[None])
        for bus in range(2):
            index = int(detail.hardware.converter[p, bus])
            if index < 0 or problem.converters.kind[index] == FIXED_RATIO:
                continue
            farad = 0.0
            for r in np.flatnonzero(detail.hardware.on_bus[p, bus]):
                stage = int(choice.rail("stage")[0, r])
                farad += float(problem.stages.input_capacitance_f[stage]) * int(choice.rail("phases")[0, r])
            for kind, first in (("bulk", 0), ("damper", 1)):
                bank = int(choice.bus(kind)[0, bus]) - first
                if bank >= 0:
                    count = int(problem.bank_counts[choice.bus(f"{kind}_count")[0, bus]])
                    farad += count * float(table.capacitance_f[bank] * (1.0 + table.tolerance[bank]))
            volts = [float(problem.grid_v[k]) for k in choice.volts[0, bus]]
            for a, low in enumerate(volts):
                joule += sum(float(counts[a, b]) * farad * (v**2 - low**2) / 2 for b, v in enumerate(volts) if v > low)
        transition_kwh = float(detail.transition_kwh[p])
        assert transition_kwh == pytest.approx(joule / 3.6e6, rel=BALANCE, abs=1e-15)
        year = year_by_mechanism(parts, states.hours, transition_kwh)
        listed_kwh = sum(kwh for mechanisms in year.values() for kwh in mechanisms.values())
        load_kwh = sum(useful_w(evaluator, detail, p, s) * float(hours[s]) * 1e-3 for s in states.with_hours)
        input_kwh = float(detail.solution.input_w[p] @ hours) * 1e-3 + joule / 3.6e6
        assert abs(load_kwh + listed_kwh - input_kwh) <= BALANCE * input_kwh
        assert listed_kwh == pytest.approx(float(detail.evaluation.objectives[p, 0]), rel=BALANCE)
        moved += joule
    assert len(moving)
    assert (moved > 0.0) == bool(counts.any())
