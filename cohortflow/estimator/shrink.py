"""Shrinkage of rows that belong together (the same state in several groups) towards their pooled row.

Groups g = 1..G of one state, n_g departures, shares p_g, pooled p, q destinations. With noise f times the
multinomial one and true shares that scatter with relative variance t2,

    E Q = (q - 1) [ f (G - 1) + t2 (n - sum n_g^2 / n) ],     Q = sum_g n_g sum_j (p_gj - p_j)^2 / p_j

so t2 follows from Q (never below 0), and the row of a group becomes w p_g + (1 - w) p with
w = n_g / (n_g + f / t2): empirical Bayes, the amount estimated, not chosen. Groups without departures get the
pooled row. Draws of a shrunk row scatter w times as much as those of the row alone.

Source: DerSimonian & Laird (1986) Control. Clin. Trials 7, 177 (the moment estimator); Efron & Morris (1975)
JASA 70, 311.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from cohortflow.estimator.covariance import covariance, design_effects
from cohortflow.estimator.rows import RowCounts

Array = NDArray[np.float64]

LEAST_SHARE = 0.05
SURELY_EXPECTED = 10.0  # chance of none: exp(-10)


@dataclass(frozen=True, eq=False)
class Shrink:
    """Which rows belong together and how much of itself each keeps.

    state : (R,) which pool a row belongs to;  n : (R,) its departures;  w : (R,) share it keeps, 0 .. 1
    barred : (R, K) moves that the row cannot make though its pool can, or None
    """

    state: NDArray[np.int64]
    n: Array
    w: Array
    barred: NDArray[np.bool_] | None = None

    def apply(self, rates: Array, *, pools_of: Array | None = None) -> Array:
        """(..., R, K) shrunk rows of (..., R, K) rates; pools without any departure stay NaN.

        pools_of : rates that the pools are made of, when they are others than `rates`

        >>> shrink = Shrink(np.array([0, 0]), np.array([30.0, 10.0]), np.array([1.0, 0.5]))
        >>> shrink.apply(np.array([[0.8, 0.2], [0.4, 0.6]])).round(2).tolist()
        [[0.8, 0.2], [0.55, 0.45]]
        """
        pooled = self.pooled(rates if pools_of is None else pools_of)[..., self.state, :]
        own = np.where(np.isnan(rates), 0.0, rates)
        w = np.where(np.isnan(rates).any(axis=-1), 0.0, self.w)[..., None]
        mixed = w * own + (1 - w) * pooled
        if self.barred is None:
            return mixed
        mixed = np.where(self.barred & ~np.isnan(mixed), 0.0, mixed)
        return mixed / mixed.sum(axis=-1, keepdims=True)

    def pooled(self, rates: Array) -> Array:
        """(..., S, K) means of the rows of each pool, weighted by departures."""
        weight = np.eye(int(self.state.max()) + 1)[self.state].T * self.n
        total = weight.sum(axis=1, keepdims=True)
        weight = np.divide(weight, total, out=np.full_like(weight, np.nan), where=total > 0)
        return weight @ np.where(np.isnan(rates), 0.0, rates)

    @property
    def inflate(self) -> Array:
        """(R,) factor on the variance of the rows' own draws, so that w^2 times it is w."""
        return 1.0 / np.maximum(self.w, LEAST_SHARE)


def shrink_rows(
    counts: RowCounts, state: NDArray[np.int64], noise: Array, *, bar_missed: bool = False
) -> Shrink:
    """Shrink with the amount estimated for each pool.

    state : (R,) pool of each row, 0 .. S-1;  noise : (S,) variance relative to the multinomial one
    bar_missed : a move not seen from a row from which the pool's share let expect 10 or more stays out there
    """
    n = counts.effective
    w = np.zeros(len(state))
    for pool in np.unique(state):
        rows = np.flatnonzero((state == pool) & (n > 0))
        if len(rows):
            w[rows] = kept(counts.P[rows], n[rows], float(noise[pool]))
    shrink = Shrink(state, n, w)
    if not bar_missed:
        return shrink
    expected = np.nan_to_num(shrink.pooled(counts.P))[state] * n[:, None]
    return Shrink(state, n, w, (counts.N == 0) & (expected >= SURELY_EXPECTED * noise[state][:, None]))


def kept(p: Array, n: Array, noise: float) -> Array:
    """(G,) shares w that the groups of one pool keep.

    >>> kept(np.array([[0.5, 0.5], [0.5, 0.5]]), np.array([50.0, 50.0]), 1.0).tolist()
    [0.0, 0.0]
    """
    statistic, freedom, scale = scatter(p, n)
    if freedom <= 0:
        return np.ones(len(n)) if len(n) == 1 else np.zeros(len(n))
    variance = max(0.0, statistic / freedom - noise) * (len(n) - 1) / scale
    return np.zeros(len(n)) if variance == 0 else n / (n + noise / variance)


def scatter(p: Array, n: Array) -> tuple[float, int, float]:
    """Q of the groups' rows around their pooled row, its degrees of freedom, and n - sum n_g^2 / n."""
    pooled = n @ p / n.sum()
    seen = pooled > 0
    statistic = float((n[:, None] * (p - pooled)[:, seen] ** 2 / pooled[seen]).sum())
    return statistic, (len(n) - 1) * (int(seen.sum()) - 1), float(n.sum() - (n**2).sum() / n.sum())


def customer_noise(rates: RowCounts) -> Array:
    """(K,) mean design effect of each state's row under the customer form; 1 where it is not known."""
    if len(np.unique(rates.bucket)) < 2:
        return np.ones(rates.shape[0])
    effects = design_effects(rates, covariance(rates, "customer"))
    weights = np.where(rates.N > 0, 1 - np.nan_to_num(rates.P), 0.0)
    total = weights.sum(axis=1)
    mean = np.divide(
        (np.nan_to_num(effects) * weights).sum(axis=1), total, out=np.ones_like(total), where=total > 0
    )
    return np.maximum(mean, 1.0)
