"""Loss of a measured unit at one operating point: linear between the corners of its table, number by number."""

from __future__ import annotations

from dataclasses import replace
from typing import Any

from equivalence.reference_stage import Point


def place(levels: Any, value: float) -> list[tuple[int, float]]:
    """Return the levels a value lies between with their shares; the end's alone beyond it."""
    low = [k for k in range(len(levels)) if levels[k] <= value]
    if len(low) == len(levels):
        return [(len(levels) - 1, 1.0)]
    if not low:
        return [(0, 1.0)]
    k = low[-1]
    above = (value - levels[k]) / (levels[k + 1] - levels[k])
    return [(k, 1.0 - above), (k + 1, above)]


def measured_unit(
    table: Any, vin: float, vout: float, amps: float, here: Point, at_bench: Point, ambient: float, k_per_w: float
) -> Point:
    """Return the unit as its table says, with what its own terms lose more in this air than in the bench's."""
    loss = here.loss_w - at_bench.loss_w
    for i, share_in in place(table.input_v, vin):
        for o, share_out in place(table.output_v, vout):
            for c, share_a in place(table.current_a, amps):
                loss += share_in * share_out * share_a * float(table.loss_w[i][o][c])
    return replace(here, loss_w=loss, temperature_degc=ambient + k_per_w * (loss + here.bias_w))
