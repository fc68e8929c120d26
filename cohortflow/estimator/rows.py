"""RowCounts: what rates are estimated from, for any model.

A model says which row each move belongs to (the state moved from; or state and tenure; or state and calendar
position ...) and where it went. One entry is one (row, column, bucket, period) with its number of moves and
the weight of each.  Rates, covariances, draws and shocks all read this one form.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cached_property

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.record import frozen_array

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False, repr=False)
class RowCounts:
    """Weighted counts of moves by row, column, bucket of customers and period.

    allowed : (R, K) bool, cells that are not structural zeros
    row, column, bucket, period : (E,) integers, one entry a distinct key
    n : (E,) numbers of moves;  weight : (E,) weight of each of them (1, or halving with age)
    case : (E,) mean case weight of the moves of the entry (1 without case weights)

    >>> counts = RowCounts.of_matrix([[8, 2, 0], [1, 5, 0], [0, 0, 0]])
    >>> counts.P.round(3).tolist()
    [[0.8, 0.2, 0.0], [0.167, 0.833, 0.0], [nan, nan, nan]]
    """

    allowed: NDArray[np.bool_]
    row: NDArray[np.int64]
    column: NDArray[np.int64]
    bucket: NDArray[np.int64]
    period: NDArray[np.int64]
    n: Array
    weight: Array
    case: Array

    def __post_init__(self) -> None:
        for name in ("row", "column", "bucket", "period"):
            object.__setattr__(self, name, frozen_array(getattr(self, name), np.int64))
        for name in ("n", "weight", "case"):
            object.__setattr__(self, name, frozen_array(getattr(self, name)))
        object.__setattr__(self, "allowed", frozen_array(self.allowed, bool))

    @classmethod
    def of_matrix(cls, counts: object, allowed: object = None) -> RowCounts:
        """One bucket, one period: a plain matrix of counts (R, K)."""
        matrix = np.asarray(counts, dtype=float)
        row, column = np.nonzero(matrix)
        one, zero = np.ones(len(row)), np.zeros(len(row), dtype=np.int64)
        cells = np.ones(matrix.shape, bool) if allowed is None else np.asarray(allowed)
        return cls(cells, row, column, zero, zero, matrix[row, column], one, one)

    @classmethod
    def of_table(
        cls, table: pd.DataFrame, allowed: NDArray[np.bool_], weight: Array, case: Array | None = None
    ) -> RowCounts:
        """From a table with columns row, column, bucket, period, n (any order, keys may repeat)."""
        work = pd.DataFrame(
            {name: table[name].to_numpy() for name in ("row", "column", "bucket", "period")}
        ).assign(n=table["n"].to_numpy(float), weight=weight)
        work["cases"] = work["n"] * (1.0 if case is None else case)
        sums = work.groupby(["row", "column", "bucket", "period", "weight"], as_index=False).sum()
        parts = {name: sums[name].to_numpy() for name in ("row", "column", "bucket", "period", "n", "weight")}
        return cls(allowed, **parts, case=(sums["cases"] / sums["n"]).to_numpy())

    @property
    def shape(self) -> tuple[int, int]:
        """R rows, K columns."""
        rows, columns = self.allowed.shape
        return rows, columns

    @cached_property
    def N(self) -> Array:
        """(R, K) weighted counts."""
        return self.sums(self.n * self.weight * self.case)

    @cached_property
    def at_risk(self) -> Array:
        """(R,) weighted departures seen from each row."""
        return self.N.sum(axis=1)

    @cached_property
    def effective(self) -> Array:
        """(R,) effective number of departures: (sum of weights)^2 / sum of squared weights (Kish)."""
        weights = self.weight * self.case
        total = np.bincount(self.row, self.n * weights, minlength=self.shape[0])
        squares = np.bincount(self.row, self.n * weights**2, minlength=self.shape[0])
        return np.divide(total**2, squares, out=np.zeros_like(total), where=squares > 0)

    @cached_property
    def P(self) -> Array:
        """(R, K) shares of each row; NaN where nothing departed."""
        total = self.at_risk[:, None]
        return np.divide(self.N, total, out=np.full(self.shape, np.nan), where=total > 0)

    def sums(self, values: Array) -> Array:
        """(R, K) sums of `values` (one an entry) by cell."""
        rows, columns = self.shape
        flat = np.bincount(self.row * columns + self.column, values, minlength=rows * columns)
        return flat.reshape(rows, columns).astype(float)

    def by_period(self, *, weighted: bool = False) -> tuple[NDArray[np.int64], Array]:
        """(T,) periods and (T, R, K) counts; unweighted unless asked."""
        rows, columns = self.shape
        periods, where = np.unique(self.period, return_inverse=True)
        values = self.n * self.weight * self.case if weighted else self.n
        cube = np.zeros((len(periods), rows * columns))
        np.add.at(cube, (where, self.row * columns + self.column), values)
        return periods, cube.reshape(len(periods), rows, columns)

    def groups(self, by: str) -> NDArray[np.int64]:
        """(E,) group number 0 .. G-1 of each entry, by "bucket", "period" or "bucket x period"."""
        if by == "bucket":
            return np.unique(self.bucket, return_inverse=True)[1].reshape(-1)
        if by == "period":
            return np.unique(self.period, return_inverse=True)[1].reshape(-1)
        width = int(self.period.max(initial=0)) - int(self.period.min(initial=0)) + 1
        key = self.groups("bucket") * width + (self.period - self.period.min(initial=0))
        return np.unique(key, return_inverse=True)[1].reshape(-1)
