"""The copper question: what the next ounce, and the next layer pair of each net, is worth to one design.

Everything but the copper stays as the design has it, its stored decisions too, or is chosen again at every step of
a sweep; every point is direct physics.
"""

from __future__ import annotations

import time
from collections.abc import Sequence
from dataclasses import asdict, dataclass, replace
from typing import Any

import numpy as np

from archopt.errors import OutputError
from archopt.inputs.problems import nearest
from archopt.model.cost import copper_area_m2
from archopt.model.evaluator import Detail
from archopt.model.limits import LIMITS
from archopt.model.parameters import IntArray
from archopt.model.problem import Problem
from archopt.model.space import BUS_NAMES, Designs
from archopt.physics.ampacity import RISE_EXPONENT
from archopt.trade.copper_again import EVALUATIONS, Held, chooser_of
from archopt.trade.copper_nets import NetFigures, net_figures
from archopt.trade.money import money_per_kwh
from archopt.trade.rebuilt import detail_of

WEIGHT = "copper weight"
MONTHS_PER_YEAR = 12.0


@dataclass(frozen=True)
class CopperPoint:
    """One point of a sweep.

    sweep : ``copper weight``, or the net whose pairs are changed
    amount : ounces, or pairs
    months : until the step from the point before has paid for itself; 0 where it costs nothing, None where never
    missed : limits that are not met here; drop and rise are the worst of the swept net, or of all
    """

    sweep: str
    amount: float
    stack: str
    here: bool
    loss_kwh: float
    copper_kwh: float
    cost: float
    drop_percent: float
    rise_k: float
    months: float | None
    missed: tuple[str, ...]


@dataclass(frozen=True)
class CopperAnswer:
    """What the copper of a design is worth: its nets and every sweep.

    reoptimised : whether everything else was chosen again at every point, within ``seconds``
    cheaper_stack : a stack of the same weight that holds the design and costs less by ``cheaper_by``; else empty
    """

    design: str
    nets: tuple[NetFigures, ...]
    points: tuple[CopperPoint, ...]
    life_months: float
    reoptimised: bool
    cheaper_stack: str
    cheaper_by: float
    seconds: float = 0.0

    def sweeps(self) -> dict[str, list[CopperPoint]]:
        """The points by sweep, in order."""
        found: dict[str, list[CopperPoint]] = {}
        for point in self.points:
            found.setdefault(point.sweep, []).append(point)
        return found

    def as_dict(self) -> dict[str, Any]:
        """The answer as plain data."""
        return asdict(self)


def copper_question(
    problem: Problem, row: IntArray, *, design: str = "", net: str | None = None, reoptimise: bool = False,
    evaluations: int = EVALUATIONS,
) -> CopperAnswer:  # fmt: skip
    """Sweep copper weight and the pairs of each net around one decided design.

    Parameters
    ----------
    row : a decided row, (columns,)
    design : its name
    net : only the pairs of this net (and the weight)
    reoptimise : choose everything else again at every point (:mod:`archopt.trade.copper_again`): the weight, or
        the pairs of the net, are held. Without a net the weight and the buses are swept.
    evaluations : budget of one point, where everything else is chosen again

    Raises
    ------
    OutputError : the design has no net of that name
    """
    nets = nets_of(problem, row)
    if net is not None and net not in nets:
        raise OutputError(f"the design has no net '{net}'; {nearest(net, nets, many=40)}")
    began = time.monotonic()
    swept = [name for name in nets if name in BUS_NAMES or not reoptimise] if net is None else [net]
    asked = [(WEIGHT, amount, found) for amount, found in weight_rows(problem, row)]
    for name in swept:
        asked += [(name, float(pairs), found) for pairs, found in pair_rows(problem, row, name)]
    here = [bool(np.array_equal(found, row)) for _, _, found in asked]
    if reoptimise:
        choose = chooser_of(problem, row, evaluations)
        asked = [
            (sweep, amount, choose((found, spread_pairs(problem, found), row), held_by(problem, sweep, amount)))
            for sweep, amount, found in asked
        ]
    detail = detail_of(problem, np.stack([row, *(found for _, _, found in asked)]))
    figures = [net_figures(problem, detail, p) for p in range(len(asked) + 1)]
    points = [
        point_of(problem, detail, p, sweep, amount, figures[p], here[p - 1])
        for p, (sweep, amount, _) in enumerate(asked, start=1)
    ]
    rate = money_per_kwh(problem.study)
    kept = [figure for figure in figures[0] if net is None or figure.net == net]
    life_months = problem.study.economics.life_years * MONTHS_PER_YEAR
    stack, saved = cheaper_stack(problem, row)
    return CopperAnswer(
        design, tuple(kept), tuple(with_months(points, rate)), life_months, reoptimise, stack, saved,
        time.monotonic() - began if reoptimise else 0.0,
    )  # fmt: skip


