"""Consolidation: drop part numbers one at a time and keep a drop where the completed board is better."""

from __future__ import annotations

from dataclasses import replace

import numpy as np

from archopt.model.cost import count_pieces
from archopt.model.problem import Problem
from archopt.model.space import Designs
from archopt.physics.arrays import FloatArray, IntArray
from archopt.search.genome import Genome, Plan


def droppable_parts(problem: Problem, row: IntArray) -> IntArray:
    """Return the stage, inductor and bank part numbers one decided design uses."""
    designs = Designs(problem.layout, row[None])
    used = np.flatnonzero(count_pieces(problem, designs)[0] > 0)
    stages = np.unique(
        np.concatenate([problem.stages.part, problem.stages.second_part[problem.stages.second_part >= 0]])
    )
    rail_parts = np.union1d(stages, problem.capacitors.part)
    return np.asarray(np.intersect1d(used, rail_parts), dtype=np.int64)


def dropped_plans(genome: Genome, genomes: FloatArray, rows: IntArray) -> tuple[Plan, IntArray]:
    """Return plans of genomes (P, genes) with each part number their designs use dropped in turn.

    Beside the plans stands the place of the genome each came from.
    """
    problem = genome.problem
    learned = genome.learn(genomes, rows, np.ones(len(rows), dtype=bool))
    parts = [droppable_parts(problem, row) for row in rows]
    owner = np.repeat(np.arange(len(rows)), [len(each) for each in parts])
    dropped = np.concatenate(parts)[:, None]
    plan = genome.decode(learned[owner])
    stages, capacitors = problem.stages, problem.capacitors
    stage_ok = plan.stage_ok & (stages.part != dropped) & (stages.second_part != dropped)
    return replace(plan, stage_ok=stage_ok, capacitor_ok=plan.capacitor_ok & (capacitors.part != dropped)), owner


def worth(objectives: FloatArray, violation: FloatArray, price: FloatArray, cap: FloatArray) -> FloatArray:
    """Return what a design costs at a price of energy and under a droop cap, the less the better, (P,)."""
    money = objectives[:, 1] + price * objectives[:, 0]
    over = np.maximum(objectives[:, 2] - cap, 0.0)
    return np.asarray(money + 1e6 * np.minimum(violation, 1e6) + 1e3 * over)
