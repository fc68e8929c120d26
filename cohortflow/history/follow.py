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

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np

from cohortflow.history.cells import CellPlan
from cohortflow.history.rules import Memory, Rules, word
from cohortflow.tally import KINDS

JOINED, RETURNED, UNKNOWN_HISTORY = (KINDS.index(k) for k in ("joined", "returned", "unknown"))
UNSEEN, LIVE = -2, -1  # instead of the exit a customer is in


@dataclass
class Followed:
    """What became of B customers in T periods: arrays (T, B) unless said otherwise.

    state : position, -1 = no row;  start : kind of the stay that begins here, -1 = none
    origin : exit from which a return comes, -1;  tenure : periods since the stay began, -1 = unknown
    memo : 0 joined_and_left, 1 returned_and_left in the period, -1 = none;  memo_state : the exit
    aside : whether the cell's rows are set aside: 0 no, 1 all, 2 those before the first return event, which is of
        the return set aside_set
    without_join : (B,) first seen after the warm-up without a join event, where joins are named
    """

    state: np.ndarray
    start: np.ndarray
    origin: np.ndarray
    tenure: np.ndarray
    memo: np.ndarray
    memo_state: np.ndarray
    aside: np.ndarray
    aside_set: np.ndarray
    without_join: np.ndarray
    any_exit: bool
    amount: np.ndarray | None = None


@dataclass(frozen=True)
class Span:
    """Periods as indices 0 .. size-1 from the first period with used rows on.

    complete : first complete period of the log;  settled : first period after the warm-up
    """

    size: int
    complete: int
    settled: int


def empty_block(plan: CellPlan, periods: int, size: int) -> dict[str, np.ndarray]:
    """(T, B) arrays of the cell columns, filled with what a period without rows has."""
    fill: dict[str, tuple[int, type]] = {"n": (0, np.int32)}
    fill |= {f"seen_{w}": (0, np.int64) for w in range(plan.words)}
    fill |= {f"last_{i}": (-1, np.int16) for i in range(len(plan.among))}
    fill |= {f"count_{j}": (0, np.int32) for j in range(len(plan.counted))}
    fill |= {f"back_{r}": (0, np.int8) for r in range(len(plan.returns))}
    fill |= {"amount": (0, np.int64)} if plan.amount else {}
    fill |= {"until": (-(2**31), np.int64)} if plan.until else {}
    return {name: np.full((periods, size), value, dtype=kind) for name, (value, kind) in fill.items()}


