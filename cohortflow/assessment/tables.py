"""Independence in a set of two-way tables: the one test that order, drift, tenure and seasons come down to.

    LR = 2 sum n log(n / e),   X2 = sum (n - e)^2 / e,   e = row total x column total / total, table by table
    df = sum over tables of (rows with a count - 1)(columns with a count - 1)

A table with one row or one column that has counts adds nothing; structural zeros leave empty columns and so
never count; single zeros inside margins that have counts do. Counting every cell of the full table instead
gives a test that practically never rejects.

For thin tables the reference is not the chi-square law but random tables with the same margins, in which the
rates, whatever they are, drop out. Drawn stratum by stratum (period by period) they also leave room for
whatever the strata do to the rates.

Sources: Anderson & Goodman (1957) Ann. Math. Statist. 28, 89; Kullback, Kupperman & Ku (1962) Technometrics
4, 573; Patefield (1981) Appl. Statist. 30, 91 (random tables).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray
from scipy.special import chdtrc, xlogy
from scipy.stats import random_table

from cohortflow.errors import CallError

Array = NDArray[np.float64]
Counts = NDArray[np.int64]
TIE = 1e-9  # statistics closer than this are the same number


@dataclass(frozen=True, eq=False)
class Independence:
    """Statistics of one set of tables.

    lr, x2 : the two statistics;  df : identified degrees of freedom;  full_df : if every cell counted
    p_lr, p_x2 : upper tails of the chi-square law (NaN without degrees of freedom)
    """

    lr: float
    x2: float
    df: int
    full_df: int

    @property
    def p_lr(self) -> float:
        return chi_square_tail(self.lr, self.df)

    @property
    def p_x2(self) -> float:
        return chi_square_tail(self.x2, self.df)


def independence(tables: Any) -> Independence:
    """Test rows against columns in each of G tables, (G, R, C) or (R, C) counts, added up.

    CallError when the counts are negative or not two-way.

    >>> found = independence([[[5, 0, 3], [6, 0, 1]], [[2, 4, 0], [0, 3, 0]], [[0, 0, 7], [0, 0, 0]]])
    >>> found.df, found.full_df, round(found.lr, 4)
    (2, 6, 2.9674)
    """
    counts = _as_tables(tables)
    expected = _expected(counts)
    seen = expected > 0
    x2 = ((counts - expected)[seen] ** 2 / expected[seen]).sum()
    full = len(counts) * (counts.shape[1] - 1) * (counts.shape[2] - 1)
    return Independence(float(likelihood_ratio(counts)), float(x2), identified_df(counts), full)


def against(counts: Any, probabilities: Any) -> Independence:
    """Test (K, K) counts against given rows of probabilities: LR = 2 sum N log(N / (n_i p0)).

    df = sum over rows with counts of (cells with p0 > 0, less 1). A count where p0 = 0 is an outright
    rejection: infinite statistics.

    >>> round(against([[50, 50]], [[0.4, 0.6]]).x2, 4)  # (50-40)^2/40 + (50-60)^2/60
    4.1667
    """
    n, p = np.asarray(counts, dtype=float), np.asarray(probabilities, dtype=float)
    if n.shape != p.shape or n.ndim != 2 or (n < 0).any() or not np.allclose(p.sum(axis=1), 1.0):
        raise CallError(
            "Counts and given probabilities must have one shape, each row of the latter adding up "
            f"to 1; got {n.shape} and {p.shape}."
        )
    total = n.sum(axis=1)
    df = int(((p > 0).sum(axis=1) - 1)[total > 0].sum())
    full = n.shape[0] * (n.shape[1] - 1)
    expected = total[:, None] * p
    if (n[p == 0] > 0).any():
        return Independence(np.inf, np.inf, df, full)
    seen = expected > 0
    lr = 2 * (xlogy(n, n) - xlogy(n, np.where(seen, expected, 1.0))).sum()
    return Independence(float(lr), float(((n - expected)[seen] ** 2 / expected[seen]).sum()), df, full)


def likelihood_ratio(counts: Any) -> Any:
    """LR of (..., G, R, C) counts, summed over the tables G; shape (...).

    >>> float(likelihood_ratio([[[10, 10], [20, 20]]]).round(9))
    0.0
    """
    n = np.asarray(counts, dtype=float)
    cells = xlogy(n, n).sum(axis=(-1, -2))
    rows = n.sum(axis=-1)
    columns = n.sum(axis=-2)
    total = rows.sum(axis=-1)
    inner = (
        cells - xlogy(rows, rows).sum(axis=-1) - xlogy(columns, columns).sum(axis=-1) + xlogy(total, total)
    )
    return 2 * np.maximum(inner, 0.0).sum(axis=-1)


def identified_df(counts: Any) -> int:
    """Degrees of freedom that (G, R, C) counts identify."""
    n = np.asarray(counts)
    rows = (n.sum(axis=-1) > 0).sum(axis=-1) - 1
    columns = (n.sum(axis=-2) > 0).sum(axis=-1) - 1
    return int((np.maximum(rows, 0) * np.maximum(columns, 0)).sum())


def chi_square_tail(statistic: float, df: int) -> float:
    """P(chi-square with df > statistic); NaN without degrees of freedom."""
    return float(chdtrc(df, statistic)) if df > 0 else float("nan")


def tail_share(observed: float, drawn: Array) -> float:
    """(1 + draws at least as large) / (1 + draws): the p-value of a Monte Carlo test.

    >>> tail_share(3.0, np.array([1.0, 2.0, 3.0, 4.0]))
    0.6
    """
    return float((1 + np.sum(drawn >= observed - TIE * max(1.0, abs(observed)))) / (1 + len(drawn)))


@dataclass(frozen=True, eq=False)
class Stratified:
    """Counts by table, stratum, row and column.

    table, stratum, row, column, n : (E,) integers, one entry a cell;  shape : (G, R, C)
    """

    table: Counts
    stratum: Counts
    row: Counts
    column: Counts
    n: Counts
    shape: tuple[int, int, int]

    def pooled(self) -> Counts:
        """(G, R, C) counts over all strata."""
        out = np.zeros(self.shape, dtype=np.int64)
        np.add.at(out, (self.table, self.row, self.column), self.n)
        return out

    def drawn(self, size: int, rng: np.random.Generator) -> Array:
        """(size,) LR of the pooled tables when rows and columns are independent within each stratum."""
        total = np.zeros((size, *self.shape), dtype=np.int64)
        _, block = np.unique(np.stack([self.table, self.stratum]), axis=1, return_inverse=True)
        order = np.argsort(block.reshape(-1), kind="stable")
        for entries in np.split(order, np.flatnonzero(np.diff(block.reshape(-1)[order])) + 1):
            cells = np.zeros(self.shape[1:], dtype=np.int64)
            np.add.at(cells, (self.row[entries], self.column[entries]), self.n[entries])
            total[:, self.table[entries[0]]] += _random_tables(cells, size, rng)
        return np.array([likelihood_ratio(t) for t in total])


def _random_tables(cells: Counts, size: int, rng: np.random.Generator) -> Counts:
    """(size or 1, R, C) random tables with the margins of `cells`."""
    rows, columns = cells.sum(axis=1), cells.sum(axis=0)
    if (rows > 0).sum() < 2 or (columns > 0).sum() < 2:
        return cells[None]
    out = np.zeros((size, *cells.shape), dtype=np.int64)
    kept = np.ix_(np.arange(size), np.flatnonzero(rows), np.flatnonzero(columns))
    out[kept] = random_table(rows[rows > 0], columns[columns > 0]).rvs(size, random_state=rng)
    return out


def _as_tables(tables: Any) -> Array:
    counts = np.asarray(tables, dtype=float)
    counts = counts[None] if counts.ndim == 2 else counts
    if counts.ndim != 3 or (counts < 0).any():
        raise CallError(
            f"Independence is tested in tables of counts, (rows, columns) or (tables, rows, columns), none "
            f"below 0; got shape {counts.shape}."
        )
    return counts


def _expected(counts: Array) -> Array:
    total = counts.sum(axis=(1, 2))[:, None, None]
    product = counts.sum(axis=2)[:, :, None] * counts.sum(axis=1)[:, None, :]
    return np.divide(product, total, out=np.zeros_like(counts), where=total > 0)
