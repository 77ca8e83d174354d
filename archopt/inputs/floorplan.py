"""The floorplan file as a person writes it: outline, cut-outs, regions of nets, places of parts; checked tables.

Every length is in mm. Keys end in their unit; what may be left out has a default that is noted as assumed.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Annotated, Any, Literal

from pydantic import Field, model_validator

from archopt.inputs.draft import Draft
from archopt.inputs.floorplan_check import check_floorplan
from archopt.inputs.floorplan_shape import BUSES, Floorplan, NeckLine, Point, Region, Spot, SpotKind, ViaField
from archopt.inputs.problems import Locate, Notebook, brief, nearest, validated
from archopt.inputs.resolved import Board, Rail
from archopt.inputs.study import Table
from archopt.inputs.text_files import read_toml

Corner = Annotated[tuple[float, float], Field(strict=False)]
Polygon = Annotated[tuple[Corner, ...], Field(strict=False, min_length=3, max_length=400)]
WHOLE_BOARD = "outline"

#: Defaults of a via field: holes a pitch apart both ways, an ordinary drill and plating, the whole board deep.
VIA_PITCH_MM = 2.0
VIA_DRILL_MM, VIA_PLATING_UM, VIA_LENGTH_MM = 0.3, 25.0, 1.6


class ViaTable(Table):
    """``vias``: the plated holes under a pad."""

    count: int | None = Field(None, ge=1, le=5000, description="holes under one pad; default one every 2 mm both ways")
    drill_mm: float | None = Field(None, ge=0.05, le=5, description="before plating; default 0.3")
    plating_um: float | None = Field(None, ge=5, le=200, description="thickness of the wall; default 25")
    length_mm: float | None = Field(None, gt=0, le=20, description="the current runs through; default 1.6")


class SpotRow(Table):
    """A pad: ``width_mm`` and ``height_mm`` of a rectangle, or the ``diameter_mm`` of a disc."""

    x_mm: float = Field(ge=-10000, le=10000, description="middle of the pad")
    y_mm: float = Field(ge=-10000, le=10000, description="middle of the pad")
    width_mm: float | None = Field(None, gt=0, le=1000, description="along x before it is turned")
    height_mm: float | None = Field(None, gt=0, le=1000, description="along y before it is turned")
    angle_deg: float = Field(0.0, ge=-360, le=360, description="turned anticlockwise; default 0")
    diameter_mm: float | None = Field(None, gt=0, le=1000, description="of a round pad")
    vias: ViaTable = Field(ViaTable(), description="holes under this pad; default those of [vias]")

    @model_validator(mode="after")
    def _one_shape(self) -> SpotRow:
        sides = (self.width_mm is None, self.height_mm is None)
        if any(sides) != all(sides) or all(sides) == (self.diameter_mm is None):
            raise ValueError("a pad has width_mm and height_mm, or diameter_mm")
        return self


class ConverterRow(SpotRow):
    """``[[converters]]``: where the converters of a bus feed its plane."""

    bus: Literal["bus_a", "bus_b"] = Field(description="bus_a or bus_b")


class StageRow(SpotRow):
    """``[[stages]]``: where the stage of a rail draws from its bus and feeds its pour."""

    rail: str = Field(min_length=1, description="rail it makes")
    side: Literal["both", "input", "output"] = Field("both", description="which side this pad is; default both")


class LoadRow(SpotRow):
    """``[[loads]]``: where the load of a rail draws from its pour."""

    rail: str = Field(min_length=1, description="rail it draws from")


class NeckRow(Table):
    """``necks``: a line across the copper whose current is held against its own width."""

    name: str = Field(min_length=1, description="what it is called")
    from_mm: Corner = Field(description="one end, [x, y]")
    to_mm: Corner = Field(description="the other end, [x, y]")


class NetRow(Table):
    """``[[nets]]``: the copper of a bus or of a rail's pour."""

    name: str = Field(min_length=1, description="bus_a, bus_b or a rail")
    region_mm: Literal["outline"] | Polygon = Field(description='corners, or "outline" for the whole board')
    cutouts_mm: Annotated[tuple[Polygon, ...], Field(strict=False)] = Field((), description="holes of its own")
    perforation_share: float | None = Field(
        None, ge=0, le=0.6, description="of its area, taken by clearances; default the floorplan's"
    )
    necks: Annotated[tuple[NeckRow, ...], Field(strict=False)] = Field((), description="marked necks; default none")
    rails: Annotated[tuple[str, ...], Field(strict=False)] | None = Field(
        None, min_length=1, description="rails a bus reaches; default all with a stage of their own"
    )


