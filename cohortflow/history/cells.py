"""Rows of an event log into cells: one a customer and period, holding all that the rules may ask.

The engine has read and typed the rows; here they lie in arrays, a block of customers at a time, sorted by customer,
instant, declared order of events at one instant (`Study.event_order`), record number. Every column of a cell is then
one reduction over a run of rows:

    seen_w   events seen, 62 bits a word            last_i   latest event of the i-th `among` set, -1 = none
    count_j  rows of the j-th counted set           amount   sum of money     until  latest valid-until period

A return inside a period splits it: the cell is then made again from its rows from the first return event on.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass

import numpy as np

from cohortflow.errors import InputError, listed
from cohortflow.study import Condition, Study

WORD = 62  # events in a word of bits
MOST_EVENTS = 1024
NO_DATE = -(2**31)  # instead of a valid-until period

Columns = dict[str, np.ndarray]


@dataclass(frozen=True)
class CellPlan:
    """Which columns the cells of an event log need; events are places in `Study.event_order`.

    among, counted, returns : the sets of the rules and exits, each set once;  amount, until : whether there are any
    """

    events: int
    among: tuple[frozenset[int], ...]
    counted: tuple[frozenset[int], ...]
    returns: tuple[frozenset[int], ...]
    amount: bool = False
    until: bool = False

    @property
    def words(self) -> int:
        """Words of bits for the events seen."""
        return (self.events + WORD - 1) // WORD

    def empty(self) -> dict[str, int]:
        """Each column with its value for a period without rows."""
        out = {f"seen_{w}": 0 for w in range(self.words)}
        out |= {f"last_{i}": -1 for i in range(len(self.among))}
        out |= {f"count_{j}": 0 for j in range(len(self.counted))}
        out |= {"amount": 0} if self.amount else {}
        return out | ({"until": NO_DATE} if self.until else {})


def plan_cells(study: Study, *, amount: bool, until: bool) -> CellPlan:
    """The columns that the rules of a study need; InputError for rules that need columns the extract lacks."""
    place = {name: i for i, name in enumerate(study.event_order)}
    conditions = [c for rule in study.rules for c in rule.conditions]
    _check_columns(study, conditions, amount, until, len(place))

    def positions(names: Sequence[str]) -> frozenset[int]:
        return frozenset(place[n] for n in names)

    counting = ("at_least", "at_most")
    return CellPlan(
        events=max(len(place), 1),
        among=_each_once(positions(c.among) for c in conditions if c.kind == "last_event"),
        counted=_each_once(positions(c.events) for c in conditions if c.kind in counting),
        returns=_each_once(positions(study.returns_of(e)) for e in study.states.exits),
        amount=amount,
        until=until,
    )


def _check_columns(study: Study, conditions: list[Condition], amount: bool, until: bool, events: int) -> None:
    kinds = {c.kind for c in conditions}
    if "spent_at_least" in kinds and not amount:
        raise InputError(
            "A rule asks spent_at_least, but [input] names no `amount`: the column of the money."
        )
    if kinds & {"expired_for", "due_within"} and not until:
        raise InputError(
            "A rule asks expired_for or due_within, but [input] names no `valid_until`: the column of the "
            "paid-up-to day."
        )
    if events > MOST_EVENTS:
        raise InputError(
            f"The study names {events} events; at most {MOST_EVENTS} can be told apart (the first are "
            f"{listed(study.event_order, 3)}). Map several to one name in [events]."
        )


def _each_once(sets: Iterable[frozenset[int]]) -> tuple[frozenset[int], ...]:
    return tuple(dict.fromkeys(sets))


def flags(events: Iterable[int], size: int) -> np.ndarray:
    """(size,) bool by event; one place more than there are events stands for "none" and stays false."""
    out = np.zeros(size, dtype=bool)
    out[list(events)] = True
    return out


class Cells:
    """The cells of a block of B customers over T periods.

    code, t, amount, until : used rows, sorted as the module text says;  c, p : their customer and period, both from 0
    index : (T, B) number of the cell, -1 = no rows;  start : (cells + 1,) its first row
    """

    def __init__(self, plan: CellPlan, rows: Columns, *, periods: int, size: int) -> None:
        self.plan, self.rows = plan, rows
        key = rows["c"].astype(np.int64) * periods + rows["p"]
        self.start = np.flatnonzero(np.concatenate([[True], key[1:] != key[:-1]]))[: len(key)]
        found = key[self.start]
        self.index = np.full((periods, size), -1, dtype=np.int32)
        self.index[found % periods, found // periods] = np.arange(len(found))
        self.end = np.append(self.start[1:], len(key))
        self.found, self.periods, self.size = found, periods, size

    def dense(self) -> Columns:
        """(T, B) arrays of every column, with the values of a period without rows where there are none."""
        p, c = self.found % self.periods, self.found // self.periods
        out = {}
        for name, values in self.columns(self.rows, self.start).items():
            whole = np.full((self.periods, self.size), self.plan.empty()[name], dtype=values.dtype)
            whole[p, c] = values
            out[name] = whole
        return out

    def columns(self, rows: Columns, start: np.ndarray) -> Columns:
        """Every column of the cells whose rows begin at `start` (each ends where the next begins)."""
        plan, code = self.plan, rows["code"]
        if len(start) == 0:
            return {name: np.empty(0, dtype=np.int64) for name in plan.empty()}
        out: Columns = {}
        for w in range(plan.words):
            bits = np.zeros(plan.events, dtype=np.int64)
            inside = np.arange(w * WORD, min((w + 1) * WORD, plan.events))
            bits[inside] = np.int64(1) << (inside - w * WORD)
            out[f"seen_{w}"] = np.bitwise_or.reduceat(bits[code], start)
        places = np.arange(len(code), dtype=np.int32)
        for i, events in enumerate(plan.among):
            latest = np.maximum.reduceat(np.where(flags(events, plan.events)[code], places, -1), start)
            out[f"last_{i}"] = np.where(latest >= 0, code[latest], -1).astype(np.int16)
        for j, events in enumerate(plan.counted):
            out[f"count_{j}"] = np.add.reduceat(flags(events, plan.events)[code].astype(np.int32), start)
        if plan.amount:
            out["amount"] = np.add.reduceat(rows["amount"], start)
        if plan.until:
            out["until"] = np.maximum.reduceat(rows["until"], start)
        return out

    def before_return(self, r: int, cells: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """(first row from the first return event on of each cell, flat places of the rows before it)."""
        rows, owner = ranges(self.start[cells], self.end[cells])
        is_return = flags(self.plan.returns[r], self.plan.events)[self.rows["code"][rows]]
        begins = np.flatnonzero(np.concatenate([[True], owner[1:] != owner[:-1]]))
        first = np.minimum.reduceat(np.where(is_return, rows, np.iinfo(np.int64).max), begins)
        return first, rows[rows < first[owner]]

    def from_row(self, cells: np.ndarray, first: np.ndarray) -> Columns:
        """The columns of cells made again from row `first` of each on."""
        rows, owner = ranges(first, self.end[cells])
        begins = np.flatnonzero(np.concatenate([[True], owner[1:] != owner[:-1]]))
        return self.columns({name: values[rows] for name, values in self.rows.items()}, begins)

    def rows_of(self, cells: np.ndarray) -> np.ndarray:
        """Places of all rows of some cells."""
        return ranges(self.start[cells], self.end[cells])[0]

    def decided_by_ties(self, asked: Sequence[tuple[int, frozenset[int]]]) -> int:
        """Cells in which the order of events at one instant decided a rule.

        asked : (place of the `among` set, events the rule lists)
        """
        c, t, code = self.rows["c"], self.rows["t"], self.rows["code"]
        tied = (c[1:] == c[:-1]) & (t[1:] == t[:-1]) & (code[1:] != code[:-1])
        if not tied.any():
            return 0
        decided = np.zeros(len(self.start), dtype=bool)
        cell = np.repeat(np.arange(len(self.start)), self.end - self.start)
        for i, events in asked:
            rows = np.flatnonzero(flags(self.plan.among[i], self.plan.events)[code])
            decided[_cells_tied(cell[rows], t[rows], flags(events, self.plan.events)[code[rows]])] = True
        return int(decided.sum())


def _cells_tied(cell: np.ndarray, t: np.ndarray, verdict: np.ndarray) -> np.ndarray:
    """Cells whose last rows share an instant and differ in verdict."""
    if len(cell) == 0:
        return cell
    begins = np.flatnonzero(np.concatenate([[True], (cell[1:] != cell[:-1]) | (t[1:] != t[:-1])]))
    both = np.maximum.reduceat(verdict, begins) != np.minimum.reduceat(verdict, begins)
    of = cell[begins]
    last = np.append(of[1:] != of[:-1], True)
    return of[both & last]


def ranges(start: np.ndarray, end: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """All numbers start[i] .. end[i]-1, and the i that each belongs to.

    >>> ranges(np.array([3, 8]), np.array([5, 9]))
    (array([3, 4, 8]), array([0, 0, 1]))
    """
    many = end - start
    owner = np.repeat(np.arange(len(start)), many)
    offset = np.arange(int(many.sum())) - np.repeat(np.cumsum(many) - many, many)
    return start[owner] + offset, owner
