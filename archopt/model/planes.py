"""What the copper of every net is: resistance in squares, area it is charged, and where its current crowds.

Without a floorplan the study's squares and areas stand. With one, every net is solved as a sheet, once, when
the problem is compiled; the search only scales what was found by sheet resistance and pairs. The region that
sets a resistance is the region the layer budget charges.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from functools import cached_property, lru_cache

import numpy as np

from archopt.inputs.floorplan_shape import (
    BUSES,
    SOURCE,
    Floorplan,
    Region,
    net_pitch_m,
    net_sheet,
)
from archopt.inputs.resolved import ResolvedStudy
from archopt.model.parameters import BoolArray, FloatArray
from archopt.model.rails import RailArrays
from archopt.model.vias import fields_limit_a, fields_ohm, via_field_ohm
from archopt.physics.ampacity import SECTION_EXPONENT
from archopt.physics.copper import squares_matrix
from archopt.physics.sheet import SheetSolution, solve
from archopt.physics.sheet_discs import face_density, worst_disc
from archopt.physics.sheet_fields import DISC_M, averaged_density_a_per_m, neck_flow
from archopt.physics.sheet_grid import copper_share
from archopt.physics.sheet_shape import SheetError, polygon_area_m2

LEAST_SHARE = 1e-6  # of a net's current through a place; keeps widths finite
UNREACHED_SQUARES = 100.0  # of a stage a bus does not reach: no design may use it


@dataclass(frozen=True)
class NetCopper:
    """One net solved, for P load ports.

    squares (P, P) one way, perforation counted; via_ohm: source (a number) and own (P,), one way, warm; area_m2
    the region; place_width_m (K,) and place_share (K, P): through place k of that width runs at most
    ``place_share @ currents``; place_names (K,).
    """

    ports: tuple[str, ...]
    squares: FloatArray
    source_ohm: float
    own_ohm: FloatArray
    area_m2: float
    place_width_m: FloatArray
    place_share: FloatArray
    place_names: tuple[str, ...]


@dataclass(frozen=True)
class BusPlanes:
    """The planes of both buses, R rails, K places where current may crowd (padded with shares of 0).

    squares (2, R, R) one way, symmetric positive definite; source_ohm (2,) and own_ohm (2, R) of via fields, one
    way; area_m2 (2,); place_width_m (2, K), place_share (2, K, R), place_bias (2, K): share of a bias supply's
    current; source_limit_a (2,) and own_limit_a (2, R): what the via fields may carry; reached (2, R): the rails each
    bus can feed.
    """

    squares: FloatArray
    source_ohm: FloatArray
    own_ohm: FloatArray
    area_m2: FloatArray
    place_width_m: FloatArray
    place_share: FloatArray
    place_bias: FloatArray
    source_limit_a: FloatArray
    own_limit_a: FloatArray
    place_names: tuple[tuple[str, ...], tuple[str, ...]]
    reached: BoolArray

    @cached_property
    def star(self) -> tuple[FloatArray, FloatArray] | None:
        """Squares shared by all and each rail's own, (2,) and (2, R), where a plane is no more than that."""
        count = self.squares.shape[1]
        shared = self.squares[:, 0, -1] if count > 1 else np.zeros(2)
        own = np.diagonal(self.squares, axis1=1, axis2=2) - shared[:, None]
        same = np.allclose(self.squares, shared[:, None, None] + own[:, None, :] * np.eye(count), rtol=1e-12, atol=0.0)
        return (shared, own) if same else None

    def square_drop(self, bus: int, on_a: FloatArray) -> FloatArray:
        """Return squares times current to every stage of a bus, (..., R), from the currents of its stages (..., R)."""
        if self.star is None:
            return np.asarray(np.einsum("...q,rq->...r", on_a, self.squares[bus]))
        shared, own = self.star
        part = on_a * own[bus]
        part += shared[bus] * np.einsum("...r->...", on_a)[..., None]
        return np.asarray(part)

    @property
    def with_vias(self) -> bool:
        """Whether via fields add resistance."""
        return bool(self.source_ohm.any() or self.own_ohm.any())


def copper_degc(study: ResolvedStudy) -> float:
    """Temperature (degC) of copper as warm as it may be: hottest local air and the permitted rise.

    The resistance the schedule and the choice of pairs are decided by; copper within its limit is never hotter.
    A solved board has every net at its own temperature (:mod:`archopt.model.copper_heat`).
    """
    return study.supply.hottest_inlet_degc + study.supply.local_rise_k + study.board.copper_rise_k


def perforated(share: float) -> float:
    """Factor on the resistance of a sheet whose area is taken by round holes to a share, scattered evenly.

    (1 + p) / (1 - p): the effective medium of insulating discs in a sheet (Maxwell; Rayleigh 1892 to first order).
    """
    return (1.0 + share) / (1.0 - share)


