"""Print how fast the sheet solver converges and how long it takes: run this file.

Error against a closed form, or against the finest grid where there is none, by pitch; then the time of one
solution of a board with 20 ports by number of cells (processor time of this process).
"""

from __future__ import annotations

import time
from collections.abc import Callable

import numpy as np

from archopt.physics.arrays import FloatArray
from archopt.physics.sheet import solve
from archopt.physics.sheet_shape import DiscPad, Pad, RectanglePad, Sheet

MM = 1e-3


def rectangle(x1: float, y1: float, x2: float, y2: float) -> FloatArray:
    """Corners (m) of a rectangle given in mm."""
    return MM * np.array([[x1, y1], [x2, y1], [x2, y2], [x1, y2]])


def bar(port: str, x1: float, y1: float, x2: float, y2: float) -> RectanglePad:
    """A rectangular pad given in mm."""
    return RectanglePad(port, MM * (x1 + x2) / 2, MM * (y1 + y2) / 2, MM * (x2 - x1), MM * (y2 - y1))


def circle(radius: float, corners: int = 720, x: float = 0.0, y: float = 0.0) -> FloatArray:
    """Corners (m) of a polygon of a circle's area, in mm."""
    angle = 2 * np.pi / corners
    turn = angle * np.arange(corners)
    reach = radius * np.sqrt(angle / np.sin(angle))
    return MM * (np.array([x, y]) + reach * np.stack([np.cos(turn), np.sin(turn)], axis=1))


def corner() -> tuple[Sheet, float]:
    """A right-angle bend of 10 mm strips, and its squares (conformal map)."""
    outline = MM * np.array([[0, 0], [40, 0], [40, 10], [10, 10], [10, 40], [0, 40.0]])
    return Sheet(
        outline, (bar("source", 0, 39, 10, 40), bar("load", 39, 0, 40, 10)), "source"
    ), 5.8 + 0.5587290


def bend() -> tuple[Sheet, float]:
    """Half an annulus from 10 to 20 mm, current round the bend, and its squares (closed form)."""
    turn = np.linspace(0.0, np.pi, 721)
    arc = np.stack([np.cos(turn), np.sin(turn)], axis=1)
    ends = np.array([[-20.0, -2.0], [-10.0, -2.0]])
    outline = MM * np.concatenate([20 * arc, ends, 10 * arc[::-1], ends[::-1] * [-1.0, 1.0]])
    return Sheet(
        outline, (bar("source", -20, -2, -10, 0), bar("load", 10, -2, 20, 0)), "source"
    ), np.pi / np.log(2.0)


def discs() -> tuple[Sheet, float]:
    """Two discs of 5 mm, 20 mm apart, in a round sheet, and their squares (images of two line sources)."""
    pads = (DiscPad("source", -10 * MM, 0.0, 5 * MM), DiscPad("load", 10 * MM, 0.0, 5 * MM))
    edge = np.log((60.0**2 + 93.75) / (60.0**2 - 93.75))
    return Sheet(circle(60.0), pads, "source"), float((np.arccosh(4.0) + edge) / np.pi)


def board(ports: int = 20) -> Sheet:
    """A plane of 200 x 120 mm with a notch, 48 holes and pads of 3 to 4 mm."""
    pads: list[Pad] = [bar("source", 4, 50, 10, 70)]
    for number in range(ports):
        x, y = 30 + 38 * (number % 5), 15 + 30 * (number // 5)
        name = f"load {number + 1}"
        pads.append(
            bar(name, x - 2, y - 1.5, x + 2, y + 1.5) if number % 2 else DiscPad(name, x * MM, y * MM, 4 * MM)
        )
    holes = [circle(0.6 + 0.1 * (k % 9), 24, 18.3 + 38.1 * (k % 5), 6.1 + 9.7 * (k // 5)) for k in range(48)]
    outline = [[0, 0], [200, 0], [200, 120], [90, 120], [90, 110], [76, 110], [76, 120], [0, 120]]
    return Sheet(MM * np.array(outline, dtype=float), tuple(pads), "source", tuple(holes))


def table(name: str, made: Callable[[], tuple[Sheet, float]], pitches: tuple[float, ...]) -> None:
    """Print error and order by pitch (mm)."""
    sheet, expected = made()
    print(f"{name}: {expected:.6f} squares")
    before: tuple[float, float] | None = None
    for pitch in pitches:
        found = float(solve(sheet, pitch * MM).squares[0, 0])
        error = abs(found / expected - 1.0)
        order = f"{np.log(before[1] / error) / np.log(before[0] / pitch):6.2f}" if before else " " * 6
        print(f"  pitch {pitch:6.3f} mm  {found:.6f}  error {100 * error:8.4f} %  order {order}")
        before = pitch, error


def main() -> None:
    """Print the tables."""
    table("right-angle bend", corner, (2.0, 1.0, 0.5, 0.25, 0.125))
    table("round the bend", bend, (2.0, 1.0, 0.5, 0.25))
    table("two discs", discs, (2.5, 1.25, 0.625, 0.4))
    sheet = board()
    finest = solve(sheet, 0.35 * MM).squares
    print("board of 200 x 120 mm, 20 ports; error against a pitch of 0.35 mm")
    for pitch in (None, 2.0, 1.0, 0.7, 0.49):
        start, process = time.perf_counter(), time.process_time()
        solution = solve(sheet, None if pitch is None else pitch * MM)
        wall_s, busy_s = time.perf_counter() - start, time.process_time() - process
        error = np.abs(solution.squares / finest - 1.0)
        print(
            f"  pitch {1e3 * solution.grid.pitch_m:.3f} mm{' (default)' if pitch is None else '':10s}"
            f"  cells {solution.faces.node_cell.size:7d}  worst {100 * error.max():6.3f} %"
            f"  own {100 * np.diag(error).max():6.3f} %  wall {wall_s:5.2f} s  processor {busy_s:5.2f} s"
        )


if __name__ == "__main__":
    main()