def held_by(problem: Problem, sweep: str, amount: float) -> Held:
    """Return what a point of a sweep holds while everything else is chosen again."""
    stacks, layout = problem.stacks, problem.layout
    if sweep == WEIGHT:
        return {layout.board("stack"): tuple(int(k) for k in np.flatnonzero(stacks.copper_oz == amount))}
    return {pairs_column(problem, sweep): (int(amount),)}


def pairs_column(problem: Problem, net: str) -> int:
    """Return the column of the pairs of a net."""
    if net in BUS_NAMES:
        return int(problem.layout.bus("pairs").start + BUS_NAMES.index(net))
    return int(problem.layout.rail("pairs").start + problem.rails.names.index(net))


def nets_of(problem: Problem, row: IntArray) -> list[str]:
    """Return the nets a design has copper of: its buses in use, then every rail."""
    designs = Designs(problem.layout, row[None])
    buses = [name for k, name in enumerate(BUS_NAMES) if (designs.rail("feed")[0] == k + 1).any()]
    return [*buses, *problem.rails.names]


def holds(problem: Problem, row: IntArray) -> bool:
    """Return whether a stack has the pairs and the area that all nets of a design take."""
    designs = Designs(problem.layout, row[None])
    feed = designs.rail("feed")[0]
    used = [k for k in range(2) if (feed == k + 1).any()]
    most = max([int(designs.rail("pairs").max()), *(int(designs.bus("pairs")[0, k]) for k in used)])
    pairs, board = int(problem.stacks.pairs[designs.board("stack")[0]]), problem.study.board
    offered_m2 = pairs * board.area_cm2 * 1e-4 * board.usable_copper_share
    there = np.concatenate([designs.bus("pairs")[0] * np.isin((0, 1), used), designs.rail("pairs")[0]])
    most = max(most, int((problem.overlaps.holds @ there).max(initial=0.0)))
    return most <= pairs and float(copper_area_m2(problem, designs)[0]) <= offered_m2 * (1.0 + 1e-9)


def weight_rows(problem: Problem, row: IntArray) -> list[tuple[float, IntArray]]:
    """Return the design in every copper weight on offer, (ounces, row), lightest first.

    On the stack of that weight with as many pairs as its own; where there is none, on the cheapest that holds it.
    """
    stacks, own = problem.stacks, int(row[problem.layout.board("stack")])
    found = []
    for ounces in np.unique(stacks.copper_oz):
        weighing = [int(k) for k in np.flatnonzero(stacks.copper_oz == ounces)]
        weighing.sort(key=lambda k: (stacks.pairs[k] != stacks.pairs[own], float(stacks.price_per_cm2[k]), k))
        order = [own] if own in weighing else weighing
        index = next((k for k in order if k == own or holds(problem, with_stack(problem, row, k))), None)
        if index is not None:
            found.append((float(ounces), with_stack(problem, row, index)))
    return found


def cheaper_stack(problem: Problem, row: IntArray) -> tuple[str, float]:
    """Return the cheapest stack of a design's copper weight that holds it, and what it saves; nothing if its own."""
    stacks, own = problem.stacks, int(row[problem.layout.board("stack")])
    alike = np.flatnonzero(stacks.copper_oz == stacks.copper_oz[own])
    held = [int(k) for k in alike if holds(problem, with_stack(problem, row, int(k)))]
    best = min(held, key=lambda k: float(stacks.price_per_cm2[k]), default=own)
    saved = float(stacks.price_per_cm2[own] - stacks.price_per_cm2[best]) * problem.study.board.area_cm2
    return (stacks.names[best], saved) if saved > 0.0 else ("", 0.0)


def with_stack(problem: Problem, row: IntArray, stack: int) -> IntArray:
    """Return a row on another stack."""
    out = row.copy()
    out[problem.layout.board("stack")] = stack
    return out


def pair_rows(problem: Problem, row: IntArray, net: str) -> list[tuple[int, IntArray]]:
    """Return the design with one net on 1, 2, ... pairs, (pairs, row).

    It stays on its stack where that holds it; else it goes to the cheapest of the same weight that does, and the
    pairs no stack holds are left out.
    """
    layout, stacks = problem.layout, problem.stacks
    column = pairs_column(problem, net)
    own = int(row[layout.board("stack")])
    alike = [int(k) for k in np.flatnonzero(stacks.copper_oz == stacks.copper_oz[own])]
    order = [own, *sorted(alike, key=lambda k: (float(stacks.price_per_cm2[k]), k))]
    found = []
    for pairs in range(1, problem.study.board.max_pairs_per_net + 1):
        changed = row.copy()
        changed[column] = pairs
        if pairs == row[column]:
            found.append((pairs, changed))
            continue
        roomy = next((k for k in order if holds(problem, with_stack(problem, changed, k))), None)
        if roomy is not None:
            found.append((pairs, with_stack(problem, changed, roomy)))
    return found


