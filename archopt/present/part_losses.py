"""Losses of one catalogue row by the physics, at the air speed its own thermal resistance is stated at."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from types import SimpleNamespace
from typing import Any

import numpy as np

from archopt.inputs.parts import BuckStage, LinearRegulator, Part
from archopt.inputs.resolved import Catalogue
from archopt.model.part_rows import buck_parameters, converter_parameters
from archopt.physics import buck, bus_converter, linear
from archopt.physics.arrays import FloatArray, FloatLike
from archopt.physics.measured import table_loss_w


class RowLosses:
    """Losses of rows of a catalogue, by mechanism; see :class:`archopt.inputs.fitting_forms.PartLosses`.

    Parameters
    ----------
    catalogue : where a buck stage's inductor is found
    """

    def __init__(self, catalogue: Catalogue) -> None:
        self.catalogue = catalogue

    def __call__(
        self, part: Part, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike, ambient_degc: FloatLike,
        own_heat: bool = True,
    ) -> Mapping[str, FloatArray]:  # fmt: skip
        """Loss (W) of one unit by mechanism, in the broadcast shape of the operating point."""
        heat = 1.0 if own_heat else 0.0
        found: Any
        if isinstance(part, LinearRegulator):
            low = linear.LinearParameters(
                quiescent_a=np.asarray(part.quiescent_ma * 1e-3), dropout_v=np.asarray(part.dropout_mv * 1e-3),
                rated_a=np.asarray(part.phase_current_a), thermal_k_per_w=np.asarray(part.thermal_k_per_w * heat),
            )  # fmt: skip
            found = linear.losses(low, input_v, output_v, current_a, ambient_degc)
            return {name: getattr(found, name) for name in ("pass_element_w", "quiescent_w")}
        row: Any = part
        # the row's own air speed, so that its thermal resistance holds as it is stated
        bench: Any = SimpleNamespace(
            supply=SimpleNamespace(air_speed_m_s=row.air_speed_m_s), derating=SimpleNamespace(min_on_ns=0.0)
        )
        if isinstance(part, BuckStage):
            p = buck_parameters(bench, self.catalogue, [part])
            p = replace(p, thermal_k_per_w=p.thermal_k_per_w * heat)
            found = buck.losses(p, input_v, output_v, current_a, ambient_degc)
            return {name: getattr(found, name) for name in buck.MECHANISMS}
        c = converter_parameters(bench, [part])
        c = replace(c, thermal_k_per_w=c.thermal_k_per_w * heat)
        found = bus_converter.losses(c, input_v, output_v, current_a, ambient_degc)
        return {name: getattr(found, name) for name in bus_converter.MECHANISMS}


def row_loss_w(
    catalogue: Catalogue, part: Part, input_v: FloatLike, output_v: FloatLike, current_a: FloatLike,
    ambient_degc: float,
) -> FloatArray:  # fmt: skip
    """Loss (W) of one unit as a search takes it: of a measured part from its table, nan beyond it."""
    losses_of = RowLosses(catalogue)
    at = (part, input_v, output_v, current_a)
    warm = np.asarray(sum(losses_of(*at, ambient_degc).values()))
    table = catalogue.measured.get(part.name)
    if table is None:
        return warm
    loss, inside = table_loss_w(table, input_v, output_v, current_a)
    bench = np.asarray(sum(losses_of(*at, table.local_degc).values()))
    return np.where(inside, loss + warm - bench, np.nan)
