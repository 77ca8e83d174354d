"""Which designs of a front are worth printing: the marked ones and an even spread between them."""

from __future__ import annotations

import math
from collections.abc import Sequence
from dataclasses import dataclass, field

LOSS_CLOSE = 0.02
COST_CLOSE = 0.05
"""The catalogue's own spread: designs closer than both are one design in a printed table."""

SPREAD_PLACES = 4
"""Places of a printed table kept for the spread, however many topologies have a best design."""

ROLE_ORDER = ("least loss", "least cost", "knee", "most margin", "least lifetime cost")


@dataclass(frozen=True)
class Telling:
    """The designs to print.

    Parameters
    ----------
    index : positions in the front, ordered by energy loss
    on_front : for each, whether nothing has both less loss and less cost (droop set aside)
    merged_roles : for a printed position, the roles of designs merged into it with their positions
    merged : how many designs lie closer than the catalogue's spread to a printed one
    """

    index: tuple[int, ...]
    on_front: tuple[bool, ...]
    merged_roles: dict[int, list[tuple[str, int]]] = field(default_factory=dict)
    merged: int = 0


def energy_cost_front(loss: Sequence[float], cost: Sequence[float]) -> list[int]:
    """Positions that nothing beats in loss and cost together, ordered by loss; of equal pairs the first."""
    order = sorted(range(len(loss)), key=lambda position: (loss[position], cost[position], position))
    kept: list[int] = []
    least_cost = math.inf
    for position in order:
        if cost[position] < least_cost:
            kept.append(position)
            least_cost = cost[position]
    return kept


def close(loss: Sequence[float], cost: Sequence[float], one: int, other: int) -> bool:
    """Whether two designs differ by less than the catalogue's own spread, in loss and in cost."""
    return (
        abs(loss[one] - loss[other]) <= LOSS_CLOSE * min(loss[one], loss[other])
        and abs(cost[one] - cost[other]) <= COST_CLOSE * min(cost[one], cost[other])
    )  # fmt: skip


def role_rank(role: str) -> int:
    """Order in which marked designs claim a place."""
    return ROLE_ORDER.index(role) if role in ROLE_ORDER else len(ROLE_ORDER)


def even_spread(
    loss: Sequence[float],
    cost: Sequence[float],
    chosen: Sequence[int],
    candidates: Sequence[int],
    wanted: int,
) -> list[int]:
    """Candidates added one by one, each the farthest from all chosen, until enough or all are close to one.

    Distance is in the logarithm of loss and of cost, each measured in the catalogue's spread, so that "far"
    means the same across a front that spans a factor of ten.

    Parameters
    ----------
    loss, cost : (K,) positive objectives of the whole front
    chosen : positions already taken
    candidates : positions that may be added
    wanted : at most so many are added
    """
    taken = list(chosen)
    added: list[int] = []
    left = [position for position in candidates if position not in taken]
    while left and len(added) < wanted:
        if taken:
            left = [p for p in left if not any(close(loss, cost, p, q) for q in taken)]
            if not left:
                break
            best = max(left, key=lambda p: (min(_distance(loss, cost, p, q) for q in taken), -p))
        else:
            best = left[0]
        added.append(best)
        taken.append(best)
        left.remove(best)
    return added


def telling(loss: Sequence[float], cost: Sequence[float], roles: Sequence[Sequence[str]], at_most: int = 12) -> Telling:
    """Choose the designs to print.

    Parameters
    ----------
    loss, cost : (K,) energy loss and cost of each design, positive
    roles : (K,) the roles of each design, empty for most
    at_most : most designs printed
    """
    count = len(loss)
    marked = sorted(
        (position for position in range(count) if roles[position]),
        key=lambda position: (min(role_rank(role) for role in roles[position]), position),
    )
    chosen: list[int] = []
    merged_roles: dict[int, list[tuple[str, int]]] = {}
    waiting: list[int] = []
    for position in marked:
        near = next((other for other in chosen if close(loss, cost, position, other)), None)
        main = any(role in ROLE_ORDER for role in roles[position])
        if near is not None:
            merged_roles.setdefault(near, []).extend((role, position) for role in roles[position])
        elif len(chosen) < (at_most if main else at_most - SPREAD_PLACES):
            chosen.append(position)
        else:
            waiting.append(position)
    front = energy_cost_front(loss, cost)
    chosen += even_spread(loss, cost, chosen, front, at_most - len(chosen))
    for position in waiting:
        if len(chosen) < at_most and not any(close(loss, cost, position, other) for other in chosen):
            chosen.append(position)
    order = tuple(sorted(chosen, key=lambda position: (loss[position], position)))
    on_front = set(front)
    merged = sum(
        1 for p in range(count) if p not in chosen and any(close(loss, cost, p, q) for q in chosen)
    )  # fmt: skip
    return Telling(order, tuple(p in on_front for p in order), merged_roles, merged)


@dataclass(frozen=True)
class MarginStep:
    """The cheapest design over its life whose worst droop is within a cap.

    Parameters
    ----------
    cap_percent : the droop it is held to
    index : position in the front, None when no design meets the cap
    """

    cap_percent: float
    index: int | None


def margin_steps(
    droop: Sequence[float], lifetime: Sequence[float], caps: Sequence[float] = (100, 90, 80, 70, 60)
) -> list[MarginStep]:
    """For each cap on the worst droop, the design with the least lifetime cost that meets it.

    Parameters
    ----------
    droop : (K,) worst droop or release, percent of its budget
    lifetime : (K,) purchase plus energy over the life, in the study's currency
    caps : percent, from loose to tight
    """
    steps = []
    for cap in caps:
        meeting = [position for position in range(len(droop)) if droop[position] <= cap * (1 + 1e-9)]
        best = min(meeting, key=lambda position: (lifetime[position], position), default=None)
        steps.append(MarginStep(float(cap), best))
    return steps


def _distance(loss: Sequence[float], cost: Sequence[float], one: int, other: int) -> float:
    return math.hypot(
        math.log(loss[one] / loss[other]) / LOSS_CLOSE, math.log(cost[one] / cost[other]) / COST_CLOSE
    )  # fmt: skip
