"""Confidence intervals for probabilities: for each cell by itself, or for a whole row at once.

Every function takes arrays and returns (low, high) arrays inside [0, 1]. Counts may be fractions, so that an
effective number (weights, design effects) can be used as such. Nothing at risk gives [0, 1]: nothing is
known.

Per cell, x of n with p = x / n and z the normal quantile (1 + level) / 2:
wilson, wilson_cc, clopper_pearson, jeffreys, agresti_coull, mid_p. Four 95 % cells of one row hold all
together only about 84 % of the time, so say "per cell".
Per row, K allowed cells at once: goodman, quesenberry_hurst.

Sources: Wilson (1927) JASA 22, 209; Clopper & Pearson (1934) Biometrika 26, 404; Agresti & Coull (1998) Amer.
Statist. 52, 119; Newcombe (1998) Stat. Med. 17, 857; Brown, Cai & DasGupta (2001) Statist. Sci. 16, 101;
Quesenberry & Hurst (1964) Technometrics 6, 191; Goodman (1965) Technometrics 7, 247.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy import special, stats

from cohortflow.errors import CallError, listed, nearest

Array = NDArray[np.float64]
Limits = tuple[Array, Array]

SMALLEST_EXPECTED = 5.0
BISECTIONS = 60


def wilson(x: ArrayLike, n: ArrayLike, *, level: float = 0.95) -> Limits:
    """Score interval: (p + z^2/2n -+ z sqrt(p(1-p)/n + z^2/4n^2)) / (1 + z^2/n).

    >>> low, high = wilson([81, 0, 3], [263, 20, 3])
    >>> low.round(4).tolist(), high.round(4).tolist()
    ([0.2553, 0.0, 0.4385], [0.3662, 0.1611, 1.0])
    """
    x, n, some = _counts(x, n, level)
    return _score(x, n, some, _z(level) ** 2)


def wilson_cc(x: ArrayLike, n: ArrayLike, *, level: float = 0.95) -> Limits:
    """Score interval with continuity correction (Newcombe's method 4).

    >>> low, high = wilson_cc([15, 0, 29], [148, 20, 29])
    >>> low.round(4).tolist(), high.round(4).tolist()
    ([0.0598, 0.0, 0.8544], [0.1644, 0.2005, 1.0])
    """
    x, n, some = _counts(x, n, level)
    z2, p, m = _z(level) ** 2, x / n, n - x
    below = np.sqrt(np.maximum(z2 * (z2 - 2 - 1 / n + 4 * p * (m + 1)), 0.0))
    above = np.sqrt(np.maximum(z2 * (z2 + 2 - 1 / n + 4 * p * (m - 1)), 0.0))
    low = np.where(x == 0, 0.0, (2 * x + z2 - 1 - below) / (2 * (n + z2)))
    high = np.where(m == 0, 1.0, (2 * x + z2 + 1 + above) / (2 * (n + z2)))
    return _finished(low, high, some)


def clopper_pearson(x: ArrayLike, n: ArrayLike, *, level: float = 0.95) -> Limits:
    """Exact interval from two binomial tests; covers at least `level`, usually more.

    >>> low, high = clopper_pearson([81, 0, 1], [263, 20, 29])
    >>> low.round(4).tolist(), high.round(4).tolist()
    ([0.2527, 0.0, 0.0009], [0.3676, 0.1684, 0.1776])
    """
    x, n, some = _counts(x, n, level)
    tail, m = (1 - level) / 2, n - x
    low = np.where(x == 0, 0.0, special.betaincinv(np.maximum(x, 1e-300), m + 1, tail))
    high = np.where(m == 0, 1.0, special.betaincinv(x + 1, np.maximum(m, 1e-300), 1 - tail))
    return _finished(low, high, some)


def jeffreys(x: ArrayLike, n: ArrayLike, *, level: float = 0.95) -> Limits:
    """Equal tails of Beta(x + 1/2, n - x + 1/2), closed at 0 when x = 0 and at 1 when x = n.

    >>> low, high = jeffreys([15, 0, 20], [148, 20, 20])
    >>> low.round(4).tolist(), high.round(4).tolist()
    ([0.0604, 0.0, 0.8834], [0.1576, 0.1166, 1.0])
    """
    x, n, some = _counts(x, n, level)
    tail, m = (1 - level) / 2, n - x
    low = np.where(x == 0, 0.0, special.betaincinv(x + 0.5, m + 0.5, tail))
    high = np.where(m == 0, 1.0, special.betaincinv(x + 0.5, m + 0.5, 1 - tail))
    return _finished(low, high, some)


def agresti_coull(x: ArrayLike, n: ArrayLike, *, level: float = 0.95) -> Limits:
    """The simple normal interval after adding z^2/2 to both counts, clipped to [0, 1].

    >>> low, high = agresti_coull([81, 0, 20], [263, 20, 20])
    >>> low.round(4).tolist(), high.round(4).tolist()
    ([0.2552, 0.0, 0.8102], [0.3663, 0.1898, 1.0])
    """
    x, n, some = _counts(x, n, level)
    z2 = _z(level) ** 2
    size = n + z2
    centre = (x + z2 / 2) / size
    half = np.sqrt(z2 * centre * (1 - centre) / size)
    return _finished(centre - half, centre + half, some)


def mid_p(x: ArrayLike, n: ArrayLike, *, level: float = 0.95) -> Limits:
    """Solves P(X > x) + P(X = x)/2 = (1 - level)/2 and its mirror; less conservative than the exact one.

    >>> low, high = mid_p([15, 0, 1], [148, 20, 29])
    >>> low.round(4).tolist(), high.round(4).tolist()
    ([0.0601, 0.0, 0.0017], [0.1581, 0.1391, 0.1585])
    """
    x, n, some = _counts(x, n, level)
    tail = (1 - level) / 2
    low = np.where(x == 0, 0.0, _mid_p_root(x, n, tail))
    high = np.where(x == n, 1.0, 1 - _mid_p_root(n - x, n, tail))
    return _finished(low, high, some)


def goodman(
    counts: ArrayLike,
    *,
    level: float = 0.95,
    allowed: ArrayLike | None = None,
    switch_below: float = SMALLEST_EXPECTED,
) -> Limits:
    """All K cells of a row at once: Wilson with z^2 = chi-square(1) quantile at 1 - (1 - level)/K.

    counts : (..., K); allowed : (..., K) bool, cells that can be other than zero (their number is K).
    Where the smallest expected count of the row is below `switch_below`, the row gets Clopper-Pearson
    intervals at the same 1 - (1 - level)/K instead, because the score interval then covers too little.

    >>> low, high = goodman([56, 72, 73, 59, 62, 87, 58])
    >>> low.round(3).tolist()
    [0.085, 0.115, 0.116, 0.091, 0.096, 0.143, 0.089]
    """
    x, open_cells, cells = _row(counts, allowed, level)
    n, alpha = x.sum(axis=-1, keepdims=True) + 0 * x, (1 - level) / cells
    some = n > 0
    safe = np.where(some, n, 1.0)
    low, high = _score(x, safe, some, stats.chi2.isf(alpha, 1))
    small = np.where(open_cells, x, np.inf).min(axis=-1, keepdims=True) < switch_below
    exact = [_exact_at(x, safe, alpha, some)[side] for side in (0, 1)]
    return _closed(np.where(small, exact[0], low), np.where(small, exact[1], high), open_cells)


def quesenberry_hurst(counts: ArrayLike, *, level: float = 0.95, allowed: ArrayLike | None = None) -> Limits:
    """All K cells of a row at once: Wilson with z^2 = chi-square(K - 1) quantile at `level` (wider).

    counts, allowed : (..., K) as for `goodman`.

    >>> low, high = quesenberry_hurst([44, 55, 43, 32, 67, 78])
    >>> low[:3].round(4).tolist(), high[:3].round(4).tolist()
    ([0.0858, 0.1134, 0.0833], [0.2144, 0.2534, 0.2108])
    """
    x, open_cells, cells = _row(counts, allowed, level)
    n = x.sum(axis=-1, keepdims=True) + 0 * x
    some = n > 0
    low, high = _score(x, np.where(some, n, 1.0), some, stats.chi2.isf(1 - level, np.maximum(cells - 1, 1)))
    return _closed(low, high, open_cells)


PER_CELL: dict[str, Callable[..., Limits]] = {
    "wilson": wilson,
    "wilson-cc": wilson_cc,
    "clopper-pearson": clopper_pearson,
    "jeffreys": jeffreys,
    "agresti-coull": agresti_coull,
    "mid-p": mid_p,
}
PER_ROW: dict[str, Callable[..., Limits]] = {"goodman": goodman, "quesenberry-hurst": quesenberry_hurst}


def method_name(method: str) -> str:
    """The method's name as used here (underscores are taken as hyphens); CallError if unknown.

    >>> method_name("clopper_pearson")
    'clopper-pearson'
    """
    name = str(method).replace("_", "-").lower()
    known = (*PER_CELL, *PER_ROW)
    if name not in known:
        raise CallError(
            f'Unknown interval method "{method}"{nearest(name, known)}. Per cell: {listed(PER_CELL)}; '
            f"for a whole row: {listed(PER_ROW)}."
        )
    return name


def row_limits(
    counts: ArrayLike, *, method: str = "wilson", level: float = 0.95, allowed: ArrayLike | None = None
) -> Limits:
    """(..., K) limits of rows of counts by any method; cells not allowed get [0, 0].

    >>> low, high = row_limits([[8, 2, 0]], allowed=[[True, True, False]])
    >>> high.round(3).tolist()
    [[0.943, 0.51, 0.0]]
    """
    name = method_name(method)
    if name in PER_ROW:
        return PER_ROW[name](counts, level=level, allowed=allowed)
    x, open_cells, _ = _row(counts, allowed, level)
    low, high = PER_CELL[name](x, x.sum(axis=-1, keepdims=True) + 0 * x, level=level)
    return _closed(low, high, open_cells)


# ---- inner ----
def check_level(level: float) -> float:
    """A level strictly between 0 and 1."""
    if not 0 < level < 1:
        raise CallError(f"level is a share between 0 and 1, for instance 0.95; got {level!r}.")
    return float(level)


def _z(level: float) -> float:
    return float(special.ndtri((1 + level) / 2))


def _counts(x: ArrayLike, n: ArrayLike, level: float) -> tuple[Array, Array, NDArray[np.bool_]]:
    """Checked x, n (with 1 where nothing is at risk) and where something is at risk."""
    check_level(level)
    x, n = np.broadcast_arrays(np.asarray(x, dtype=float), np.asarray(n, dtype=float))
    with np.errstate(invalid="ignore"):
        bad = ~((x >= 0) & (x <= n * (1 + 1e-12)) & np.isfinite(n))
    if bad.any():
        where = tuple(np.argwhere(bad)[0])
        raise CallError(f"Counts need 0 <= x <= n; got x = {x[where]:g} of n = {n[where]:g}.")
    some = n > 0
    return np.minimum(x, n), np.where(some, n, 1.0), some


def _row(
    counts: ArrayLike, allowed: ArrayLike | None, level: float
) -> tuple[Array, NDArray[np.bool_], Array]:
    """Checked counts, allowed cells, and the number of allowed cells kept as a last axis of 1."""
    check_level(level)
    x = np.asarray(counts, dtype=float)
    if x.ndim == 0 or not np.isfinite(x).all() or (x < 0).any():
        raise CallError("A row of counts needs numbers of 0 or more, one for each cell.")
    open_cells = np.ones(x.shape, bool) if allowed is None else np.broadcast_to(np.asarray(allowed), x.shape)
    if (x[~open_cells] > 0).any():
        raise CallError(
            "A cell that is not allowed has a count above 0; check the moves declared impossible."
        )
    return x, open_cells, np.maximum(open_cells.sum(axis=-1, keepdims=True), 1)


def _score(x: Array, n: Array, some: NDArray[np.bool_], z2: float | Array) -> Limits:
    p = x / n
    centre = (p + z2 / (2 * n)) / (1 + z2 / n)
    half = np.sqrt(z2 * (p * (1 - p) / n + z2 / (4 * n * n))) / (1 + z2 / n)
    low = np.where(x == 0, 0.0, centre - half)  # exactly: rounding would leave 1e-17
    high = np.where(x == n, 1.0, centre + half)
    return _finished(low, high, some)


def _exact_at(x: Array, n: Array, alpha: Array, some: NDArray[np.bool_]) -> Limits:
    m = n - x
    low = np.where(x == 0, 0.0, special.betaincinv(np.maximum(x, 1e-300), m + 1, alpha / 2))
    high = np.where(m <= 0, 1.0, special.betaincinv(x + 1, np.maximum(m, 1e-300), 1 - alpha / 2))
    return _finished(low, high, some)


def _mid_p_root(x: Array, n: Array, tail: float) -> Array:
    """p with P(X > x) + P(X = x)/2 = tail, by bisection (the left side grows with p)."""
    low, high = np.zeros(x.shape), np.ones(x.shape)
    for _ in range(BISECTIONS):
        p = (low + high) / 2
        at_least = np.where(x > 0, special.betainc(np.maximum(x, 1e-300), n - x + 1, p), 1.0)
        above = np.where(x < n, special.betainc(x + 1, np.maximum(n - x, 1e-300), p), 0.0)
        too_big = (at_least + above) / 2 > tail
        low, high = np.where(too_big, low, p), np.where(too_big, p, high)
    return (low + high) / 2


def _finished(low: Array, high: Array, some: NDArray[np.bool_]) -> Limits:
    return np.where(some, np.clip(low, 0.0, 1.0), 0.0), np.where(some, np.clip(high, 0.0, 1.0), 1.0)


def _closed(low: Array, high: Array, open_cells: NDArray[np.bool_]) -> Limits:
    return np.where(open_cells, low, 0.0), np.where(open_cells, high, 0.0)