def spread_pairs(problem: Problem, row: IntArray) -> IntArray:
    """Return a row whose pours share the layers its buses leave: one more pair where it saves most for its area.

    Starts from one pair each, or what drop and ampacity ask; loss of a pour goes as one over its pairs.
    """
    designs = Designs(problem.layout, row[None].copy())
    rails, states, board = problem.rails, problem.states, problem.study.board
    stack = int(designs.board("stack")[0])
    sheet_ohm, thickest = float(problem.sheet_ohm[stack]), int(problem.stacks.pairs[stack])
    square_hours = (np.where(states.off, 0.0, states.current_a) ** 2 * states.hours[:, None]).sum(axis=0)
    worth = 2.0 * rails.squares * sheet_ohm * square_hours * 1e-3
    most = min(thickest, board.max_pairs_per_net)
    pairs = designs.rail("pairs")
    pairs[0] = np.minimum(asked_pairs(problem, row), most)
    while holds(problem, designs.rows[0]):
        kept = pairs[0].copy()
        gain = np.where(kept < most, worth * (1.0 / kept - 1.0 / (kept + 1.0)) / rails.copper_area_m2, -1.0)
        for rail in np.argsort(-gain, kind="stable"):
            if gain[rail] <= 0.0:
                continue
            pairs[0, rail] += 1
            if holds(problem, designs.rows[0]):
                break
            pairs[0, rail] -= 1
        if np.array_equal(pairs[0], kept):
            break
    return np.asarray(designs.rows[0])


def asked_pairs(problem: Problem, row: IntArray) -> IntArray:
    """Return the fewest pairs at which each pour meets its drop and ampacity, (R,), one at least."""
    one = Designs(problem.layout, row[None].copy())
    one.rail("pairs")[0] = 1
    figures = net_figures(problem, detail_of(problem, one.rows), 0)
    by_net = {figure.net: figure for figure in figures}
    budget = problem.rails.drop_budget * 100.0
    rise = problem.study.board.copper_rise_k
    found = [
        max(by_net[name].drop_percent / budget[k], (by_net[name].rise_k / rise) ** RISE_EXPONENT)
        for k, name in enumerate(problem.rails.names)
    ]
    return np.maximum(np.ceil(np.array(found) - 1e-9), 1).astype(np.int64)


def point_of(
    problem: Problem, detail: Detail, p: int, sweep: str, amount: float, nets: Sequence[NetFigures], here: bool
) -> CopperPoint:
    """Return one point of a sweep; its step has no months yet."""
    ledger = detail.ledger.worst
    names = [limit.name for limit in LIMITS]
    missed = tuple(name for name in names if name in ledger and ledger[name].normalised[p] < 0.0)
    seen = [net for net in nets if sweep in (WEIGHT, net.net)]
    return CopperPoint(
        sweep=sweep,
        amount=amount,
        stack=problem.stacks.names[int(detail.hardware.stack[p])],
        here=here,
        loss_kwh=float(detail.evaluation.objectives[p, 0]),
        copper_kwh=sum(net.loss_kwh for net in nets),
        cost=float(detail.evaluation.objectives[p, 1]),
        drop_percent=max(net.drop_percent for net in seen),
        rise_k=max(net.rise_k for net in seen),
        months=None,
        missed=missed,
    )


def with_months(points: Sequence[CopperPoint], money_kwh: float) -> list[CopperPoint]:
    """Return points with the months after which the step from the point before has paid for itself."""
    found: list[CopperPoint] = []
    for k, point in enumerate(points):
        months: float | None = None
        if k and points[k - 1].sweep == point.sweep:
            saved = (points[k - 1].loss_kwh - point.loss_kwh) * money_kwh
            more = point.cost - points[k - 1].cost
            months = 0.0 if more <= 0.0 and saved >= 0.0 else MONTHS_PER_YEAR * more / saved if saved > 0.0 else None
        found.append(replace(point, months=months))
    return found


def last_worth(points: Sequence[CopperPoint], life_months: float) -> CopperPoint | None:
    """Return the point after which the next step no longer pays within the life of the board.

    Steps are taken from the first point that meets every limit, or misses no other than the design itself does;
    None where none is.
    """
    known = {name for point in points if point.here for name in point.missed}
    sound = [k for k, point in enumerate(points) if set(point.missed) <= known]
    if not sound:
        return None
    best = points[sound[0]]
    for point in points[sound[0] + 1 :]:
        if point.months is None or point.months > life_months or not set(point.missed) <= known:
            break
        best = point
    return best
