"""Planes and pours of a floorplan: closed forms, the balance of power, what they change, and that nobody cheats."""

from __future__ import annotations

from dataclasses import replace
from functools import cache
from pathlib import Path

import numpy as np
import pytest

from archopt.errors import InputError
from archopt.inputs.floorplan_shape import Floorplan, Region, Spot, ViaField
from archopt.inputs.load import LoadedStudy, load
from archopt.model import planes
from archopt.model.compiled import incumbent_row
from archopt.model.evaluator import Detail, Evaluator
from archopt.model.hardware import unpack
from archopt.model.overlaps import overlaps
from archopt.model.parameters import FloatArray, IntArray
from archopt.model.planes import copper_degc, net_copper, perforated, solved_net, with_pours
from archopt.model.problem import Problem, compile_problem
from archopt.model.space import BUS_NAMES, Designs
from archopt.model.states import reduce_load
from archopt.model.vias import fields_limit_a, via_field_limit_a
from archopt.physics.copper import resistivity_ohm_m, sheet_resistance_ohm
from archopt.physics.sheet_discs import FaceDensity, face_density, worst_disc
from archopt.physics.sheet_fields import DISC_M, averaged_density_a_per_m, link_current_a

STUDY = Path(__file__).resolve().parents[2] / "studies" / "compute_sixteen" / "study.toml"
VIAS = ViaField(10, 0.3, 25.0, 1.6)


def rectangle(x0: float, y0: float, x1: float, y1: float) -> tuple[tuple[float, float], ...]:
    return ((x0, y0), (x1, y0), (x1, y1), (x0, y1))


def strip(length_mm: float, perforation: float = 0.0) -> tuple[Floorplan, Region]:
    """A pour 20 mm wide with a stage and a load over its whole width, so long between them."""
    outline = rectangle(0.0, 0.0, length_mm + 10.0, 20.0)
    region = Region("core", outline, (), 0, perforation, (), ("core",))
    spots = (
        Spot("output", "core", 2.5, 10.0, 5.0, 20.0, 0.0, 0.0, VIAS, "stages.core"),
        Spot("load", "core", length_mm + 7.5, 10.0, 5.0, 20.0, 0.0, 0.0, VIAS, "loads.core"),
    )
    return Floorplan("floorplan.toml", outline, (), (region,), spots), region


@cache
def loaded() -> LoadedStudy:
    return load(STUDY)


@cache
def problem_with(drawn: bool) -> Problem:
    """The compute study by its floorplan, or by the squares it states."""
    study = loaded().study if drawn else replace(loaded().study, floorplan=None)
    return compile_problem(study, loaded().catalogue, reduce_load(loaded().study))


def changed(problem: Problem, *, bus_pairs: int | None = None, volts: float | None = None, stack: str = "") -> IntArray:
    row = incumbent_row(problem)
    assert row is not None
    designs = Designs(problem.layout, row[None])
    if bus_pairs is not None:
        designs.bus("pairs")[0, 0] = bus_pairs
    if volts is not None:
        for field in ("nominal_v", "lower_v", "upper_v"):
            designs.bus(field)[0, 0] = int(np.abs(problem.grid_v - volts).argmin())
    if stack:
        row[problem.layout.board("stack")] = problem.stacks.names.index(stack)
    return row


@cache
def details(drawn: bool) -> Detail:
    """Today's design; its bus on 1 and on 3 pairs; at 9.5 V; in 3 oz."""
    problem = problem_with(drawn)
    heavy = "20_layers_6_pairs_3_oz"
    rows = [
        changed(problem), changed(problem, bus_pairs=1), changed(problem, bus_pairs=3), changed(problem, volts=9.5),
        changed(problem, stack=heavy),
    ]  # fmt: skip
    evaluator = Evaluator(problem)
    return evaluator.detail(evaluator.decide(np.array(rows)), exact=True, explain=True)


def plane_kwh(detail: Detail, drawn: bool) -> FloatArray:
    hours = problem_with(drawn).states.hours
    return np.asarray((detail.solution.plane_w.sum(axis=2) * hours).sum(axis=1) * 1e-3)


def test_a_strip_is_length_over_width() -> None:
    # closed form
    plan, region = strip(50.0)
    net = net_copper(plan, region, 60.0)
    assert net.squares[0, 0] == pytest.approx(2.5, rel=1e-6)
    assert net.area_m2 == pytest.approx(60e-3 * 20e-3, rel=1e-12)
    # evenly 1 A over 20 mm: 3 mm of it carry 0.15 A
    assert net.place_share.max() == pytest.approx(3.0 / 20.0, rel=1e-3)


