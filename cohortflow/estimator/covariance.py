"""Covariance of estimated rates: multinomial, robust to customers who differ, robust to months that differ.

With N_gij moves i -> j of group g, p_ij = N_ij / n_i and the score s_gij = N_gij - p_ij N_gi. ,

    multinomial   Cov(p_ij, p_kl) = 1{i=k} (p_ij 1{j=l} - p_ij p_il) / n_i
    customer      Cov(p_ij, p_kl) = G/(G-1) sum_g s_gij s_gkl / (n_i n_k),  groups = buckets of customers
    two_way       V_bucket + V_period - V_(bucket x period), negative eigenvalues set to 0

The customer form equals ordinary least squares of destination indicators on origin dummies with clustered
errors. Buckets are a hash of the customer's id: whole customers stay together, so the form is right for any
number of buckets; with G of them the quantile is Student's with G - 1 degrees of freedom. In the two-way
form a month shared by everybody is a draw too: T - 1 degrees of freedom.

V_period is corrected row by row for the few periods that carry a row: residuals around a mean with weights
w_t = n_ti / n_i shrink sum w_t^2 s_t^2 by 1 - 2 sum w^3 / sum w^2 + sum w^2 (T/(T-1) when all are equal). A
row seen in one period only has no period error; it keeps the customer form and is named in `notes`.

Sources: Liang & Zeger (1986) Biometrika 73, 13; Cameron, Gelbach & Miller (2011) J. Bus. Econ. Stat. 29, 238.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from numpy.typing import NDArray
from scipy import sparse, special

from cohortflow.errors import CallError, NotIdentified, listed, nearest
from cohortflow.estimator.rows import RowCounts
from cohortflow.record import Record, frozen_array

Array = NDArray[np.float64]

KINDS = ("multinomial", "customer", "two_way")
LEAST_DESIGN_EFFECT = 0.25
LEAST_PERIODS = 1.5
NEARLY_ONE = 1 - 1e-15


@dataclass(frozen=True, repr=False, eq=False)
class Covariance(Record):
    """Covariance of the rates of one fit.

    matrix : (R*K, R*K), indexed by row * K + column; NaN for rows without data
    df : degrees of freedom for Student's t (infinite for the multinomial form)
    covariance_kind : "multinomial", "customer" or "two_way";  groups : what was counted, by name
    row_names, column_names : labels;  notes : codes, for instance "one_period_only:fresh"
    """

    matrix: Array
    df: float
    covariance_kind: str
    groups: Mapping[str, int]
    row_names: tuple[str, ...]
    column_names: tuple[str, ...]
    notes: tuple[str, ...] = ()
    kind: ClassVar[str] = "covariance"

    def __post_init__(self) -> None:
        object.__setattr__(self, "matrix", frozen_array(self.matrix))

    @property
    def variance(self) -> Array:
        """(R, K) variance of each rate."""
        return np.diag(self.matrix).reshape(len(self.row_names), len(self.column_names))

    @property
    def std_error(self) -> Array:
        """(R, K) standard errors."""
        return np.sqrt(np.maximum(self.variance, 0.0))

    def level_for(self, level: float) -> float:
        """The level at which a normal quantile equals Student's quantile for `level` and `df`.

        >>> flat = Covariance(np.zeros((1, 1)), 11, "two_way", {}, ("a",), ("a",))
        >>> round(flat.level_for(0.95), 4)
        0.9723
        """
        if np.isinf(self.df):
            return level
        quantile = special.stdtrit(self.df, (1 + level) / 2)
        return min(float(2 * special.ndtr(quantile) - 1), NEARLY_ONE)

    def to_frame(self) -> pd.DataFrame:
        """from, to, from_2, to_2, covariance: one row a pair of cells."""
        cells = [(a, b) for a in self.row_names for b in self.column_names]
        size = len(cells)
        first, second = np.repeat(np.arange(size), size), np.tile(np.arange(size), size)
        names = np.array(cells, dtype=object).reshape(size, 2)
        columns = {"from": names[first, 0], "to": names[first, 1]}
        columns |= {"from_2": names[second, 0], "to_2": names[second, 1]}
        return pd.DataFrame({**columns, "covariance": self.matrix.ravel()})

    def headline(self) -> str:
        groups = ", ".join(f"{v:,} {k}" for k, v in self.groups.items())
        size = f"{len(self.row_names)} x {len(self.column_names)} rates"
        return f"{self.covariance_kind} covariance of {size}" + (f" from {groups}" if groups else "")

    def about(self) -> Mapping[str, Any]:
        return {"kind": self.covariance_kind, "df": self.df, **self.groups, "notes": list(self.notes)}


def covariance(
    counts: RowCounts,
    kind: str = "customer",
    *,
    row_names: tuple[str, ...] | None = None,
    column_names: tuple[str, ...] | None = None,
) -> Covariance:
    """Covariance of the rates of `counts`; kind "multinomial", "customer" or "two_way".

    CallError for an unknown kind; NotIdentified when there are not two groups to compare.

    >>> counts = RowCounts.of_matrix([[8, 2, 0], [1, 5, 0], [0, 0, 4]])
    >>> covariance(counts, "multinomial").variance.round(3).tolist()[0]  # .8 x .2 / 10
    [0.016, 0.016, 0.0]
    """
    if kind not in KINDS:
        raise CallError(f'Unknown covariance "{kind}"{nearest(kind, KINDS)}. Allowed: {listed(KINDS)}.')
    rows = row_names or tuple(str(i) for i in range(counts.shape[0]))
    columns = column_names or tuple(str(i) for i in range(counts.shape[1]))
    build = {"multinomial": _multinomial, "customer": _customer, "two_way": _two_way}[kind]
    matrix, df, groups, weak = build(counts)
    unknown = np.repeat(counts.at_risk <= 0, counts.shape[1])
    matrix = np.where(unknown[:, None] | unknown[None, :], np.nan, matrix)
    notes = tuple(f"one_period_only:{rows[i]}" for i in weak)
    return Covariance(matrix, df, kind, groups, rows, columns, notes)


def design_effects(counts: RowCounts, robust: Covariance, *, floor: float = LEAST_DESIGN_EFFECT) -> Array:
    """(R, K) robust variance over multinomial variance; cells without a count get their row's.

    The row's own is (sum_j V_robust/p) / (sum_j V_multinomial/p). Never below `floor`; NaN without data.
    """
    plain = np.diag(_multinomial(counts)[0]).reshape(counts.shape)
    p = np.where(counts.N > 0, counts.P, 1.0)
    seen = (counts.N > 0) & (plain > 0)
    top = np.where(seen, robust.variance / p, 0.0).sum(axis=1)
    bottom = np.where(seen, plain / p, 0.0).sum(axis=1)
    row = np.divide(top, bottom, out=np.ones_like(top), where=bottom > 0)
    cell = np.divide(robust.variance, plain, out=np.tile(row[:, None], (1, counts.shape[1])), where=seen)
    return np.where(counts.at_risk[:, None] > 0, np.maximum(cell, floor), np.nan)


def group_scores(counts: RowCounts, by: str) -> sparse.csr_matrix:
    """(G, R*K) sparse scores s_g = N_g - p N_g. , one line a group of `by`."""
    rows, columns = counts.shape
    group = counts.groups(by)
    size = int(group.max(initial=-1)) + 1
    weight = counts.n * counts.weight * counts.case
    cell = counts.row * columns + counts.column
    moved = sparse.csr_matrix((weight, (group, cell)), shape=(size, rows * columns))
    left = sparse.csr_matrix((weight, (group, counts.row)), shape=(size, rows))
    p = np.nan_to_num(counts.P)
    i, j = np.nonzero(p)
    spread = sparse.csr_matrix((p[i, j], (i, i * columns + j)), shape=(rows, rows * columns))
    return (moved - left @ spread).tocsr()


# ---- the three forms: matrix, df, groups, rows without a period error ----
Form = tuple[Array, float, dict[str, int], list[int]]


def _multinomial(counts: RowCounts) -> Form:
    rows, columns = counts.shape
    out = np.zeros((rows, columns, rows, columns))
    for i in np.flatnonzero(counts.at_risk > 0):
        p = counts.P[i]
        out[i, :, i, :] = (np.diag(p) - np.outer(p, p)) / counts.effective[i]
    return out.reshape(rows * columns, rows * columns), np.inf, {}, []


def _customer(counts: RowCounts) -> Form:
    matrix, groups = _one_way(counts, "bucket")
    return matrix, groups - 1.0, {"buckets": groups}, []


def _two_way(counts: RowCounts) -> Form:
    by_customer, buckets = _one_way(counts, "bucket")
    by_both, _ = _one_way(counts, "bucket x period")
    by_period, periods = _raw(counts, "period")
    factor = _period_factor(counts)
    weak = np.flatnonzero(np.isnan(factor) & (counts.at_risk > 0))
    spread = np.repeat(np.sqrt(np.nan_to_num(factor)), counts.shape[1])
    extra = by_period * np.outer(spread, spread) - by_both
    silent = np.repeat(np.isnan(factor), counts.shape[1])
    extra[silent] = 0.0
    extra[:, silent] = 0.0
    groups = {"buckets": buckets, "periods": periods}
    return clipped(by_customer + extra), min(buckets, periods) - 1.0, groups, weak.tolist()


def _raw(counts: RowCounts, by: str) -> tuple[Array, int]:
    score = group_scores(counts, by)
    if score.shape[0] < 2:
        what = {"period": "period", "bucket": "bucket of customers"}.get(by, "group")
        raise NotIdentified(
            f"A covariance by {what} compares groups, and these counts have {score.shape[0]}. Use "
            '"multinomial", or count from the customers\' rows over two periods or more.'
        )
    total = np.repeat(np.where(counts.at_risk > 0, counts.at_risk, 1.0), counts.shape[1])
    return (score.T @ score).toarray() / np.outer(total, total), score.shape[0]


def _one_way(counts: RowCounts, by: str) -> tuple[Array, int]:
    matrix, groups = _raw(counts, by)
    return matrix * (groups / (groups - 1)), groups


def _period_factor(counts: RowCounts) -> Array:
    """(R,) correction of V_period for few and unequal periods; NaN for rows seen in too few."""
    _, cube = counts.by_period(weighted=True)
    total = np.where(counts.at_risk > 0, counts.at_risk, 1.0)
    w = cube.sum(axis=2) / total
    two, three = (w**2).sum(axis=0), (w**3).sum(axis=0)
    kept = 1 - 2 * np.divide(three, two, out=np.ones_like(two), where=two > 0) + two
    enough = np.divide(1.0, two, out=np.zeros_like(two), where=two > 0) >= LEAST_PERIODS
    return np.divide(1.0, kept, out=np.full_like(kept, np.nan), where=enough)


def clipped(matrix: Array) -> Array:
    """The nearest positive semidefinite matrix: negative eigenvalues set to 0."""
    values, vectors = np.linalg.eigh((matrix + matrix.T) / 2)
    if values[0] >= 0:
        return (matrix + matrix.T) / 2
    return (vectors * np.maximum(values, 0.0)) @ vectors.T
