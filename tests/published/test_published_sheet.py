"""The sheet solver against closed forms and independent codes; the source stands beside each number."""

from __future__ import annotations

import networkx
import numpy as np
import pytest
import skfem
from skfem.models.poisson import laplace

from archopt.physics import sheet_fields as fields
from archopt.physics.arrays import FloatArray
from archopt.physics.sheet import SheetSolution, solve
from archopt.physics.sheet_network import joined_to, solve_network
from archopt.physics.sheet_shape import DiscPad, Neck, RectanglePad, Sheet, SheetError

MM = 1e-3


def rectangle(x1: float, y1: float, x2: float, y2: float) -> FloatArray:
    return MM * np.array([[x1, y1], [x2, y1], [x2, y2], [x1, y2]])


def pad(port: str, x1: float, y1: float, x2: float, y2: float) -> RectanglePad:
    return RectanglePad(port, MM * (x1 + x2) / 2, MM * (y1 + y2) / 2, MM * (x2 - x1), MM * (y2 - y1))


def circle(radius: float, corners: int = 720) -> FloatArray:
    """A polygon whose area is the circle's."""
    angle = 2 * np.pi / corners
    radius *= np.sqrt(angle / np.sin(angle))
    turn = angle * np.arange(corners)
    return MM * radius * np.stack([np.cos(turn), np.sin(turn)], axis=1)


def squares(sheet: Sheet, pitch: float | None = None) -> float:
    """Squares between the source and the only load; pitch in mm."""
    return float(solve(sheet, None if pitch is None else MM * pitch).squares[0, 0])


STRIP = Sheet(
    rectangle(0.0, 0.0, 50.0, 7.3),
    (pad("source", 0.0, 0.0, 2.1, 7.3), pad("load", 44.0, 0.0, 50.0, 7.3)),
    "source",
    necks=(Neck("across", 20 * MM, -1 * MM, 22 * MM, 9 * MM),),
)


@pytest.mark.parametrize("pitch", [None, 3.1, 0.73, 0.5])
def test_straight_strip(pitch: float | None) -> None:
    # closed form: length over width, whatever the grid
    assert squares(STRIP, pitch) == pytest.approx((44.0 - 2.1) / 7.3, rel=1e-6)


def test_strip_across_the_grid() -> None:
    # closed form: length over width; no side of the strip runs along the grid
    turn = np.array([[np.cos(0.4), np.sin(0.4)], [-np.sin(0.4), np.cos(0.4)]])
    ends = np.array([[-24.0, 0.0], [22.0, 0.0]]) @ turn * MM
    pads = [
        RectanglePad(name, float(x), float(y), size * MM, 7 * MM, 0.4)
        for name, (x, y), size in zip(("source", "load"), ends, (2.0, 6.0), strict=True)
    ]
    sheet = Sheet(rectangle(-25.0, -3.5, 25.0, 3.5) @ turn, tuple(pads), "source")
    assert squares(sheet) == pytest.approx((19.0 + 23.0) / 7.0, rel=2e-3)


@pytest.mark.parametrize(("cells", "within"), [(5.3, 0.03), (20.3, 0.006), (40.3, 0.003)])
def test_right_angle_corner(cells: float, within: float) -> None:
    # closed form: 1 - (2 ln 2)/pi = 0.558729 squares (conformal map)
    outline = MM * np.array([[0, 0], [40, 0], [40, 10], [10, 10], [10, 40], [0, 40.0]])
    sheet = Sheet(outline, (pad("source", 0, 39, 10, 40), pad("load", 39, 0, 40, 10)), "source")
    straight = 2 * (39.0 - 10.0) / 10.0
    assert squares(sheet, 10.0 / cells) - straight == pytest.approx(0.558729, rel=within)


