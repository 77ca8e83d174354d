"""What each bus carries in each band over the voltage grid, from the tables: its rails, its plane, its bias supply."""

from __future__ import annotations

import numpy as np

from archopt.model.board import LARGEST_STEP_RATIO, STEP_POWER_RATIO
from archopt.model.hardware import Hardware
from archopt.model.options import Options, band_hours
from archopt.model.parameters import FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.states import StateTable


def bus_sums(
    problem: Problem, options: Options, option: IntArray, hardware: Hardware
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return energy, mix and jump power of each bus's rails and their children, (P, 2, B, G)."""
    rows = options.rows
    row = options.row[option]
    shape = (len(row), 2, row.shape[2], rows.energy_kwh.shape[2])
    energy, mix, jump = np.zeros(shape), np.zeros(shape), np.zeros(shape)
    band = np.arange(row.shape[2])
    for r in range(row.shape[1]):
        for bus in range(2):
            here = np.flatnonzero(hardware.on_bus[:, bus, r])
            if not len(here):
                continue
            index = row[here, r]
            energy[here, bus] += rows.energy_kwh[index, band]
            mix[here, bus] += rows.mix_w[index, band]
            jump[here, bus] += rows.jump_w[index, band]
    add_children(problem, options, row, hardware, (energy, mix, jump))
    return energy, mix, jump


def add_children(
    problem: Problem, options: Options, row: IntArray, hardware: Hardware,
    sums: tuple[FloatArray, FloatArray, FloatArray],
) -> None:  # fmt: skip
    """Add what children draw from the buses of their parents, at the parent's own power in over out, in place.

    row (P, R, B): table rows of the rails' options.
    """
    p, child = np.nonzero(hardware.parent >= 0)
    parent = hardware.parent[p, child]
    fed = hardware.on_bus[p, :, parent].any(axis=1)
    p, child, parent = p[fed], child[fed], parent[fed]
    if not len(p):
        return
    rows, rails = options.rows, problem.rails
    bus = hardware.on_bus[p, :, parent].argmax(axis=1)
    band = np.arange(row.shape[2])
    output = (rails.voltage_v * problem.states.mix_a).T[parent][..., None]
    drawn = rows.mix_w[row[p, parent], band]
    ratio = np.where(output > 0, drawn / np.maximum(output, 1e-12), STEP_POWER_RATIO)
    ratio = np.clip(ratio, 1.0, LARGEST_STEP_RATIO)
    for total, values in zip(sums, (rows.child_kwh, rows.child_mix_w, rows.child_jump_w), strict=True):
        np.add.at(total, (p, bus), values[row[p, child], band, parent[:, None]][..., None] * ratio)


def rail_shares(options: Options, option: IntArray, hardware: Hardware) -> FloatArray:
    """Return the rails' shares of each bus's power at the worst mix, (P, 2, B, R)."""
    rows = options.rows
    middle = rows.mix_w.shape[2] // 2
    power = rows.mix_w[options.row[option], np.arange(rows.mix_w.shape[1]), middle]  # (P, R, B)
    on_bus = hardware.on_bus.astype(np.float64)
    on_it = np.einsum("pkr,prb->pkbr", on_bus, power)
    return np.asarray(on_it / np.maximum(on_it.sum(axis=3, keepdims=True), 1e-12))


def plane_ohm(problem: Problem, hardware: Hardware, shares: FloatArray) -> FloatArray:
    """Return the loop resistance at which a bus's whole current would lose what its plane does, (P, 2, B) ohm.

    shares (P, 2, B, R): each rail's share u of the current; u^T R u of the plane, and of the via fields.
    """
    planes = problem.planes
    squares = np.einsum("pkbr,kqr,pkbq->pkb", shares, planes.squares, shares)
    own = np.einsum("pkbr,kr->pkb", shares**2, planes.own_ohm)
    source = planes.source_ohm[:, None] * shares.sum(axis=3)
    return np.asarray(hardware.plane_ohm[..., None] * squares + 2.0 * (source + own))


def sensed_pours(
    problem: Problem, states: StateTable, hardware: Hardware
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return what the pours of rails with remote sense take from each bus, (P, 2, B, 1): kWh, mix W, jump W."""
    ohm = np.where(problem.rails.remote_sense, hardware.pour_ohm, 0.0)
    on_bus = hardware.on_bus * ohm[:, None, :]
    energy = states.with_hours
    square_kwh = np.zeros_like(states.mix_a)
    np.add.at(square_kwh, states.band[energy], states.hours[energy, None] * states.current_a[energy] ** 2 * 1e-3)
    found = [np.einsum("pkr,br->pkb", on_bus, square) for square in (square_kwh, states.mix_a**2, states.after_a**2)]
    return found[0][..., None], found[1][..., None], found[2][..., None]


def with_bus_losses(
    problem: Problem,
    states: StateTable,
    hardware: Hardware,
    shares: FloatArray,
    sums: tuple[FloatArray, FloatArray, FloatArray],
) -> tuple[FloatArray, FloatArray, FloatArray]:
    """Return energy (kWh), mix and jump power (W) of each bus, (P, 2, B, G), with what is not the rails' own.

    A stage that senses its load delivers what its pour loses. The plane loses I^T R I, by the band's mean current
    and how evenly its rails share it; a bias supply on bus A draws its own power. The plane weighs on the
    schedule: it asks for a higher bus at heavy load.
    """
    sensed_kwh, sensed_mix_w, sensed_jump_w = sensed_pours(problem, states, hardware)
    energy, mix_w, jump_w = sums[0] + sensed_kwh, sums[1] + sensed_mix_w, sums[2] + sensed_jump_w
    per_square_amp = plane_ohm(problem, hardware, shares)[..., None] / problem.grid_v**2  # (P, 2, B, G)
    hours = np.maximum(band_hours(states), 1e-6)[:, None]
    mean_w = energy * 1e3 / hours
    bias_w = np.zeros((*hardware.band_v.shape, 1))
    if len(problem.biases.names):
        index = np.maximum(hardware.bias, 0)
        gates = np.einsum("prb,pr->pb", hardware.running_band.astype(np.float64), hardware.bias_w)
        drawn = problem.biases.no_load_w[index][:, None] + gates / problem.biases.efficiency[index][:, None]
        on_bus = hardware.bias_on_bus & hardware.on_bus[:, 0].any(axis=1)
        bias_w[:, 0, :, 0] = np.where(on_bus[:, None], drawn, 0.0)
    return (
        energy + (per_square_amp * mean_w**2 + bias_w) * hours * 1e-3,
        mix_w + per_square_amp * mix_w**2 + bias_w,
        jump_w + per_square_amp * jump_w**2 + bias_w,
    )
