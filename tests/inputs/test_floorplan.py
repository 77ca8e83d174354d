"""The floorplan file: what it gives, and every fault told at once with its place."""

from __future__ import annotations

from typing import TYPE_CHECKING

import pytest

if TYPE_CHECKING:
    from conftest import Desk

PLAN = """\
outline_mm = [[0, 0], [200, 0], [200, 150], [0, 150]]
cutouts_mm = [[[190, 140], [195, 140], [195, 145], [190, 145]]]
perforation_share = 0.1

[vias]
drill_mm = 0.3
plating_um = 25

[[converters]]
bus = "bus_a"
x_mm = 20
y_mm = 75
width_mm = 16
height_mm = 12
vias.count = 40

[[stages]]
rail = "core"
x_mm = 100
y_mm = 40
width_mm = 30
height_mm = 6

[[stages]]
rail = "io"
side = "input"
x_mm = 100
y_mm = 110
diameter_mm = 8

[[loads]]
rail = "core"
x_mm = 150
y_mm = 40
width_mm = 20
height_mm = 20

[[nets]]
name = "bus_a"
region_mm = [[5, 20], [120, 20], [120, 130], [5, 130]]

[[nets]]
name = "core"
region_mm = [[80, 20], [180, 20], [180, 60], [80, 60]]
necks = [{ name = "waist", from_mm = [125, 10], to_mm = [125, 70] }]
"""


def study_with(study_text: str) -> str:
    return 'floorplan = "floorplan.toml"\n' + study_text


def faults(desk: Desk, study_text: str, plan: str) -> list[str]:
    desk.write("floorplan.toml", plan)
    return desk.problems(study_with(study_text))


def test_what_a_floorplan_says_reaches_the_study(desk: Desk, study_text: str) -> None:
    desk.write("floorplan.toml", PLAN)
    study = desk.load(study_with(study_text)).study
    plan = study.floorplan
    assert plan is not None
    assert [region.net for region in plan.regions] == ["bus_a", "core"]
    kinds = [(spot.kind, spot.of) for spot in plan.spots]
    assert kinds == [("converter", "bus_a"), ("input", "core"), ("output", "core"), ("input", "io"), ("load", "core")]
    bus = plan.region("bus_a")
    assert bus is not None
    assert bus.rails == ("core", "io")
    assert bus.cutouts_mm == plan.cutouts_mm
    assert plan.spots[0].vias.count == 40
    # a hole every 2 mm both ways under 30 x 6 mm
    assert plan.spots[1].vias.count == 45
    assumed = {known.place: known for known in study.assumed}
    assert assumed["floorplan.vias.length_mm"].value == "1.6"
    assert "floorplan.vias.drill_mm" not in assumed


def test_without_a_floorplan_nothing_changes(desk: Desk, study_text: str) -> None:
    assert desk.load(study_text).study.floorplan is None


def test_the_floorplan_counts_in_the_hash(desk: Desk, study_text: str) -> None:
    desk.write("floorplan.toml", PLAN)
    first = desk.load(study_with(study_text)).study.study_hash
    desk.write("floorplan.toml", PLAN.replace("perforation_share = 0.1", "perforation_share = 0.2"))
    assert desk.load(study_with(study_text)).study.study_hash != first


