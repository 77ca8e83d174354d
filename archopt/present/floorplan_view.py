"""A floorplan drawn: outline, places of parts, and the drop or the current density of one net over its copper."""

from __future__ import annotations

import re
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import TYPE_CHECKING, Any

import numpy as np
from rich.console import RenderableType

from archopt.errors import OutputError
from archopt.inputs.floorplan_shape import BUSES, Floorplan, Point, Region, Spot
from archopt.inputs.problems import nearest
from archopt.inputs.resolved import Catalogue, ResolvedStudy
from archopt.model.parameters import FloatArray, stack_table
from archopt.model.planes import copper_degc, net_copper, perforated, solved_net
from archopt.model.states import coincident_maximum, own_rails
from archopt.physics.copper import sheet_resistance_ohm
from archopt.physics.sheet import SheetSolution
from archopt.physics.sheet_fields import averaged_density_a_per_m, drop_v
from archopt.present.amounts import number
from archopt.present.tables import HangingLines, section, table

if TYPE_CHECKING:
    from matplotlib.axes import Axes

ENDINGS = (".png", ".svg", ".pdf")
STAGE_EFFICIENCY = 0.9  # of the stages between the bus and their rails, to know what they draw before any is chosen
COLOURS = {"converter": "#7a1f1f", "input": "#1f4e7a", "output": "#1f4e7a", "load": "#3c3c3c"}


@dataclass(frozen=True)
class NetPicture:
    """One net in figures, on one layer of a stack's thickness, each rail at its coincident maximum, grown.

    current_a (P,) by ports; drop_mv and density_a_per_mm (rows, columns), not a number off the copper.
    """

    net: str
    ports: tuple[str, ...]
    current_a: FloatArray
    solution: SheetSolution
    drop_mv: FloatArray
    density_a_per_mm: FloatArray
    squares: FloatArray
    area_cm2: float
    loss_w: float
    words: str


def net_names(plan: Floorplan) -> list[str]:
    """Return the nets a floorplan draws."""
    return [region.net for region in plan.regions]


def net_picture(
    study: ResolvedStudy, catalogue: Catalogue, net: str, bus_v: float | None = None
) -> NetPicture:
    """Return the fields of one net on one layer of the lightest stack on offer, one way.

    bus_v : voltage of the bus, V; None for the habitual one

    Raises
    ------
    OutputError : the floorplan draws no such net
    """
    plan = floorplan_of(study)
    region = plan.region(net)
    if region is None:
        raise OutputError(f"the floorplan draws no net '{net}'; {nearest(net, net_names(plan), many=40)}")
    solution = solved_net(plan, region)
    copper = net_copper(plan, region, copper_degc(study))
    volts = study.control.habitual_v if bus_v is None else bus_v
    current_a = port_currents_a(study, region, solution.ports, volts)
    stacks = stack_table(study, catalogue)
    thin = int(stacks.thickness_m.argmin())
    sheet_ohm = float(sheet_resistance_ohm(stacks.thickness_m[thin], copper_degc(study)))
    effective_ohm = sheet_ohm * perforated(region.perforation_share)
    density = averaged_density_a_per_m(solution, current_a) * 1e-3 / (1.0 - region.perforation_share)
    loss_w = float(sheet_ohm * current_a @ copper.squares @ current_a)
    words = f"one layer of {stacks.copper_oz[thin]:g} oz at {copper_degc(study):g} degC, one way"
    if region.is_bus:
        words += f", bus at {volts:g} V"
    return NetPicture(
        net=net,
        ports=solution.ports,
        current_a=current_a,
        solution=solution,
        drop_mv=1e3 * drop_v(solution, current_a, effective_ohm),
        density_a_per_mm=density,
        squares=copper.squares,
        area_cm2=copper.area_m2 * 1e4,
        loss_w=loss_w,
        words=words,
    )


def floorplan_of(study: ResolvedStudy) -> Floorplan:
    """Return a study's floorplan.

    Raises
    ------
    OutputError : it has none
    """
    if study.floorplan is None:
        raise OutputError(f'{study.file}: the study has no floorplan; name one with floorplan = "floorplan.toml"')
    return study.floorplan


def port_currents_a(study: ResolvedStudy, region: Region, ports: tuple[str, ...], bus_v: float) -> FloatArray:
    """Return what each port of a net draws with every rail at its coincident maximum, grown, (P,) A.

    On a bus at a voltage (V) through stages of an ordinary efficiency, as none is chosen yet.
    """
    current_a, _, _ = coincident_maximum(study)
    rails = own_rails(study)
    amps = {rail.name: float(current_a[k]) * study.growth for k, rail in enumerate(rails)}
    if not region.is_bus:
        return np.array([amps[region.net]])
    watts = {rail.name: rail.voltage_v * amps[rail.name] for rail in rails}
    return np.array([watts[port] / STAGE_EFFICIENCY / bus_v for port in ports])


