"""The estimation error of latent types: observed information, and draws that keep rows and zeros.

With a_uf the derivative of log L_ug with respect to log-weights of type g's rows, N_uij - p_gij N_ui. , the
score
of customer u is z_ug a_uf, and 1{h=h_u} (z_ug - w_hg) for memberships. Summed outer products of the scores
estimate the information; its inverse is the covariance of the log-weights, and the delta method gives that of
every row of rates, of the memberships of joiners, and of the mix of types among those there now, whose
memberships move with the rates. All rows are then drawn together by draws.py.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Draws, Schedule
from cohortflow.estimator.covariance import Covariance
from cohortflow.estimator.draws import draw_rows
from cohortflow.estimator.em import Types, membership
from cohortflow.estimator.patterns import Patterns
from cohortflow.estimator.rows import RowCounts

Array = NDArray[np.float64]


NEGLIGIBLE = 1e-9  # rates below this take no part: a type that never makes a move has no error in it


@dataclass(frozen=True, eq=False)
class TypeSampler:
    """Draws of a mixture's matrices, start and join laws.

    prior : the prior's moves a cell, which the information holds too (0: none)
    """

    patterns: Patterns
    types: Types
    prior: float

    def draws(self, schedule: Schedule, n: int, *, rng: int | np.random.Generator, covariance: str) -> Draws:
        """`covariance` is not asked: types are what makes customers differ, the information allows for it."""
        size, count = self.patterns.size, self.types.count
        counts, cov = self._table
        drawn = draw_rows(counts, cov, n, rng=rng)
        rates = drawn[:, : count * size, :size].reshape(n, count, size, size)
        now = drawn[:, count * size : (count + 1) * size, :count]
        share = drawn[:, (count + 1) * size :, :count]
        matrices, start, join = [], [], []
        for g, component in enumerate(schedule.components):
            fixed = component.matrices[0]
            free = ~np.isnan(rates[0, g]).any(axis=1) & ~np.isnan(fixed).any(axis=1)
            matrices.append(np.where(free[:, None], rates[:, g], fixed)[:, None])
            start.append(_diagonal(now[:, :, g], component.start))
            join.append(_diagonal(share[:, :, g], component.join))
        return Draws(schedule, tuple(matrices), tuple(start), tuple(join))

    @cached_property
    def _table(self) -> tuple[RowCounts, Covariance]:
        """Rows: G K of rates, K of types now, K of types joining; as counts with their joint covariance."""
        parts = _Parts(self.patterns, self.types, self.prior)
        table = parts.counts()
        return RowCounts.of_matrix(table, table > 0), parts.covariance(table)


class _Parts:
    """The scores of a mixture and what follows from them."""

    def __init__(self, patterns: Patterns, types: Types, prior: float) -> None:
        self.patterns, self.types, self.prior = patterns, types, prior
        self.size, self.count = patterns.size, types.count
        self.z, _ = membership(patterns, types)
        origin = np.eye(self.size)[patterns.cells[:, 0]]
        self.visits = patterns.moves @ origin @ origin.T  # (U, F) moves from the cell's own origin
        self.p = types.P[:, patterns.cells[:, 0], patterns.cells[:, 1]]
        self.width = max(self.size, self.count)

    def counts(self) -> Array:
        """(R, W) expected numbers behind each row: moves of a type, customers by type now and joining."""
        cells, weight = self.patterns.cells, self.z * self.patterns.n[:, None]
        rates = np.zeros((self.count, self.size, self.width))
        rates[:, cells[:, 0], cells[:, 1]] = weight.T @ self.patterns.moves
        held = rates.sum(axis=2, keepdims=True) + self.prior * (self.types.P > 0).sum(axis=2, keepdims=True)
        rates[:, :, : self.size] = np.where(self.types.P > NEGLIGIBLE, self.types.P * held, 0.0)
        if self.types.fixed >= 0:
            rates[self.types.fixed] = 0.0
        weight = np.where(self.z > NEGLIGIBLE, weight, 0.0)
        now, share = (np.zeros((self.size, self.width)) for _ in range(2))
        here = self.patterns.now >= 0
        np.add.at(now[:, : self.count], self.patterns.now[here], weight[here])
        joined = self.patterns.group < self.size
        np.add.at(share[:, : self.count], self.patterns.group[joined], weight[joined])
        return np.vstack([rates.reshape(-1, self.width), now, share])

    def covariance(self, table: Array) -> Covariance:
        score, slope = self._score(), self._slopes(table)
        information = (score * self.patterns.n[:, None]).T @ score + np.diag(self._prior_information())
        values, vectors = np.linalg.eigh(information)
        kept = values > 1e-9 * max(values[-1], 1e-300)
        root = slope @ (vectors[:, kept] / np.sqrt(values[kept]))
        names = tuple(str(i) for i in range(len(table)))
        columns = tuple(str(i) for i in range(self.width))
        return Covariance(root @ root.T, np.inf, "information", {}, names, columns)

    def _free(self) -> list[int]:
        return [g for g in range(self.count) if g != self.types.fixed]

    def _score(self) -> Array:
        """(U, d) score of each pattern: cells of the free types, then memberships by group."""
        parts = [self.z[:, [g]] * (self.patterns.moves - self.visits * self.p[g]) for g in self._free()]
        gap = self.z - self.types.share[self.patterns.group]
        member = np.zeros((len(gap), len(self.types.share), self.count))
        member[np.arange(len(gap)), self.patterns.group] = gap
        return np.hstack([*parts, member.reshape(len(gap), -1)])

    def _prior_information(self) -> Array:
        """The prior's curvature on the log-weights, and a trace of one on the memberships."""
        cells = np.tile(self.prior * np.ones(len(self.patterns.cells)), len(self._free()))
        return np.append(cells, np.full(self.types.share.size, 1e-6))

    def _slopes(self, table: Array) -> Array:
        """(R*W, d) derivative of every row of the table, as shares, with respect to the log-weights."""
        d = len(self._free()) * len(self.patterns.cells) + self.types.share.size
        out = np.zeros((*table.shape, d))
        for at, g in enumerate(self._free()):
            self._rate_slopes(out, g, at * len(self.patterns.cells))
        self._now_slopes(out)
        start = d - self.types.share.size
        for h in range(self.size):
            w = self.types.share[h]
            row = (self.count + 1) * self.size + h
            columns = slice(start + h * self.count, start + (h + 1) * self.count)
            out[row, : self.count, columns] = np.diag(w) - np.outer(w, w)
        return out.reshape(-1, d)

    def _rate_slopes(self, out: Array, g: int, offset: int) -> None:
        cells = self.patterns.cells
        for i in np.unique(cells[:, 0]):
            own = np.flatnonzero(cells[:, 0] == i)
            p = self.types.P[g, i, cells[own, 1]]
            jacobian = np.diag(p) - np.outer(p, p)
            out[g * self.size + i, cells[own, 1][:, None], offset + own[None, :]] = jacobian

    def _now_slopes(self, out: Array) -> None:
        """Mix of types among those in state k: mean over them of z_ug (score of g - mean score)."""
        total = [self.z[:, [g]] * (self.patterns.moves - self.visits * self.p[g]) for g in self._free()]
        start = len(self._free()) * len(self.patterns.cells)
        for k in range(self.size):
            rows = np.flatnonzero(self.patterns.now == k)
            if not len(rows):
                continue
            weight = np.asarray(self.patterns.n[rows] / self.patterns.n[rows].sum(), dtype=float)
            target = out[self.count * self.size + k]
            for at, other in enumerate(self._free()):
                columns = slice(at * len(self.patterns.cells), (at + 1) * len(self.patterns.cells))
                for g in range(self.count):
                    own = weight * (float(g == other) - self.z[rows, g])
                    target[g, columns] = own @ total[at][rows]
            self._member_slopes(target, rows, weight, start)

    def _member_slopes(self, target: Array, rows: NDArray[np.int64], weight: Array, start: int) -> None:
        z, group = self.z[rows], self.patterns.group[rows]
        for h in np.unique(group):
            own = group == h
            spread = np.diag(weight[own] @ z[own]) - (z[own] * weight[own, None]).T @ z[own]
            columns = slice(start + h * self.count, start + (h + 1) * self.count)
            target[: self.count, columns] += spread


def _diagonal(shares: Array, law: Array) -> Array:
    """(n, K, K) start laws from shares by state; states without a count keep the schedule's law."""
    shares = np.where(np.isnan(shares), np.diag(law)[None], shares)
    return shares[:, :, None] * np.eye(len(law))
