"""The vectorised evaluator: design rows in, objectives and limits out, by tables or by direct physics."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from archopt.model.board import DirectStages, Solution, solve
from archopt.model.checks import check_all
from archopt.model.cost import Bill, bill
from archopt.model.decide import decide
from archopt.model.hardware import Hardware, unpack
from archopt.model.limits import Ledger
from archopt.model.options import Options, make_options
from archopt.model.parameters import FloatArray, IntArray
from archopt.model.problem import Problem
from archopt.model.situation import Droop, Situation, rail_droop
from archopt.model.space import Designs
from archopt.model.states import StateTable
from archopt.model.tables import LossTables, TableStages, make_tables
from archopt.physics.transient import transition_energy_j

JOULE_PER_KWH = 3.6e6
FREE_DROOP_PERCENT = 60.0  # margin below this buys nothing
DROOP_STEP_PERCENT = 2.0
LARGEST = 1e12


@dataclass(frozen=True)
class Evaluation:
    """P designs evaluated.

    objectives (P, 3): energy lost a year (kWh), cost a board, worst droop or release (% of budget, stepped);
    droop_exact (P,); slack (P, limits) normalised; violation (P,) sum of normalised excess, 0 when feasible.
    """

    rows: IntArray
    objectives: FloatArray
    droop_exact: FloatArray
    slack: FloatArray
    violation: FloatArray

    @property
    def feasible(self) -> IntArray:
        """Indices of the feasible designs."""
        return np.flatnonzero(self.violation <= 0.0)


@dataclass(frozen=True)
class Detail:
    """Everything known of a batch after evaluation, for explaining."""

    designs: Designs
    hardware: Hardware
    solution: Solution
    droop: Droop
    bill: Bill
    ledger: Ledger
    evaluation: Evaluation
    transition_kwh: FloatArray


def stepped_droop(exact_percent: FloatArray) -> FloatArray:
    """Return the droop objective: the larger of 60 and the value rounded up to the next even number."""
    up = np.ceil(np.round(exact_percent, 9) / DROOP_STEP_PERCENT) * DROOP_STEP_PERCENT
    return np.maximum(FREE_DROOP_PERCENT, up)


def transition_kwh(problem: Problem, states: StateTable, hardware: Hardware) -> FloatArray:
    """Return the charging energy of bus transitions, (P,) kWh a year."""
    counts = states.transitions_per_year
    if not counts.any():
        return np.zeros(len(hardware.stage))
    volts = hardware.band_v[..., : states.bands]  # (P, 2, B)
    moved = transition_energy_j(hardware.bulk_nominal_f[..., None, None], volts[..., :, None], volts[..., None, :])
    rising = volts[..., None, :] > volts[..., :, None]
    used = (hardware.converter >= 0) & ~hardware.fixed_ratio
    total = np.where(rising & used[..., None, None], moved, 0.0) * counts
    return np.asarray(total.sum(axis=(1, 2, 3)) / JOULE_PER_KWH)


class Evaluator:
    """Evaluates design rows of one problem; holds its tables."""

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        self.states = problem.states
        self.tables: LossTables = make_tables(problem, problem.states)
        self.options: Options = make_options(problem, problem.states, self.tables)
        self.table_stages = TableStages(problem, problem.states, self.tables)
        self.direct_stages = DirectStages(problem, problem.states)

    def decide(self, rows: IntArray) -> IntArray:
        """Return rows in canonical form with schedule and running counts decided."""
        designs = Designs(self.problem.layout, np.asarray(rows, dtype=np.int64))
        return decide(self.problem, self.states, self.options, designs).rows

    def evaluate(self, rows: IntArray, *, exact: bool = False) -> Evaluation:
        """Evaluate decided rows by the tables, or with ``exact`` by direct physics."""
        return self.evaluated(rows, exact=exact, explain=False, bare=True).evaluation

    def detail(self, rows: IntArray, *, exact: bool = True, explain: bool = False) -> Detail:
        """Evaluate decided rows and keep every intermediate result."""
        return self.evaluated(rows, exact=exact, explain=explain, bare=False)

    def evaluated(self, rows: IntArray, *, exact: bool, explain: bool, bare: bool) -> Detail:
        """Evaluate decided rows, ``bare`` without the places of the limits."""
        return evaluate_in(
            self.problem,
            self.states,
            Designs(self.problem.layout, np.asarray(rows, dtype=np.int64)),
            self.direct_stages if exact else self.table_stages,
            exact=exact,
            explain=explain,
            bare=bare,
        )


def evaluate_in(
    problem: Problem,
    states: StateTable,
    designs: Designs,
    stages: DirectStages | TableStages,
    *,
    exact: bool,
    explain: bool = False,
    bare: bool = False,
) -> Detail:
    """Evaluate decided designs over given states."""
    hardware = unpack(problem, designs, states)
    solution = solve(problem, states, hardware, stages, exact=exact)
    board_bill = bill(problem, designs)
    situation = Situation(problem, states, designs, hardware, solution, board_bill)
    droop = rail_droop(situation)
    ledger = check_all(situation, droop, explain=explain, bare=bare)
    moving = transition_kwh(problem, states, hardware)
    energy = (solution.loss_w * states.hours).sum(axis=1) * 1e-3 + moving
    exact_percent = np.maximum(droop.droop_percent, droop.release_percent).max(axis=(1, 2))
    objectives = np.stack([energy, board_bill.total, stepped_droop(exact_percent)], axis=1)
    objectives = np.clip(np.nan_to_num(objectives, nan=LARGEST, posinf=LARGEST), -LARGEST, LARGEST)
    slack = ledger.normalised()
    evaluation = Evaluation(
        rows=designs.rows,
        objectives=objectives,
        droop_exact=exact_percent,
        slack=slack,
        violation=np.maximum(-slack, 0.0).sum(axis=1),
    )
    return Detail(designs, hardware, solution, droop, board_bill, ledger, evaluation, moving)