@lru_cache(maxsize=64)
def solved_net(plan: Floorplan, region: Region) -> SheetSolution:
    """Solve the sheet of one net; kept in memory, as a study is compiled more than once.

    Raises
    ------
    SheetError : the net cannot be solved
    """
    sheet = net_sheet(plan, region)
    return solve(sheet, net_pitch_m(sheet))


def port_densities(solution: SheetSolution) -> tuple[FloatArray, FloatArray]:
    """Current density averaged over the disc in every copper cell for one ampere at each port, (cells, P) 1/m.

    Densities of several ports add up to at least the density of all together (triangle inequality), and to just
    that where all run the same way, as they do where it crowds. Returned with the middles of the cells, (cells, 2) m.
    """
    count = len(solution.ports)
    found = np.stack([averaged_density_a_per_m(solution, np.eye(count)[k]).ravel() for k in range(count)], axis=1)
    x_m, y_m = solution.grid.centres_m()
    middles = np.stack(np.meshgrid(x_m, y_m), axis=2).reshape(-1, 2)
    kept = ~np.isnan(found).any(axis=1)
    return found[kept], middles[kept]


def crowded(solution: SheetSolution) -> tuple[FloatArray, FloatArray]:
    """The discs where the density summed over ports is greatest for some mix of currents, (K, P) 1/m, (K, 2) m.

    Mixes tried: each port alone, each two alike, all alike. The worst cell of each is looked at closely: the disc
    moves between cells, so that a finer grid hardly changes what it finds.
    """
    density, middles = port_densities(solution)
    count = density.shape[1]
    one, other = np.triu_indices(count)
    mixes = np.zeros((len(one) + 1, count))
    np.add.at(mixes, (np.arange(len(one)), one), 1.0)
    np.add.at(mixes, (np.arange(len(one)), other), 1.0)
    mixes[-1] = 1.0
    worst = (density @ mixes.T).argmax(axis=0)
    cells = np.unique(worst)
    field = face_density(solution)
    found = [
        worst_disc(solution, field, middles[cell], mixes[worst == cell].mean(axis=0), DISC_M) for cell in cells
    ]
    # between the sides of a slot narrower than the grid only the cells tell them apart
    return np.maximum(np.stack(found), density[cells]), middles[cells]


def copper_area_m2(solution: SheetSolution) -> float:
    """Area (m2) of a sheet's copper: the outline less what its holes take of it, overlaps counted once."""
    whole = polygon_area_m2(solution.sheet.outline_m)
    if not solution.sheet.cutouts_m:
        return whole
    unbroken = copper_share(replace(solution.sheet, cutouts_m=()), solution.grid).sum()
    left = copper_share(solution.sheet, solution.grid).sum()
    return whole - float(unbroken - left) * solution.grid.pitch_m**2


@lru_cache(maxsize=64)
def net_copper(plan: Floorplan, region: Region, temperature_degc: float) -> NetCopper:
    """Solve one net and find where its current crowds.

    Raises
    ------
    SheetError : the net cannot be solved, or a neck is finer than the grid
    """
    solution = solved_net(plan, region)
    left = 1.0 - region.perforation_share
    density, middles = crowded(solution)
    cells = density * (DISC_M / left)
    flows = [neck_flow(solution, neck) for neck in solution.sheet.necks]
    widths = [flow.width_m * left for flow in flows]
    ohm = fields_ohm(plan, region, temperature_degc)
    return NetCopper(
        ports=solution.ports,
        squares=0.5 * (solution.squares + solution.squares.T) * perforated(region.perforation_share),
        source_ohm=ohm[SOURCE],
        own_ohm=np.array([ohm[port] for port in solution.ports]),
        area_m2=copper_area_m2(solution),
        place_width_m=np.array([*widths, *(DISC_M for _ in cells)]),
        place_share=np.concatenate([np.abs([flow.share for flow in flows]).reshape(-1, len(solution.ports)), cells]),
        place_names=(
            *(f"neck {neck.name}" for neck in region.necks),
            *(f"disc at ({1e3 * x:.0f}, {1e3 * y:.0f}) mm" for x, y in middles.tolist()),
        ),
    )


def bus_planes(study: ResolvedStudy, names: tuple[str, ...]) -> BusPlanes:
    """Return the planes of both buses: of the floorplan, or of the study's squares and area.

    Parameters
    ----------
    names : rails with a stage of their own
    """
    nets = [bus_copper(study, bus, names) for bus in BUSES]
    limits = [bus_vias_limit_a(study, bus, names) for bus in BUSES]
    most = max(len(net.place_width_m) for net, _, _ in nets)
    share = np.zeros((2, most, len(names)))
    width = np.ones((2, most))
    for bus, (net, _, _) in enumerate(nets):
        share[bus, : len(net.place_width_m)] = net.place_share
        width[bus, : len(net.place_width_m)] = net.place_width_m
    return BusPlanes(
        squares=np.stack([net.squares for net, _, _ in nets]),
        source_ohm=np.array([net.source_ohm for net, _, _ in nets]),
        own_ohm=np.stack([net.own_ohm for net, _, _ in nets]),
        area_m2=np.array([net.area_m2 for net, _, _ in nets]),
        place_width_m=width,
        place_share=share,
        place_bias=np.array([[carries_bias] * most for _, _, carries_bias in nets]),
        source_limit_a=np.array([source for source, _ in limits]),
        own_limit_a=np.stack([own for _, own in limits]),
        place_names=(nets[0][0].place_names, nets[1][0].place_names),
        reached=np.stack([reached for _, reached, _ in nets]),
    )


