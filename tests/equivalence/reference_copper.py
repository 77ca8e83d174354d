"""The copper of a design computed again: squares stated by the study, or of the sheets its floorplan draws.

The sheet solver itself is checked against closed forms and other solvers in tests of its own; here its answer is
put together one number at a time.
"""

from __future__ import annotations

import math

import numpy as np

from archopt.inputs.floorplan_shape import Floorplan, Region, spots_of
from archopt.inputs.resolved import Rail, ResolvedStudy
from archopt.model.planes import solved_net
from archopt.physics.copper import resistivity_ohm_m
from archopt.physics.sheet_fields import averaged_density_a_per_m, neck_flow

DISC_MM = 3.0


class Copper:
    """Squares, via fields and areas of the nets of one study."""

    def __init__(self, study: ResolvedStudy, own: list[Rail]) -> None:
        self.study = study
        self.own = own
        self.plan: Floorplan | None = study.floorplan
        supply = study.supply
        self.warm_degc = supply.inlet_degc + supply.local_rise_k + study.board.copper_rise_k

    def region(self, net: str) -> Region | None:
        return None if self.plan is None else self.plan.region(net)

    def field_ohm(self, region: Region, port: str) -> float:
        """Return the barrels of all pads of a port in parallel, each a ring of copper."""
        assert self.plan is not None
        siemens = 0.0
        for name, spot in spots_of(self.plan, region):
            if name == port:
                vias = spot.vias
                ring_mm2 = math.pi / 4 * (vias.drill_mm**2 - (vias.drill_mm - 2e-3 * vias.plating_um) ** 2)
                one = float(resistivity_ohm_m(self.warm_degc)) * vias.length_mm / ring_mm2 * 1e3
                siemens += vias.count / one
        return 1.0 / siemens

    def pour_ohm(self, rail: Rail, sheet_ohm: float, pairs: int) -> float:
        """Return the loop of a rail's pour."""
        region = self.region(rail.name)
        if region is None or self.plan is None:
            return 2.0 * rail.squares * sheet_ohm / pairs
        holes = region.perforation_share
        squares = float(solved_net(self.plan, region).squares[0, 0]) * (1 + holes) / (1 - holes)
        vias = self.field_ohm(region, "source") + self.field_ohm(region, "load")
        return 2.0 * (squares * sheet_ohm / pairs + vias)

    def drops_v(self, bus: str, square_ohm: float, into_a: dict[int, float]) -> dict[int, float]:
        """Return the drop there and back of every stage on a bus; square_ohm is a square's loop."""
        region, board = self.region(bus), self.study.board
        if region is None or self.plan is None:
            shared = board.bus_shared_squares * sum(into_a.values())
            return {k: square_ohm * (shared + board.bus_own_squares * amps) for k, amps in into_a.items()}
        solution = solved_net(self.plan, region)
        holes = region.perforation_share
        factor = (1 + holes) / (1 - holes)
        drops: dict[int, float] = {}
        for k, own_a in into_a.items():
            to = solution.ports.index(self.own[k].name)
            squares = sum(
                float(solution.squares[to, solution.ports.index(self.own[q].name)]) * amps
                for q, amps in into_a.items()
            )
            vias = self.field_ohm(region, "source") * sum(into_a.values())
            vias += self.field_ohm(region, self.own[k].name) * own_a
            drops[k] = square_ohm * factor * squares + 2.0 * vias
        return drops

    def area_cm2(self, net: str, stated_cm2: float) -> float:
        """Return the region a net is charged: its polygon less its holes, the holes inside it."""
        region = self.region(net)
        if region is None:
            return stated_cm2
        found = polygon_cm2(region.outline_mm)
        return found - sum(polygon_cm2(hole) for hole in region.cutouts_mm if within(hole, region.outline_mm))

    def crowding(self, net: str, into_a: dict[str, float], thick_um: float) -> list[tuple[float, float]]:
        """Return current and IPC-2221 limit of one layer, in every cell's disc and every neck."""
        region = self.region(net)
        assert region is not None
        assert self.plan is not None
        solution, left = solved_net(self.plan, region), 1.0 - region.perforation_share
        amps = np.array([into_a.get(port, 0.0) for port in solution.ports])
        unit = np.eye(len(amps))
        density = sum(averaged_density_a_per_m(solution, unit[k]) * amps[k] for k in range(len(amps)))
        disc = float(np.nanmax(density)) * DISC_MM * 1e-3 / left
        found = [(disc, self.limit_a(DISC_MM, thick_um))]
        for neck in solution.sheet.necks:
            flow = neck_flow(solution, neck)
            found.append((float(np.abs(flow.share) @ amps), self.limit_a(flow.width_m * 1e3 * left, thick_um)))
        return found

    def limit_a(self, width_mm: float, thick_um: float) -> float:
        """IPC-2221: I = 0.024 dT^0.44 A^0.725 with A in square mil, a layer inside."""
        mil2 = (width_mm / 25.4e-3) * (thick_um / 25.4)
        return float(0.024 * self.study.board.copper_rise_k**0.44 * mil2**0.725)


def polygon_cm2(corners_mm: tuple[tuple[float, float], ...]) -> float:
    """Return the area of a polygon by its signed trapezes."""
    total = 0.0
    for (x0, y0), (x1, y1) in zip(corners_mm, (*corners_mm[1:], corners_mm[0]), strict=True):
        total += 0.5 * (x1 - x0) * (y0 + y1)
    return abs(total) / 100.0


def within(hole_mm: tuple[tuple[float, float], ...], outline_mm: tuple[tuple[float, float], ...]) -> bool:
    """Return whether a hole lies in a region; all corners in or all out in the shipped floorplan."""
    inside = []
    for x, y in hole_mm:
        crossings = 0
        for (x0, y0), (x1, y1) in zip(outline_mm, (*outline_mm[1:], outline_mm[0]), strict=True):
            if (y0 > y) != (y1 > y) and x < x0 + (y - y0) / (y1 - y0) * (x1 - x0):
                crossings += 1
        inside.append(crossings % 2 == 1)
    assert all(inside) or not any(inside)
    return inside[0]
