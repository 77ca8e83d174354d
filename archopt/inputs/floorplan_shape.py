"""A floorplan as the model reads it: regions of nets, places of parts, and the sheet each net makes of them."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Literal

import numpy as np

from archopt.physics.sheet_shape import DiscPad, Neck, Pad, RectanglePad, Sheet

Point = tuple[float, float]
SpotKind = Literal["converter", "input", "output", "load"]
BUSES = ("bus_a", "bus_b")
SOURCE = "source"
LOAD = "load"


@dataclass(frozen=True)
class ViaField:
    """The plated holes under a pad, all in parallel."""

    count: int
    drill_mm: float
    plating_um: float
    length_mm: float  # of the barrel the current runs through


@dataclass(frozen=True)
class Spot:
    """Where a part meets the copper: a rectangle about its middle, or a disc where ``diameter_mm`` is not 0.

    ``converter`` feeds the bus it names; ``input`` and ``output`` are the two sides of the stage of the rail it
    names, ``load`` is its load. ``place`` is where the floorplan says so.
    """

    kind: SpotKind
    of: str
    x_mm: float
    y_mm: float
    width_mm: float
    height_mm: float
    angle_deg: float
    diameter_mm: float
    vias: ViaField
    place: str

    @property
    def area_mm2(self) -> float:
        """Its area, mm2."""
        return np.pi * self.diameter_mm**2 / 4.0 if self.diameter_mm else self.width_mm * self.height_mm

    def pad(self, port: str) -> Pad:
        """The contact it makes on a sheet."""
        x_m, y_m = self.x_mm * 1e-3, self.y_mm * 1e-3
        if self.diameter_mm:
            return DiscPad(port, x_m, y_m, self.diameter_mm * 1e-3)
        return RectanglePad(
            port, x_m, y_m, self.width_mm * 1e-3, self.height_mm * 1e-3, float(np.radians(self.angle_deg))
        )


@dataclass(frozen=True)
class NeckLine:
    """A line across the copper of a net, through which its current must squeeze."""

    name: str
    x1_mm: float
    y1_mm: float
    x2_mm: float
    y2_mm: float


@dataclass(frozen=True)
class Region:
    """The copper of one net: a bus or the pour of a rail.

    ``rails`` are those a bus reaches; of a rail's pour it is the rail alone. ``cutouts_mm`` holds those of the
    board first (``board_cutouts`` of them), then the net's own.
    """

    net: str
    outline_mm: tuple[Point, ...]
    cutouts_mm: tuple[tuple[Point, ...], ...]
    board_cutouts: int
    perforation_share: float  # of the area, taken by the clearances of foreign holes
    necks: tuple[NeckLine, ...]
    rails: tuple[str, ...]

    @property
    def is_bus(self) -> bool:
        """Whether it is a bus rather than a rail."""
        return self.net in BUSES


@dataclass(frozen=True)
class Floorplan:
    """A whole floorplan; nets without a region keep the squares and areas of the study."""

    file: str
    outline_mm: tuple[Point, ...]
    cutouts_mm: tuple[tuple[Point, ...], ...]
    regions: tuple[Region, ...]
    spots: tuple[Spot, ...]

    def region(self, net: str) -> Region | None:
        """The region of a net, None where it has none."""
        return next((region for region in self.regions if region.net == net), None)


def metres(points_mm: tuple[Point, ...]) -> np.ndarray[tuple[int, ...], np.dtype[np.float64]]:
    """Corners (mm) as an array, (N, 2) m."""
    return np.array(points_mm, dtype=np.float64).reshape(-1, 2) * 1e-3


def spots_of(plan: Floorplan, region: Region) -> tuple[tuple[str, Spot], ...]:
    """The port and spot of every contact of a net, the source first.

    A bus runs from its converters to the stage inputs, its ports named after the rails; a pour from the stage
    outputs to the load.
    """
    if region.is_bus:
        found = [(SOURCE, spot) for spot in plan.spots if spot.kind == "converter" and spot.of == region.net]
        for rail in region.rails:
            found += [(rail, spot) for spot in plan.spots if spot.kind == "input" and spot.of == rail]
        return tuple(found)
    own = [spot for spot in plan.spots if spot.of == region.net]
    found = [(SOURCE, spot) for spot in own if spot.kind == "output"]
    return (*found, *((LOAD, spot) for spot in own if spot.kind == "load"))


def net_sheet(plan: Floorplan, region: Region) -> Sheet:
    """The sheet of one net in metres, its pads in the order of :func:`spots_of`."""
    necks = tuple(
        Neck(neck.name, neck.x1_mm * 1e-3, neck.y1_mm * 1e-3, neck.x2_mm * 1e-3, neck.y2_mm * 1e-3)
        for neck in region.necks
    )
    return Sheet(
        outline_m=metres(region.outline_mm),
        pads=tuple(spot.pad(port) for port, spot in spots_of(plan, region)),
        source=SOURCE,
        cutouts_m=tuple(metres(hole) for hole in region.cutouts_mm),
        necks=necks,
    )


def net_pitch_m(sheet: Sheet) -> float:
    """Pitch (m) of the grid a net is solved on: as fine as shows where its current crowds, finer for small pads.

    Two per cent of a resistance are far below what a floorplan knows; the density under a disc of 3 mm needs more.
    """
    span = np.ptp(sheet.outline_m, axis=0)
    box_m2 = float(span[0] * span[1])
    smallest_m = min(pad.least_size_m for pad in sheet.pads)
    cells = min(BUS_CELLS, PORT_CELLS * len(sheet.load_ports))
    finest_m = (box_m2 / MOST_CELLS) ** 0.5
    return float(max(finest_m, min((box_m2 / cells) ** 0.5, smallest_m / PAD_CELLS, DISC_PITCH_M)))


#: Cells in the box around a net: for each load port, at most, at most for small pads; and across the smallest pad.
PORT_CELLS = 4_000
BUS_CELLS = 16_000
MOST_CELLS = 100_000
PAD_CELLS = 3.0
#: A quarter of the disc the density is averaged over, m.
DISC_PITCH_M = 0.75e-3