def bus_copper(study: ResolvedStudy, bus: str, names: tuple[str, ...]) -> tuple[NetCopper, BoolArray, float]:
    """Return a bus's copper over all rails, those it reaches, and the share of a bias supply's current it carries.

    A bias supply has no place of its own: without a floorplan its current crosses the plane's width, with one it
    sits by the converter.
    """
    plan, board, count = study.floorplan, study.board, len(names)
    region = None if plan is None else plan.region(bus)
    if plan is None or region is None:
        squares = board.bus_shared_squares + board.bus_own_squares
        area_m2 = board.bus_area_cm2 * 1e-4
        net = NetCopper(
            ports=names,
            squares=squares_matrix(board.bus_shared_squares, np.full(count, board.bus_own_squares)),
            source_ohm=0.0,
            own_ohm=np.zeros(count),
            area_m2=area_m2,
            place_width_m=np.array([np.sqrt(area_m2 / max(squares, 0.1))]),
            place_share=np.ones((1, count)),
            place_names=("width",),
        )
        return net, np.ones(count, dtype=bool), 1.0
    found = net_copper(plan, region, copper_degc(study))
    at = [names.index(port) for port in found.ports]
    squares_all = np.diag(np.full(count, UNREACHED_SQUARES))
    squares_all[np.ix_(at, at)] = found.squares
    own, share = np.zeros(count), np.zeros((len(found.place_width_m), count))
    own[at], share[:, at] = found.own_ohm, found.place_share
    reached = np.zeros(count, dtype=bool)
    reached[at] = True
    return replace(found, ports=names, squares=squares_all, own_ohm=own, place_share=share), reached, 0.0


def bus_vias_limit_a(study: ResolvedStudy, bus: str, names: tuple[str, ...]) -> tuple[float, FloatArray]:
    """Return what the vias of a bus's converters and of every rail's stage may carry, A; no end without a floorplan."""
    plan, own = study.floorplan, np.full(len(names), np.inf)
    region = None if plan is None else plan.region(bus)
    if plan is None or region is None:
        return np.inf, own
    limits = fields_limit_a(plan, region, study.board.copper_rise_k)
    for port, limit in limits.items():
        if port != SOURCE:
            own[names.index(port)] = limit
    return limits[SOURCE], own


def with_pours(study: ResolvedStudy, rails: RailArrays) -> RailArrays:
    """Return the rails with squares, area, width and vias of the pours that the floorplan draws.

    The width is that of the trace which may carry as much as the pour's most crowded place: IPC-2221 permits a
    current in proportion to width to the power 0.725, so that one width serves every thickness.
    """
    plan = study.floorplan
    if plan is None:
        return rails
    squares, area_m2, width_m = rails.squares.copy(), rails.copper_area_m2.copy(), rails.copper_width_m.copy()
    via_ohm, limit_a = rails.pour_via_ohm.copy(), rails.via_limit_a.copy()
    for k, name in enumerate(rails.names):
        region = plan.region(name)
        if region is None:
            continue
        net = net_copper(plan, region, copper_degc(study))
        squares[k], area_m2[k] = net.squares[0, 0], net.area_m2
        via_ohm[k] = net.source_ohm + net.own_ohm[0]
        limit_a[k] = min(fields_limit_a(plan, region, study.board.copper_rise_k).values())
        share = np.maximum(net.place_share[:, 0], LEAST_SHARE)
        width_m[k] = float((net.place_width_m * share ** (-1.0 / SECTION_EXPONENT)).min())
    return replace(
        rails, squares=squares, copper_area_m2=area_m2, copper_width_m=width_m, pour_via_ohm=via_ohm,
        via_limit_a=limit_a,
    )  # fmt: skip


def pour_place(study: ResolvedStudy, rail: str) -> str:
    """Return the name of the most crowded place of a rail's pour."""
    region = None if study.floorplan is None else study.floorplan.region(rail)
    if study.floorplan is None or region is None:
        return "width"
    net = net_copper(study.floorplan, region, copper_degc(study))
    share = np.maximum(net.place_share[:, 0], LEAST_SHARE)
    return net.place_names[int((net.place_width_m * share ** (-1.0 / SECTION_EXPONENT)).argmin())]


__all__ = [
    "BusPlanes", "NetCopper", "SheetError", "bus_planes", "copper_degc", "net_copper", "perforated", "pour_place",
    "solved_net", "via_field_ohm", "with_pours",
]  # fmt: skip