def test_holes_raise_resistance_and_density() -> None:
    # closed form: effective medium of insulating discs in a sheet, (1 + p) / (1 - p)
    plan, region = strip(50.0, perforation=0.2)
    net = net_copper(plan, region, 60.0)
    assert net.squares[0, 0] == pytest.approx(2.5 * 1.2 / 0.8, rel=1e-6)
    assert net.place_share.max() == pytest.approx(3.0 / 20.0 / 0.8, rel=1e-3)
    assert perforated(0.0) == 1.0


def test_via_fields_add_in_parallel_barrels() -> None:
    # closed form: ten rings of 0.3 mm drill and 25 um wall, 1.6 mm long, at 20 degC
    plan, region = strip(50.0)
    net = net_copper(plan, region, 20.0)
    ring_m2 = np.pi * 25e-6 * (0.3e-3 - 25e-6)
    assert net.source_ohm == pytest.approx(1.7241e-8 * 1.6e-3 / ring_m2 / 10.0, rel=1e-9)
    assert net.own_ohm[0] == pytest.approx(net.source_ohm, rel=1e-12)


def test_holes_in_a_region_are_not_charged() -> None:
    plan, region = strip(50.0)
    hole = rectangle(20.0, 5.0, 30.0, 15.0)
    holed = replace(region, cutouts_mm=(hole, rectangle(25.0, 5.0, 32.0, 15.0)))
    net = net_copper(plan, holed, 60.0)
    assert net.area_m2 == pytest.approx((60.0 * 20.0 - 12.0 * 10.0) * 1e-6, rel=1e-3)
    assert net.squares[0, 0] > net_copper(plan, region, 60.0).squares[0, 0]


def test_bus_matrices_are_symmetric_and_positive_definite() -> None:
    matrices = problem_with(True).bus_squares
    assert matrices.shape == (2, 16, 16)
    for matrix in matrices:
        np.testing.assert_allclose(matrix, matrix.T, rtol=1e-12)
        assert np.linalg.eigvalsh(matrix).min() > 0.05
    assert np.abs(matrices[0] - matrices[1]).max() > 0.1


@pytest.mark.parametrize("bus", [0, 1])
def test_power_of_the_ports_is_the_heat_of_the_sheet(bus: int) -> None:
    """I^T R I, of the matrix the model uses, against the sum of I^2 R over every link of the sheet."""
    problem = problem_with(True)
    plan = problem.study.floorplan
    assert plan is not None
    region = plan.region(BUS_NAMES[bus])
    assert region is not None
    solution = solved_net(plan, region)
    amps = np.random.default_rng(3).uniform(0.0, 12.0, 16)
    links = np.nan_to_num(link_current_a(solution, amps))
    conductance = solution.network.conductance
    heat = float((links[conductance > 0] ** 2 / conductance[conductance > 0]).sum())
    order = [problem.rails.names.index(port) for port in solution.ports]
    drawn = np.zeros(16)
    drawn[order] = amps
    power = float(drawn @ problem.bus_squares[bus] @ drawn)
    assert power == pytest.approx(heat * perforated(region.perforation_share), rel=1e-7)


def test_plane_losses_of_the_board_are_of_that_matrix() -> None:
    """Every state: the plane's loss from the stage currents, two ways of copper and the vias."""
    problem, detail = problem_with(True), details(True)
    solution, planes = detail.solution, problem.planes
    on_bus = detail.hardware.on_bus[:, None, 0]
    amps = solution.stage_in_w / solution.stage_v * on_bus
    square = 2.0 * problem.sheet_ohm[detail.hardware.stack] / detail.designs.bus("pairs")[:, 0]
    expected = square[:, None] * np.einsum("psr,rq,psq->ps", amps, planes.squares[0], amps)
    expected += 2.0 * (planes.source_ohm[0] * amps.sum(axis=2) ** 2 + (planes.own_ohm[0] * amps**2).sum(axis=2))
    warm = resistivity_ohm_m(problem.states.ambient_degc + solution.plane_rise_k[..., 0])
    expected *= warm / resistivity_ohm_m(copper_degc(problem.study))
    np.testing.assert_allclose(solution.plane_w[..., 0], expected, rtol=1e-9)


