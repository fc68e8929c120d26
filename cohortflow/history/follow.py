"""Following a block of customers through the periods: events into states, stays, exits and returns.

Sequential over periods, vectorised over customers. Decided here, once:

- A customer is seen first in the period of his first used row. His stay is known (kind joined) when that period
  holds a join event, or when it lies after the warm-up; else his history is unknown and his stay began, as far as
  the rules ask, in the period of first sight.
- Rules are evaluated at each period end up to the last complete period, with or without rows (silence is
  information). The rows of an exit's own period are all used.
- An exit holds until a return event. Other rows are set aside (`after_exit`), also those of the return's period
  that come before the first return event, in the order of (instant, order of ties, record).
- A return clears the memory of latest events, not the windows; it starts a stay with tenure 0.
- Joining, or returning, and leaving by the end of the same period is no move: a memo (joined_and_left,
  returned_and_left). A last event that leaves and one that returns within a period are no exit either: the state
  is the one at the period's end.
- Customers of unknown history count from the end of the warm-up on, those of known stays from the first complete
  period of the log. Whoever is under way then starts there as "unknown"; whoever has left by then does not start.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from cohortflow.history.cells import Cells, Columns
from cohortflow.history.rules import Memory, Rules, word
from cohortflow.history.silences import Watch, watched
from cohortflow.tally import KINDS

JOINED, RETURNED, UNKNOWN_HISTORY = (KINDS.index(k) for k in ("joined", "returned", "unknown"))
UNSEEN, LIVE = -2, -1  # instead of the exit a customer is in


@dataclass
class Followed:
    """What became of B customers in T periods: arrays (T, B) unless said otherwise.

    state : position, -1 = no row;  start : kind of the stay that begins here, -1 = none
    origin : exit from which a return comes, -1;  tenure : periods since the stay began, -1 = unknown
    memo : 0 joined_and_left, 1 returned_and_left in the period, -1 = none;  memo_state : the exit
    aside : places of the used rows that are set aside after an exit
    silences : one row a silence, see silences.py
    without_join : (B,) first seen after the warm-up without a join event, where joins are named
    """

    state: np.ndarray
    start: np.ndarray
    origin: np.ndarray
    tenure: np.ndarray
    memo: np.ndarray
    memo_state: np.ndarray
    without_join: np.ndarray
    aside: list[np.ndarray]
    any_exit: bool = False
    amount: np.ndarray | None = None
    silences: Columns | None = None


@dataclass(frozen=True)
class Span:
    """Periods as indices 0 .. size-1 from the first period with used rows on.

    complete : first complete period of the log;  settled : first period after the warm-up
    """

    size: int
    complete: int
    settled: int


class EventFollower:
    """Follows blocks of customers of an event log under the rules of a study."""

    def __init__(self, rules: Rules, span: Span) -> None:
        self.rules, self.span, self.plan = rules, span, rules.plan
        study = rules.study
        self.watched = watched(study, rules.place)
        self.joins = frozenset(rules.place[n] for n in study.input.joins)
        self.returns_of_state = np.full(len(study.states) + 1, -1, dtype=np.int64)
        for name in study.states.exits:
            events = frozenset(rules.place[n] for n in study.returns_of(name))
            self.returns_of_state[study.states.index(name)] = self.plan.returns.index(events)
        everything = frozenset(range(self.plan.events))
        self.others = [everything - events for events in self.plan.returns]
        self.is_exit = study.states.exit_mask

    def follow(self, cells: Cells) -> Followed:
        """Label a block."""
        periods, size = cells.index.shape
        dense = cells.dense()
        out = blank(periods, size)
        memory = Memory(self.rules, periods, size)
        watch = Watch(self.rules, dense, self.watched)
        where = np.full(size, UNSEEN, dtype=np.int8)
        count_from = np.zeros(size, dtype=np.int32)
        for t in range(periods):
            row = {name: column[t] for name, column in dense.items()}
            there = cells.index[t] >= 0
            new = (where == UNSEEN) & there
            back = self._returns(t, row, (where >= 0) & there, where, cells, out)
            if new.any():
                self._first_sight(t, row, new, memory, count_from, out)
            if back.any():
                memory.begin(t, back, np.ones(size, dtype=bool))
                out.origin[t, back] = where[back]
            memory.take_in(t, row)
            here = new | back | (where == LIVE)
            self._label(t, here, new, back, memory, where, out)
            watch.take_in(t, memory, where)
        out.silences = watch.table()
        self._cut(out, count_from)
        if self.plan.amount:
            out.amount = dense["amount"]
        return out

    def _returns(
        self,
        t: int,
        row: Columns,
        gone: np.ndarray,
        where: np.ndarray,
        cells: Cells,
        out: Followed,
    ) -> np.ndarray:
        """Who returns in period t; the rows that are set aside are taken out of `row`."""
        back = np.zeros(len(where), dtype=bool)
        if not gone.any():
            return back
        for r, events in enumerate(self.plan.returns):
            mine = gone & (self.returns_of_state[where] == r)
            hit = mine & self._saw(row, events)
            back |= hit
            mixed = np.flatnonzero(hit & self._saw(row, self.others[r]))
            if len(mixed):
                self._split(t, r, mixed, row, cells, out)
        aside = np.flatnonzero(gone & ~back)
        if len(aside):
            out.aside.append(cells.rows_of(cells.index[t, aside]))
            for name, value in self.plan.empty().items():
                row[name][aside] = value
        return back

    def _split(self, t: int, r: int, who: np.ndarray, row: Columns, cells: Cells, out: Followed) -> None:
        """Returns in a period with other events: only the rows from the first return event on count."""
        mine = cells.index[t, who]
        first, before = cells.before_return(r, mine)
        if len(before):
            out.aside.append(before)
            for name, values in cells.from_row(mine, first).items():
                row[name][who] = values

    def _saw(self, row: Columns, events: frozenset[int]) -> np.ndarray:
        hit = np.zeros(len(row["seen_0"]), dtype=bool)
        for w in range(self.plan.words):
            if bits := word(events, w):
                hit |= (row[f"seen_{w}"] & bits) != 0
        return hit

    def _first_sight(
        self,
        t: int,
        row: Columns,
        new: np.ndarray,
        memory: Memory,
        count_from: np.ndarray,
        out: Followed,
    ) -> None:
        joining = self._saw(row, self.joins)
        known = joining | (t >= self.span.settled)
        memory.begin(t, new, known)
        count_from[new] = np.where(known, max(t, self.span.complete), self.span.settled)[new]
        if self.joins:
            out.without_join |= new & ~joining & (t >= self.span.settled)

    def _label(
        self,
        t: int,
        here: np.ndarray,
        new: np.ndarray,
        back: np.ndarray,
        memory: Memory,
        where: np.ndarray,
        out: Followed,
    ) -> None:
        state = self.rules.states(t, memory)
        left = here & self.is_exit[state]
        out.any_exit |= bool(left.any())
        at_once = left & (new | back)
        known_new = new & memory.known
        np.copyto(out.state[t], state, where=here & ~at_once)
        for who, kind in ((new, UNKNOWN_HISTORY), (known_new, JOINED), (back, RETURNED), (at_once, -1)):
            np.copyto(out.start[t], np.int8(kind), where=who)
        if at_once.any():
            np.copyto(out.memo[t], np.int8(0), where=at_once & known_new)
            np.copyto(out.memo[t], np.int8(1), where=at_once & back)
        out.memo_state[t] = state
        out.tenure[t] = np.where(memory.known, t - memory.began, -1)
        np.copyto(where, np.int8(LIVE), where=here)
        np.copyto(where, state, where=left)

    def _cut(self, out: Followed, count_from: np.ndarray) -> None:
        """Forget what lies before each customer counts; whoever is under way then starts as unknown."""
        last = int(count_from.max(initial=0))
        if last == 0:
            return
        periods = len(out.state)
        for t in range(min(last, periods)):
            early = t < count_from
            for array in (out.state, out.start, out.memo):
                array[t, early] = -1
        who = np.flatnonzero(count_from < periods)
        at = count_from[who]
        under_way = (out.state[at, who] >= 0) & (out.start[at, who] < 0)
        who, at = who[under_way], at[under_way]
        gone = self.is_exit[out.state[at, who]]
        out.state[at[gone], who[gone]] = -1
        out.start[at[~gone], who[~gone]] = UNKNOWN_HISTORY


def blank(periods: int, size: int) -> Followed:
    """Nothing known yet of a block."""

    def none(kind: type = np.int8) -> np.ndarray:
        return np.full((periods, size), -1, dtype=kind)

    return Followed(none(), none(), none(), none(np.int32), none(), none(), np.zeros(size, dtype=bool), [])
