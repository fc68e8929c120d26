"""Intervals on three scales, Student's quantile, quantiles of draws with infinities."""

from types import SimpleNamespace

import numpy as np
import pytest
from scipy import stats

from cohortflow.errors import CallError
from cohortflow.markov.derivative import stationary_derivative
from cohortflow.projector.delta import Spread, interval, quantiles
from tests.projector_cases import multinomial


def test_scales_by_hand():
    value, variance = np.array([0.2]), np.array([0.0016])
    low, high = interval(value, variance, 2.0, "plain")
    assert (low[0], high[0]) == pytest.approx((0.12, 0.28))
    low, high = interval(value, variance, 2.0, "log")  # .2 exp(-+ 2 x .04 / .2)
    assert (low[0], high[0]) == pytest.approx((0.2 * np.exp(-0.4), 0.2 * np.exp(0.4)))
    low, high = interval(value, variance, 2.0, "logit")  # logit(.2) -+ 2 x .04 / .16
    odds = 0.25 * np.exp([-0.5, 0.5])
    assert [low[0], high[0]] == pytest.approx(list(odds / (1 + odds)))
    with pytest.raises(CallError, match=r'Unknown scale "loggit" \(did you mean "logit"'):
        interval(value, variance, 2.0, "loggit")


def test_no_interval_where_the_scale_ends_or_the_value_is_not_finite():
    for scale, value in (("log", 0.0), ("log", np.inf), ("logit", 1.0), ("logit", 0.0), ("log", np.nan)):
        low, high = interval(np.array([value]), np.array([1.0]), 2.0, scale)
        assert np.isnan(low[0]) and np.isnan(high[0])


def test_student_where_degrees_of_freedom_are_few():
    cov = SimpleNamespace(matrix=np.zeros((4, 4)), df=11.0)
    assert Spread.of(cov, 2, 0.95).quantile == pytest.approx(stats.t.ppf(0.975, 11))  # scipy
    cov.df = np.inf
    assert Spread.of(cov, 2, 0.95).quantile == pytest.approx(stats.norm.ppf(0.975))
    with pytest.raises(CallError, match=r"covariance.matrix has shape \(4, 4\); for 3 states it must be"):
        Spread.of(cov, 3, 0.95)


def test_variance_of_a_stationary_share_by_hand():
    # pi_0 = q / (p + q), p = .1, q = .3: d/dp = -q/s^2 = -1.875, d/dq = p/s^2 = .625; rows of 100 departures:
    # var = 1.875^2 x .09/100 + .625^2 x .21/100
    P = np.array([[0.9, 0.1], [0.3, 0.7]])
    spread = Spread.of(multinomial(P, 100), 2, 0.9)
    expected = 1.875**2 * 0.0009 + 0.625**2 * 0.0021
    assert spread.variance(stationary_derivative(P).gradient(0)) == pytest.approx(expected)
    assert np.isnan(spread.variance(np.full((2, 2), np.nan)))


def test_quantiles_keep_infinities_and_missing_values():
    values = np.array([[1.0, np.nan], [2.0, 1.0], [np.inf, 1.0], [np.inf, 1.0]])
    low, high = quantiles(values, 0.5)
    assert (low[0], high[0]) == (1.0, np.inf) and np.isnan(low[1])
