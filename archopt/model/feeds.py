"""Where stages take their input from, and the drop of the planes between: bus A, bus B, the input node, a parent."""

from __future__ import annotations

import numpy as np

from archopt.model.hardware import Hardware
from archopt.model.parameters import BoolArray, FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.space import INPUT

LEAST_STAGE_SHARE = 0.3  # of the set bus voltage: below it the plane has collapsed and a limit says so


def via_drop_v(problem: Problem, rail_a: FloatArray, bus: int) -> FloatArray:
    """Return the drop in a bus's via fields, there and back, from the currents of its rails (..., R) A."""
    planes = problem.planes
    shared = planes.source_ohm[bus] * rail_a.sum(axis=-1, keepdims=True)
    return np.asarray(2.0 * (shared + planes.own_ohm[bus] * rail_a))


def users(on_bus: BoolArray) -> IntArray | slice:
    """Return which designs of (P, R) have a rail on a bus; all of them without a copy."""
    here = np.flatnonzero(on_bus.any(axis=1))
    return slice(None) if len(here) == len(on_bus) else here


class Feeds:
    """Where the stages of a batch take their input from: bus A, bus B, the input node or a parent rail.

    Weights and loads keep states last in memory, where all rails of a bus have the same source.
    """

    def __init__(self, problem: Problem, hardware: Hardware) -> None:
        self.problem, self.hardware = problem, hardware
        self.source = np.where(hardware.feed == INPUT, 2, hardware.on_bus[:, 1].astype(np.int64))
        self.child = np.nonzero(hardware.parent >= 0)
        self.parent_v = problem.rails.voltage_v[hardware.parent[self.child]]
        self.direct = (hardware.feed == INPUT).astype(np.float64)
        self.on_bus = hardware.on_bus.astype(np.float64)
        self.users = [users(hardware.on_bus[:, bus]) for bus in range(2)]

    def stage_v(self, bus_v: FloatArray, node_v: FloatArray, drop_v: FloatArray) -> FloatArray:
        """Return the stage inputs, (P, S, R) V, from buses (P, 2, S), input node (P, S) and drops (P, S, R)."""
        sources = np.concatenate([bus_v, node_v[:, None]], axis=1)
        fed_v = sources[np.arange(len(sources))[:, None], self.source]
        stage_v = np.maximum(fed_v - drop_v.transpose(0, 2, 1), LEAST_STAGE_SHARE * fed_v)
        stage_v[self.child] = self.parent_v[:, None]
        return stage_v.transpose(0, 2, 1)

    def bus_sum(self, values: FloatArray) -> FloatArray:
        """Return what the rails of each bus sum to, (P, 2, S), from (P, S, R)."""
        out = np.zeros((len(values), 2, values.shape[1]))
        for bus, here in enumerate(self.users):
            out[here, bus] = np.einsum("psr,pr->ps", values[here], self.on_bus[here, bus])
        return out

    def plane_drops(self, rail_a: FloatArray, warmth: FloatArray) -> tuple[FloatArray, FloatArray]:
        """Return the drop to every stage, (P, S, R) V, and the loss of both planes, (P, 2, S) W.

        rail_a : (P, S, R) stage input currents; warmth : (P, S, 2) resistance over that at the reference
        """
        problem, hardware = self.problem, self.hardware
        drop = np.zeros_like(rail_a)
        plane_w = np.zeros((len(rail_a), 2, rail_a.shape[1]))
        for bus, here in enumerate(self.users):
            on_bus, warm = self.on_bus[here, bus, None], warmth[here, :, bus]
            on_a = rail_a[here] * on_bus
            part = problem.planes.square_drop(bus, on_a)
            square_ohm = hardware.plane_ohm[here, bus, None]
            if problem.planes.with_vias:
                part *= square_ohm[..., None]
                part += via_drop_v(problem, on_a, bus)
                part *= warm[..., None]
            else:
                part *= (square_ohm * warm)[..., None]
            part *= on_bus
            plane_w[here, bus] = np.einsum("psr,psr->ps", part, on_a)
            drop[here] += part
        return drop, plane_w
