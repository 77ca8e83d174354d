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


def dropped_plans(genome: Genome, genomes: FloatArray, row: IntArray) -> Plan:
    """Return the plans of one genome (1, genes) with each part number its design uses dropped in turn."""
    problem = genome.problem
    learned = genome.learn(genomes, row[None], np.ones(1, dtype=bool))
    parts = droppable_parts(problem, row)
    plan = genome.decode(np.repeat(learned, max(len(parts), 1), axis=0))
    stage_ok, capacitor_ok = plan.stage_ok.copy(), plan.capacitor_ok.copy()
    for k, part in enumerate(parts):
        stage_ok[k, (problem.stages.part == part) | (problem.stages.second_part == part)] = False
        capacitor_ok[k, problem.capacitors.part == part] = False
    return replace(plan, stage_ok=stage_ok, capacitor_ok=capacitor_ok)


def worth(objectives: FloatArray, violation: FloatArray, price: FloatArray, cap: FloatArray) -> FloatArray:
    """Return what a design costs at a price of energy and under a droop cap, the less the better, (P,)."""
    money = objectives[:, 1] + price * objectives[:, 0]
    over = np.maximum(objectives[:, 2] - cap, 0.0)
    return np.asarray(money + 1e6 * np.minimum(violation, 1e6) + 1e3 * over)
