"""Customers' state paths as arrays: runs, moves, and the panel of stays that simulations start from."""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from cohortflow.states import States
from cohortflow.tally import Tally

Ints = NDArray[np.int64]
GAP = -1


@dataclass(frozen=True, eq=False)
class Paths:
    """Runs of states, one entry a run, in order of customer and time; gaps are left out.

    customer : (E,) 0 .. customers-1;  state, start, length : (E,) state, first period, periods
    stay : (E,) number of the stay; a new one begins with the path, after an exit, a gap, or a move
        declared impossible (which was set aside)
    segment : (C,) segment code of each customer;  exits : (K,) bool;  last : last period of the window
    """

    customer: Ints
    state: Ints
    start: Ints
    length: Ints
    stay: Ints
    segment: Ints
    exits: NDArray[np.bool_]
    last: int

    @classmethod
    def of(cls, tally: Tally, *, most: int | None = None, rng: np.random.Generator | None = None) -> Paths:
        """All sampled customers of the tally, or a random `most` of them; NotIdentified without paths."""
        table = tally.table("paths")
        rows = np.repeat(np.arange(len(table)), table["n"].to_numpy())
        if most is not None and rng is not None and len(rows) > most:
            rows = np.sort(rng.choice(rows, most, replace=False))
        texts = table["path"].to_numpy(object)[rows]
        segment = table["segment"].to_numpy(np.int64)[rows]
        return _decoded(texts, segment, tally.states, tally.meta.last)

    @property
    def customers(self) -> int:
        return len(self.segment)

    @cached_property
    def moves(self) -> tuple[Ints, Ints, Ints, Ints]:
        """(customer, from, to, n) of one-period moves within stays, not summed up."""
        stays_put = (self.length > 1) & ~self.exits[self.state]
        onward = np.flatnonzero(self.stay[1:] == self.stay[:-1])
        customer = np.concatenate([self.customer[stays_put], self.customer[onward]])
        origin = np.concatenate([self.state[stays_put], self.state[onward]])
        target = np.concatenate([self.state[stays_put], self.state[onward + 1]])
        n = np.concatenate([self.length[stays_put] - 1, np.ones(len(onward), dtype=np.int64)])
        return customer, origin, target, n

    @cached_property
    def entry(self) -> Ints:
        """(C,) first period of each customer."""
        first = np.searchsorted(self.customer, np.arange(self.customers))
        return self.start[first]

    def panel(self) -> Panel:
        """The stays in order of their first period, an exit kept until the end of the window."""
        first = np.flatnonzero(np.r_[True, np.diff(self.stay) != 0])
        ends = np.r_[first[1:], len(self.stay)] - 1
        origin = int(self.start.min(initial=self.last))
        width = self.last - origin + 1
        gone = self.exits[self.state[ends]]
        last = np.where(gone, width - 1, self.start[ends] + self.length[ends] - 1 - origin)
        grid = np.full((width, len(first)), GAP, dtype=np.int16)
        length = self.length.copy()
        length[ends[gone]] = width - (self.start[ends[gone]] - origin)
        line = np.repeat(np.arange(len(first)), ends - first + 1)
        within = np.arange(length.sum()) - np.repeat(np.cumsum(length) - length, length)
        column = np.repeat(self.start - origin, length) + within
        grid[column, np.repeat(line, length)] = np.repeat(self.state, length)
        began = self.start[first] - origin
        useful = np.flatnonzero(~self.exits[self.state[first]])
        useful = useful[np.argsort(began[useful], kind="stable")]
        return Panel(grid[:, useful], began[useful], last[useful], self.exits)


@dataclass(frozen=True, eq=False)
class Panel:
    """States of S stays in T periods.

    grid : (T, S) state, -1 outside the stay;  first, last : (S,) rows observed, first ascending;  exits :
        (K,) bool
    """

    grid: NDArray[np.int16]
    first: Ints
    last: Ints
    exits: NDArray[np.bool_]

    def counts(self, k: int = 1) -> Ints:
        """(K, K) stays in state i that were in state j k periods later, over all (overlapping) starts."""
        size = len(self.exits)
        now, later = self.grid[:-k], self.grid[k:]
        cell = np.where((now < 0) | (later < 0), size * size, now * np.int16(size) + later)
        out = np.bincount(cell.ravel(), minlength=size * size + 1)[:-1].reshape(size, size)
        out[self.exits] = 0
        return out

    def simulated(self, P: NDArray[np.float64], rng: np.random.Generator) -> Panel:
        """A panel of one chain with the same first states and the same windows of observation.

        P : (K, K); rows without data stay where they are.
        """
        size = len(self.exits)
        filled = np.where(np.isnan(P) | self.exits[:, None], np.eye(size), P)
        upper = filled.cumsum(axis=1)[:, :-1]
        begun = np.searchsorted(self.first, np.arange(len(self.grid)), side="right")
        start = self.grid[self.first, np.arange(len(self.first))]
        grid = np.full_like(self.grid, GAP)
        here = start.copy()
        for t, (old, now) in enumerate(zip(np.r_[0, begun[:-1]], begun, strict=True)):
            was = here[:old].copy()
            for state in range(size):
                there = np.flatnonzero(was == state)
                here[there] = np.searchsorted(upper[state], rng.random(len(there)), side="right")
            grid[t, :now] = here[:now]
        grid[np.arange(len(grid))[:, None] > self.last] = GAP
        return Panel(grid, self.first, self.last, self.exits)


def shares(counts: Ints) -> NDArray[np.float64]:
    """(K, K) row shares; NaN without departures.

    >>> shares(np.array([[3, 1], [0, 0]])).tolist()
    [[0.75, 0.25], [nan, nan]]
    """
    total = counts.sum(axis=1, keepdims=True)
    return np.divide(counts, total, out=np.full(counts.shape, np.nan), where=total > 0)


def _decoded(texts: NDArray[np.object_], segment: Ints, states: States, last: int) -> Paths:
    rows: list[tuple[int, int, int, int, int]] = []
    follows = (states.allowed & ~states.exit_mask[:, None]).tolist()  # may a stay go on with this move?
    nowhere, stay = [False] * len(states), -1
    for customer, text in enumerate(texts):
        first, *runs = text.split(" ")
        period, onward = int(first), nowhere
        for run in runs:
            name, length = run.split("*")
            if name == "-":
                onward = nowhere
            else:
                state = int(name)
                stay += not onward[state]
                rows.append((customer, state, period, int(length), stay))
                onward = follows[state]
            period += int(length)
    table = np.array(rows, dtype=np.int64).reshape(-1, 5)
    customer_of, state_of, start, length_of, stay_of = table.T
    return Paths(customer_of, state_of, start, length_of, stay_of, segment, states.exit_mask, last)
