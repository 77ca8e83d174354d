"""An outer bound of a study's front: points that no feasible design can beat, from a relaxation of the whole board.

Designs are sorted into classes (one bus that stays, one that moves, one of fixed ratio, with rails straight from the
input, two buses, none). In each, what couples the rails is relaxed, always in the designs' favour:

- losses upstream (input path, converter) are charged by a slope a watt, with what remains put to the converter, see
  :mod:`archopt.proof.bound_parts`; each stage may choose the drop of its plane, and pays for that drop only;
- a part number's cost is shared out between the rails in fixed shares, every price step a board could reach is granted;
- every rail, and the converter, may choose the bus voltage for itself, in every band. What one gains by not standing
  where the others stand is taken back by multipliers that sum to nothing over the board: at any common voltage they
  cancel, so that the bound stays one;
- copper is shared out by the dual of the layer budget; limits that join rails are left out.

Then the rails' (cost, energy) staircases are added up exactly, a droop step at a time. Several prices of energy give
several shares and multipliers, each a bound: what lies on or above all of them is left.
"""

from __future__ import annotations

import time
from dataclasses import dataclass, field

import numpy as np

from archopt.model.evaluator import Evaluator
from archopt.model.hardware import bias_per_phase_w
from archopt.model.space import PARENT
from archopt.model.states import ENERGY
from archopt.physics.arrays import BoolArray, FloatArray, IntArray
from archopt.proof.bound_fold import RAIL_STEPS, added, coarser, crossed, front, height, joined
from archopt.proof.bound_kinds import Kind, kinds_of
from archopt.proof.bound_parts import (
    Outfit,
    charges,
    converter_outfits,
    least_unit_cost,
    make_slopes,
    new_part_cost,
    stack_outfits,
)
from archopt.proof.bound_rails import DIRECT, EASE, GRID, LEVELS, RAIL, RailMaker, make_slots
from archopt.search.genome import energy_price_scale
from archopt.search.indicator import Scale

PRICES = (0.05, 0.3, 1.5)  # of energy, as multiples of its worth over the board's life


@dataclass(frozen=True)
class OuterBound:
    """Points no feasible design can beat: objectives (N, 3) energy kWh, cost, droop %; steps: a staircase a level.

    Every feasible design is weakly dominated by one of the points.
    """

    objectives: FloatArray
    steps: tuple[FloatArray, ...]
    seconds: float

    def violated(self, objectives: FloatArray, ease: float = 1e-6) -> BoolArray:
        """Return which designs lie below the bound, (P,): none that is feasible does."""
        level = np.searchsorted(LEVELS, objectives[:, 2] - EASE)
        out = np.zeros(len(objectives), dtype=bool)
        for k in np.unique(level):
            mine = level == k
            steps = self.steps[min(int(k), len(self.steps) - 1)]
            least = height(steps, objectives[mine, 1] * (1.0 + ease)) if len(steps) else np.full(mine.sum(), np.inf)
            out[mine] = objectives[mine, 0] * (1.0 + ease) < least
        return out

    def gap(self, objectives: FloatArray) -> tuple[float, float]:
        """Return how far above the bound a front lies in energy, at each design's own cost and droop: median, largest.

        As shares of the designs' energy; 0 where a design lies on the bound.
        """
        apart = []
        for energy, cost, droop in objectives.tolist():
            steps = self.steps[min(int(np.searchsorted(LEVELS, droop - EASE)), len(self.steps) - 1)]
            least = float(height(steps, np.array([cost * (1.0 + EASE)]))[0]) if len(steps) else np.inf
            apart.append(1.0 - max(min(least, energy), 0.0) / energy)
        return float(np.median(apart)), float(np.max(apart))

    def share(self, front_objectives: FloatArray) -> float:
        """Return the hypervolume of a front as a share of the bound's, both on the scale of the front."""
        scale = Scale.of(front_objectives)
        return scale.hypervolume(front_objectives) / scale.hypervolume(self.objectives)


