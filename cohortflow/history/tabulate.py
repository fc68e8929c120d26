"""Blocks of labelled customers into the tables of the Tally: the last step of every layout.

A block is a matrix (T, B) of states, -1 where a customer has no row, with the stays that begin in it.
A move declared impossible is set aside: its origin row ends as "unseen", what follows starts as "unknown", and
the move is counted as a finding, so that arrivals and starts still add up to rows.
"""

from __future__ import annotations

from collections import Counter
from dataclasses import dataclass

import numpy as np
import pandas as pd

from cohortflow.history.adder import Adder, Columns
from cohortflow.history.paths import PathSample
from cohortflow.states import States
from cohortflow.tally import ENDS, KEYS, KINDS

STEPS_AHEAD = 12
MOVED, AS_OF, EXIT, UNSEEN = (ENDS.index(e) for e in ("moved", "as_of", "exit", "unseen"))
UNKNOWN = KINDS.index("unknown")


@dataclass
class Block:
    """B labelled customers, T periods, the first of them the ordinal `first`.

    state, start, origin, tenure, memo, memo_state : (T, B), see follow.Followed
    bucket : (B,) place in the list of buckets;  segment, level : (B,);  weight : (B,) or None
    amount : (T, B) or None;  gaps : whether a stay may have periods without a row
    """

    first: int
    state: np.ndarray
    start: np.ndarray
    origin: np.ndarray
    tenure: np.ndarray
    memo: np.ndarray
    memo_state: np.ndarray
    bucket: np.ndarray
    segment: np.ndarray
    level: np.ndarray
    weight: np.ndarray | None = None
    amount: np.ndarray | None = None
    gaps: bool = False


