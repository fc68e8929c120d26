"""Draws of estimated rates that stay probability rows and have the covariance that was asked for.

Each row is drawn as independent-looking gamma weights divided by their sum. With independent weights of shape
N_ij that is exactly the Dirichlet law of a multinomial row; here the weights get the shapes and the
correlations that the covariance V implies:

    relative covariance  R = V_ij,kl / (p_ij p_kl) + 1{i=k} c_i,     shape_ij = 1 / R_ij,ij

A common factor on a row cancels when the row is divided by its sum, so c_i is free; c_i = (row's design
effect) / n_i makes R diagonal for multinomial data. The weights are joined by a Gaussian copula with the
correlations of R, stretched by sqrt(df / chi-square) when V has few degrees of freedom. Gamma weights keep
the estimate as the mean at any count, which log-normal weights do not (one move seen: 1.65 times too high).

A cell without a count is not "never": the cells of a row that are allowed but were not seen share half a
count. That bounds the shift of a row by 1/2 / n while its upper limits are near those of the exact interval.
Structural zeros stay 0, rows without data stay NaN.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray
from scipy import special

from cohortflow.errors import CallError
from cohortflow.estimator.covariance import Covariance
from cohortflow.estimator.rows import RowCounts

Array = NDArray[np.float64]

UNSEEN = 0.5  # counts that the unseen cells of a row share
LARGE = 50.0  # shapes from which the Wilson-Hilferty form is exact enough (relative error below 1e-4)


def generator(rng: int | np.random.Generator) -> np.random.Generator:
    """A numpy Generator from a seed or a Generator; CallError for anything else (no hidden randomness)."""
    if isinstance(rng, np.random.Generator):
        return rng
    if isinstance(rng, bool) or not isinstance(rng, int | np.integer) or rng < 0:
        raise CallError(f"rng is a whole number from 0 on or a numpy Generator; got {rng!r}.")
    return np.random.default_rng(int(rng))


def draw_rows(counts: RowCounts, cov: Covariance, n: int, *, rng: int | np.random.Generator) -> Array:
    """(n, R, K) draws of the rates of `counts` under `cov`.

    >>> counts = RowCounts.of_matrix([[80, 20, 0], [10, 60, 0], [0, 0, 0]], [[1, 1, 0], [1, 1, 1], [1, 1, 1]])
    >>> from cohortflow.estimator.covariance import covariance
    >>> drawn = draw_rows(counts, covariance(counts, "multinomial"), 4000, rng=1)
    >>> drawn.mean(axis=0).round(2)[:2].tolist(), bool(np.isnan(drawn[:, 2]).all())
    ([[0.8, 0.2, 0.0], [0.14, 0.85, 0.01]], True)
    """
    if n < 1:
        raise CallError(f"The number of draws is at least 1; got {n}.")
    random, rows = generator(rng), counts.shape[0]
    seen = counts.N > 0
    cells = np.flatnonzero(seen.ravel())
    shape, factor = _shapes(counts, cov, cells)
    z = random.standard_normal((n, len(cells))) @ factor.T
    if np.isfinite(cov.df):
        z *= np.sqrt(cov.df / random.chisquare(cov.df, (n, 1)))
    weights = np.zeros((n, seen.size))
    weights[:, cells] = counts.P.ravel()[cells] * _gamma(z, shape)
    unseen = counts.allowed & ~seen & (counts.at_risk[:, None] > 0)
    if unseen.any():
        row, _ = np.nonzero(unseen)
        each = UNSEEN / unseen.sum(axis=1)[row]
        size = _effective(counts, cov)[row]
        weights[:, unseen.ravel()] = random.gamma(each, size=(n, len(each))) / size
    drawn = weights.reshape(n, rows, -1)
    drawn[:, counts.at_risk <= 0] = np.nan
    total = drawn.sum(axis=2, keepdims=True)  # 0 where weights of a next to empty row all vanish
    return np.where(total == 0, counts.P, drawn / np.where(total == 0, 1.0, total))


def _shapes(counts: RowCounts, cov: Covariance, cells: NDArray[np.int64]) -> tuple[Array, Array]:
    """Gamma shape of each seen cell, and a factor L with L L' = their correlation."""
    p = counts.P.ravel()[cells]
    row = cells // counts.shape[1]
    free = 1.0 / _effective(counts, cov)
    relative = cov.matrix[np.ix_(cells, cells)] / np.outer(p, p)
    relative = relative + (row[:, None] == row[None, :]) * free[row][:, None]
    scale = np.sqrt(np.diag(relative))
    values, vectors = np.linalg.eigh(relative / np.outer(scale, scale))
    return 1.0 / scale**2, vectors * np.sqrt(np.maximum(values, 0.0))


def _effective(counts: RowCounts, cov: Covariance) -> Array:
    """(R,) effective departures: Kish's number divided by the row's design effect under `cov`."""
    p = np.nan_to_num(counts.P)
    spread = np.divide(cov.variance, p, out=np.zeros_like(p), where=p > 0).sum(axis=1)
    plain = (1 - p)[...] * (p > 0)
    bottom = np.divide(plain.sum(axis=1), counts.effective, out=np.ones(len(p)), where=counts.effective > 0)
    effect = np.divide(spread, bottom, out=np.ones_like(spread), where=(bottom > 0) & (spread > 0))
    return np.where(counts.effective > 0, counts.effective / np.maximum(effect, 1e-9), 1.0)


def _gamma(z: Array, shape: Array) -> Array:
    """Gamma quantiles of mean 1 at the normal scores z; Wilson-Hilferty for large shapes."""
    out = np.empty_like(z)
    large = shape > LARGE
    a = shape[large]
    out[:, large] = np.maximum(1 - 1 / (9 * a) + z[:, large] / (3 * np.sqrt(a)), 0.0) ** 3
    a = shape[~large]
    if a.size:
        out[:, ~large] = special.gammaincinv(a, np.clip(special.ndtr(z[:, ~large]), 1e-300, 1 - 1e-16)) / a
    return out
