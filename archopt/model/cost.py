"""Cost and area of a board: parts at their price step, new part numbers, placement and the board itself."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from archopt.model.parameters import PRICE_STEPS, BoolArray, FloatArray, IntArray, PartTable
from archopt.model.problem import Problem
from archopt.model.space import Designs


@dataclass(frozen=True)
class Bill:
    """What P boards are made of: pieces (P, parts) a board, and cost by kind (P,), currency a board."""

    pieces: IntArray
    parts: FloatArray
    new_parts: FloatArray
    placement: FloatArray
    board: FloatArray
    area_mm2: FloatArray

    @property
    def total(self) -> FloatArray:
        """Cost of one board, (P,)."""
        return self.parts + self.new_parts + self.placement + self.board


def count_pieces(problem: Problem, designs: Designs) -> IntArray:
    """Return the pieces of every part number on each board, (P, parts)."""
    count, width = len(designs), len(problem.parts.names)
    flat = np.zeros(count * width)
    offset = np.arange(count) * width

    def add(part: IntArray, pieces: IntArray, here: BoolArray) -> None:
        index = (offset.reshape(-1, *([1] * (part.ndim - 1))) + part)[here]
        np.add.at(flat, index, np.broadcast_to(pieces, part.shape)[here])

    stages = problem.stages
    stage, phases = designs.rail("stage"), designs.rail("phases")
    everywhere = np.ones(stage.shape, dtype=bool)
    add(stages.part[stage], phases, everywhere)
    second = stages.second_part[stage]
    add(np.maximum(second, 0), phases, second >= 0)
    bank_pieces = problem.bank_counts[designs.rail("bank_count")]
    add(problem.capacitors.part[designs.rail("bank")], bank_pieces, everywhere)
    feed = designs.rail("feed")
    used = np.stack([(feed == 1).any(axis=1), (feed == 2).any(axis=1)], axis=1)
    converter = designs.bus("converter") - 1
    if len(problem.converters.names):
        part = problem.converters.part[np.maximum(converter, 0)]
        add(part, designs.bus("count"), used & (converter >= 0))
    bulk_pieces = problem.bank_counts[designs.bus("bulk_count")]
    add(problem.capacitors.part[designs.bus("bulk")], bulk_pieces, used)
    damper = designs.bus("damper") - 1
    damper_pieces = problem.bank_counts[designs.bus("damper_count")]
    add(problem.capacitors.part[np.maximum(damper, 0)], damper_pieces, used & (damper >= 0))
    one = np.ones(count, dtype=np.int64)
    for column, part_of in (("bias", problem.biases.part), ("supervisor", problem.supervisors.part)):
        chosen = designs.board(column) - 1
        if len(part_of):
            add(part_of[np.maximum(chosen, 0)], one, chosen >= 0)
    add(np.full(count, problem.path.part), one, np.ones(count, dtype=bool))
    return flat.reshape(count, width).astype(np.int64)


def unit_price(parts: PartTable, quantity: NDArray[Any]) -> FloatArray:
    """Return unit prices at yearly quantities (..., parts), by step."""
    step = np.searchsorted(np.array(PRICE_STEPS), quantity, side="right")
    return parts.price[np.arange(len(parts.names)), step]


def bill(problem: Problem, designs: Designs) -> Bill:
    """Return cost and area of a batch of designs."""
    economics = problem.study.economics
    parts = problem.parts
    pieces = count_pieces(problem, designs)
    price = unit_price(parts, pieces * economics.boards_per_year)
    fresh = (pieces > 0) & ~parts.preferred
    stack = designs.board("stack")
    return Bill(
        pieces=pieces,
        parts=(pieces * price).sum(axis=1),
        new_parts=fresh.sum(axis=1) * (economics.new_part_cost / economics.boards_per_year),
        placement=(pieces * parts.placements).sum(axis=1) * economics.placement_cost,
        board=problem.stacks.price_per_cm2[stack] * problem.study.board.area_cm2,
        area_mm2=(pieces * parts.area_mm2).sum(axis=1),
    )


def copper_area_m2(problem: Problem, designs: Designs) -> FloatArray:
    """Return the pair area all nets of each design take, (P,) square metres: pairs times region, summed."""
    feed = designs.rail("feed")
    pours = (designs.rail("pairs") * problem.rails.copper_area_m2).sum(axis=1)
    used = np.stack([(feed == 1).any(axis=1), (feed == 2).any(axis=1)], axis=1)
    planes = (designs.bus("pairs") * used * problem.planes.area_m2).sum(axis=1)
    return np.asarray(pours + planes)
