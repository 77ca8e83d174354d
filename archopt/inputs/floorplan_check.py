"""What is wrong with a floorplan as a whole: its board, every net's sheet, and parts in one another's way."""

from __future__ import annotations

import numpy as np

from archopt.inputs.floorplan_shape import (
    BUSES,
    LOAD,
    SOURCE,
    Floorplan,
    Region,
    metres,
    net_pitch_m,
    net_sheet,
    spots_of,
)
from archopt.inputs.problems import Notebook
from archopt.inputs.resolved import Rail
from archopt.physics.arrays import FloatArray
from archopt.physics.sheet_findings import SheetFinding, findings, shape_findings
from archopt.physics.sheet_shape import (
    Sheet,
    distance_to_segments,
    edges,
    inside_polygon,
    polygon_area_m2,
    segments_cross,
)

AREA_AGREES = 0.02  # how far the outline's area may be from the study's board area
ON_EDGE_M = 1e-9


def check_floorplan(plan: Floorplan, rails: tuple[Rail, ...], area_cm2: float | None, notebook: Notebook) -> None:
    """Note everything wrong with a floorplan.

    Parameters
    ----------
    rails : the study's, those that can stand
    area_cm2 : of the board in the study; None where it is not known
    """
    before = len(notebook.problems)
    check_board(plan, area_cm2, notebook)
    if len(notebook.problems) > before:
        return
    for region in plan.regions:
        check_region(plan, region, notebook)


def check_board(plan: Floorplan, area_cm2: float | None, notebook: Notebook) -> None:
    """Note an outline that crosses itself or is of another size than the study's, and pads in each other's way."""
    owners = dict.fromkeys(spot.of for spot in plan.spots)
    pads = tuple(spot.pad(spot.of) for spot in plan.spots)
    source = next(iter(owners), SOURCE)
    sheet = Sheet(metres(plan.outline_mm), pads, source, tuple(metres(hole) for hole in plan.cutouts_mm))
    found = [finding for finding in shape_findings(sheet) if finding.kind not in ("no source", "no load")]
    for finding in found:
        if finding.thing == "pad":
            spot = plan.spots[finding.number]
            twin = spot.kind == "output" and any(other.place == spot.place for other in plan.spots[: finding.number])
            if not twin:
                notebook.problem(spot.place, _of_pad(finding, spot.of), plan.file)
        else:
            place = "outline_mm" if finding.thing == "outline" else f"cutouts_mm[{finding.number + 1}]"
            notebook.problem(place, str(finding), plan.file)
    if area_cm2 is None or any(finding.thing != "pad" for finding in found):
        return
    drawn_cm2 = 1e4 * polygon_area_m2(sheet.outline_m)
    if abs(drawn_cm2 / area_cm2 - 1.0) > AREA_AGREES:
        message = f"the outline encloses {drawn_cm2:.4g} cm2, but board.area_cm2 of the study is {area_cm2:g} cm2"
        notebook.problem("outline_mm", message, plan.file)


def _of_pad(finding: SheetFinding, owner: str) -> str:
    """Return a finding on a pad without the number the pad has in the solver."""
    _, _, words = finding.message.partition(f" of {owner} ")
    return f"{finding.kind}: the pad {words}" if words else str(finding)


def check_region(plan: Floorplan, region: Region, notebook: Notebook) -> None:
    """Note what keeps one net from being solved."""

    def wrong(place: str, message: str) -> None:
        notebook.problem(place, message, plan.file)

    at = f"nets.{region.net}"
    spots = spots_of(plan, region)
    ports = {port for port, _ in spots}
    missing = [port for port in (SOURCE, *(region.rails if region.net in BUSES else (LOAD,))) if port not in ports]
    for port in missing:
        wrong(*_missing(region, port))
    reaching = _outside(metres(region.outline_mm), metres(plan.outline_mm))
    if reaching is not None:
        x_mm, y_mm = 1e3 * reaching
        wrong(f"{at}.region_mm", f"reaches outside the board's outline near ({x_mm:.3f}, {y_mm:.3f}) mm")
    if missing or reaching is not None:
        return
    sheet = net_sheet(plan, region)
    for finding in findings(sheet, net_pitch_m(sheet)):
        if finding.thing == "outline":
            wrong(f"{at}.region_mm", str(finding))
        elif finding.thing == "cutout" and finding.number < region.board_cutouts:
            wrong(f"cutouts_mm[{finding.number + 1}]", str(finding))
        elif finding.thing == "cutout":
            wrong(f"{at}.cutouts_mm[{finding.number - region.board_cutouts + 1}]", str(finding))
        elif finding.thing == "pad":
            port, spot = spots[finding.number]
            wrong(spot.place, f"{_of_pad(finding, port)} (region of {region.net})")
        elif finding.thing == "neck":
            wrong(f"{at}.necks.{region.necks[finding.number].name}", str(finding))
        else:
            wrong(*_of_port(region, sheet.load_ports[finding.number], finding))


def _of_port(region: Region, port: str, finding: SheetFinding) -> tuple[str, str]:
    """Return place and words of a port that the copper does not join to its source."""
    if finding.kind != "port cut off":
        return f"nets.{region.net}", str(finding)
    place = f"stages.{port}" if region.net in BUSES else f"loads.{region.net}"
    source = "its converter" if region.net in BUSES else "its stage"
    return place, f"stands on an island: no copper of {region.net} joins it to {source}"


def _missing(region: Region, port: str) -> tuple[str, str]:
    """Return place and words of a port that no pad belongs to."""
    net = region.net
    if region.is_bus and port == SOURCE:
        return f"nets.{net}", f'no converter feeds it; write [[converters]] with bus = "{net}"'
    if region.is_bus:
        words = f'it has a plane but not the stage of {port}; write [[stages]] with rail = "{port}", or name its rails'
        return f"nets.{net}", words
    table, what = ("stages", "stage") if port == SOURCE else ("loads", "load")
    return f"nets.{net}", f'its {what} has no place; write [[{table}]] with rail = "{net}"'


def _outside(corners_m: FloatArray, board_m: FloatArray) -> FloatArray | None:
    """Return a point (m) at which a polygon leaves another, None where it stays inside; edges may be shared."""
    start, end = edges(board_m)
    middles = 0.5 * (corners_m + np.roll(corners_m, -1, axis=0))
    for points in (corners_m, middles):
        on_edge = distance_to_segments(points[:, None], start, end).min(axis=1) <= ON_EDGE_M
        out = np.flatnonzero(~on_edge & ~inside_polygon(points, board_m))
        if len(out):
            found: FloatArray = points[out[0]]
            return found
    first, last = edges(corners_m)
    crossed = np.flatnonzero(segments_cross(first[:, None], last[:, None], start, end).any(axis=1))
    return middles[crossed[0]] if len(crossed) else None
