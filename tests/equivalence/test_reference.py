"""The vectorised evaluator against the slow scalar reference, written from the same equations on its own."""

from __future__ import annotations

from functools import cache

import numpy as np
import pytest

from archopt.model.limits import INDEX
from archopt.model.states import JUMP
from equivalence.reference import Reference
from equivalence.shipped import STUDIES, decided, evaluator_of, kinds_wanted

COUNT = 18
SEED = 20
EXACT = 1e-9
BY_TABLE = 1e-3


@cache
def references(name: str) -> tuple[Reference, ...]:
    problem = evaluator_of(name).problem
    return tuple(Reference(problem, row) for row in decided(name, COUNT, SEED))


@pytest.mark.parametrize("name", STUDIES)
def test_objectives_equal_the_reference(name: str) -> None:
    evaluation = evaluator_of(name).evaluate(decided(name, COUNT, SEED), exact=True)
    for p, reference in enumerate(references(name)):
        assert evaluation.objectives[p, 0] == pytest.approx(reference.energy_kwh(), rel=EXACT)
        assert evaluation.objectives[p, 1] == pytest.approx(reference.cost(), rel=EXACT)
        droop = reference.droop_percent()
        assert evaluation.droop_exact[p] == pytest.approx(droop, rel=EXACT)
        assert evaluation.objectives[p, 2] == max(60.0, 2.0 * np.ceil(round(droop, 9) / 2.0))


@pytest.mark.parametrize("name", STUDIES)
def test_every_state_equals_the_reference(name: str) -> None:
    solution = evaluator_of(name).detail(decided(name, COUNT, SEED), exact=True).solution
    for p, reference in enumerate(references(name)):
        for s, result in enumerate(reference.results):
            close = lambda value: pytest.approx(value, rel=EXACT, abs=1e-12)  # noqa: E731
            assert solution.input_w[p, s] == close(result.input_w)
            assert solution.path_w[p, s] == close(result.path_w)
            assert solution.loss_w[p, s] == close(result.loss_w)
            assert solution.node_v[p, s] == close(result.node_v)
            on = ~reference.states.off[s]
            np.testing.assert_allclose(solution.stage_v[p, s][on], np.array(result.stage_v)[on], rtol=EXACT)
            np.testing.assert_allclose(solution.stage_in_w[p, s], result.stage_in_w, rtol=EXACT, atol=1e-12)
            for bus in reference.buses:
                k = ("bus_a", "bus_b").index(bus.name)
                assert solution.bus_v[p, s, k] == close(result.bus_v[bus.name])
                assert solution.converter_loss_w[p, s, k] == close(result.converter_w[bus.name])
                assert solution.plane_w[p, s, k] == close(result.plane_w[bus.name])


@pytest.mark.parametrize("name", STUDIES)
def test_dip_equals_the_reference(name: str) -> None:
    solution = evaluator_of(name).detail(decided(name, COUNT, SEED), exact=True).solution
    for p, reference in enumerate(references(name)):
        for bus in reference.buses:
            k = ("bus_a", "bus_b").index(bus.name)
            np.testing.assert_allclose(solution.dip_v[p, k], reference.dips_v[bus.name], rtol=EXACT)


@pytest.mark.parametrize("name", STUDIES)
def test_tables_agree_with_the_reference_where_stages_can_run(name: str) -> None:
    """Stages far outside their input range lie beyond the tables; what cannot be built needs no figure."""
    evaluator = evaluator_of(name)
    rows = decided(name, COUNT, SEED)
    fast = evaluator.evaluate(rows)
    runs = fast.slack[:, INDEX["stage input range"]] >= -1.0
    runs &= fast.slack[:, INDEX["choices that fit together"]] >= 0.0
    assert runs.sum() >= COUNT // 6  # drawn at random, few keep every stage inside its range at the fall-back too
    for p in np.flatnonzero(runs):
        reference = references(name)[p]
        assert fast.objectives[p, 0] == pytest.approx(reference.energy_kwh(), rel=BY_TABLE)
        assert fast.objectives[p, 1] == pytest.approx(reference.cost(), rel=EXACT)
        droop = reference.droop_percent()
        # far beyond its budget a rail has no headroom left, and droop amplifies every millivolt
        assert fast.droop_exact[p] == pytest.approx(droop, rel=BY_TABLE * max(1.0, droop / 200.0))


def test_every_kind_of_design_is_among_them() -> None:
    seen: set[str] = set()
    for name in STUDIES:
        for reference in references(name):
            seen |= reference.kinds()
    assert kinds_wanted() <= seen, kinds_wanted() - seen


def test_the_jump_is_solved_at_the_dipped_bus() -> None:
    """Guards the comparison itself: the dip must matter in the states it is meant for."""
    reference = next(r for r in references("telecom_six") if r.buses and not r.buses[0].follows_input)
    bus = reference.buses[0]
    jump = [s for s in range(len(reference.results)) if reference.states.kind[s] == JUMP]
    for band, s in enumerate(jump):
        dipped = reference.set_v(s, bus) - reference.dips_v[bus.name][band]
        assert reference.results[s].bus_v[bus.name] == pytest.approx(dipped, rel=1e-12)
        assert reference.set_v(s, bus) < bus.volts[band]
        assert dipped < bus.volts[band]
