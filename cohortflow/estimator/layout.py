"""From rows of rates to a Schedule: which rates stand where in the matrices of a model.

Every model that estimates shares row by row is a RowCounts and some Parts. A Part says how the (R, K) rates
are laid into its matrices over m expanded states, so that one function serves the estimate and its draws.
"""

from __future__ import annotations

from collections.abc import Callable, Mapping
from dataclasses import dataclass, field, replace
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Component, Draws, Schedule
from cohortflow.estimator.covariance import covariance as covariance_of
from cohortflow.estimator.draws import draw_rows, generator
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.shrink import Shrink
from cohortflow.states import States
from cohortflow.tally import Tally

Array = NDArray[np.float64]


class Sampler(Protocol):
    """Draws a schedule's matrices from the law of their estimation error."""

    def draws(
        self, schedule: Schedule, n: int, *, rng: int | np.random.Generator, covariance: str
    ) -> Draws: ...


@dataclass(frozen=True, eq=False)
class Part:
    """One component of a model built from rows of rates.

    matrices : (..., R, K) rates, shrunk if they are to be, to (..., L, m, m) matrices
    report, start, join, tail, name : as in Component
    """

    matrices: Callable[[Array], Array]
    report: NDArray[np.int64]
    start: Array
    join: Array
    tail: str = "hold"
    name: str = "all"


@dataclass(frozen=True, eq=False)
class RowSampler:
    """Draws of models whose parts are laid out from one set of rows.

    shrink : how rows are drawn towards their pools before the parts lay them out, or None. The pools come
        from the rows' plain draws, a row's own share from the same draws stretched (see Shrink.inflate).
    """

    counts: RowCounts
    parts: tuple[Part, ...]
    shrink: Shrink | None = None

    def draws(self, schedule: Schedule, n: int, *, rng: int | np.random.Generator, covariance: str) -> Draws:
        cov = covariance_of(self.counts, covariance)
        seed = int(generator(rng).integers(2**62))
        rows = draw_rows(self.counts, cov, n, rng=seed)
        if self.shrink is not None:
            root = np.repeat(np.sqrt(self.shrink.inflate), self.counts.shape[1])
            wide = replace(cov, matrix=cov.matrix * np.outer(root, root))
            rows = self.shrink.apply(draw_rows(self.counts, wide, n, rng=seed), pools_of=rows)
        return Draws.of_matrices(schedule, [part.matrices(rows) for part in self.parts])


@dataclass(frozen=True, eq=False)
class Built:
    """What a model's builder hands back to `fit`.

    season : (C, K) share of its own rates that a state keeps at each place of the cycle; None without seasons
    """

    schedule: Schedule
    sampler: Sampler
    notes: tuple[str, ...] = ()
    settings: Mapping[str, Any] = field(default_factory=dict)
    season: Array | None = None


def lay_out(rates: Array, row: NDArray[np.int64], successor: NDArray[np.int64]) -> Array:
    """(..., m, m) matrix of expanded states from (..., R, K) rates.

    row : (m,) which row of rates an expanded state uses
    successor : (m, K) expanded state reached by a move to declared state k; -1 where no such move exists.
        Different k lead to different expanded states.

    >>> rates = np.array([[0.7, 0.3], [0.0, 1.0]])
    >>> lay_out(rates, np.array([0, 0, 1]), np.array([[1, 2], [1, 2], [-1, 2]])).tolist()
    [[0.0, 0.7, 0.3], [0.0, 0.7, 0.3], [0.0, 0.0, 1.0]]
    """
    m = len(row)
    out = np.zeros((*rates.shape[:-2], m, m))
    state, column = np.nonzero(successor >= 0)
    out[..., state, successor[state, column]] = rates[..., row[state], column]
    return out


def with_exits(rates: Array, exits: NDArray[np.bool_]) -> Array:
    """(..., K, K) rates with unit rows at the exits."""
    return np.where(exits[:, None], np.eye(len(exits)), rates)


def build(
    tally: Tally,
    counts: RowCounts,
    parts: tuple[Part, ...],
    *,
    rates: RowCounts,
    shrink: Shrink | None = None,
    notes: tuple[str, ...] = (),
    settings: Mapping[str, Any] | None = None,
    season: Array | None = None,
) -> Built:
    """Schedule and sampler of a model whose parts are laid out from `counts`; `rates` are the pooled ones."""
    shares = counts.P if shrink is None else shrink.apply(counts.P)
    components = tuple(
        Component(p.matrices(shares), p.report, p.start, p.join, p.tail, p.name) for p in parts
    )
    unknown = unknown_states(rates, tally.states)
    schedule = Schedule(tally.states, components, tally.calendar, first=tally.meta.last, unknown=unknown)
    return Built(schedule, RowSampler(counts, parts, shrink), notes, settings or {}, season)


def unknown_states(rates: RowCounts, states: States) -> tuple[str, ...]:
    """States other than exits from which no departure was counted."""
    return tuple(
        n for n, r in zip(states.names, rates.at_risk, strict=True) if r == 0 and n in states.remaining
    )