class Tabulator:
    """Adds blocks up. `impossible`: set-aside moves by (period, from, to); `counted`: customers with a row."""

    def __init__(self, states: States, paths: PathSample) -> None:
        self.states, self.paths = states, paths
        self.adders = {name: Adder(name) for name in KEYS if name not in ("paths", "spells")}
        self.impossible: Counter[tuple[int, int, int]] = Counter()
        self.counted = 0
        self.is_exit = states.exit_mask

    def add(self, block: Block) -> None:
        """Count one block."""
        after = next_rows(block)
        self._set_aside_impossible(block, after)
        here = block.state >= 0
        t, b = np.nonzero(here)
        rows = _Rows(block, t, b, after)
        self.counted += int(here.any(axis=0).sum())
        self._moves(block, rows)
        self._starts(block)
        self._contexts(block, rows)
        self._ages(block, rows)
        self._steps(block, after)
        self._memos(block)
        if block.amount is not None:
            money = block.amount[t, b]
            values = {"total": money, "squares": money * money}
            self.adders["amounts"].add(
                {"bucket": rows.bucket, "segment": rows.segment, "period": rows.period, "state": rows.state},
                values,
            )
        self.paths.add(block.first, block.state, block.segment, block.level)

    def _set_aside_impossible(self, block: Block, after: np.ndarray) -> None:
        if self.states.allowed[~self.is_exit].all():
            return
        t, b = np.nonzero((block.state >= 0) & (after >= 0))
        later = after[t, b]
        origin, target = block.state[t, b], block.state[later, b]
        broken = ~self.states.allowed[origin, target]
        if not broken.any():
            return
        t, b, later, origin, target = (a[broken] for a in (t, b, later, origin, target))
        self.impossible.update(zip((t + block.first).tolist(), origin.tolist(), target.tolist(), strict=True))
        after[t, b] = -1
        into_exit = self.is_exit[target]
        block.start[later[~into_exit], b[~into_exit]] = UNKNOWN
        block.state[later[into_exit], b[into_exit]] = -1

    def _moves(self, block: Block, rows: _Rows) -> None:
        last = len(block.state) - 1
        end = np.where(rows.t == last, AS_OF, UNSEEN)
        end[self.is_exit[rows.state]] = EXIT
        end[rows.moved] = MOVED
        gap = np.where(rows.moved, rows.later - rows.t, 0)
        keys = {
            "bucket": rows.bucket,
            "segment": rows.segment,
            "period": rows.period,
            "gap": gap,
            "end": end,
            "state": rows.state,
            "next_state": rows.next_state,
        }
        self.adders["moves"].add(keys, _weights(block, rows.b))

    def _starts(self, block: Block) -> None:
        t, b = np.nonzero((block.start >= 0) & (block.state >= 0))
        keys = {
            "bucket": block.bucket[b],
            "segment": block.segment[b],
            "period": t + block.first,
            "state": block.state[t, b],
            "kind": block.start[t, b],
            "from_state": block.origin[t, b],
        }
        self.adders["starts"].add(keys, _weights(block, b))

    def _contexts(self, block: Block, rows: _Rows) -> None:
        spell, previous = spells_so_far(block)
        step = rows.moved & (rows.later - rows.t == 1)
        t, b = rows.t[step], rows.b[step]
        keys = {
            "bucket": rows.bucket[step],
            "segment": rows.segment[step],
            "period": rows.period[step],
            "tenure": block.tenure[t, b],
            "spell": spell[t, b],
            "previous": previous[t, b],
            "state": rows.state[step],
            "next_state": rows.next_state[step],
        }
        self.adders["contexts"].add(keys)

    def _ages(self, block: Block, rows: _Rows) -> None:
        """Stays whose beginning was seen, by their age; an exit stands once."""
        began, kind = stays_so_far(block)
        at = began[rows.t, rows.b]
        kinds = kind[rows.t, rows.b]
        seen = kinds != UNKNOWN
        keys = {
            "segment": rows.segment[seen],
            "joined": at[seen] + block.first,
            "kind": kinds[seen],
            "age": (rows.t - at)[seen],
            "state": rows.state[seen],
        }
        self.adders["ages"].add(keys)

    def _steps(self, block: Block, after: np.ndarray) -> None:
        """Pairs k periods apart within a stay; an exit, once reached, is kept."""
        periods, size = block.state.shape
        states = len(self.states)
        exited, ended = stay_ends(block, after, self.is_exit)
        segments, place = np.unique(block.segment, return_inverse=True)
        origin = (block.state >= 0) & ~self.is_exit[block.state]
        base = (place * periods + np.arange(periods)[:, None]) * states + block.state
        room = len(segments) * periods * states
        base = np.where(origin, base, room) * (states + 1)
        for k in range(1, min(STEPS_AHEAD, periods - 1) + 1):
            within = ended[:-k] >= np.arange(k, periods, dtype=np.int16)[:, None]
            later = np.where(within, block.state[k:], exited[:-k])
            code = base[:-k] + np.where(later >= 0, later, states)
            counts = np.bincount(code.ravel(), minlength=(room + 1) * (states + 1))
            found = np.flatnonzero(counts[: room * (states + 1)])
            where, later = np.divmod(found, states + 1)
            found, where = found[later < states], where[later < states]
            keys = {
                "segment": segments[where // states // periods],
                "period": where // states % periods + block.first,
                "k": k,
                "state": where % states,
                "later": later[later < states],
            }
            self.adders["steps"].add(keys, {"n": counts[found]})

    def _memos(self, block: Block) -> None:
        t, b = np.nonzero(block.memo >= 0)
        keys = {
            "segment": block.segment[b],
            "period": t + block.first,
            "kind": block.memo[t, b],
            "state": block.memo_state[t, b],
        }
        self.adders["memos"].add(keys)

    def merge(self, other: Tabulator) -> None:
        """Take over what another worker has counted."""
        for name, adder in self.adders.items():
            adder.take_over(other.adders[name])
        self.impossible.update(other.impossible)
        self.counted += other.counted
        self.paths.merge(other.paths)

    def tables(self) -> dict[str, pd.DataFrame]:
        """All tables so far, buckets as places in the list of buckets."""
        frames = {name: adder.frame() for name, adder in self.adders.items()}
        return {name: frame for name, frame in frames.items() if frame is not None}


class _Rows:
    """The rows of a block as long columns."""

    def __init__(self, block: Block, t: np.ndarray, b: np.ndarray, after: np.ndarray) -> None:
        self.t, self.b = t, b
        self.bucket, self.segment = block.bucket[b], block.segment[b]
        self.period = t + block.first
        self.state = block.state[t, b]
        self.later = after[t, b]
        self.moved = self.later >= 0
        self.next_state = np.where(self.moved, block.state[self.later, b], -1)


def _weights(block: Block, b: np.ndarray) -> Columns | None:
    return None if block.weight is None else {"weight": block.weight[b]}


def next_rows(block: Block) -> np.ndarray:
    """(T, B) period of the customer's next row within the stay, -1 = none."""
    periods, size = block.state.shape
    after = np.full((periods, size), -1, dtype=np.int32)
    coming = np.full(size, -1, dtype=np.int32)
    for t in range(periods - 1, -1, -1):
        after[t] = coming
        here = block.state[t] >= 0
        coming = np.where(here, t, coming)
        coming[here & (block.start[t] >= 0)] = -1
    return after


def stays_so_far(block: Block) -> tuple[np.ndarray, np.ndarray]:
    """(T, B) period in which the stay under way began, and its kind (positions of KINDS)."""
    began = np.full(block.state.shape, -1, dtype=np.int32)
    kind = np.full(block.state.shape, UNKNOWN, dtype=np.int8)
    at = np.full(block.state.shape[1], -1, dtype=np.int32)
    what = np.full(block.state.shape[1], UNKNOWN, dtype=np.int8)
    for t, starts in enumerate(block.start):
        new = starts >= 0
        at = np.where(new, t, at)
        what = np.where(new, starts, what)
        began[t], kind[t] = at, what
    return began, kind


def spells_so_far(block: Block) -> tuple[np.ndarray, np.ndarray]:
    """(T, B) periods already spent in the state (-1: arrival not seen) and the state one period before (-1: none)."""
    spell = np.full(block.state.shape, -1, dtype=np.int32)
    previous = np.full(block.state.shape, -1, dtype=np.int8)
    before = np.full(block.state.shape[1], -1, dtype=np.int8)
    length = np.full(block.state.shape[1], -1, dtype=np.int32)
    for t, state in enumerate(block.state):
        begins = block.start[t] >= 0
        before = np.where(begins, -1, before)
        stays = (state == before) & (before >= 0)
        arrived = (before >= 0) | (begins & (block.start[t] != UNKNOWN))
        length = np.where(stays, np.where(length >= 0, length + 1, -1), np.where(arrived, 0, -1))
        spell[t], previous[t] = length, before
        before = state
    return spell, previous


def stay_ends(block: Block, after: np.ndarray, is_exit: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """(T, B) exit that ends the stay of a row, -1 = none, and the period of the stay's last row."""
    exited = np.full(block.state.shape, -1, dtype=np.int8)
    ended = np.full(block.state.shape, -1, dtype=np.int16)
    which = np.full(block.state.shape[1], -1, dtype=np.int8)
    when = np.full(block.state.shape[1], -1, dtype=np.int16)
    for t in range(len(block.state) - 1, -1, -1):
        state = block.state[t]
        stops = (state >= 0) & (after[t] < 0)
        np.copyto(when, np.int16(t), where=stops)
        np.copyto(which, np.where(is_exit[state], state, -1), where=stops, casting="same_kind")
        exited[t], ended[t] = which, when
    return exited, ended
