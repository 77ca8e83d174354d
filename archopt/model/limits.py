"""The limits table: every limit's name, unit and engineering tolerance, and its slack in every design.

One limit is checked in many places and states; a :class:`Ledger` keeps the worst of each. Slack is in the
limit's trade unit, positive where it is met; divided by the tolerance it can be summed and compared.
"""

from __future__ import annotations

from dataclasses import dataclass, field
from typing import Any

import numpy as np
from numpy.typing import NDArray

from archopt.model.parameters import BoolArray, FloatArray

ROOM = 1e9  # slack of a check that does not apply


@dataclass(frozen=True)
class Limit:
    """One row of the limits table. tolerance: in the unit, or a share of the bound where ``relative``."""

    name: str
    unit: str
    tolerance: float
    relative: bool = False


LIMITS = (
    Limit("rail droop", "% of budget", 5.0),
    Limit("rail release", "% of budget", 5.0),
    Limit("output ripple", "% of rail", 0.1),
    Limit("bus dip", "% of bus", 1.0),
    Limit("stage input range", "V", 0.25),
    Limit("bus output range", "V", 0.25),
    Limit("duty", "%", 2.0),
    Limit("on-time", "ns", 5.0),
    Limit("off-time", "ns", 20.0),
    Limit("headroom", "V", 0.05),
    Limit("stage current", "A", 0.05, relative=True),
    Limit("stage temperature", "K", 5.0),
    Limit("converter current", "A", 0.05, relative=True),
    Limit("converter power", "W", 0.05, relative=True),
    Limit("converter temperature", "K", 5.0),
    Limit("thermal gain", "ratio", 0.05),
    Limit("jump survival: stage input", "V", 0.25),
    Limit("jump survival: short-time current", "A", 0.05, relative=True),
    Limit("measured range", "% beyond", 2.0),
    Limit("bus drop", "% of bus", 0.5),
    Limit("rail drop", "% of rail", 0.5),
    Limit("copper ampacity", "A", 0.05, relative=True),
    Limit("copper temperature rise", "K", 5.0),
    Limit("via ampacity", "A", 0.05, relative=True),
    Limit("layer budget", "cm2", 0.05, relative=True),
    Limit("crowding", "pairs", 0.25),
    Limit("stability", "ratio", 0.1),
    Limit("impedance margin", "dB", 1.0),
    Limit("input impedance margin", "dB", 1.0),
    Limit("start-up capacitance", "uF", 0.05, relative=True),
    Limit("input current", "A", 0.05, relative=True),
    Limit("deliverable power", "W", 0.05, relative=True),
    Limit("capacitor voltage", "V", 0.5),
    Limit("capacitor ripple", "A", 0.05, relative=True),
    Limit("loop capacitance range", "uF", 0.05, relative=True),
    Limit("bias supply power", "W", 0.05, relative=True),
    Limit("choices that fit together", "choices", 0.1),
    Limit("cost cap", "currency", 0.02, relative=True),
    Limit("area cap", "cm2", 0.02, relative=True),
)
INDEX = {limit.name: k for k, limit in enumerate(LIMITS)}


@dataclass(frozen=True)
class Place:
    """Where a limit was checked: axis labels of the slack array behind the design axis."""

    axes: tuple[tuple[str, ...], ...]


@dataclass
class Worst:
    """The worst place of one limit in each design: value, bound, slack, normalised (P,) and its text."""

    value: FloatArray
    bound: FloatArray
    slack: FloatArray
    normalised: FloatArray
    where: list[str] | None = None