SQUARE = "[[5, 20], [120, 20], [120, 130], [5, 130]]"
BAD = {
    "outline crosses itself": (
        ("[200, 150], [0, 150]]\ncut", "[0, 150], [200, 150]]\ncut"),
        "floorplan.toml: outline_mm: self-crossing outline",
    ),
    "another size than the board": (
        ("[200, 0], [200, 150]", "[220, 0], [220, 150]"),
        "floorplan.toml: outline_mm: the outline encloses 330 cm2, but board.area_cm2 of the study is 300 cm2",
    ),
    "region reaches out": (
        ("[[5, 20], [120, 20]", "[[-5, 20], [120, 20]"), "nets.bus_a.region_mm: reaches outside the board's outline",
    ),
    "region crosses itself": (
        (SQUARE, "[[5, 20], [120, 130], [120, 20], [5, 130]]"), "nets.bus_a.region_mm: self-crossing outline",
    ),
    "region touches itself": (
        (SQUARE, "[[5, 20], [120, 20], [120, 130], [60, 20], [5, 130]]"), "nets.bus_a.region_mm: zero-width neck",
    ),
    "pad outside its region": (
        ("x_mm = 150\ny_mm = 40", "x_mm = 178\ny_mm = 40"), "loads.core: pad outside the copper: the pad at (178.000",
    ),
    "pad outside the board": (
        ("x_mm = 20\ny_mm = 75", "x_mm = 2\ny_mm = 75"), "converters.bus_a: pad outside the copper",
    ),
    "pads in each other's way": (
        ("x_mm = 100\ny_mm = 110", "x_mm = 26\ny_mm = 75"),
        "stages.io: overlapping pads: the pad at (26.000, 75.000) mm touches a pad of bus_a",
    ),
    "load on its own stage": (
        ("x_mm = 150\ny_mm = 40", "x_mm = 110\ny_mm = 40"), "loads.core: overlapping pads",
    ),
    "island": (
        (f"region_mm = {SQUARE}\n", f"region_mm = {SQUARE}\ncutouts_mm = [[[0, 90], [130, 90], [130, 92], [0, 92]]]\n"),
        "stages.io: stands on an island: no copper of bus_a joins it to its converter",
    ),
    "load on an island": (
        ('name = "core"\nregion', 'name = "core"\ncutouts_mm = [[[130, 10], [132, 10], [132, 70], [130, 70]]]\nregion'),
        "loads.core: stands on an island: no copper of core joins it to its stage",
    ),
    "neck off the copper": (("from_mm = [125, 10]", "from_mm = [125, 190]"), "nets.core.necks.waist: zero-width neck"),
    "neck without length": (("to_mm = [125, 70]", "to_mm = [125, 10]"), "nets.core.necks.waist: zero-width neck"),
    "unknown net": (('name = "core"\nregion', 'name = "cor"\nregion'), "there is no net 'cor'; did you mean 'core'?"),
    "unknown rail": (('rail = "io"', 'rail = "oi"'), "stages.oi.rail: there is no rail 'oi'; there is core, io"),
    "unknown key": (("perforation_share", "perforation"), "floorplan.toml: perforation: unknown; did you mean"),
    "no shape": (
        ("diameter_mm = 8\n", ""), "floorplan.toml: stages.io: a pad has width_mm and height_mm, or diameter_mm",
    ),
    "two shapes": (("diameter_mm = 8\n", "diameter_mm = 8\nwidth_mm = 3\nheight_mm = 3\n"), "a pad has width_mm and"),
    "no stage": (('rail = "io"\nside', 'rail = "core"\nside'), "it has a plane but not the stage of io"),
    "no converter": (('bus = "bus_a"', 'bus = "bus_b"'), "nets.bus_a: no converter feeds it"),
    "no load": (('[[loads]]\nrail = "core"', '[[loads]]\nrail = "io"'), "nets.core: its load has no place"),
    "a region twice": (('name = "core"\nregion', 'name = "bus_a"\nregion'), "there are two regions of 'bus_a'"),
    "pour of several rails": (('"core"\nregion', '"core"\nrails = ["io"]\nregion'), "only a bus reaches several rails"),
    "no holes": (("vias.count = 40", "vias.count = 0"), "converters.bus_a.vias.count: 0 is out of range"),
    "all perforated": (("share = 0.1", "share = 0.95"), "perforation_share: 0.95 is out of range"),
    "not a number": (("x_mm = 20", 'x_mm = "left"'), "converters.bus_a.x_mm: needs a number in mm, found 'left'"),
    "two corners": ((SQUARE, "[[5, 20], [120, 20]]"), "nets.bus_a.region_mm"),
    "not TOML": (("[vias]", "[vias"), "floorplan.toml: line"),
}  # fmt: skip


@pytest.mark.parametrize("fault", list(BAD))
def test_a_fault_is_told_with_its_place(desk: Desk, study_text: str, fault: str) -> None:
    (before, after), wanted = BAD[fault]
    assert PLAN.count(before) == 1, "the fault must be put in once"
    found = faults(desk, study_text, PLAN.replace(before, after))
    assert any(wanted in problem for problem in found), found
    assert all(problem.startswith("floorplan.toml: ") for problem in found), found


def test_every_fault_is_told_at_once(desk: Desk, study_text: str) -> None:
    plan = PLAN.replace('rail = "io"', 'rail = "oi"').replace("x_mm = 20", 'x_mm = "left"')
    plan = plan.replace("count = 40", "count = 0")
    found = faults(desk, study_text.replace("voltage_v = 3.3", "voltage_v = 330"), plan)
    assert len(found) >= 4
    assert any("rails.io.voltage_v" in problem for problem in found)
    placed = desk.problems(study_with(study_text))
    assert {problem.split(": ")[1] for problem in placed} >= {"stages.oi.rail", "converters.bus_a.x_mm"}


def test_sheets_of_several_nets_are_told_together(desk: Desk, study_text: str) -> None:
    plan = PLAN.replace("[[5, 20], [120, 20]", "[[-5, 20], [120, 20]")
    plan = plan.replace("from_mm = [125, 10]", "from_mm = [125, 190]")
    found = faults(desk, study_text, plan)
    assert len(found) == 2


def test_a_missing_file_is_named(desk: Desk, study_text: str) -> None:
    assert desk.problems(study_with(study_text)) == ["floorplan.toml: no such file (the floorplan)"]


def test_a_tap_lies_on_the_pour_it_taps(desk: Desk, study_text: str) -> None:
    tap = '[[rails]]\nname = "quiet"\nvoltage_v = 3.3\nmax_current_a = 1\ntap_of = "io"\n'
    found = faults(desk, study_text + tap, PLAN.replace('[[loads]]\nrail = "core"', '[[loads]]\nrail = "quiet"'))
    assert any("loads.quiet.rail: 'quiet' is a tap; its load lies on the pour of io" in problem for problem in found)


def test_a_bus_may_reach_some_rails_only(desk: Desk, study_text: str) -> None:
    desk.write("floorplan.toml", PLAN.replace('name = "bus_a"\n', 'name = "bus_a"\nrails = ["core"]\n'))
    plan = desk.load(study_with(study_text)).study.floorplan
    assert plan is not None
    assert plan.regions[0].rails == ("core",)
