"""Scores of forecasts: how far, how sharp, how honest.

    interval score  (u - l) + 2/a (l - y)+ + 2/a (y - u)+           for the central 1 - a interval
    CRPS            integral (F(x) - 1{y <= x})^2 dx;  normal: s [z (2 Phi(z) - 1) + 2 phi(z) - 1/sqrt(pi)]
                    sample: mean |x - y| - 1/2 mean |x - x'|  (fair: over m(m - 1) pairs)
    MASE            mean |error| / mean |y_t - y_{t-m}| within the training periods
    log score       -log of the probability given to what happened

All are losses: smaller is better. Each is an expectation that honest forecasting minimises ("proper").
Sources: Gneiting & Raftery (2007) JASA 102, 359; Hyndman & Koehler (2006) Int. J. Forecasting 22, 679;
Diebold & Mariano (1995) J. Bus. Econ. Stat. 13, 253; Harvey, Leybourne & Newbold (1997)
Int. J. Forecasting 13, 281.
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import ArrayLike, NDArray
from scipy.special import ndtr, stdtr

from cohortflow.errors import CallError
from cohortflow.estimator.interval import wilson

Array = NDArray[np.float64]


def interval_score(low: ArrayLike, high: ArrayLike, actual: ArrayLike, *, level: float) -> Any:
    """Width plus 2/(1 - level) times the distance by which the actual value lies outside.

    >>> round(float(interval_score(2, 8, 9, level=0.95)), 9)  # 6 + 40 x 1
    46.0
    """
    lo, hi, y = (np.asarray(v, dtype=float) for v in (low, high, actual))
    if not 0 < level < 1 or (lo > hi).any():
        raise CallError("An interval score needs a level between 0 and 1 and limits with low <= high.")
    penalty = 2 / (1 - level)
    return (hi - lo) + penalty * np.maximum(lo - y, 0) + penalty * np.maximum(y - hi, 0)


def weighted_interval_score(
    median: float, intervals: dict[float, tuple[float, float]], actual: float
) -> float:
    """[|y - median| / 2 + sum_k a_k/2 IS_k] / (K + 1/2), intervals by level.

    >>> round(weighted_interval_score(5, {0.5: (4, 6), 0.95: (1, 9)}, 7), 9)
    1.08
    """
    total = abs(actual - median) / 2
    for level, (low, high) in intervals.items():
        total += (1 - level) / 2 * float(interval_score(low, high, actual, level=level))
    return total / (len(intervals) + 0.5)


def crps_normal(mean: ArrayLike, sd: ArrayLike, actual: ArrayLike) -> Any:
    """CRPS of a normal forecast; with sd 0 the absolute error.

    >>> round(float(crps_normal(0, 1, 0)), 10)
    0.2336949773
    """
    m, s, y = (np.asarray(v, dtype=float) for v in (mean, sd, actual))
    z = np.divide(y - m, s, out=np.zeros(np.broadcast(y, m, s).shape), where=s > 0)
    density = np.exp(-(z**2) / 2) / np.sqrt(2 * np.pi)
    spread = s * (z * (2 * ndtr(z) - 1) + 2 * density - 1 / np.sqrt(np.pi))
    return np.where(s > 0, spread, np.abs(y - m))


def crps_sample(draws: ArrayLike, actual: ArrayLike, *, fair: bool = False) -> Any:
    """CRPS of (m, ...) draws against actual (...); `fair` removes the bias of few draws.

    >>> float(crps_sample([1, 2, 3, 4], 2.5)), round(float(crps_sample([1, 2, 3, 4], 2.5, fair=True)), 7)
    (0.375, 0.1666667)
    """
    x = np.sort(np.asarray(draws, dtype=float), axis=0)
    m = len(x)
    if m < 1 + fair:
        raise CallError(f"CRPS of a sample needs at least {1 + fair} draws; got {m}.")
    weight = (2 * np.arange(1, m + 1) - m - 1).reshape(-1, *[1] * (x.ndim - 1))
    pairs = (weight * x).sum(axis=0) / (m * (m - 1) if fair else m * m)
    return np.abs(x - np.asarray(actual, dtype=float)).mean(axis=0) - pairs


def crps_discrete(cdf: Callable[[Array], Array], actual: int, *, last: int) -> float:
    """CRPS of a law on 0, 1 ... : sum over k <= `last` of (F(k) - 1{y <= k})^2.

    >>> from scipy.stats import poisson
    >>> round(crps_discrete(poisson(3).cdf, 2, last=60), 10)
    0.5417440078
    """
    k = np.arange(last + 1.0)
    return float(((np.asarray(cdf(k)) - (actual <= k)) ** 2).sum())


def ranked_probability_score(probabilities: ArrayLike, happened: int) -> float:
    """Sum over ordered classes of (F_k - 1{happened <= k})^2; classes counted from 0.

    >>> round(ranked_probability_score([0.2, 0.5, 0.3], 1), 9)  # .2^2 + (.7 - 1)^2
    0.13
    """
    cumulative = np.cumsum(np.asarray(probabilities, dtype=float))
    return float(((cumulative - (happened <= np.arange(len(cumulative)))) ** 2).sum())


def energy_score(draws: ArrayLike, actual: ArrayLike) -> float:
    """mean ||x - y|| - 1/2 mean ||x - x'|| for (m, d) draws: the CRPS of a whole mix.

    >>> energy_score([[0, 0], [3, 4]], [0, 0])  # 5/2 - 5/4
    1.25
    """
    x, y = np.asarray(draws, dtype=float), np.asarray(actual, dtype=float)
    apart = np.linalg.norm(x[:, None] - x[None], axis=-1).mean()
    return float(np.linalg.norm(x - y, axis=-1).mean() - apart / 2)


def log_score(probability: ArrayLike, n: ArrayLike = 1.0) -> float:
    """Mean -log probability of n moves each; infinite when something happened that was given none.

    >>> round(log_score([0.5, 0.25], [3, 1]), 6)  # (3 x log 2 + log 4) / 4
    0.866434
    """
    p, w = np.broadcast_arrays(np.asarray(probability, dtype=float), np.asarray(n, dtype=float))
    used = w > 0
    if (p[used] <= 0).any():
        return float("inf")
    return float(-(w[used] * np.log(p[used])).sum() / w[used].sum()) if used.any() else float("nan")


def log_score_normal(mean: float, sd: float, actual: float) -> float:
    """-log density of a normal forecast.

    >>> round(log_score_normal(0, 1, 0), 7)
    0.9189385
    """
    return float(0.5 * np.log(2 * np.pi) + np.log(sd) + ((actual - mean) / sd) ** 2 / 2)


def dawid_sebastiani(mean: float, sd: float, actual: float) -> float:
    """((y - mean) / sd)^2 + 2 log sd, for forecasts known by two moments only.

    >>> round(dawid_sebastiani(0, 2, 1), 7)
    1.6362944
    """
    return float(((actual - mean) / sd) ** 2 + 2 * np.log(sd))


def naive_scale(history: ArrayLike, *, season: int = 1, power: int = 1) -> float:
    """Mean |y_t - y_{t-season}|^power within the history; NaN when that is 0 or cannot be formed.

    >>> round(naive_scale([10, 12, 11, 13, 15, 14, 16]), 6)  # (2+1+2+2+1+2)/6
    1.666667
    """
    y = np.asarray(history, dtype=float)
    if len(y) <= season:
        return float("nan")
    scale = float((np.abs(y[season:] - y[:-season]) ** power).mean())
    return scale if scale > 0 else float("nan")


def mase(forecast: ArrayLike, actual: ArrayLike, history: ArrayLike, *, season: int = 1) -> float:
    """Mean |error| over the naive forecast's in the history: below 1 is better than it. NaN if that is 0.

    >>> round(mase([15, 16, 17], [18, 17, 19], [10, 12, 11, 13, 15, 14, 16]), 9)
    1.2
    """
    error = np.abs(np.asarray(forecast, dtype=float) - np.asarray(actual, dtype=float))
    return float(error.mean() / naive_scale(history, season=season))


def rmsse(forecast: ArrayLike, actual: ArrayLike, history: ArrayLike, *, season: int = 1) -> float:
    """The root of mean squared error over the naive forecast's mean squared error in the history.

    >>> round(rmsse([15, 16, 17], [18, 17, 19], [10, 12, 11, 13, 15, 14, 16]), 7)
    1.2472191
    """
    error = np.asarray(forecast, dtype=float) - np.asarray(actual, dtype=float)
    return float(np.sqrt((error**2).mean() / naive_scale(history, season=season, power=2)))


def skill(score: float, rival: float) -> float:
    """1 - score / rival's: above 0 beats it; NaN when the rival's score is 0.

    >>> skill(3.0, 4.0)
    0.25
    """
    return 1 - score / rival if rival > 0 else float("nan")


@dataclass(frozen=True)
class Coverage:
    """How often intervals held the truth: share, its Wilson limits at 95 %, origins, effective origins."""

    share: float
    low: float
    high: float
    origins: int
    effective: float

    def holds(self, level: float) -> bool:
        """Whether the limits contain the level that was promised."""
        return bool(self.low <= level <= self.high)


def coverage(inside: ArrayLike, *, horizon: int = 1) -> Coverage:
    """Coverage of `inside` (one flag an origin); origins closer than the horizon share their luck.

    effective origins = origins / horizon (at least 1): the Wilson interval is as wide as so few make it.

    >>> found = coverage([True] * 9 + [False] * 3, horizon=3)
    >>> found.share, found.effective, round(found.low, 3), round(found.high, 3)  # Wilson at 3 of 4
    (0.75, 4.0, 0.301, 0.954)
    """
    flags = np.asarray(inside, dtype=float)
    if not len(flags):
        return Coverage(float("nan"), 0.0, 1.0, 0, 0.0)
    effective = max(len(flags) / horizon, 1.0)
    share = float(flags.mean())
    low, high = wilson(share * effective, effective, level=0.95)
    return Coverage(share, float(low), float(high), len(flags), effective)


@dataclass(frozen=True)
class Difference:
    """Mean difference of two series of losses, its error, and the two-sided p-value of no difference."""

    mean: float
    std_error: float
    p_value: float


def compare_losses(first: ArrayLike, second: ArrayLike, *, horizon: int = 1) -> Difference:
    """First less second, origin by origin, allowing for overlap up to `horizon` - 1 origins apart.

    Long-run variance with Bartlett weights (never negative), the small-sample factor
    (n + 1 - 2h + h(h-1)/n) / n of the variance's inverse, and Student's law with n - 1 degrees of freedom.
    NaN error and p-value with fewer than 3 origins or fewer than twice the horizon.

    >>> found = compare_losses([3, 2, 4, 3], [1, 1, 1, 1])  # mean 2, sd 0.816 / sqrt 4
    >>> found.mean, round(found.std_error, 4)
    (2.0, 0.4082)
    """
    d = np.asarray(first, dtype=float) - np.asarray(second, dtype=float)
    n, mean = len(d), float(d.mean()) if len(d) else float("nan")
    factor = (n + 1 - 2 * horizon + horizon * (horizon - 1) / n) / n if n else 0.0
    if n < 3 or n < 2 * horizon or factor <= 0:
        return Difference(mean, float("nan"), float("nan"))
    e = d - mean
    variance = float(e @ e) / n
    for lag in range(1, horizon):
        variance += 2 * (1 - lag / horizon) * float(e[lag:] @ e[:-lag]) / n
    error = float(np.sqrt(max(variance, 0.0) / n / factor))
    if error == 0:
        return Difference(mean, 0.0, 1.0 if mean == 0 else 0.0)
    return Difference(mean, error, float(2 * stdtr(n - 1, -abs(mean) / error)))