@pytest.mark.parametrize(("pitch", "within"), [(2.0, 6e-3), (1.0, 2e-3), (0.4, 7e-4)])
def test_annulus_radially(pitch: float, within: float) -> None:
    # closed form: ln(b/a)/(2 pi) from a disc to a ring; the ring is made of tangential bars
    a, b, bars = 5.0, 20.0, 120
    turns = 2 * np.pi / bars * np.arange(bars)
    along = 2.2 * MM * (b + 1.0) * np.tan(np.pi / bars)
    ring = [
        RectanglePad("ring", MM * (b + 0.5) * np.cos(t), MM * (b + 0.5) * np.sin(t), MM, along, t)
        for t in turns.tolist()
    ]
    sheet = Sheet(circle(b + 1.2), (*ring, DiscPad("disc", 0.0, 0.0, 2 * a * MM)), "ring")
    assert squares(sheet, pitch) == pytest.approx(np.log(b / a) / (2 * np.pi), rel=within)


@pytest.mark.parametrize(("pitch", "within"), [(2.0, 3e-3), (0.5, 3e-4)])
def test_half_annulus_round_the_bend(pitch: float, within: float) -> None:
    # closed form: angle over ln(b/a) where the current runs round; the edges are curved, the ends are pads
    turn = np.linspace(0.0, np.pi, 721)
    arc = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    ends = np.array([[-20.0, -2.0], [-10.0, -2.0]])
    outline = MM * np.concatenate([20 * arc, ends, 10 * arc[::-1], ends[::-1] * [-1.0, 1.0]])
    sheet = Sheet(outline, (pad("source", -20, -2, -10, 0), pad("load", 10, -2, 20, 0)), "source")
    assert squares(sheet, pitch) == pytest.approx(np.pi / np.log(2.0), rel=within)


@pytest.mark.parametrize(("cells", "within"), [(2.0, 0.025), (4.0, 6e-3), (8.0, 2e-3)])
def test_two_discs(cells: float, within: float) -> None:
    # acosh(D/2a)/pi in an infinite sheet (textbook, two parallel cylinders); the round edge at radius R adds
    # ln((R^2+k^2)/(R^2-k^2))/pi with k^2 = D^2/4 - a^2 (closed form, images of two line sources)
    radius, apart, a = 60.0, 20.0, 2.5
    pads = tuple(DiscPad(name, x * MM, 0.0, 2 * a * MM) for name, x in (("source", -10.0), ("load", 10.0)))
    square = apart**2 / 4 - a**2
    edge = np.log((radius**2 + square) / (radius**2 - square))
    expected = (np.arccosh(apart / (2 * a)) + edge) / np.pi
    assert edge < 0.03 * expected * np.pi
    assert squares(Sheet(circle(radius), pads, "source"), 2 * a / cells) == pytest.approx(
        expected, rel=within
    )


def test_van_der_pauw_on_an_irregular_outline() -> None:
    # van der Pauw, Philips Res. Rep. 13 (1958): exp(-pi Ra/Rs) + exp(-pi Rb/Rs) = 1 on any simply connected
    # sheet with small contacts on its edge; here with a notch, a slant and a slot from the edge
    outline = MM * np.array(
        [[0, 0], [60, 0], [60, 25], [48, 44], [30, 44], [30, 30], [22, 30], [22, 44], [0, 44.0]]
    )
    slot = MM * np.array([[39.0, -1.0], [39.4, -1.0], [39.4, 13.0], [39.0, 13.0]])
    places = {"a": (30, 0, 31, 0.7), "b": (59.3, 10, 60, 11), "c": (40, 43.3, 41, 44), "d": (0, 20, 0.7, 21)}
    solution = solve(Sheet(outline, tuple(pad(name, *at) for name, at in places.items()), "a", (slot,)))
    b, c, d = range(3)
    m = solution.squares
    ab_cd = m[c, b] - m[d, b]
    bc_da = m[d, c] - m[d, b]
    assert min(ab_cd, bc_da) > 0.05
    assert np.exp(-np.pi * ab_cd) + np.exp(-np.pi * bc_da) == pytest.approx(1.0, rel=0.01)


@pytest.mark.parametrize(
    ("steps", "expected"),
    [((1, 0), 0.5), ((0, 1), 0.5), ((1, 1), 2 / np.pi), ((2, 0), 2 - 4 / np.pi)],
)
def test_infinite_square_lattice(steps: tuple[int, int], expected: float) -> None:
    # unit resistors: Cserti 2000; OEIS A355565
    side = 161
    number = np.arange(side**2).reshape(side, side)
    along = np.stack([number[1:].ravel(), number[:-1].ravel()], axis=1)
    across = np.stack([number[:, 1:].ravel(), number[:, :-1].ravel()], axis=1)
    node = np.concatenate([along, across])
    middle = side // 2
    other = number[middle + steps[0], middle + steps[1]]
    potential = solve_network(
        node, np.ones(len(node)), side**2, int(number[middle, middle]), np.array([other])
    )
    assert potential[other, 0] == pytest.approx(expected, rel=5e-4)