@dataclass
class Settled:
    """Shares and multipliers at one price of energy: charge (M,) a rail, multiplier (R, B, K) kWh."""

    charge: list[FloatArray]
    multiplier: FloatArray
    common: FloatArray = field(default_factory=lambda: np.zeros((0, 0)))


class Relaxation:
    """The relaxed problem of one evaluator."""

    def __init__(self, evaluator: Evaluator) -> None:
        self.evaluator = evaluator
        problem = evaluator.problem
        self.problem = problem
        self.slots = make_slots(evaluator)
        self.unit_cost = least_unit_cost(problem)
        self.fresh = new_part_cost(problem)
        self.slopes = make_slopes(evaluator)
        maker = RailMaker(evaluator, self.slots, self.unit_cost)
        self.rails = [maker.options(r) for r in range(problem.layout.rails)]
        self.feeds = maker.feeds
        self.scale = energy_price_scale(problem)
        self.alone_energy, self.free_energy = ([self.band_energy(r, alone=alone) for r in range(len(self.rails))]
                                               for alone in (True, False))  # fmt: skip
        self.bias_cost = self.least_bias()
        self.outfits_known: dict[tuple[bool, int], list[Outfit]] = {}

    def band_energy(self, r: int, *, alone: bool) -> tuple[FloatArray, FloatArray]:
        """Return energy (O, B, K) and that of an ohm of bank (O, B, K), kWh, with what it costs upstream.

        On a bus a watt into the stage costs its slope in the converter too, the useful watts as well. Through another
        rail it does so only where every rail hangs on the bus; the parent's own further loss is left out.
        """
        slots, slopes, rail, states = self.slots, self.slopes, self.rails[r], self.evaluator.states
        on_bus = slots.on_bus | ((slots.kind == RAIL) if alone else np.zeros(len(slots.kind), dtype=bool))
        weight = slopes.node[:, None] * (1.0 + slopes.bus[:, None] * on_bus)  # (S, K)
        useful = slopes.node[:, None] * slopes.bus[:, None] * on_bus * slopes.useful_w[:, r, None]
        energy = states.of_kind(ENERGY)
        shape = (len(rail.stage), rail.run.shape[1], len(slots.kind))
        kwh, ohm = np.zeros(shape), np.zeros(shape)
        gates = self.gate_energy(r)  # (O, S)
        for s, band in enumerate(states.band[energy].tolist()):
            kwh[:, band] += weight[s] * rail.loss_w[:, s] + useful[s] + gates[:, s, None]
            ohm[:, band] += weight[s] * rail.square[:, s]
        return kwh, ohm

    def gate_energy(self, r: int) -> FloatArray:
        """Return the least the gates of a rail on the bias supply draw, (O, S) kWh; the supply's own loss left out."""
        rail, states, problem = self.rails[r], self.evaluator.states, self.problem
        energy = states.of_kind(ENERGY)
        best = float(problem.biases.efficiency.max(initial=1e-9)) if len(problem.biases.names) else 1.0
        drawn = bias_per_phase_w(problem)[rail.stage][:, None] * rail.run[:, states.band[energy]] / best
        return np.asarray(np.where(states.off[energy, r], 0.0, drawn * self.slopes.node))

    def least_bias(self) -> float:
        """Return each biased rail's part of the cheapest bias supply: no more rails than can be biased share it."""
        problem = self.problem
        offered = problem.space.allowed[problem.layout.board("bias")]
        offered = offered[offered > 0] - 1
        able = sum(bool(problem.stages.bias_fed[rail.stage].any()) for rail in self.rails)
        if not len(offered) or not able:
            return 0.0
        part = problem.biases.part[offered]
        return float((self.unit_cost[part] + self.fresh[part]).min()) / able

    def masked(self, r: int, kind: Kind, settled: Settled | None) -> tuple[FloatArray, FloatArray]:
        """Return energy and energy an ohm of bank by group, (O, B or 1, groups), inf where nothing is legal."""
        rail, slots = self.rails[r], self.slots
        kwh, ohm = (self.alone_energy if kind.alone else self.free_energy)[r]
        if settled is not None and kind.coupled:
            kwh = kwh - settled.multiplier[r]
        legal: BoolArray = np.asarray(rail.legal & kind.slots)
        if kind.fixed:
            legal = np.asarray(legal.all(axis=1, keepdims=True))
            kwh, ohm = kwh.sum(axis=1, keepdims=True), ohm.sum(axis=1, keepdims=True)
        out = []
        for values in (np.where(legal, kwh, np.inf), np.where(legal, ohm, np.inf)):
            by_group = np.full((*values.shape[:2], slots.groups), np.inf)
            for k, group in enumerate(slots.group.tolist()):
                by_group[..., group] = np.minimum(by_group[..., group], values[..., k])
            out.append(by_group)
        return out[0], np.where(np.isfinite(out[1]), out[1], 0.0)

    def choices(self, r: int, kind: Kind, settled: Settled | None) -> tuple[FloatArray, IntArray]:
        """Return energy of every choice of option and bank by group, (M, B or 1, groups), and its droop level there."""
        rail = self.rails[r]
        kwh, ohm = self.masked(r, kind, settled)
        level = rail.level.max(axis=1, keepdims=True) if kind.fixed else rail.level
        return kwh[rail.option] + rail.esr_ohm[:, None, None] * ohm[rail.option], level

    def settle(self, kind: Kind, outfits: list[Outfit], price: float) -> Settled:
        """Return shares and multipliers that serve a price of energy, from the designs the relaxation itself picks."""
        count = len(self.rails)
        shape = (count, self.evaluator.states.mix_a.shape[0], len(self.slots.kind))
        settled = Settled([np.zeros(len(rail.cost)) for rail in self.rails], np.zeros(shape))
        for turn in range(2):
            found = []
            for r in range(count):
                energy, level = self.choices(r, kind, settled if turn else None)
                found.append(np.where(level < len(LEVELS), energy, np.inf).min(axis=2).sum(axis=1))
            if not all(np.isfinite(energy).any() for energy in found):
                return settled
            settled.charge, picked = charges(self.problem, self.rails, found, price)
            if turn == 0 and kind.coupled:
                settled.multiplier = self.multipliers(kind, outfits, [int(place) for place in picked], price)
        return settled

    def multipliers(self, kind: Kind, outfits: list[Outfit], picked: list[int], price: float) -> FloatArray:
        """Return what each rail's picked choice loses more at each grid voltage than where all stand best, (R, B, K).

        Rails that may hang on another rail get none: where they do, theirs would not cancel.
        """
        grid = (self.slots.kind == GRID) & kind.slots
        curves = []
        for r, place in enumerate(picked):
            rail, (kwh, ohm) = self.rails[r], self.alone_energy[r]
            option = int(rail.option[place])
            curve = kwh[option] + rail.esr_ohm[place] * ohm[option]
            legal = rail.legal[option] & (rail.level[place][:, self.slots.group] < len(LEVELS))
            curves.append(np.where(grid, np.where(legal, curve, curve + 1e9), 0.0))
        best = min(outfits, key=lambda outfit: outfit.cost + price * best_energy(outfit, grid))
        total = np.sum(curves, axis=0) + np.where(np.isfinite(best.energy_kwh), best.energy_kwh, 1e9)
        if kind.fixed:
            total = np.broadcast_to(total.sum(axis=0), total.shape)
        stand = np.where(grid, total, np.inf).argmin(axis=1)
        out = np.zeros((len(picked), *total.shape))
        for r, place in enumerate(picked):
            if (self.feeds[r] >= PARENT).any():
                continue
            rail, (kwh, ohm) = self.rails[r], self.alone_energy[r]
            option = int(rail.option[place])
            curve = kwh[option] + rail.esr_ohm[place] * ohm[option]
            out[r] = np.where(grid, curve - curve[np.arange(len(curve)), stand][:, None], 0.0)
        return out

    def outfits(self, kind: Kind) -> list[Outfit]:
        """Return what may furnish a bus in a class."""
        most_w = np.sum([rail.most_w for rail in self.rails], axis=0)
        known = self.outfits_known.setdefault((kind.alone, kind.buses), [])
        if not known and kind.buses:
            known += converter_outfits(
                self.evaluator, self.slots, self.slopes, self.unit_cost, most_w, alone=kind.alone, buses=kind.buses
            )
        return known

    def outfits_front(self, kind: Kind, outfits: list[Outfit], settled: Settled) -> FloatArray:
        """Return the staircase of what furnishes one bus: cost and energy with the multipliers given back."""
        back = settled.multiplier.sum(axis=0) if kind.coupled else 0.0
        points = []
        for outfit in outfits:
            energy = np.where(kind.slots, outfit.energy_kwh + back, np.inf)
            least = energy.sum(axis=0).min() if kind.fixed else energy.min(axis=1).sum()
            points.append((outfit.cost, float(least)))
        found = np.array(points).reshape(-1, 2)
        return front(found[:, 0], found[:, 1])

    def standing(self, kind: Kind) -> tuple[float, float]:
        """Return cost and energy every design of a class has: input path, taps, a supervisor where a bus moves."""
        problem, states, slopes = self.problem, self.evaluator.states, self.slopes
        energy = states.of_kind(ENERGY)
        useful = slopes.useful_w.sum(axis=1)
        path = problem.path.resistance_ohm * (useful / states.input_v[energy]) ** 2 + problem.path.power_w
        taps = useful - states.useful_w[energy] + states.tap_w[energy]
        kwh = float(((path + taps) * slopes.kwh_per_w).sum())
        cost = float(self.unit_cost[problem.path.part] + self.fresh[problem.path.part])
        offered = problem.space.allowed[problem.layout.board("supervisor")]
        offered = offered[offered > 0] - 1
        if kind.alone and not kind.fixed and len(offered):
            part = problem.supervisors.part[offered]
            cost += float((self.unit_cost[part] + self.fresh[part]).min())
            kwh += float(problem.supervisors.power_w[offered].min() * slopes.node.sum())
        return cost, kwh

    def staircases(self, kind: Kind, outfits: list[Outfit], settled: Settled) -> list[FloatArray]:
        """Return the class's staircase at each droop level, nothing where it has no design."""
        cost, kwh = self.standing(kind)
        board = added(np.array([[cost, kwh]]), front(*stack_outfits(self.evaluator, self.slopes, kind.buses).T))
        for _ in range(kind.buses):
            board = added(board, self.outfits_front(kind, outfits, settled))
        rails = [self.rail_fronts(r, kind, settled) for r in range(len(self.rails))]
        out: list[FloatArray] = []
        for level in range(len(LEVELS)):
            same = level > 0 and all(
                first[level] is first[level - 1] and second[level] is second[level - 1] for first, second in rails
            )
            out.append(out[-1] if same else folded(board, [(f[level], s[level]) for f, s in rails], kind.direct))
        return out

    def rail_fronts(self, r: int, kind: Kind, settled: Settled) -> tuple[list[FloatArray], list[FloatArray]]:
        """Return a rail's staircase at each droop level: fed otherwise, and straight from the input."""
        energy, level = self.choices(r, kind, settled)
        rail, empty = self.rails[r], np.zeros((0, 2))
        cost = rail.cost + settled.charge[r]
        cost = cost + np.where(self.problem.stages.bias_fed[rail.stage[rail.option]], self.bias_cost, 0.0)
        direct = int(self.slots.group[self.slots.kind == DIRECT][0])
        level = np.broadcast_to(level, energy.shape)
        others = np.arange(energy.shape[2]) != direct
        fronts: tuple[list[FloatArray], list[FloatArray]] = ([], [])
        if not kind.direct:
            fronts[1].extend([empty] * len(LEVELS))
            fronts[0].extend(level_fronts(cost, energy, level))
        else:
            fronts[0].extend(level_fronts(cost, energy[..., others], level[..., others]))
            fronts[1].extend(level_fronts(cost, energy[..., [direct]], level[..., [direct]]))
        return fronts

    def bound(self) -> list[FloatArray]:
        """Return the staircase of all classes together at each droop level."""
        kinds = kinds_of(self.problem, self.slots)
        total: list[list[FloatArray]] = [[] for _ in LEVELS]
        shared: dict[float, Settled] = {}
        lead = next((kind for kind in kinds if kind.coupled and not kind.fixed), kinds[0])
        for kind in kinds:
            outfits = self.outfits(kind)
            best: list[FloatArray] | None = None
            for price in PRICES:
                if kind.coupled or kind is lead or price not in shared:
                    settled = self.settle(kind, outfits, price * self.scale)
                    shared.setdefault(price, settled)
                else:
                    settled = shared[price]
                found = self.staircases(kind, outfits, settled)
                best = found if best is None else [crossed(a, b) for a, b in zip(best, found, strict=True)]
            for level, steps in enumerate(best or []):
                total[level].append(steps)
        return [joined(parts) for parts in total]


