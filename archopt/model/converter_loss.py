"""What one unit of a converter or one phase of a stage loses: by its row's terms, or read from its measured table.

A table holds for the local air it was measured in. Warmer air adds what the row's own terms say it adds (its
resistance and how that rises); everything else is the table's. Beyond a table the loss is that of its edge, and
the limit "measured range" says by how much a design went beyond: nothing is extrapolated in silence.
"""

from __future__ import annotations

from collections.abc import Callable, Sequence
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from archopt.inputs.parts import Part
from archopt.inputs.resolved import Catalogue
from archopt.physics import bus_converter
from archopt.physics.bus_converter import ConverterLosses, ConverterParameters
from archopt.physics.measured import EDGE_WIDTH, LossTable, beyond_table, table_loss_w

FloatArray = NDArray[np.float64]
IntArray = NDArray[np.int64]

Tables = tuple[LossTable | None, ...]
Parametric = Callable[[FloatArray, FloatArray, FloatArray, FloatArray, IntArray], FloatArray]
WITHIN = -1.0  # how far beyond its table a row without one is: it has no ends
BEYOND = ("input voltage", "output voltage", "current")


def measured_tables(catalogue: Catalogue, rows: Sequence[Part]) -> Tables:
    """Return each row's measured loss, None where its own terms say it."""
    return tuple(catalogue.measured.get(row.name) for row in rows)


def any_measured(tables: Tables) -> bool:
    """Tell whether any row's loss is read from a table."""
    return any(table is not None for table in tables)


class Losing(Protocol):
    """A table of converters: the terms of its rows, and their measured tables."""

    @property
    def loss(self) -> ConverterParameters:
        """Return the rows' terms."""
        ...

    @property
    def measured(self) -> Tables:
        """Return the rows' measured tables."""
        ...


class ConverterLoss:
    """Losses of one unit of each converter of a batch: the one place that knows whether a row is measured.

    Parameters
    ----------
    loss : the terms of all rows
    measured : their tables
    index : rows the operating points are of; its shape broadcasts against theirs
    """

    def __init__(self, loss: ConverterParameters, measured: Tables, index: NDArray[Any]) -> None:
        self.terms = loss.take(index)
        self.measured = measured
        self.index = index

    @classmethod
    def of(cls, table: Losing, index: NDArray[Any]) -> ConverterLoss:
        """Return the losses of rows of a table of converters."""
        return cls(table.loss, table.measured, index)

    def __call__(
        self, input_v: FloatArray, output_v: FloatArray, current_a: FloatArray, ambient_degc: FloatArray
    ) -> ConverterLosses:
        """Return losses of one unit at input and output voltage (V), current (A) and local air (degC)."""
        found = bus_converter.losses(self.terms, input_v, output_v, current_a, ambient_degc)
        if not any_measured(self.measured):
            return found
        shape = found.temperature_degc.shape
        index = np.broadcast_to(self.index, shape)
        mine = np.isin(index, [k for k, table in enumerate(self.measured) if table is not None])
        if not mine.any():
            return found

        def terms_w(
            volts: FloatArray, out: FloatArray, amps: FloatArray, degc: FloatArray, place: IntArray
        ) -> FloatArray:
            picked = ConverterParameters(
                *(np.broadcast_to(getattr(self.terms, name), shape).ravel()[place] for name in TERMS)
            )
            return bus_converter.losses(picked, volts, out, amps, degc).total_w

        measured_w = table_w(self.measured, index, (input_v, output_v, current_a, ambient_degc), terms_w)
        ambient = np.broadcast_to(ambient_degc, shape)
        warm = ambient + self.terms.thermal_k_per_w * measured_w
        by_terms = {name: np.where(mine, 0.0, getattr(found, name)) for name in bus_converter.MECHANISMS}
        return ConverterLosses(
            **by_terms,
            temperature_degc=np.where(mine, warm, found.temperature_degc),
            thermal_gain=found.thermal_gain,
            measured_w=measured_w,
        )


TERMS = tuple(ConverterParameters.__dataclass_fields__)


def table_w(
    measured: Tables, index: IntArray, at: tuple[FloatArray, FloatArray, FloatArray, FloatArray], terms_w: Parametric
) -> FloatArray:
    """Return the loss of one unit read from the tables, in the shape of ``index``; 0 where a row has none.

    Parameters
    ----------
    at : input and output voltage (V), current of one unit (A), local air (degC), broadcasting to ``index``
    terms_w : loss by the rows' own terms at some flat places: the difference that warmer air makes is taken from it
    """
    flat = [np.broadcast_to(values, index.shape).ravel() for values in at]
    out: FloatArray = np.zeros(index.size)
    for k, table in enumerate(measured):
        place = np.flatnonzero(index == k) if table is not None else ()
        if table is None or not len(place):
            continue
        here = np.asarray(place, dtype=np.int64)
        volts, out_v, amps, degc = (values[here] for values in flat)
        loss, _ = table_loss_w(table, volts, out_v, amps)
        warmer = terms_w(volts, out_v, amps, degc, here)
        bench = terms_w(volts, out_v, amps, np.full_like(degc, table.local_degc), here)
        out[here] = np.maximum(loss + warmer - bench, 0.0)
    return out.reshape(index.shape)


def beyond_percent(
    measured: Tables, index: NDArray[Any], input_v: FloatArray, output_v: FloatArray, current_a: FloatArray
) -> FloatArray:
    """Return how far operating points lie beyond their tables, (..., 3) percent; far inside where there is none."""
    shape = np.broadcast_shapes(*(np.shape(x) for x in (index, input_v, output_v, current_a)))
    rows = np.broadcast_to(index, shape)
    volts, out_v, amps = (np.broadcast_to(x, shape) for x in (input_v, output_v, current_a))
    out = np.full((*shape, 3), WITHIN)
    for k, table in enumerate(measured):
        if table is not None:
            here = rows == k
            out[here] = beyond_table(table, volts[here], out_v[here], amps[here])
    return 100.0 * out


def is_measured(measured: Tables, index: NDArray[Any]) -> NDArray[np.bool_]:
    """Return which rows are read from tables, in the shape of ``index``."""
    return np.asarray(np.array([table is not None for table in measured], dtype=bool)[index])


def edge_percent(accuracy: FloatArray | float = 0.0) -> FloatArray:
    """Return how far beyond its table a point may be, (..., 3) percent: a bench is no calibrator.

    accuracy : of a converter's output setting (share), which moved the bench's output as it moves this one's.
    """
    wide = np.asarray(accuracy, dtype=np.float64)
    none = np.zeros_like(wide)
    return 100.0 * (EDGE_WIDTH + np.stack([none, wide, none], axis=-1))