def net_rows(study: ResolvedStudy) -> list[tuple[str, ...]]:
    """Return a row of words for every net a floorplan draws: what solving its sheet gave."""
    plan, degc = floorplan_of(study), copper_degc(study)
    rows: list[tuple[str, ...]] = []
    for region in plan.regions:
        net = net_copper(plan, region, degc)
        own = np.diag(net.squares)
        far = int(own.argmax())
        via_ohm = net.source_ohm + float(net.own_ohm[far])
        to = net.ports[far] if region.is_bus else "load"
        rows.append(
            (
                region.net, str(len(net.ports)), number(float(own.min()), 3), number(float(own[far]), 3), to,
                number(net.area_m2 * 1e4, 4), number(1e6 * via_ohm, 3),
                ", ".join(neck.name for neck in region.necks),
            )
        )  # fmt: skip
    return rows


def floorplan_sections(study: ResolvedStudy) -> Iterable[RenderableType]:
    """What ``floorplan`` prints beside its picture."""
    plan = floorplan_of(study)
    heads = ("net", "loads", "nearest, squares", "farthest, squares", "to", "cm2 a pair", "its vias, uohm", "necks")
    left = ("net", "to", "necks")
    drawn = {region.net for region in plan.regions}
    rest = [name for name in (*BUSES, *(rail.name for rail in own_rails(study))) if name not in drawn]
    yield from section(f"Copper drawn in {plan.file}", table(heads, net_rows(study), left=left))
    words = ["Squares are one way, power layer, perforation counted; ground carries the same again."]
    if rest:
        words.append(f"By the squares and areas of the study: {', '.join(rest)}.")
    yield from section("How to read this", HangingLines(words))


def picture_place(study: ResolvedStudy, out: Path | None, net: str | None, *, density: bool, replace: bool) -> Path:
    """Return where the picture goes: where it was asked for, else a name of the study's in the current directory.

    Raises
    ------
    OutputError : something is there already and may not be replaced
    """
    if out is None:
        words = [study.name, "floorplan", *([] if net is None else [net, "density" if density else "drop"])]
        out = Path(re.sub(r"[^\w.+-]+", "-", "_".join(words)) + ".png")
    if out.exists() and not replace:
        raise OutputError(f"{out} is there already; name another file or replace it (--replace)")
    return out


def draw_floorplan(
    study: ResolvedStudy,
    catalogue: Catalogue,
    path: Path,
    net: str | None = None,
    *,
    density: bool = False,
    bus_v: float | None = None,
) -> NetPicture | None:
    """Draw a floorplan into a picture: all regions, or the drop (or current density) of one net.

    Parameters
    ----------
    path : ends in .png, .svg or .pdf

    Raises
    ------
    OutputError : there is no floorplan or no such net, the ending is none we draw, or the file cannot be written
    """
    if path.suffix.lower() not in ENDINGS:
        raise OutputError(f"{path}: a picture ends in {', '.join(ENDINGS)}")
    plan = floorplan_of(study)
    picture = None if net is None else net_picture(study, catalogue, net, bus_v)
    # a second to load, and only pictures need it
    from matplotlib.backends.backend_agg import FigureCanvasAgg  # noqa: PLC0415
    from matplotlib.figure import Figure  # noqa: PLC0415

    shown_mm = shown_outline(plan, net)
    span = np.ptp(np.array(shown_mm), axis=0)
    width = 11.0
    figure = Figure(figsize=(width, max(4.0, width * 0.86 * float(span[1] / span[0]) + 1.2)), layout="constrained")
    FigureCanvasAgg(figure)
    axes = figure.add_subplot()
    if picture is None:
        for number, region in enumerate(plan.regions):
            draw_region(axes, region, number)
        axes.set_title(f"{study.title}: copper of {len(plan.regions)} nets")
    else:
        draw_field(figure, axes, picture, density=density)
    draw_outline(axes, plan)
    draw_spots(axes, plan, None if net is None else plan.region(net))
    corners = np.array(shown_mm)
    margin = (0.02 if shown_mm == plan.outline_mm else 0.15) * float(np.ptp(corners, axis=0).max())
    axes.set_xlim(corners[:, 0].min() - margin, corners[:, 0].max() + margin)
    axes.set_ylim(corners[:, 1].min() - margin, corners[:, 1].max() + margin)
    axes.set_aspect("equal")
    axes.set_xlabel("x, mm")
    axes.set_ylabel("y, mm")
    try:
        figure.savefig(path, dpi=130)
    except OSError as error:
        raise OutputError(f"{path}: cannot be written: {error.strerror or error}") from error
    return picture


def shown_outline(plan: Floorplan, net: str | None) -> tuple[Point, ...]:
    """Return what the picture has to show: the region of a pour, else the whole board."""
    region = None if net is None else plan.region(net)
    return plan.outline_mm if region is None or region.is_bus else region.outline_mm