NOTCHED = Sheet(
    rectangle(0, 0, 20, 12),
    (pad("source", 1, 1, 4, 4), pad("one", 15, 1, 19, 3), DiscPad("two", 16 * MM, 9 * MM, 4 * MM)),
    "source",
    (MM * np.array([[8.0, 3.0], [10.2, 3.3], [9.1, 13.0]]),),
)


def test_small_grid_against_networkx() -> None:
    # networkx.resistance_distance, an independent network code, on the links of a small sheet
    solution = solve(NOTCHED, 1.1 * MM)
    network = solution.network
    graph = networkx.MultiGraph()
    for (left, right), conductance in zip(network.node.tolist(), network.conductance.tolist(), strict=True):
        graph.add_edge(left, right, conductance=conductance)
    for port in (1, 2):
        expected = networkx.resistance_distance(graph, 0, port, weight="conductance", invert_weight=False)
        assert solution.squares[port - 1, port - 1] == pytest.approx(expected, rel=1e-6)
    between = networkx.resistance_distance(graph, 1, 2, weight="conductance", invert_weight=False)
    m = solution.squares
    assert m[0, 0] + m[1, 1] - 2 * m[0, 1] == pytest.approx(between, rel=1e-6)
    assert joined_to(network.node, network.node_count, 0)[: network.port_count].all()


BOARD_PADS = {
    "source": (4, 12, 8, 24),
    "one": (48, 4, 52, 8),
    "two": (28, 32, 34, 36),
    "three": (50, 26, 54, 32),
}
BOARD_CUTS = ((20, 0, 24, 18), (36, 14, 44, 22), (40, 30, 42, 40))
BOARD = Sheet(
    rectangle(0, 0, 60, 40),
    tuple(pad(name, *at) for name, at in BOARD_PADS.items()),
    "source",
    tuple(rectangle(*cut) for cut in BOARD_CUTS),
)


def board_by_finite_elements() -> FloatArray:
    """Port resistance matrix of the board by quadratic triangles, refined towards every corner."""
    mesh = skfem.MeshQuad.init_tensor(np.arange(0, 61, 2.0), np.arange(0, 41, 2.0)).to_meshtri()
    boxes = [*BOARD_PADS.values(), *BOARD_CUTS]
    centre = mesh.p[:, mesh.t].mean(axis=1)
    gone = np.zeros(centre.shape[1], dtype=bool)
    for x1, y1, x2, y2 in boxes:
        gone |= (centre[0] > x1) & (centre[0] < x2) & (centre[1] > y1) & (centre[1] < y2)
    mesh = mesh.remove_elements(np.flatnonzero(gone))
    corners = np.array([(x, y) for x1, y1, x2, y2 in boxes for x in (x1, x2) for y in (y1, y2)], dtype=float)
    for level in range(7):
        away = mesh.p[:, mesh.t].mean(axis=1).T[:, None] - corners
        near = np.linalg.norm(away, axis=2).min(axis=1) < 3.0 / 2**level
        mesh = mesh.refined(np.flatnonzero(near))
    basis = skfem.Basis(mesh, skfem.ElementTriP2())
    stiffness = laplace.assemble(basis)
    held, potentials = [], []
    for x1, y1, x2, y2 in BOARD_PADS.values():
        x, y = basis.doflocs
        held.append(np.flatnonzero((x > x1 - 1e-6) & (x < x2 + 1e-6) & (y > y1 - 1e-6) & (y < y2 + 1e-6)))
    for load in held[1:]:
        start = np.zeros(basis.N)
        start[load] = 1.0
        potentials.append(skfem.solve(*skfem.condense(stiffness, x=start, D=np.concatenate(held))))
    field = np.stack(potentials, axis=1)
    return np.linalg.inv(field.T @ (stiffness @ field))


