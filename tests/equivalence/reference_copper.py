"""The copper of a design computed again: squares stated by the study, or of the sheets its floorplan draws.

The sheet solver itself is checked against closed forms and other solvers in tests of its own; here its answer is
put together one number at a time.
"""

from __future__ import annotations

import math

from archopt.inputs.floorplan_shape import Floorplan, Region, spots_of
from archopt.inputs.resolved import Rail, ResolvedStudy
from archopt.model.planes import net_copper, solved_net
from archopt.physics.copper import resistivity_ohm_m

RISE_CAP_K = 150.0


class Copper:
    """Squares, via fields and areas of the nets of one study."""

    def __init__(self, study: ResolvedStudy, own: list[Rail]) -> None:
        self.study = study
        self.own = own
        self.plan: Floorplan | None = study.floorplan

    def region(self, net: str) -> Region | None:
        return None if self.plan is None else self.plan.region(net)

    def field_ohm(self, region: Region, port: str, degc: float) -> float:
        """Return the barrels of all pads of a port in parallel, each a ring of copper."""
        assert self.plan is not None
        siemens = 0.0
        for name, spot in spots_of(self.plan, region):
            if name == port:
                vias = spot.vias
                ring_mm2 = math.pi / 4 * (vias.drill_mm**2 - (vias.drill_mm - 2e-3 * vias.plating_um) ** 2)
                one = float(resistivity_ohm_m(degc)) * vias.length_mm / ring_mm2 * 1e3
                siemens += vias.count / one
        return 1.0 / siemens

    def pour_ohm(self, rail: Rail, thick_um: float, pairs: int, amps: float, air_degc: float) -> float:
        """Return the loop of a rail's pour, all of it as warm as its tightest place makes it."""
        region = self.region(rail.name)
        tight = [(1.0, rail.copper_width_mm)] if region is None else self.tight_places(region, {"load": 1.0})
        degc = air_degc + min(self.rise_k(tight, amps, thick_um, pairs), RISE_CAP_K)
        sheet_ohm = float(resistivity_ohm_m(degc)) / (thick_um * 1e-6)
        if region is None or self.plan is None:
            return 2.0 * rail.squares * sheet_ohm / pairs
        holes = region.perforation_share
        squares = float(solved_net(self.plan, region).squares[0, 0]) * (1 + holes) / (1 - holes)
        vias = self.field_ohm(region, "source", degc) + self.field_ohm(region, "load", degc)
        return 2.0 * (squares * sheet_ohm / pairs + vias)

    def rise_k(self, places: list[tuple[float, float]], amps: float, thick_um: float, pairs: int) -> float:
        """Return the rise of the hottest of places (share of the current, width in mm), IPC-2221 turned round."""
        found = []
        for share, width_mm in places:
            mil2 = (width_mm / 25.4e-3) * (thick_um / 25.4)
            found.append((abs(share) * amps / pairs / (0.024 * mil2**0.725)) ** (1.0 / 0.44))
        return max(found)

    def tight_places(self, region: Region, into_a: dict[str, float]) -> list[tuple[float, float]]:
        """Return current and width of the places of a net where its current crowds, for currents by port.

        That these are the tightest of the whole sheet is checked in tests of the model's planes.
        """
        assert self.plan is not None
        net = net_copper(self.plan, region, 20.0)
        amps = [into_a.get(port, 0.0) for port in net.ports]
        return [
            (sum(s * a for s, a in zip(shares, amps, strict=True)), 1e3 * width)
            for shares, width in zip(net.place_share.tolist(), net.place_width_m.tolist(), strict=True)
        ]

    def plane_degc(
        self, bus: str, into_a: dict[int, float], extra_a: float, thick_um: float, pairs: int, air_degc: float
    ) -> float:
        """Return the temperature of a bus's copper, extra_a that of a bias supply which has no place drawn."""
        region, board = self.region(bus), self.study.board
        if region is None:
            width_mm = 10.0 * math.sqrt(board.bus_area_cm2 / max(board.bus_shared_squares + board.bus_own_squares, 0.1))
            places = [(sum(into_a.values()) + extra_a, width_mm)]
        else:
            places = self.tight_places(region, {self.own[k].name: amps for k, amps in into_a.items()})
        return air_degc + min(self.rise_k(places, 1.0, thick_um, pairs), RISE_CAP_K)

    def drops_v(
        self, bus: str, thick_um: float, pairs: int, into_a: dict[int, float], degc: float
    ) -> dict[int, float]:
        """Return the drop there and back of every stage on a bus whose copper is at a temperature."""
        region, board = self.region(bus), self.study.board
        square_ohm = 2.0 * float(resistivity_ohm_m(degc)) / (thick_um * 1e-6) / pairs
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
            vias = self.field_ohm(region, "source", degc) * sum(into_a.values())
            vias += self.field_ohm(region, self.own[k].name, degc) * own_a
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
        """Return current and IPC-2221 limit of one layer, in every neck and disc where it crowds."""
        region = self.region(net)
        assert region is not None
        return [(amps, self.limit_a(width_mm, thick_um)) for amps, width_mm in self.tight_places(region, into_a)]

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