class BoardShape(Table):
    """The floorplan's own keys."""

    outline_mm: Polygon = Field(description="corners of the board")
    cutouts_mm: Annotated[tuple[Polygon, ...], Field(strict=False)] = Field((), description="holes of the board")
    perforation_share: float | None = Field(
        None, ge=0, le=0.6, description="of every region, taken by clearances of foreign holes; default 0.1"
    )
    vias: ViaTable = Field(ViaTable(), description="holes under a pad that says nothing of its own")


LISTS: dict[str, type[Table]] = {
    "converters": ConverterRow, "stages": StageRow, "loads": LoadRow, "nets": NetRow,
}  # fmt: skip


def resolve_floorplan(
    draft: Draft, rails: tuple[Rail, ...], board: Board | None, notebook: Notebook
) -> Floorplan | None:
    """Return the study's floorplan, None where there is none or it has faults, which are noted with their place."""
    if draft.floorplan is None:
        return None
    file = draft.floorplan
    content = read_toml(draft.folder / file, file, notebook, "the floorplan")
    if content is None:
        return None
    before = len(notebook.problems)
    reader = Reader(file, draft, notebook)
    plan = reader.read(content)
    if plan is None or len(notebook.problems) > before:
        return None
    check_floorplan(plan, rails, None if board is None else board.area_cm2, notebook)
    return plan if len(notebook.problems) == before else None