def test_default_grid_within_one_per_cent_of_finite_elements() -> None:
    # scikit-fem, an independent field code, on a board of our own with a notch, a hole and a slot
    expected = board_by_finite_elements()
    solution = solve(BOARD)
    assert solution.ports == ("one", "two", "three")
    assert solution.squares == pytest.approx(expected, rel=0.01)
    assert np.diag(solution.squares) == pytest.approx(np.diag(expected), rel=0.005)


ENDS = (pad("source", 0, 0, 4, 20), pad("load", 36, 0, 40, 20))


@pytest.mark.parametrize("pitch", [1.3, 0.6])
def test_slit_narrower_than_a_cell_cuts(pitch: float) -> None:
    # ten times as fine a grid; the slit is a tenth of a millimetre wide and leaves two of twenty at its end
    slit = MM * np.array([[20.03, -1.0], [20.13, -1.0], [20.43, 18.0], [20.33, 18.0]])
    detour = Sheet(rectangle(0, 0, 40, 20), ENDS, "source", (slit,))
    fine = squares(detour, 0.12)
    assert fine > 2.0 * 32.0 / 20.0
    assert squares(detour, pitch) == pytest.approx(fine, rel=0.03)


@pytest.mark.parametrize("pitch", [2.0, 1.3, 0.6])
@pytest.mark.parametrize(("low", "high"), [(-1.0, 21.0), (0.0, 20.0)], ids=["over the edge", "flush"])
def test_slits_along_the_current_part_it(pitch: float, low: float, high: float) -> None:
    # closed form: a slit along the flow takes its width out of the strip; one right across takes everything
    along = rectangle(-1.0, 10.21, 41.0, 10.31)
    halves = (pad("source", 0, 10.31, 4, 20), pad("load", 36, 10.31, 40, 20))
    assert squares(Sheet(rectangle(0, 0, 40, 20), halves, "source", (along,)), pitch) == pytest.approx(
        32.0 / 9.69, rel=1e-5
    )
    cut = Sheet(rectangle(0, 0, 40, 20), ENDS, "source", (rectangle(20.03, low, 20.13, high),))
    with pytest.raises(SheetError, match="no copper joins load to the source"):
        solve(cut, pitch * MM)


@pytest.mark.parametrize("pitch", [1.0, 0.5])
def test_neck_narrower_than_a_cell_conducts_with_its_width(pitch: float) -> None:
    # closed form for a long neck: length over width, 6/0.3, and the spreading at either end
    outline = [
        [0, 0],
        [10, 0],
        [10, 5],
        [16, 5],
        [16, 0],
        [26, 0],
        [26, 10],
        [16, 10],
        [16, 5.3],
        [10, 5.3],
        [10, 10],
    ]
    sheet = Sheet(
        MM * np.array([*outline, [0, 10]], dtype=float),
        (pad("source", 0, 0, 2, 10), pad("load", 24, 0, 26, 10)),
        "source",
    )
    fine = squares(sheet, 0.05)
    assert 20.0 < fine < 26.0
    assert squares(sheet, pitch) == pytest.approx(fine, rel=0.03)


