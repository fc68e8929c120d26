"""A Schedule seen from a base period, for the long run: its closed groups, exits, cycle and verdict."""

from __future__ import annotations

import math
from collections.abc import Callable, Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from cohortflow.chain import Schedule
from cohortflow.markov.absorption import absorb
from cohortflow.markov.stationary import time_average_matrix
from cohortflow.markov.structure import Structure, analyse
from cohortflow.projector.accept import Array
from cohortflow.projector.unroll import Unrolled, unroll

SETTLED = 0.01
LONGEST = 20_000
SAME = 1e-12


@dataclass(frozen=True)
class Figure:
    """One row: `origin` is the table's column `from`."""

    measure: str
    state: str
    origin: str
    value: float
    note: str = ""

    @property
    def key(self) -> tuple[str, str, str, str]:
        return self.measure, self.state, self.origin, self.note


@dataclass(frozen=True, eq=False)
class Prospect:
    """A Schedule seen from a base period: what it leads to.

    starts : name -> (K,) law of the state now;  joiners : (K,) a period, or None
    position : label of the place k steps on ("" when the model has no cycle)
    """

    schedule: Schedule
    starts: Mapping[str, Array]
    joiners: Array | None
    first_step: int
    position: Callable[[int], str]

    @cached_property
    def chain(self) -> Unrolled:
        return unroll(self.schedule, first_step=self.first_step)

    @cached_property
    def structure(self) -> Structure:
        return analyse(self.chain.P)

    @cached_property
    def cycle(self) -> int:
        """Length of the season's cycle, 1 when there is none."""
        return math.lcm(*(len(c.matrices) for c in self.schedule.components if c.tail == "cycle"))

    @cached_property
    def time_average(self) -> Array:
        """(S, S) share of time in column, in the long run, from row."""
        return time_average_matrix(self.chain.P)

    @cached_property
    def exit_split(self) -> Array:
        """(K, K) probability of ending in each declared exit, from each declared state."""
        found = absorb(self.chain.P, self.chain.exits)
        whole = np.zeros((len(self.chain.P), len(self.schedule.states)))
        fold = np.eye(len(self.schedule.states))[self.chain.report]
        whole[list(found.inside)] = found.exit_probability @ fold[list(found.exits)]
        whole[list(found.exits)] = fold[list(found.exits)]
        return self.chain.start @ whole

    @cached_property
    def groups(self) -> list[tuple[tuple[int, ...], int]]:
        """Closed groups other than exits that somebody can get to, with their period beyond the season's."""
        begun = self.begun
        return [
            (group, max(1, period // self.length(group[0])))
            for group, period in zip(self.structure.closed, self.structure.periods, strict=True)
            if begun[list(group)].any() and group[0] not in self.chain.exits
        ]

    @cached_property
    def exits_reached(self) -> bool:
        """Whether any exit can be taken."""
        return bool(self.begun[list(self.chain.exits)].any())

    @cached_property
    def verdict(self) -> str:
        """exits_only | unique_limit | unique_cycle | depends_on_start | no_limit | not_identified.

        Of the starts that cannot reach a row without data; not_identified when there are none.
        """
        if not self.begun.any():
            return "not_identified"
        if not self.groups:
            return "exits_only"
        if any(period > 1 for _, period in self.groups):
            return "no_limit"
        if len(self.groups) > 1 or self.exits_reached:
            return "depends_on_start"
        return "unique_cycle" if self.length(self.groups[0][0][0]) > 1 else "unique_limit"

    @cached_property
    def begun(self) -> Array:
        """(S,) what can be reached from a state that is not an exit, rows without data being out of reach."""
        inside = ~self.schedule.states.exit_mask
        laws = (self.chain.start[inside].sum(axis=0) + self.chain.join[inside].sum(axis=0)) > 0
        laws &= ~self.chain.clouded
        return self.structure.reachable[laws].any(axis=0)

    def length(self, state: int) -> int:
        """Length of the cycle that an unrolled state belongs to, 1 for a held sequence."""
        part = self.schedule.components[int(self.chain.component[state])]
        return len(part.matrices) if part.tail == "cycle" else 1

    def fold(self, values: Array) -> Array:
        """(S,) to (K,)."""
        out = np.zeros(len(self.schedule.states))
        np.add.at(out, self.chain.report, values)
        return out

    def clouded(self, law: Array) -> bool:
        """Whether this start can reach a row without data."""
        return bool(self.chain.undefined()[law > 0].any())