def test_coupling_is_not_a_star_but_ranks_alike() -> None:
    """Figures of the shipped study, as they are: the shared trunk costs half as much again as the star it states."""
    star, drawn = details(False), details(True)
    loss = drawn.evaluation.objectives[:, 0]
    assert np.argsort(loss).tolist() == np.argsort(star.evaluation.objectives[:, 0]).tolist()
    ratio = plane_kwh(drawn, True) / plane_kwh(star, False)
    assert (ratio > 1.3).all()
    assert (ratio < 1.7).all()
    # uncoupled, every stage with its own resistance alone: blind to what others draw through the same trunk
    problem = problem_with(True)
    alone = np.stack([np.diag(np.diag(matrix)) for matrix in problem.bus_squares])
    blind = replace(problem, planes=replace(problem.planes, squares=alone))
    rows = drawn.designs.rows
    seen = Evaluator(blind).detail(rows, exact=True)
    assert (plane_kwh(drawn, True) > 2.5 * plane_kwh(seen, True)).all()
    worst = drawn.ledger.worst["bus drop"]
    assert worst.where is not None
    assert worst.where[0].startswith("storage_5v")
    assert star.ledger.worst["bus drop"].where is not None
    assert star.ledger.worst["bus drop"].where[0].startswith("core_east")


def test_crowding_is_never_understated() -> None:
    """What the model adds up over ports is at least the density of all of them together, and not far above it."""
    problem, detail = problem_with(True), details(True)
    plan = problem.study.floorplan
    assert plan is not None
    region = plan.region("bus_a")
    assert region is not None
    solution = solved_net(plan, region)
    order = [problem.rails.names.index(port) for port in solution.ports]
    s = int(np.argmax(problem.states.useful_w))
    amps = (detail.solution.stage_in_w[0, s] / detail.solution.stage_v[0, s])[order]
    alone = face_density(solution)
    both = FaceDensity((alone.along_x @ amps)[..., None], (alone.along_y @ amps)[..., None], alone.open_x, alone.open_y)
    density = np.nan_to_num(averaged_density_a_per_m(solution, amps))
    x_m, y_m = solution.grid.centres_m()
    true = 0.0
    for cell in np.argsort(-density.ravel())[:20:4]:
        row, column = np.divmod(cell, solution.grid.columns)
        found = worst_disc(solution, both, np.array([x_m[column], y_m[row]]), np.ones(1), DISC_M)[0]
        true = max(true, found * DISC_M / (1.0 - region.perforation_share))
    discs = problem.planes.place_width_m[0] == DISC_M
    summed = float((problem.planes.place_share[0][discs][:, order] @ amps).max())
    assert true <= summed * (1.0 + 1e-9)
    assert summed <= 1.15 * true


def test_one_width_serves_every_thickness() -> None:
    # closed form: IPC-2221 permits width^0.725, so a place with a share of the current is as a wider trace with all
    problem = problem_with(True)
    plan = problem.study.floorplan
    assert plan is not None
    region = plan.region("core_west")
    assert region is not None
    net = net_copper(plan, region, copper_degc(problem.study))
    k = problem.rails.names.index("core_west")
    for thick_um in (24.9, 55.7, 86.6):
        mil2 = net.place_width_m * 1e6 / 25.4 * thick_um / 25.4
        limits = 0.024 * 20.0**0.44 * mil2**0.725 / net.place_share[:, 0]
        wide = problem.rails.copper_width_m[k] * 1e6 / 25.4 * thick_um / 25.4
        assert 0.024 * 20.0**0.44 * wide**0.725 == pytest.approx(float(limits.min()), rel=1e-9)


def test_copper_needs_area() -> None:
    """A net drawn wider loses less and is charged more; the region that sets the resistance is the one charged."""
    problem = problem_with(True)
    plan = problem.study.floorplan
    assert plan is not None
    core = plan.region("core_west")
    assert core is not None
    grown = replace(core, outline_mm=rectangle(50.0, 49.0, 170.0, 99.0))
    other = replace(plan, regions=tuple(grown if region is core else region for region in plan.regions))
    wider = compile_problem(replace(problem.study, floorplan=other), loaded().catalogue, problem.states)
    k = problem.rails.names.index("core_west")
    assert wider.rails.squares[k] < problem.rails.squares[k]
    assert wider.rails.copper_area_m2[k] == pytest.approx(120.0 * 50.0 * 1e-6, rel=1e-9)
    row = details(True).designs.rows[:1]
    before, after = (Evaluator(p).detail(row, exact=True).ledger.worst["layer budget"] for p in (problem, wider))
    assert float(after.value[0] - before.value[0]) == pytest.approx(4 * 120.0 * 6.0 / 100.0, rel=1e-9)