class Reader:
    """Reads one floorplan file.

    Parameters
    ----------
    file : as the study names it
    draft : the study as far as it could be read, for the names of its rails
    """

    def __init__(self, file: str, draft: Draft, notebook: Notebook) -> None:
        self.file = file
        self.draft = draft
        self.notebook = notebook
        self.taps = {row.name: row.tap_of for row in draft.rails if row.tap_of}

    def wrong(self, place: str, message: str) -> None:
        """Note a problem of this file."""
        self.notebook.problem(place, message, self.file)

    def read(self, content: Mapping[str, Any]) -> Floorplan | None:
        """Return the floorplan as written, every row that can stand; faults are noted."""
        keys = [*BoardShape.model_fields, *LISTS]
        for key in content:
            if key not in keys:
                self.wrong(key, f"unknown; {nearest(key, keys, 20)}")
        own = {key: value for key, value in content.items() if key in BoardShape.model_fields}
        shape = validated(BoardShape, own, lambda key: (self.file, key), self.notebook)
        rows = {name: self.rows(name, content.get(name, [])) for name in LISTS}
        if shape is None:
            return None
        spots = [spot for name in ("converters", "stages", "loads") for spot in self.spots(rows[name], shape.vias)]
        regions = self.regions(rows["nets"], shape)
        if not regions:
            self.wrong("nets", "there is no [[nets]]; without a region of a net a floorplan says nothing")
        return Floorplan(self.file, shape.outline_mm, shape.cutouts_mm, tuple(regions), tuple(spots))

    def under(self, place: str) -> Locate:
        """Return what places a key of a row, or the row itself where no one key is at fault."""
        return lambda key: (self.file, f"{place}.{key}" if key else place)

    def rows(self, name: str, raw: object) -> list[tuple[str, Any]]:
        """Return the rows of a list that can stand, each with its place."""
        if not isinstance(raw, list):
            self.wrong(name, f"needs [[{name}]] tables, found {brief(raw)}")
            return []
        found: list[tuple[str, Any]] = []
        seen: dict[str, int] = {}
        for number, item in enumerate(raw, start=1):
            if not isinstance(item, dict):
                self.wrong(f"{name}[{number}]", f"needs a table, found {brief(item)}")
                continue
            label = item.get("bus", item.get("rail", item.get("name")))
            place = f"{name}.{label}" if isinstance(label, str) and label else f"{name}[{number}]"
            seen[place] = seen.get(place, 0) + 1
            place = place if seen[place] == 1 else f"{place}[{seen[place]}]"
            row = validated(LISTS[name], item, self.under(place), self.notebook)
            if row is not None and self.known(place, row):
                found.append((place, row))
        return found

    def known(self, place: str, row: object) -> bool:
        """Return whether the rails a row names are there, noting those that are not."""
        if isinstance(row, ConverterRow):
            return True
        names = [row.rail] if isinstance(row, StageRow | LoadRow) else []
        key = "rail"
        if isinstance(row, NetRow):
            names, key = [] if row.name in BUSES else [row.name], "name"
            if row.rails is not None and row.name not in BUSES:
                self.wrong(f"{place}.rails", "only a bus reaches several rails; a pour reaches its own load")
            names += [name for name in row.rails or () if row.name in BUSES]
        right = True
        for name in names:
            at = f"{place}.{'rails' if isinstance(row, NetRow) and name != row.name else key}"
            if name in self.taps:
                self.wrong(at, f"'{name}' is a tap; its load lies on the pour of {self.taps[name]}")
            elif name not in self.draft.rail_names:
                valid = [*BUSES, *self.draft.rail_names] if isinstance(row, NetRow) else self.draft.rail_names
                what = "net" if isinstance(row, NetRow) and key == "name" else "rail"
                self.wrong(at, f"there is no {what} '{name}'; {nearest(name, valid)}")
            else:
                continue
            right = False
        return right

    def spots(self, rows: list[tuple[str, Any]], common: ViaTable) -> list[Spot]:
        """Return the pads of converters, stages or loads; a stage's pad of both sides is two."""
        found: list[Spot] = []
        for place, row in rows:
            kinds: tuple[SpotKind, ...]
            of: str
            if isinstance(row, ConverterRow):
                kinds, of = ("converter",), row.bus
            elif isinstance(row, StageRow):
                kinds, of = ("input", "output") if row.side == "both" else (row.side,), row.rail
            else:
                kinds, of = ("load",), row.rail
            shape = (row.x_mm, row.y_mm, row.width_mm or 0.0, row.height_mm or 0.0, row.angle_deg, row.diameter_mm or 0)
            bare = ViaField(1, VIA_DRILL_MM, VIA_PLATING_UM, VIA_LENGTH_MM)
            area_mm2 = Spot("load", of, *shape, bare, place).area_mm2
            vias = self.vias(place, row.vias, common, area_mm2)
            found += [Spot(kind, of, *shape, vias, place) for kind in kinds]
        return found

    def vias(self, place: str, own: ViaTable, common: ViaTable, area_mm2: float) -> ViaField:
        """Return the via field of a pad: its own keys, else those of [vias], else the defaults."""

        def take(key: str, default: float, reason: str) -> float:
            stated = getattr(own, key) if getattr(own, key) is not None else getattr(common, key)
            at = f"floorplan.{place}.vias.{key}" if key == "count" else f"floorplan.vias.{key}"
            if stated is None and any(known.place == at for known in self.notebook.assumptions):
                return default
            return float(self.notebook.take(at, stated, default, reason))

        fitting = max(1.0, float(round(area_mm2 / VIA_PITCH_MM**2)))
        return ViaField(
            count=int(take("count", fitting, f"one every {VIA_PITCH_MM:g} mm both ways")),
            drill_mm=take("drill_mm", VIA_DRILL_MM, "usual"),
            plating_um=take("plating_um", VIA_PLATING_UM, "usual"),
            length_mm=take("length_mm", VIA_LENGTH_MM, "the whole board"),
        )

    def regions(self, rows: list[tuple[str, Any]], shape: BoardShape) -> list[Region]:
        """Return the regions of nets; a net written twice is noted."""
        own = [name for name in self.draft.rail_names if name not in self.taps]
        found: list[Region] = []
        common = self.notebook.take("floorplan.perforation_share", shape.perforation_share, 0.1, "plain default")
        for place, row in rows:
            if any(region.net == row.name for region in found):
                self.wrong(place, f"there are two regions of '{row.name}'; draw one, or name it on one of them")
                continue
            outline: tuple[Point, ...] = shape.outline_mm if row.region_mm == WHOLE_BOARD else row.region_mm
            reached = tuple(own if row.rails is None else row.rails) if row.name in BUSES else (row.name,)
            found.append(
                Region(
                    net=row.name,
                    outline_mm=outline,
                    cutouts_mm=(*shape.cutouts_mm, *row.cutouts_mm),
                    board_cutouts=len(shape.cutouts_mm),
                    perforation_share=common if row.perforation_share is None else row.perforation_share,
                    necks=tuple(NeckLine(neck.name, *neck.from_mm, *neck.to_mm) for neck in row.necks),
                    rails=tuple(dict.fromkeys(reached)),
                )
            )
        return found