@dataclass
class Ledger:
    """Collects the worst slack of every limit over P designs; remembers places when ``explain``.

    A ``bare`` one keeps nothing but the normalised slack, which is all a search asks for.
    """

    count: int
    explain: bool = False
    bare: bool = False
    states: frozenset[str] = frozenset()  # state names, so that a place reads part first, state last
    worst: dict[str, Worst] = field(default_factory=dict)
    least: dict[str, FloatArray] = field(default_factory=dict)  # normalised slack of a bare one, (P,)

    def add(
        self,
        name: str,
        value: NDArray[Any],
        bound: NDArray[Any] | float,
        *,
        at_most: bool,
        axes: tuple[tuple[str, ...], ...] = (),
        applies: BoolArray | bool = True,
    ) -> None:
        """Record one check; value and bound broadcast to (P, *axes), in the limit's unit."""
        limit = LIMITS[INDEX[name]]
        if self.bare:
            found_least = least_slack(limit, value, bound, at_most=at_most, applies=applies)
            known = self.least.get(name)
            self.least[name] = found_least if known is None else np.minimum(known, found_least)
            return
        shape = (self.count, *(len(labels) for labels in axes))
        bound_full = np.broadcast_to(bound, shape)
        slack = (bound_full - value) if at_most else (value - bound_full)
        scale = limit.tolerance * np.maximum(np.abs(bound_full), 1e-9) if limit.relative else limit.tolerance
        normalised = np.where(applies, slack / scale, ROOM)
        flat = np.nan_to_num(normalised.reshape(self.count, -1), nan=-ROOM, posinf=ROOM, neginf=-ROOM)
        place = flat.argmin(axis=1)
        rows = np.arange(self.count)
        found = Worst(
            value=np.broadcast_to(value, shape).reshape(self.count, -1)[rows, place],
            bound=bound_full.reshape(self.count, -1)[rows, place],
            slack=slack.reshape(self.count, -1)[rows, place],
            normalised=flat[rows, place],
        )
        if self.explain:
            found.where = [text_of(axes, int(k), self.states) for k in place]
        self.keep(name, found)

    def keep(self, name: str, found: Worst) -> None:
        """Merge a check into the worst so far."""
        known = self.worst.get(name)
        if known is None:
            self.worst[name] = found
            return
        less = found.normalised < known.normalised
        for key in ("value", "bound", "slack", "normalised"):
            setattr(known, key, np.where(less, getattr(found, key), getattr(known, key)))
        if known.where is not None and found.where is not None:
            known.where = [f if bad else k for f, k, bad in zip(found.where, known.where, less, strict=True)]

    def normalised(self) -> FloatArray:
        """Return (P, limits) normalised slack, room where a limit was never checked."""
        out = np.full((self.count, len(LIMITS)), ROOM)
        for name, least in self.least.items():
            out[:, INDEX[name]] = np.nan_to_num(least, nan=-ROOM, posinf=ROOM, neginf=-ROOM)
        for name, worst in self.worst.items():
            out[:, INDEX[name]] = worst.normalised
        return out


def least_slack(
    limit: Limit, value: NDArray[Any], bound: NDArray[Any] | float, *, at_most: bool, applies: BoolArray | bool
) -> FloatArray:
    """Return the least normalised slack of each design, (P,), and no place: :meth:`Ledger.add` without its records.

    Not finite where nothing applies or nothing can be said.
    A tolerance that is one number divides the least slack alone.
    """
    slack = np.subtract(bound, value) if at_most else np.subtract(value, bound)
    if limit.relative:
        slack = slack / (limit.tolerance * np.maximum(np.abs(bound), 1e-9))
    if not np.all(applies):
        slack = np.where(applies, slack, np.inf)
    least = slack.min(axis=tuple(range(1, slack.ndim))) if slack.ndim > 1 else slack
    return np.asarray(least if limit.relative else least / limit.tolerance)


def text_of(axes: tuple[tuple[str, ...], ...], place: int, states: frozenset[str]) -> str:
    """Return the labels of a flat place, ``part; state``."""
    if not axes:
        return "board; "
    where = np.unravel_index(place, tuple(len(labels) for labels in axes))
    labels = [names[int(k)] for names, k in zip(axes, where, strict=True)]
    if labels[0] in states:
        labels = [*(labels[1:] or ["board"]), labels[0]]
    return "; ".join(labels)