def test_two_nets_on_one_region_are_charged_twice() -> None:
    problem = problem_with(True)
    row = details(True).designs.rows[:1].copy()
    designs = Designs(problem.layout, row)
    one = Evaluator(problem).detail(row, exact=True).ledger.worst["layer budget"]
    feeds, r = designs.rail("feed"), problem.rails.names.index("memory_2v5")
    feeds[0, r] = 2
    designs.bus("converter")[0, 1], designs.bus("pairs")[0, 1] = designs.bus("converter")[0, 0], 3
    two = Evaluator(problem).detail(row, exact=True).ledger.worst["layer budget"]
    # both buses are drawn on the same I of copper
    assert float(two.value[0] - one.value[0]) == pytest.approx(3e4 * problem.planes.area_m2[1], rel=1e-9)


def test_ground_is_not_free() -> None:
    """Half of every loop is the way back."""
    problem = problem_with(True)
    designs = Designs(problem.layout, details(True).designs.rows[:1])
    hardware = unpack(problem, designs, problem.states)
    stack = int(designs.board("stack")[0])
    thickness = float(problem.stacks.thickness_m[stack])
    one = float(sheet_resistance_ohm(thickness, copper_degc(problem.study)))
    assert float(hardware.plane_ohm[0, 0]) == pytest.approx(2.0 * one / 2, rel=1e-12)
    pours = 2.0 * (problem.rails.squares * one / designs.rail("pairs")[0] + problem.rails.pour_via_ohm)
    np.testing.assert_allclose(hardware.pour_ohm[0], pours, rtol=1e-12)


def test_layers_come_in_pairs_the_stack_has() -> None:
    """A net on more pairs than the stack has is no design, however thin."""
    problem = problem_with(True)
    row = details(True).designs.rows[:1].copy()
    row[0, problem.layout.board("stack")] = problem.stacks.names.index("10_layers_3_pairs_1_oz")
    ledger = Evaluator(problem).detail(row, exact=True).ledger.worst
    assert float(ledger["choices that fit together"].value[0]) >= 2.0
    assert (problem.stacks.layers - 2 * problem.stacks.pairs >= 2).all()


def test_a_bus_feeds_only_what_it_reaches() -> None:
    problem = problem_with(True)
    plan = problem.study.floorplan
    assert plan is not None
    reached = ("core_east", "core_west")
    short = tuple(
        replace(region, rails=reached) if region.net == "bus_b" else region for region in plan.regions
    )
    less = compile_problem(
        replace(problem.study, floorplan=replace(plan, regions=short)), loaded().catalogue, problem.states
    )
    cores = [problem.rails.names.index(name) for name in ("core_east", "core_west")]
    others = [k for k in range(16) if k not in cores]
    assert not less.feed_ok[others, :, 2].any()
    assert less.feed_ok[cores, :, 2].any()
    assert np.linalg.eigvalsh(less.bus_squares[1]).min() > 0.05


def test_a_floorplan_of_another_board_is_refused(tmp_path: Path) -> None:
    for file in STUDY.parent.iterdir():
        (tmp_path / file.name).write_bytes(file.read_bytes())
    study = tmp_path / "study.toml"
    study.write_text(study.read_text().replace("area_cm2 = 1000.0", "area_cm2 = 900.0"))
    with pytest.raises(InputError, match="the outline encloses 1000 cm2"):
        load(study)


def test_a_via_field_carries_what_its_barrels_do() -> None:
    # closed form: 0.024 dT^0.44 A^0.725, A the ring of 0.3 mm drill and 25 um wall in square mil; ten of them
    ring_mil2 = np.pi * 25.0 * (300.0 - 25.0) / 25.4**2
    one = 0.024 * 20.0**0.44 * ring_mil2**0.725
    assert via_field_limit_a(VIAS, 20.0) == pytest.approx(10.0 * one, rel=1e-12)
    # a hole filled with copper is a wire of the drill's section
    filled = ViaField(1, 0.3, 200.0, 1.6)
    wire = 0.024 * 20.0**0.44 * (np.pi * 150.0**2 / 25.4**2) ** 0.725
    assert via_field_limit_a(filled, 20.0) == pytest.approx(wire, rel=1e-12)