def draw_outline(axes: Axes, plan: Floorplan) -> None:
    """Draw the edge of the board and its holes."""
    axes.fill(*np.array(plan.outline_mm).T, fill=False, edgecolor="black", linewidth=1.4)
    for hole in plan.cutouts_mm:
        axes.fill(*np.array(hole).T, facecolor="white", edgecolor="black", linewidth=1.4)


def write_name(axes: Axes, x_mm: float, y_mm: float, text: str, **style: Any) -> None:
    """Write a name, readable on any ground."""
    from matplotlib.patheffects import withStroke  # noqa: PLC0415

    axes.text(x_mm, y_mm, text, fontsize=6, path_effects=[withStroke(linewidth=2.0, foreground="white")], **style)


def draw_region(axes: Axes, region: Region, number: int) -> None:
    """Draw the copper of one net in a tint of its own, its name in the middle of a pour."""
    tint = "#b9c7d6" if region.is_bus else ("#d9cfa3", "#c9d9b5", "#dcc3b2", "#c8c3de")[number % 4]
    axes.fill(*np.array(region.outline_mm).T, facecolor=tint, edgecolor="#555555", linewidth=0.8, alpha=0.8)
    for hole in region.cutouts_mm[region.board_cutouts :]:
        axes.fill(*np.array(hole).T, facecolor="white", edgecolor="#555555", linewidth=0.8)
    if not region.is_bus:
        middle = np.array(region.outline_mm).mean(axis=0)
        write_name(axes, float(middle[0]), float(middle[1]), region.net, ha="center", va="center")


def draw_spots(axes: Axes, plan: Floorplan, region: Region | None) -> None:
    """Draw the pads, those of one net named where a net is shown."""
    from matplotlib.patches import Circle, Rectangle  # noqa: PLC0415

    for spot in plan.spots:
        ours = region is not None and belongs(spot, region)
        style: dict[str, Any] = {
            "facecolor": "none", "edgecolor": COLOURS[spot.kind], "linewidth": 1.3 if ours else 0.7,
            "alpha": 1.0 if ours or region is None else 0.35,
        }  # fmt: skip
        if spot.diameter_mm:
            axes.add_patch(Circle((spot.x_mm, spot.y_mm), 0.5 * spot.diameter_mm, **style))
        else:
            corner = (spot.x_mm - 0.5 * spot.width_mm, spot.y_mm - 0.5 * spot.height_mm)
            size = (spot.width_mm, spot.height_mm)
            axes.add_patch(Rectangle(corner, *size, angle=spot.angle_deg, rotation_point="center", **style))
        if ours or (region is None and spot.kind == "converter"):
            text = spot.of if spot.kind in ("converter", "input") else f"{spot.of} {spot.kind}"
            offset = 0.5 * (spot.diameter_mm or spot.height_mm) + 1.0
            write_name(axes, spot.x_mm, spot.y_mm + offset, text, ha="center", va="bottom", clip_on=True)
    if region is not None:
        for neck in region.necks:
            # dotted, so that the field stays visible below
            axes.plot([neck.x1_mm, neck.x2_mm], [neck.y1_mm, neck.y2_mm], color="black", linestyle=":", linewidth=1.2)
            write_name(axes, neck.x2_mm, neck.y2_mm, f" neck {neck.name}", va="center")


def belongs(spot: Spot, region: Region) -> bool:
    """Whether a pad is a contact of a net."""
    if region.is_bus:
        return (spot.kind == "converter" and spot.of == region.net) or (
            spot.kind == "input" and spot.of in region.rails
        )
    return spot.of == region.net and spot.kind in ("output", "load")


def draw_field(figure: Any, axes: Axes, picture: NetPicture, *, density: bool) -> None:
    """Draw the drop, with lines of equal drop, or the current density of a net, and a scale."""
    grid = picture.solution.grid
    x_mm, y_mm = (1e3 * centres for centres in grid.centres_m())
    half = 0.5e3 * grid.pitch_m
    extent = (float(x_mm[0]) - half, float(x_mm[-1]) + half, float(y_mm[0]) - half, float(y_mm[-1]) + half)
    field = picture.density_a_per_mm if density else picture.drop_mv
    shown = np.ma.masked_invalid(field)
    image = axes.imshow(shown, origin="lower", extent=extent, cmap="cividis", aspect="equal", interpolation="nearest")
    word = "current density over a 3 mm disc, A/mm" if density else "drop below the source, mV"
    figure.colorbar(image, ax=axes, label=word, shrink=0.85)
    if not density and float(shown.max()) > 0.0:
        axes.contour(x_mm, y_mm, shown, levels=10, colors="white", linewidths=0.5, alpha=0.7)
    total_a = float(picture.current_a.sum())
    head = f"{picture.net}: {total_a:.3g} A, {picture.loss_w:.3g} W, {picture.area_cm2:.4g} cm2"
    axes.set_title(f"{head}\n{picture.words}", fontsize=10)
