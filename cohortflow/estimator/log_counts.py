"""The logarithm of a small count, as a measurement of the logarithm of its mean.

For X ~ Poisson(m), g(m) = E log(X + 1/2) and v(m) = Var log(X + 1/2) are close to log m and 1/m only for
large m. Linearised at a known m, (log(X + 1/2) - g(m)) / g'(m) measures log(mean) - log m without bias and
with variance v / g'^2. g' is taken with respect to log m: g'(m) = m (E log(X + 3/2) - E log(X + 1/2)).
"""

from __future__ import annotations

from functools import cache

import numpy as np
from numpy.typing import NDArray
from scipy import stats

Array = NDArray[np.float64]

TABLE = (
    0.05,
    400.0,
    161,
)  # smallest, largest mean and number of points; beyond it the series is exact to 1e-6


def log_measurement(counts: Array, means: Array) -> tuple[Array, Array]:
    """How far log(true mean) lies from log(means), measured from counts: (estimate, its variance).

    counts, means : same shape, means > 0

    >>> shift, variance = log_measurement(np.array([100.0, 3.0]), np.array([100.0, 3.0]))
    >>> shift.round(3).tolist(), variance.round(3).tolist()
    ([0.005, 0.156], [0.01, 0.392])
    """
    means = np.asarray(means, dtype=float)
    expected, spread, slope = log_moments(means)
    shift = (np.log(np.asarray(counts, dtype=float) + 0.5) - expected) / slope
    return shift, spread / slope**2


def log_moments(means: Array) -> tuple[Array, Array, Array]:
    """g(m), v(m) and g'(m), interpolated in a table of exact sums; the series for large m."""
    m = np.maximum(np.asarray(means, dtype=float), TABLE[0])
    points, g, v, slope = _table()
    at = np.log(np.minimum(m, TABLE[1]))
    inside = m <= TABLE[1]
    small = [np.interp(at, points, column) for column in (g, v, slope)]
    large = (np.log(m) - 1 / (24 * m**2), 1 / m + 1 / (2 * m**2), np.ones_like(m))
    gap = small[0] + np.log(m) - at
    return (
        np.where(inside, gap, large[0]),
        np.where(inside, small[1], large[1]),
        np.where(inside, small[2], large[2]),
    )


@cache
def _table() -> tuple[Array, Array, Array, Array]:
    means = np.geomspace(*TABLE)
    x = np.arange(800)
    weight = stats.poisson.pmf(x[None, :], means[:, None])
    log_half, log_more = np.log(x + 0.5), np.log(x + 1.5)
    g = weight @ log_half
    v = weight @ log_half**2 - g**2
    return np.log(means), g, v, means * (weight @ log_more - g)
