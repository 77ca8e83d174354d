"""States that stand for hours of the year: clusters of moments at their hour-weighted means, or every moment."""

from __future__ import annotations

from dataclasses import dataclass, fields

import numpy as np

from archopt.inputs.resolved import ResolvedStudy
from archopt.model.parameters import BoolArray, FloatArray, IntArray


@dataclass(frozen=True)
class Moments:
    """The load table folded onto the rails that have stages of their own: M moments, R rails."""

    hours: FloatArray
    current_a: FloatArray
    off: BoolArray
    input_v: FloatArray
    inlet_degc: FloatArray
    tap_w: FloatArray
    useful_w: FloatArray
    label: tuple[str, ...]


@dataclass(frozen=True)
class EnergyStates:
    """Representative states with hours: N rows."""

    name: tuple[str, ...]
    hours: FloatArray
    current_a: FloatArray
    off: BoolArray
    input_v: FloatArray
    inlet_degc: FloatArray
    tap_w: FloatArray
    useful_w: FloatArray
    band: IntArray

    def take(self, index: IntArray) -> EnergyStates:
        """Return some of the states."""
        picked = {field.name: getattr(self, field.name)[index] for field in fields(self) if field.name != "name"}
        return EnergyStates(name=tuple(self.name[int(k)] for k in index), **picked)

    def joined(self, other: EnergyStates) -> EnergyStates:
        """Return these states followed by others."""
        both = {
            field.name: np.concatenate([getattr(self, field.name), getattr(other, field.name)])
            for field in fields(self)
            if field.name != "name"
        }
        return EnergyStates(name=(*self.name, *other.name), **both)


def means(study: ResolvedStudy, moments: Moments, band: IntArray, clusters: list[IntArray]) -> EnergyStates:
    """Return one state a cluster and input level, at its hour-weighted means."""
    names: list[str] = []
    rows: list[tuple[float, FloatArray, BoolArray, float, float, float, float, int]] = []
    for number, members in enumerate(clusters):
        weight = moments.hours[members]
        total = float(weight.sum())
        if total <= 0:
            continue
        share = weight / total
        stated = np.isfinite(moments.input_v[members])
        label = moments.label[members[0]] if len(members) == 1 and moments.label else f"load {number + 1}"
        levels: list[tuple[float, float, FloatArray]] = []  # volts, share of the hours, weights of members
        part = float(share[stated].sum())
        if part > 0:
            inside = np.where(stated, share, 0.0)
            volts = float(inside[stated] @ moments.input_v[members][stated] / part)
            levels.append((volts, part, inside / part))
        if part < 1:
            outside = np.where(stated, 0.0, share)
            levels += [
                (level.voltage_v, level.share * (1 - part), outside / (1 - part))
                for level in study.supply.levels
                if level.share > 0
            ]
        for volts, fraction, weights in levels:
            names.append(label if len(levels) == 1 else f"{label} at {volts:g} V")
            rows.append(
                (
                    total * fraction,
                    weights @ moments.current_a[members],
                    moments.off[members[0]],
                    volts,
                    float(weights @ moments.inlet_degc[members]),
                    float(weights @ moments.tap_w[members]),
                    float(weights @ moments.useful_w[members]),
                    int(band[members[0]]),
                )
            )
    columns = list(zip(*rows, strict=True))
    return EnergyStates(
        name=tuple(names),
        hours=np.array(columns[0]),
        current_a=np.array(columns[1]),
        off=np.array(columns[2]),
        input_v=np.array(columns[3]),
        inlet_degc=np.array(columns[4]),
        tap_w=np.array(columns[5]),
        useful_w=np.array(columns[6]),
        band=np.array(columns[7], dtype=np.int64),
    )


def every_moment(study: ResolvedStudy, moments: Moments, band: IntArray, index: IntArray) -> EnergyStates:
    """Return one state a moment and input level: the whole series, not reduced."""
    stated = np.isfinite(moments.input_v[index])
    parts = [(index[stated], moments.input_v[index[stated]], 1.0)]
    free = index[~stated]
    parts += [
        (free, np.full(len(free), level.voltage_v), level.share) for level in study.supply.levels if level.share > 0
    ]
    where = np.concatenate([part[0] for part in parts])
    return EnergyStates(
        name=("moment",) * len(where),
        hours=np.concatenate([moments.hours[rows] * share for rows, _, share in parts]),
        current_a=moments.current_a[where],
        off=moments.off[where],
        input_v=np.concatenate([part[1] for part in parts]),
        inlet_degc=moments.inlet_degc[where],
        tap_w=moments.tap_w[where],
        useful_w=moments.useful_w[where],
        band=band[where],
    )