def test_density_in_a_strip() -> None:
    # closed form: current over width everywhere, averaged or not; the drop falls evenly
    solution = solve(STRIP, 0.5 * MM)
    current = np.array([3.0])
    for density in (
        fields.density_a_per_m(solution, current),
        fields.averaged_density_a_per_m(solution, current),
    ):
        found = density[np.isfinite(density)]
        assert found.size > 1000
        assert found == pytest.approx(3.0 / 7.3e-3, rel=1e-6)
    drop = fields.drop_v(solution, current, 1e-3)
    assert np.nanmax(drop) == pytest.approx(3.0 * 1e-3 * (44.0 - 2.1) / 7.3, rel=1e-6)
    assert np.nanmin(drop) == pytest.approx(0.0, abs=1e-12)
    x_m, _ = solution.grid.centres_m()
    row = drop[solution.grid.rows // 2]
    inside = (x_m > 2.1 * MM) & (x_m < 44 * MM)
    assert row[inside] == pytest.approx(3e-3 * (x_m[inside] / MM - 2.1) / 7.3, rel=1e-6)


def test_neck_carries_all_and_is_as_wide_as_the_copper() -> None:
    # closed form: the marked line leans by 2 in 10; Kirchhoff
    flow = fields.neck_flow(solve(STRIP, 0.9 * MM), STRIP.necks[0])
    assert flow.width_m == pytest.approx(7.3e-3 * np.hypot(1.0, 0.2), rel=1e-6)
    assert flow.share == pytest.approx(np.array([-1.0]), rel=1e-9)
    assert flow.density_a_per_m(np.array([5.0])) == pytest.approx(5.0 / flow.width_m, rel=1e-9)


@pytest.mark.parametrize(
    "ends", [(22, 18, 22, 40), (24, 18, 24, 40), (20, 18, 20, 30), (20, 18, 17, 40)], ids=str
)
def test_neck_from_corner_to_edge_carries_what_lies_beyond(ends: tuple[float, ...]) -> None:
    # Kirchhoff: everything drawn beyond a line that parts the board goes through it, however it is marked
    neck = Neck("beside the notch", *(MM * value for value in ends))
    flow = fields.neck_flow(solve(BOARD, 0.61 * MM), neck)
    assert flow.width_m == pytest.approx(22e-3 * np.hypot(1.0, (ends[2] - ends[0]) / 22.0), rel=1e-6)
    assert np.abs(flow.share) == pytest.approx(np.ones(3), rel=1e-9)


def annulus_solution(pitch: float) -> SheetSolution:
    pads = tuple(
        RectanglePad("ring", MM * 24.5 * np.cos(t), MM * 24.5 * np.sin(t), MM, MM * 2.7, t)
        for t in (2 * np.pi / 60 * np.arange(60)).tolist()
    )
    return solve(Sheet(circle(25.5), (*pads, DiscPad("disc", 0.0, 0.0, 8 * MM)), "ring"), pitch * MM)


def test_averaged_density_in_an_annulus() -> None:
    # closed form I/(2 pi r), averaged over a disc of 3 mm by numerical integration
    solution = annulus_solution(0.4)
    density = fields.averaged_density_a_per_m(solution, np.ones(1))
    x_m, y_m = solution.grid.centres_m()
    column, row = int(np.argmin(np.abs(x_m - 8 * MM))), int(np.argmin(np.abs(y_m)))
    local = np.linspace(-1.5, 1.5, 601) * MM
    dx, dy = (axis.ravel() for axis in np.meshgrid(local, local))
    under = dx**2 + dy**2 <= (1.5 * MM) ** 2
    radius = np.hypot(x_m[column] + dx[under], y_m[row] + dy[under])
    assert density[row, column] == pytest.approx(np.mean(1 / (2 * np.pi * radius)), rel=0.01)


def test_averaged_density_settles_where_the_peak_does_not() -> None:
    # the field at an inner corner goes as distance to minus one third (textbook); its mean is finite
    outline = MM * np.array([[0, 0], [40, 0], [40, 10], [10, 10], [10, 40], [0, 40.0]])
    sheet = Sheet(outline, (pad("source", 0, 38, 10, 40), pad("load", 38, 0, 40, 10)), "source")
    coarse, fine = (solve(sheet, pitch * MM) for pitch in (0.6, 0.15))
    one = np.ones(1)
    peaks = [np.nanmax(fields.density_a_per_m(solution, one)) for solution in (coarse, fine)]
    means = [np.nanmax(fields.averaged_density_a_per_m(solution, one)) for solution in (coarse, fine)]
    assert peaks[1] > 1.3 * peaks[0]
    assert means[1] == pytest.approx(means[0], rel=0.05)


def test_link_currents_add_up_to_what_is_drawn() -> None:
    # Kirchhoff: what flows into every load's pads is drawn there, what leaves the source is the sum
    solution = solve(NOTCHED)
    drawn = np.array([2.0, 5.0])
    current, node = fields.link_current_a(solution, drawn), solution.network.node
    net = np.bincount(node[:, 1], current, solution.network.node_count)
    net -= np.bincount(node[:, 0], current, solution.network.node_count)
    assert net[:3] == pytest.approx([-7.0, 2.0, 5.0], rel=1e-9)
    assert np.abs(net[3:]).max() < 1e-9
