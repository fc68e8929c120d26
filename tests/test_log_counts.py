"""The logarithm of small counts: moments against exact sums, and against chance itself."""

import numpy as np
import pytest
from scipy import stats

from cohortflow.estimator.log_counts import log_measurement, log_moments


@pytest.mark.parametrize("mean", [0.5, 1.0, 3.0, 10.0, 100.0, 399.0, 401.0, 2000.0])
def test_moments_equal_the_sums(mean):
    x = np.arange(5000)
    weight = stats.poisson.pmf(x, mean)
    g = weight @ np.log(x + 0.5)
    v = weight @ np.log(x + 0.5) ** 2 - g**2
    got = [float(a) for a in log_moments(np.array(mean))]
    assert got[:2] == pytest.approx([g, v], abs=3e-4)
    step = 1e-4  # numerical slope in log(mean)
    up, down = (stats.poisson.pmf(x, mean * np.exp(s)) @ np.log(x + 0.5) for s in (step, -step))
    assert got[2] == pytest.approx((up - down) / (2 * step), abs=2e-3)


def test_the_measurement_is_unbiased_for_small_shifts():
    # true mean is 10 % above the assumed one: the measured shift averages log 1.1
    rng = np.random.default_rng(1)
    for mean in (1.0, 5.0, 50.0):
        counts = rng.poisson(1.1 * mean, 400_000)
        shift, variance = log_measurement(counts, np.full(counts.shape, mean))
        assert shift.mean() == pytest.approx(np.log(1.1), abs=0.006)
        assert shift.var() == pytest.approx(variance[0], rel=0.12)
