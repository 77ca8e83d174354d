"""A bench that measures rows of the catalogue: points of a known part, with noise on efficiency."""

from __future__ import annotations

from collections.abc import Sequence
from pathlib import Path

import numpy as np

from archopt.inputs.measured import MeasuredPoints
from archopt.inputs.parts import Part
from archopt.inputs.resolved import Catalogue
from archopt.physics.arrays import FloatArray
from archopt.present.part_losses import RowLosses

SHARES = (0.1, 0.2, 0.35, 0.5, 0.7, 0.85, 1.0)


def loss_w(catalogue: Catalogue, part: Part, points: MeasuredPoints) -> FloatArray:
    """Loss (points,) of a row where the points are."""
    found = RowLosses(catalogue)(part, points.input_v, points.output_v, points.current_a, points.temperature_degc)
    return sum(found.values(), np.zeros(len(points)))


def measure(
    catalogue: Catalogue, part: Part, input_v: Sequence[float], output_v: Sequence[float], current_a: Sequence[float],
    noise: float = 0.0, seed: int = 1, local_degc: Sequence[float] = (25.0,),
) -> MeasuredPoints:  # fmt: skip
    """Every combination once; ``noise`` is the standard deviation of efficiency (0 to 1)."""
    grid = np.array(np.meshgrid(input_v, output_v, current_a, local_degc, indexing="ij")).reshape(4, -1)
    count = grid.shape[1]
    lines = tuple(range(2, 2 + count))
    points = MeasuredPoints("points.csv", lines, grid[0], grid[1], grid[2], np.ones(count), grid[3])
    share = points.efficiency(loss_w(catalogue, part, points))
    share = share + np.random.default_rng(seed).normal(0.0, 1.0, count) * noise
    loss = points.output_w * (1.0 / share - 1.0)
    return MeasuredPoints(points.file, points.lines, grid[0], grid[1], grid[2], loss, grid[3])


def worst_points(catalogue: Catalogue, known: Part, fitted: Part, points: MeasuredPoints) -> float:
    """Worst error of the fitted part against the known one, in points of efficiency, where the points are."""
    true = points.efficiency(loss_w(catalogue, known, points))
    return float(100 * np.max(np.abs(points.efficiency(loss_w(catalogue, fitted, points)) - true)))


def write_points(path: Path, points: MeasuredPoints) -> Path:
    """The points as a person would have them."""
    rows = zip(points.input_v, points.output_v, points.current_a, points.efficiency(points.loss_w), strict=True)
    lines = ["input_voltage_v,output_voltage_v,current_a,efficiency"]
    lines += [f"{volts:.6g},{out:.6g},{load:.6g},{share:.6f}" for volts, out, load, share in rows]
    path.write_text("\n".join(lines) + "\n", encoding="utf-8")
    return path