class EventFollower:
    """Follows blocks of customers of an event log under the rules of a study."""

    def __init__(self, rules: Rules, span: Span) -> None:
        self.rules, self.span, self.plan = rules, span, rules.plan
        study = rules.study
        self.joins = frozenset(rules.place[n] for n in study.input.joins)
        self.returns_of_state = np.full(len(study.states) + 1, -1, dtype=np.int64)
        for name in study.states.exits:
            events = frozenset(rules.place[n] for n in study.returns_of(name))
            self.returns_of_state[study.states.index(name)] = self.plan.returns.index(events)
        self.is_exit = study.states.exit_mask

    def follow(self, cells: dict[str, np.ndarray], splits: Mapping[int, Splits]) -> Followed:
        """Label a block; `cells` is used up (rows that are set aside are taken out of it)."""
        periods, size = cells["n"].shape
        out = blank(periods, size)
        memory = Memory(self.rules, periods, size)
        where = np.full(size, UNSEEN, dtype=np.int8)
        count_from = np.zeros(size, dtype=np.int32)
        for t in range(periods):
            row = {name: column[t] for name, column in cells.items()}
            new = (where == UNSEEN) & (row["n"] > 0)
            back = self._returns(t, row, where, out, splits)
            if new.any():
                self._first_sight(t, row, new, memory, count_from, out)
            if back.any():
                memory.begin(t, back, np.ones(size, dtype=bool))
                out.origin[t, back] = where[back]
            memory.take_in(t, row)
            here = new | back | (where == LIVE)
            self._label(t, here, new, back, memory, where, out)
        self._cut(out, count_from)
        if self.plan.amount:
            out.amount = cells["amount"]
        return out

    def _returns(
        self,
        t: int,
        row: dict[str, np.ndarray],
        where: np.ndarray,
        out: Followed,
        splits: Mapping[int, Splits],
    ) -> np.ndarray:
        """Who returns in period t; the rows that are set aside are taken out of `row`."""
        gone = (where >= 0) & (row["n"] > 0)
        back = np.zeros(len(where), dtype=bool)
        if not gone.any():
            return back
        for r in range(len(self.plan.returns)):
            mine = gone & (self.returns_of_state[where] == r)
            hit = mine & (row[f"back_{r}"] > 0)
            back |= hit
            late = np.flatnonzero(hit & (row[f"back_{r}"] == 2))
            if len(late):
                out.aside[t, late], out.aside_set[t, late] = 2, r
                splits[r].put(t, late, row)
        aside = np.flatnonzero(gone & ~back)
        if len(aside):
            out.aside[t, aside] = 1
            _clear(row, aside)
        return back

    def _first_sight(
        self,
        t: int,
        row: dict[str, np.ndarray],
        new: np.ndarray,
        memory: Memory,
        count_from: np.ndarray,
        out: Followed,
    ) -> None:
        joining = self._holds_join(row)
        known = joining | (t >= self.span.settled)
        memory.begin(t, new, known)
        count_from[new] = np.where(known, max(t, self.span.complete), self.span.settled)[new]
        if self.joins:
            out.without_join |= new & ~joining & (t >= self.span.settled)

    def _holds_join(self, row: dict[str, np.ndarray]) -> np.ndarray:
        hit = np.zeros(len(row["n"]), dtype=bool)
        for w in range(self.plan.words):
            hit |= (row[f"seen_{w}"] & word(self.joins, w)) != 0
        return hit

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
        out.state[t] = np.where(here & ~at_once, state, -1)
        out.start[t] = np.select(
            [at_once, back, known_new, new], [-1, RETURNED, JOINED, UNKNOWN_HISTORY], default=-1
        )
        out.memo[t] = np.select([at_once & back, at_once & known_new], [1, 0], default=-1)
        out.memo_state[t] = state
        out.tenure[t] = np.where(memory.known, t - memory.began, -1)
        where[left] = state[left]
        where[here & ~left] = LIVE

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


class Splits:
    """Cells of a block made again from the first return on, found by period and customer."""

    def __init__(self, columns: Mapping[str, np.ndarray], size: int) -> None:
        self.size = size
        key = columns["p"].astype(np.int64) * size + columns["c"]
        order = np.argsort(key, kind="stable")
        self.key = key[order]
        self.columns = {name: values[order] for name, values in columns.items() if name not in ("c", "p")}

    def put(self, t: int, who: np.ndarray, row: dict[str, np.ndarray]) -> None:
        """Replace the cells of `who` in period t."""
        place = np.searchsorted(self.key, t * self.size + who)
        for name, column in row.items():
            column[who] = self.columns[name][place]


def blank(periods: int, size: int) -> Followed:
    """Nothing known yet of a block."""

    def none(kind: type = np.int8) -> np.ndarray:
        return np.full((periods, size), -1, dtype=kind)

    return Followed(
        none(), none(), none(), none(np.int32), none(), none(), np.zeros((periods, size), np.int8),
        none(), np.zeros(size, dtype=bool), False,
    )  # fmt: skip


def _clear(row: dict[str, np.ndarray], who: np.ndarray) -> None:
    """As if the period had no rows."""
    for name, column in row.items():
        if name.startswith("last_"):
            column[who] = -1
        elif name == "until":
            column[who] = -(2**31)
        else:
            column[who] = 0
