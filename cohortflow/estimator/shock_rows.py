"""What the counts say about period-to-period variation: log-odds of one row's cells over time.

For the moves out of state i, with r the row's most frequent destination,

    y_jt = log-odds of j against r in period t = mu_j + l_j f_t + e_jt - e_rt + measurement error,
    l_j = 1{j is an exit} - 1{r is an exit}

f is shared by all rows, e belongs to the cell, mu_j is diffuse (one for each place in the season's cycle when
the model has seasons). The measurement (log_counts.py) has known variance, shared through r within a period.
`RowLog` whitens one row once for each autocorrelation, so that any size of e costs one weighted product.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray
from scipy.linalg import solve_triangular

from cohortflow.estimator.log_counts import log_measurement

Array = NDArray[np.float64]

LEAST_MEAN = 0.5  # cells whose expected count in a period is below this say nothing about that period
LEAST_TOTAL = 20.0  # cells with fewer moves in all are left out
FEWEST_PERIODS = 4


@dataclass(frozen=True, eq=False)
class RowLog:
    """The measurements of one row; n of them over T times.

    row : position of the state;  cells : (n,) destination;  time : (n,) 0 .. T-1;  reference : destination r
    y : (n,);  noise : (n, n) their measurement covariance;  X : (n, p) diffuse means;  Z : (n, T) loads of f
    """

    row: int
    cells: NDArray[np.int64]
    time: NDArray[np.int64]
    reference: int
    y: Array
    noise: Array
    X: Array
    Z: Array

    def signal(self, correlation: Array) -> Array:
        """(n, n) covariance of e_jt - e_rt at size 1, given the (T, T) correlation over time."""
        same = self.cells[:, None] == self.cells[None, :]
        return correlation[np.ix_(self.time, self.time)] * (1.0 + same)

    def loads(self, cell: int) -> Array:
        """(n,) how the measurements hold e of one destination."""
        if cell == self.reference:
            return -np.ones(len(self.y))
        return (self.cells == cell).astype(float)


@dataclass(frozen=True, eq=False)
class Whitened:
    """A RowLog in the axes in which noise is 1 and signal is d: every column of [X, Z, y] as B.

    axes : (n, n) from measurements to those axes
    """

    log: RowLog
    d: Array
    axes: Array
    B: Array

    @classmethod
    def of(cls, log: RowLog, correlation: Array) -> Whitened:
        root = np.linalg.cholesky(log.noise)
        half = solve_triangular(root, log.signal(correlation), lower=True)
        d, vectors = np.linalg.eigh(solve_triangular(root, half.T, lower=True))
        axes = solve_triangular(root, vectors, lower=True, trans="T").T
        columns = np.column_stack([log.X, log.Z, log.y])
        return cls(log, np.maximum(d, 0.0), axes, axes @ columns)

    def weights(self, size: float) -> Array:
        """(n,) precision of each axis when e has standard deviation `size`."""
        return 1.0 / (1.0 + size**2 * self.d)

    def profile(self, size: float) -> tuple[float, Array, Array]:
        """-2 log-likelihood apart from f, information (T, T) on f, its right side (T,); means integrated."""
        w, p = self.weights(size), self.log.X.shape[1]
        gram = self.B.T @ (w[:, None] * self.B)
        inner, cross = gram[:p, :p], gram[:p, p:]
        left = gram[p:, p:] - cross.T @ np.linalg.solve(inner, cross)
        score = -np.log(w).sum() + np.linalg.slogdet(inner)[1] + left[-1, -1]
        return float(score), left[:-1, :-1], left[:-1, -1]

    def precision(self, size: float) -> Array:
        """(n, n) inverse covariance of y with the diffuse means taken out."""
        w, p = self.weights(size), self.log.X.shape[1]
        scaled = w[:, None] * self.B[:, :p]
        core = np.diag(w) - scaled @ np.linalg.solve(self.B[:, :p].T @ scaled, scaled.T)
        return self.axes.T @ core @ self.axes


def row_logs(cube: Array, exits: NDArray[np.bool_], position: NDArray[np.int64]) -> list[RowLog]:
    """Measurements of every row that has some; cube (T, K, K) counts, position (T,) place in the cycle."""
    found = (_row_log(int(i), cube[:, i], exits, position) for i in np.flatnonzero(~exits))
    return [log for log in found if log is not None]


def _row_log(row: int, counts: Array, exits: NDArray[np.bool_], position: NDArray[np.int64]) -> RowLog | None:
    total = counts.sum(axis=0)
    cells = np.flatnonzero(total >= LEAST_TOTAL)
    if len(cells) < 2:
        return None
    reference = int(cells[total[cells].argmax()])
    others = cells[cells != reference]
    expected = counts.sum(axis=1)[:, None] * (total / total.sum())[None, :]
    usable = (expected[:, others] >= LEAST_MEAN) & (expected[:, [reference]] >= LEAST_MEAN)
    usable &= usable.sum(axis=0) >= max(FEWEST_PERIODS, 2 * len(np.unique(position)))
    time, where = np.nonzero(usable)
    if not len(time):
        return None
    cell = others[where]
    shift, variance = log_measurement(counts, np.maximum(expected, 1e-9))
    noise = np.diag(variance[time, cell])
    noise += np.where(time[:, None] == time[None, :], variance[time, reference][:, None], 0.0)
    means = where * (position.max() + 1) + position[time]
    X = (means[:, None] == np.unique(means)[None, :]).astype(float)
    Z = np.zeros((len(time), len(counts)))
    Z[np.arange(len(time)), time] = exits[cell].astype(float) - float(exits[reference])
    return RowLog(row, cell, time, reference, shift[time, cell] - shift[time, reference], noise, X, Z)
