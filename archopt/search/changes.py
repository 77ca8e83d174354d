"""Every single change of one choice of a design, with what must move along with it, as whole arrays.

A design is its choices only here (C columns, decisions left out): rows of :func:`choice_layout`. Beside the bare
changes stand changes whose follow-up a person would make too: phases that carry the current with another stage, a
count that keeps the capacitance with another capacitor, a stage that takes another feed, limits that let a bus move.
"""

from __future__ import annotations

import numpy as np

from archopt.model.canonical import canonical
from archopt.model.problem import Problem
from archopt.model.space import BUS_A, BUS_FIELDS, FIXED, FOLLOW, PARENT, RAIL_FIELDS, TWO_LEVELS, Designs, Layout
from archopt.physics.arrays import BoolArray, IntArray
from archopt.search.genome import nearest

FOLLOW_ROOM = 4  # grid steps around its voltage that a bus made to follow the load may take


def choice_layout(problem: Problem) -> Layout:
    """Return the layout of rows that hold choices and no decisions."""
    return Layout(problem.layout.rails, 0)


class SingleChanges:
    """Lists the changes of designs of one problem."""

    def __init__(self, problem: Problem) -> None:
        self.problem = problem
        self.layout = choice_layout(problem)
        allowed = problem.space.allowed
        column = [np.full(len(values), place) for place, values in enumerate(allowed)]
        self.column = np.concatenate(column).astype(np.int64)
        self.value = np.concatenate(allowed).astype(np.int64)
        rails = self.layout.rails
        field = np.where(self.column < len(RAIL_FIELDS) * rails, self.column // rails, -1)
        self.rail = np.where(field >= 0, self.column % rails, -1)
        self.feeds, self.stages, self.banks = (field == RAIL_FIELDS.index(f) for f in ("feed", "stage", "bank"))
        start = self.layout.bus(BUS_FIELDS[0]).start
        in_bus = (self.column >= start) & (self.column < start + 2 * len(BUS_FIELDS))
        self.bus = np.where(in_bus, (self.column - start) % 2, -1)
        self.fed = self._fed()

    def _fed(self) -> IntArray:
        """Return every rail, feed and stage that go together, (n, 3)."""
        allowed, layout = self.problem.space.allowed, self.layout
        rows = [
            (r, int(feed), int(stage))
            for r in range(layout.rails)
            for feed in allowed[layout.rail("feed").start + r]
            for stage in allowed[layout.rail("stage").start + r]
            if self.problem.feed_ok[r, stage, feed]
        ]
        return np.array(rows, dtype=np.int64).reshape(-1, 3)

    def of(self, choices: IntArray) -> tuple[IntArray, IntArray]:
        """Return the canonical rows one change of a design (C,) leads to, (n, C), and the rail changed, (n,), or -1."""
        made = [
            self.bare(choices), self.restaged(choices), self.rebanked(choices), self.refed(choices),
            self.reconverted(choices), self.recontrolled(choices),
        ]  # fmt: skip
        rows = np.concatenate([each[0] for each in made])
        rail = np.concatenate([each[1] for each in made])
        rows = canonical(self.problem, Designs(self.layout, rows)).rows
        other = (rows != choices).any(axis=1)
        return rows[other], rail[other]

    def used(self, choices: IntArray) -> BoolArray:
        """Return which buses feed a rail, (2,)."""
        feed = choices[self.layout.rail("feed")]
        return np.array([(feed == BUS_A + b).any() for b in range(2)])

    def bare(self, choices: IntArray) -> tuple[IntArray, IntArray]:
        """Return one column changed and nothing else; feeds apart, and only stages that take the rail's feed."""
        feed = choices[self.layout.rail("feed")]
        fits = np.ones(len(self.column), dtype=bool)
        at = np.flatnonzero(self.stages)
        fits[at] = self.problem.feed_ok[self.rail[at], self.value[at], feed[self.rail[at]]]
        fits &= (self.value != choices[self.column]) & ~self.feeds
        fits &= (self.bus < 0) | self.used(choices)[self.bus]
        here = np.flatnonzero(fits)
        rows = repeated(choices, len(here))
        rows[np.arange(len(here)), self.column[here]] = self.value[here]
        return rows, self.rail[here]

    def restaged(self, choices: IntArray) -> tuple[IntArray, IntArray]:
        """Return another stage with the fewest phases that carry the rail's current, where those differ."""
        feed, phases = (choices[self.layout.rail(name)] for name in ("feed", "phases"))
        here = np.flatnonzero(self.stages & (self.value != choices[self.column]))
        rail, stage = self.rail[here], self.value[here]
        low = self.problem.phases_low[rail, stage]
        fits = self.problem.feed_ok[rail, stage, feed[rail]] & (low != phases[rail])
        rail, stage, low = rail[fits], stage[fits], low[fits]
        rows = repeated(choices, len(rail))
        every = np.arange(len(rail))
        rows[every, self.layout.rail("stage").start + rail] = stage
        rows[every, self.layout.rail("phases").start + rail] = self.allowed_phases(rail, low)
        return rows, rail

    def allowed_phases(self, rail: IntArray, wanted: IntArray) -> IntArray:
        """Return the phase counts pins allow that are nearest to those wanted."""
        out = wanted.copy()
        start = self.layout.rail("phases").start
        for r in np.unique(rail):
            here = rail == r
            out[here] = nearest(self.problem.space.allowed[start + r], wanted[here])
        return out

    def rebanked(self, choices: IntArray) -> tuple[IntArray, IntArray]:
        """Return another capacitor with about the capacitance there was: the nearest count, one less and one more."""
        layout, problem = self.layout, self.problem
        here = np.flatnonzero(self.banks & (self.value != choices[self.column]))
        rail, bank = self.rail[here], self.value[here]
        size = problem.capacitors.capacitance_f
        old, count = choices[layout.rail("bank")][rail], choices[layout.rail("bank_count")][rail]
        pieces = problem.bank_counts[count] * size[old] / size[bank]
        place = np.abs(np.log(problem.bank_counts / np.maximum(pieces, 1e-9)[:, None])).argmin(axis=1)
        wanted = np.stack([place - 1, place, place + 1])
        start = layout.rail("bank_count").start
        may = np.zeros((layout.rails, len(problem.bank_counts)), dtype=bool)
        for r in range(layout.rails):
            may[r, problem.space.allowed[start + r]] = True
        inside = (wanted >= 0) & (wanted < len(problem.bank_counts)) & (wanted != count)
        inside &= may[rail, np.clip(wanted, 0, len(problem.bank_counts) - 1)]
        turn, which = np.nonzero(inside)
        rows = repeated(choices, len(which))
        every = np.arange(len(which))
        rows[every, layout.rail("bank").start + rail[which]] = bank[which]
        rows[every, start + rail[which]] = wanted[turn, which]
        return rows, rail[which]

    def refed(self, choices: IntArray) -> tuple[IntArray, IntArray]:
        """Return another feed: with the stage there is where that takes it, else with every stage that does."""
        layout = self.layout
        feed, stage, phases = (choices[layout.rail(name)] for name in ("feed", "stage", "phases"))
        r, to, with_stage = self.fed.T
        keeps = self.problem.feed_ok[r, stage[r], to]
        fits = (to != feed[r]) & np.where(keeps, with_stage == stage[r], True)
        parent = np.maximum(to - PARENT, 0)
        has_children = np.isin(np.arange(layout.rails), feed - PARENT)
        fits &= (to < PARENT) | ((feed[parent] < PARENT) & ~has_children[r] & (parent != r))
        r, to, with_stage = r[fits], to[fits], with_stage[fits]
        low, high = self.problem.phases_low[r, with_stage], self.problem.phases_high[r, with_stage]
        rows = repeated(choices, len(r))
        every = np.arange(len(r))
        rows[every, layout.rail("feed").start + r] = to
        rows[every, layout.rail("stage").start + r] = with_stage
        held = np.where(with_stage == stage[r], phases[r], np.clip(phases[r], low, high))
        rows[every, layout.rail("phases").start + r] = held
        furnished = rows.copy()
        self.furnish(furnished, choices)
        more = (furnished != rows).any(axis=1)
        return np.concatenate([rows, furnished[more]]), np.concatenate([r, r[more]])

    def furnish(self, rows: IntArray, choices: IntArray) -> None:
        """Give a bus no rail was on what the other has, in place, so that it can start."""
        designs = Designs(self.layout, rows)
        used = self.used(choices)
        feed = designs.rail("feed")
        for b in range(2):
            fresh = (feed == BUS_A + b).any(axis=1) & ~used[b]
            if not used[1 - b] or not fresh.any():
                continue
            for field in BUS_FIELDS:
                column = self.layout.bus(field).start + b
                values = self.problem.space.allowed[column]
                there = int(choices[self.layout.bus(field).start + 1 - b])
                rows[fresh, column] = there if there in values else values[-1]

    def reconverted(self, choices: IntArray) -> tuple[IntArray, IntArray]:
        """Return another converter in the count that carries as much as there was."""
        layout, table = self.layout, self.problem.converters
        rows = []
        for b in np.flatnonzero(self.used(choices)):
            column, counts = (layout.bus(field).start + b for field in ("converter", "count"))
            values = self.problem.space.allowed[column]
            values = values[(values > 0) & (values != choices[column])]
            if not len(values) or choices[column] == 0:
                continue
            carried = choices[counts] * table.limit_w[choices[column] - 1]
            wanted = np.ceil(carried / table.limit_w[values - 1] - 1e-9).astype(np.int64)
            for fewer in (0, 1):
                made = repeated(choices, len(values))
                made[:, column] = values
                made[:, counts] = nearest(self.problem.space.allowed[counts], np.maximum(wanted - fewer, 1))
                rows.append(made[made[:, counts] != choices[counts]])
        every = np.concatenate(rows) if rows else repeated(choices, 0)
        return every, np.full(len(every), -1)

    def recontrolled(self, choices: IntArray) -> tuple[IntArray, IntArray]:
        """Return another control of a bus with the limits it needs to move at all."""
        layout, allowed = self.layout, self.problem.space.allowed
        rows = []
        for b in np.flatnonzero(self.used(choices)):
            control, low, high, nominal = (
                layout.bus(field).start + b for field in ("control", "lower_v", "upper_v", "nominal_v")
            )
            if choices[control] == FIXED and FOLLOW in allowed[control]:
                for room in (FOLLOW_ROOM, len(self.problem.grid_v)):
                    row = choices.copy()
                    row[control] = FOLLOW
                    row[low] = nearest(allowed[low], np.array([choices[nominal] - room]))[0]
                    row[high] = nearest(allowed[high], np.array([choices[nominal] + room]))[0]
                    rows.append(row)
            if choices[control] != TWO_LEVELS and TWO_LEVELS in allowed[control]:
                for column, values in ((low, allowed[low]), (high, allowed[high])):
                    beyond = values[values < choices[nominal]] if column == low else values[values > choices[nominal]]
                    made = repeated(choices, len(beyond))
                    made[:, control] = TWO_LEVELS
                    made[:, [low, high]] = choices[nominal]
                    made[:, column] = beyond
                    rows += list(made)
        every = np.array(rows, dtype=np.int64).reshape(-1, len(choices))
        return every, np.full(len(every), -1)


def repeated(choices: IntArray, count: int) -> IntArray:
    """Return a design's choices so many times, (count, C)."""
    return np.repeat(choices[None], count, axis=0)