def test_fields_of_one_port_share_as_they_conduct() -> None:
    """Two alike carry double; a long one beside a short one of the same holes takes its part and no more."""
    plan, region = strip(50.0)
    one = fields_limit_a(plan, region, 20.0)
    assert one["source"] == pytest.approx(via_field_limit_a(VIAS, 20.0), rel=1e-12)
    long = replace(plan.spots[0], vias=ViaField(10, 0.3, 25.0, 3.2), place="stages.core again")
    both = fields_limit_a(replace(plan, spots=(*plan.spots, long)), region, 20.0)
    assert both["source"] == pytest.approx(1.5 * one["source"], rel=1e-9)


def test_too_few_vias_are_told_with_their_place() -> None:
    problem = problem_with(True)
    plan = problem.study.floorplan
    assert plan is not None
    poor = tuple(
        replace(spot, vias=replace(spot.vias, count=4)) if (spot.kind, spot.of) == ("load", "network_1v0") else spot
        for spot in plan.spots
    )
    rails = with_pours(replace(problem.study, floorplan=replace(plan, spots=poor)), problem.rails)
    row = details(True).designs.rows[:1]
    worst = Evaluator(replace(problem, rails=rails)).detail(row, exact=True, explain=True).ledger.worst["via ampacity"]
    assert worst.where is not None
    assert worst.where[0].startswith("network_1v0 pour; ")
    assert float(worst.bound[0]) == pytest.approx(via_field_limit_a(replace(VIAS, count=4), 20.0), rel=1e-9)
    assert worst.slack[0] < 0.0
    sound = details(True).ledger.worst["via ampacity"]
    assert sound.slack[0] >= 0.0


def test_nets_above_one_another_share_the_pairs_of_the_place() -> None:
    """Bus A and bus B lie on the same ground: three pairs each do not fit into five, whatever area is left."""
    problem = problem_with(True)
    assert problem.overlaps.holds.tolist() == [[1.0, 1.0, *[0.0] * 16]]
    row = details(True).designs.rows[:1].copy()
    designs = Designs(problem.layout, row)
    designs.rail("feed")[0, problem.rails.names.index("memory_2v5")] = 2
    designs.bus("converter")[0, 1] = designs.bus("converter")[0, 0]
    designs.bus("pairs")[0] = 3, 3
    ledger = Evaluator(problem).detail(row, exact=True, explain=True).ledger.worst
    assert float(ledger["layer budget"].slack[0]) > 0.0
    crowd = ledger["crowding"]
    assert (float(crowd.value[0]), float(crowd.bound[0])) == (6.0, 5.0)
    assert crowd.where is not None
    assert crowd.where[0].startswith("(10, 6) mm")
    assert details(True).ledger.worst["crowding"].slack[0] == 3.0


def test_overlaps_are_the_places_with_most_nets() -> None:
    outline = rectangle(0.0, 0.0, 100.0, 50.0)
    hole = rectangle(40.0, 0.0, 60.0, 50.0)
    regions = (
        Region("bus_a", rectangle(0.0, 0.0, 60.0, 50.0), (), 0, 0.0, (), ("core", "io")),
        Region("core", rectangle(20.0, 0.0, 90.0, 25.0), (hole,), 0, 0.0, (), ("core",)),
        Region("io", rectangle(30.0, 10.0, 100.0, 50.0), (), 0, 0.0, (), ("io",)),
    )
    found = overlaps(Floorplan("floorplan.toml", outline, (), regions, ()), ("core", "io", "aux"))
    assert found.holds.tolist() == [[1.0, 0.0, 1.0, 1.0, 0.0]]
    x, y = (float(part) for part in found.names[0].strip("() m").split(","))
    assert 29.0 <= x <= 41.0
    assert 9.0 <= y <= 26.0
    assert overlaps(None, ("core",)).names == ()


def test_no_field_is_solved_once_a_problem_is_compiled(monkeypatch: pytest.MonkeyPatch) -> None:
    """Decisions, tables, direct physics and the checks only scale what was found: the sheets are never touched."""
    problem = problem_with(True)
    rows = details(True).designs.rows

    def refuse(*_: object, **__: object) -> None:
        raise AssertionError("a field was solved")

    for name in ("solve", "solved_net", "net_copper", "crowded"):
        monkeypatch.setattr(planes, name, refuse)
    evaluator = Evaluator(problem)
    decided = evaluator.decide(rows)
    assert np.isfinite(evaluator.evaluate(decided).objectives).all()
    assert np.isfinite(evaluator.evaluate(decided, exact=True).objectives).all()
    with pytest.raises(AssertionError, match="a field was solved"):
        planes.bus_planes(problem.study, problem.rails.names)
