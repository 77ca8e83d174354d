"""Losses of a measured part from a table: linear between its points, and marked where there are none."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.physics.arrays import BoolArray, FloatArray, FloatLike, IntArray

#: Beyond the ends of the table by no more than this still counts as inside (relative): a bench is no calibrator.
EDGE_WIDTH = 0.01


@dataclass(frozen=True, slots=True)
class LossTable:
    """Measured loss of one unit; axes rise strictly, one level on an axis is allowed.

    input_v (a,), output_v (b,) in V, current_a (c,) in A of one unit, loss_w (a, b, c) in W.
    """

    input_v: FloatArray
    output_v: FloatArray
    current_a: FloatArray
    loss_w: FloatArray


def table_loss_w(
    table: LossTable, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike
) -> tuple[FloatArray, BoolArray]:
    """Return the loss (W) of one unit and whether the point lies inside the table.

    Outside, the loss is that of the nearest point of the table's surface and the mark is False: nothing is
    extrapolated.

    Parameters
    ----------
    table : measured loss
    input_v, output_v : voltages (V)
    current_a : current of one unit (A); all broadcast

    Notes
    -----
    Linear in each of the three axes (trilinear): exact where loss is a product of linear functions. Closed form.
    """
    point = np.broadcast_arrays(np.asarray(input_v), np.asarray(output_v), np.asarray(current_a))
    loss = np.zeros(point[0].shape)
    inside: BoolArray = np.ones(point[0].shape, dtype=bool)
    steps = []
    for axis, value in zip((table.input_v, table.output_v, table.current_a), point, strict=True):
        below, share = _between(axis, value)
        steps.append(((below, 1.0 - share), (np.minimum(below + 1, len(axis) - 1), share)))
        inside &= (value >= axis[0] * (1.0 - EDGE_WIDTH)) & (value <= axis[-1] * (1.0 + EDGE_WIDTH))
    for at_input, input_share in steps[0]:
        for at_output, output_share in steps[1]:
            for at_current, current_share in steps[2]:
                corner = table.loss_w[at_input, at_output, at_current]
                loss = loss + corner * input_share * output_share * current_share
    return loss, inside


def _between(axis: FloatArray, value: FloatArray) -> tuple[IntArray, FloatArray]:
    """Return the level below each value and how far (0 to 1) it is on the way to the next; ends are held."""
    if len(axis) == 1:
        return np.zeros(value.shape, dtype=np.int_), np.zeros(value.shape)
    below = np.clip(np.searchsorted(axis, value, side="right") - 1, 0, len(axis) - 2).astype(np.int_)
    share = (value - axis[below]) / (axis[below + 1] - axis[below])
    return below, np.clip(share, 0.0, 1.0)
