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

    input_v (a,), output_v (b,) in V, current_a (c,) in A of one unit, loss_w (a, b, c) in W; local_degc is the
    local air it was measured in. Where output_follows, the output is what the input makes of it (a fixed ratio):
    output_v has one level, which is not looked at.
    """

    input_v: FloatArray
    output_v: FloatArray
    current_a: FloatArray
    loss_w: FloatArray
    local_degc: float = 25.0
    output_follows: bool = False


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
    steps = []
    for axis, value in zip((table.input_v, table.output_v, table.current_a), point, strict=True):
        below, share = _between(axis, value)
        steps.append(((below, 1.0 - share), (np.minimum(below + 1, len(axis) - 1), share)))
    inside: BoolArray = np.asarray((beyond_table(table, *point) <= EDGE_WIDTH).all(axis=-1))
    for at_input, input_share in steps[0]:
        for at_output, output_share in steps[1]:
            for at_current, current_share in steps[2]:
                corner = table.loss_w[at_input, at_output, at_current]
                loss = loss + corner * input_share * output_share * current_share
    return loss, inside


def beyond_table(table: LossTable, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike) -> FloatArray:
    """Return how far input voltage, output voltage and current lie beyond the table, (..., 3), as shares of its ends.

    Above 0 outside the table, below 0 inside it, -1 where there is no end (a current from 0 A, an output that
    follows). Arguments as in :func:`table_loss_w`. Closed form.
    """
    point = np.broadcast_arrays(np.asarray(input_v), np.asarray(output_v), np.asarray(current_a))
    found = np.full((*point[0].shape, 3), -1.0)
    for k, (axis, value) in enumerate(zip((table.input_v, table.output_v, table.current_a), point, strict=True)):
        if k == 1 and table.output_follows:
            continue
        found[..., k] = np.maximum(value / axis[-1] - 1.0, 1.0 - value / axis[0] if axis[0] > 0 else -1.0)
    return found


def _between(axis: FloatArray, value: FloatArray) -> tuple[IntArray, FloatArray]:
    """Return the level below each value and how far (0 to 1) it is on the way to the next; ends are held."""
    if len(axis) == 1:
        return np.zeros(value.shape, dtype=np.int_), np.zeros(value.shape)
    below = np.clip(np.searchsorted(axis, value, side="right") - 1, 0, len(axis) - 2).astype(np.int_)
    share = (value - axis[below]) / (axis[below + 1] - axis[below])
    return below, np.clip(share, 0.0, 1.0)