def level_fronts(cost: FloatArray, energy: FloatArray, level: IntArray) -> list[FloatArray]:
    """Return the staircase of choices at each droop level; energy and level (M, B, groups).

    What at the loosest level is no better than some choice at the strictest is nowhere needed.
    """

    def at(k: int, mine: IntArray) -> FloatArray:
        return np.asarray(np.where(level[mine] <= k, energy[mine], np.inf).min(axis=2).sum(axis=1))

    every = np.arange(len(cost))
    strict, loose = at(0, every), at(len(LEVELS) - 1, every)
    first = front(cost, strict)
    beaten = height(first, cost) < loose if len(first) else ~np.isfinite(loose)
    mine = np.flatnonzero(~beaten & np.isfinite(loose))
    cost = cost[mine]
    out: list[FloatArray] = []
    for k in range(len(LEVELS)):
        if k and not (level[mine] == k).any():
            out.append(out[-1])
        else:
            out.append(coarser(front(cost, at(k, mine)), RAIL_STEPS))
    return out


def best_energy(outfit: Outfit, grid: BoolArray) -> float:
    """Return an outfit's least energy over some slots, kWh; large where it has none."""
    least = np.where(grid, outfit.energy_kwh, np.inf).min(axis=1).sum()
    return float(least) if np.isfinite(least) else 1e12


def folded(board: FloatArray, rails: list[tuple[FloatArray, FloatArray]], direct: bool) -> FloatArray:
    """Return the staircase of the board and all rails; with ``direct`` at least one rail stands on the board input."""
    without, having = board, np.zeros((0, 2))
    for other, straight in rails:
        if not direct:
            without = added(without, other)
            continue
        having = joined([added(having, joined([other, straight])), added(without, straight)])
        without = added(without, other)
    return having if direct else without


def outer_bound(evaluator: Evaluator) -> OuterBound:
    """Return points that no feasible design of the space, as the tables evaluate it, can beat."""
    began = time.perf_counter()
    steps = Relaxation(evaluator).bound()
    points = [
        np.column_stack([stairs[:, 1], stairs[:, 0], np.full(len(stairs), level)])
        for level, stairs in zip(LEVELS, steps, strict=True)
        if len(stairs)
    ]
    every = np.concatenate(points) if points else np.zeros((0, 3))
    return OuterBound(every, tuple(steps), time.perf_counter() - began)
