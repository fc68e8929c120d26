"""Scores: each published or hand-worked value by itself, and the laws of proper scores."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy import integrate, stats
from statsmodels.stats.proportion import proportion_confint

from cohortflow.assessment import scores
from cohortflow.errors import CallError


# ---- CRPS of a normal forecast
@pytest.mark.parametrize(
    "actual, value, digits",
    [
        (0, 0.2336949773, 10),  # VERIFIED (documentation of a scoring-rules package)
        (-3, 2.43657473, 8),  # VERIFIED (tests of the R package scoringRules)
        (1, 0.6024413576, 10),  # recomputed
        (2, 1.4527918217, 10),  # recomputed
    ],
)
def test_crps_normal(actual, value, digits):
    assert float(scores.crps_normal(0, 1, actual)) == pytest.approx(value, abs=0.5 * 10**-digits)


def test_crps_normal_of_other_scale():
    assert float(scores.crps_normal(1, 0.5, 2)) == pytest.approx(0.7263959108, abs=5e-11)  # recomputed


def test_crps_normal_is_the_integral():
    for mean, sd, y in [(0.3, 2.0, 1.7), (5.0, 0.1, 4.0)]:
        low, _ = integrate.quad(lambda x: stats.norm.cdf(x, mean, sd) ** 2, mean - 12 * sd, y, epsabs=1e-12)  # noqa: B023
        high, _ = integrate.quad(lambda x: stats.norm.sf(x, mean, sd) ** 2, y, mean + 12 * sd, epsabs=1e-12)  # noqa: B023
        assert float(scores.crps_normal(mean, sd, y)) == pytest.approx(low + high, abs=1e-8)


def test_crps_without_spread_is_the_absolute_error():
    assert scores.crps_normal([1.0, 1.0], [0.0, 0.0], [4.0, 1.0]).tolist() == [3.0, 0.0]


def test_mean_crps_under_the_truth():
    # E CRPS of N(0,1) under itself is 1 / sqrt(pi) = .5641896 (exact)
    value, _ = integrate.quad(lambda y: float(scores.crps_normal(0, 1, y)) * stats.norm.pdf(y), -12, 12)
    assert value == pytest.approx(1 / np.sqrt(np.pi), abs=1e-8)


# ---- CRPS of a sample
@pytest.mark.parametrize(
    "draws, actual, plain, fair",
    [
        # mean |x-y| = (1.5+.5+.5+1.5)/4 = 1; pairs 20/16 -> .625: .375; 20/12 -> .8333: .16667
        ([1, 2, 3, 4], 2.5, 0.375, 1 / 6),
        ([0, 1], 0, 0.25, 0.0),  # 1/2 - (2/4)/2; 1/2 - (2/2)/2
        (range(1, 11), 12, 4.85, 4.6666666667),  # 6.5 - 330/200; 6.5 - 330/180
    ],
)
def test_crps_sample(draws, actual, plain, fair):
    assert float(scores.crps_sample(list(draws), actual)) == pytest.approx(plain, abs=1e-9)
    assert float(scores.crps_sample(list(draws), actual, fair=True)) == pytest.approx(fair, abs=1e-9)


def test_crps_sample_goes_by_column_and_to_the_normal_limit():
    draws = stats.norm.ppf((np.arange(20_000) + 0.5) / 20_000)
    found = scores.crps_sample(np.stack([draws, draws + 1], axis=1), [1.0, 1.0])
    assert found == pytest.approx([0.6024413576, 0.2336949773], abs=2e-4)


def test_crps_sample_needs_draws():
    with pytest.raises(CallError, match="CRPS of a sample needs at least 2 draws; got 1"):
        scores.crps_sample([1.0], 1.0, fair=True)


# ---- discrete laws
@pytest.mark.parametrize(
    "law, actual, value",
    [
        (stats.poisson(3), 2, 0.5417440078),  # recomputed
        (stats.poisson(8), 10, 1.2685777746),  # recomputed
        (stats.binom(10, 0.3), 5, 1.3160082272),  # recomputed
        (stats.nbinom(100, 0.95), 5, 0.5321525768),  # VERIFIED (tests of scoringRules)
        (stats.nbinom(200.1, 0.82), 44, 1.7085968725),  # VERIFIED (tests of scoringRules)
    ],
)
def test_crps_discrete(law, actual, value):
    assert scores.crps_discrete(law.cdf, actual, last=400) == pytest.approx(value, abs=5e-11)


def test_ranked_probability_score():
    # classes .2 .5 .3, the second happened: (.2 - 0)^2 + (.7 - 1)^2 = .13
    assert scores.ranked_probability_score([0.2, 0.5, 0.3], 1) == pytest.approx(0.13, abs=1e-12)


# ---- intervals
@pytest.mark.parametrize(
    "level, actual, value",
    [
        (0.95, 5, 6.0),  # inside: the width
        (0.95, 9, 46.0),  # 6 + 2/.05 x 1
        (0.90, 1.5, 16.0),  # 6 + 2/.1 x .5
    ],
)
def test_interval_score(level, actual, value):
    assert float(scores.interval_score(2, 8, actual, level=level)) == pytest.approx(value, abs=1e-9)


def test_mean_interval_score_under_the_truth():
    # N(0,1), central 95 %: 4.6756056 (recomputed): width 2 z + 2 (2/a) E(y - z)+
    z = stats.norm.ppf(0.975)
    outside = stats.norm.pdf(z) - z * 0.025
    assert 2 * z + 2 / 0.05 * 2 * outside == pytest.approx(4.6756056, abs=5e-8)
    value, _ = integrate.quad(
        lambda y: float(scores.interval_score(-z, z, y, level=0.95)) * stats.norm.pdf(y),
        -12,
        12,
        points=[-z, z],
    )
    assert value == pytest.approx(4.6756056, abs=5e-8)


def test_weighted_interval_score():
    # median 5, 50 % (4,6), 95 % (1,9), y = 7: [2/2 + .25 (2 + 4) + .025 x 8] / 2.5 = 2.7 / 2.5
    assert scores.weighted_interval_score(5, {0.5: (4, 6), 0.95: (1, 9)}, 7) == pytest.approx(1.08, abs=1e-12)


@pytest.mark.parametrize("low, high, level", [(3, 2, 0.9), (2, 3, 1.0)])
def test_interval_score_refuses(low, high, level):
    with pytest.raises(CallError, match="level between 0 and 1 and limits with low <= high"):
        scores.interval_score(low, high, 2, level=level)


@settings(deadline=None, max_examples=50)
@given(st.floats(-3, 3), st.floats(-3, 3))
def test_the_true_quantiles_minimise_the_interval_score(shift_low, shift_high):
    draws = stats.norm.ppf((np.arange(4000) + 0.5) / 4000)
    z = stats.norm.ppf(0.95)
    low, high = sorted([-z + shift_low, z + shift_high])
    honest = scores.interval_score(-z, z, draws, level=0.9).mean()
    assert scores.interval_score(low, high, draws, level=0.9).mean() >= honest - 1e-6


# ---- other scores
def test_log_score_of_a_normal():
    assert scores.log_score_normal(0, 1, 0) == pytest.approx(0.9189385, abs=5e-8)  # log(2 pi) / 2


def test_log_score_of_moves():
    assert scores.log_score([0.5, 0.25], [3, 1]) == pytest.approx((3 * np.log(2) + np.log(4)) / 4)
    assert scores.log_score([0.5, 0.0], [3, 0]) == pytest.approx(np.log(2))  # nothing happened there
    assert scores.log_score([0.5, 0.0], [3, 1]) == np.inf
    assert np.isnan(scores.log_score([], []))


def test_dawid_sebastiani():
    assert scores.dawid_sebastiani(0, 2, 1) == pytest.approx(0.25 + 2 * np.log(2))


def test_energy_score():
    # {(0,0), (3,4)} against (0,0): mean distance 5/2; pairs (0+5+5+0)/4 = 2.5, half of it 1.25
    assert scores.energy_score([[0, 0], [3, 4]], [0, 0]) == pytest.approx(1.25)


def test_energy_score_in_one_dimension_is_crps():
    draws = np.random.default_rng(1).normal(size=50)
    assert scores.energy_score(draws[:, None], [0.4]) == pytest.approx(float(scores.crps_sample(draws, 0.4)))


# ---- scaled errors
TRAIN, TEST, FORECAST = [10, 12, 11, 13, 15, 14, 16], [18, 17, 19], [15, 16, 17]


def test_mase():
    # errors 3 1 2: mean 2; naive in sample (2+1+2+2+1+2)/6 = 5/3: 1.2 (VERIFIED, R package forecast)
    assert scores.mase(FORECAST, TEST, TRAIN) == pytest.approx(1.2)


def test_rmsse():
    # mean square 14/3; naive (4+1+4+4+1+4)/6 = 3: sqrt(14/9) = 1.2472191
    assert scores.rmsse(FORECAST, TEST, TRAIN) == pytest.approx(1.2472191, abs=5e-8)


def test_a_constant_history_gives_no_scale():
    assert np.isnan(scores.mase([1], [2], [5, 5, 5]))
    assert np.isnan(scores.naive_scale([1, 2], season=2))


def test_skill():
    assert scores.skill(3.0, 4.0) == 0.25
    assert np.isnan(scores.skill(1.0, 0.0))


# ---- coverage
def test_coverage_counts_overlapping_horizons_as_fewer_origins():
    found = scores.coverage([True] * 9 + [False] * 3, horizon=3)
    low, high = proportion_confint(3, 4, method="wilson")  # 12 origins / 3 = 4 effective, 3/4 of them inside
    assert (found.low, found.high) == (pytest.approx(low, abs=1e-12), pytest.approx(high, abs=1e-12))
    assert (found.origins, found.effective, found.share) == (12, 4.0, 0.75)
    assert found.holds(0.9) and not found.holds(0.97)


def test_coverage_of_nothing():
    found = scores.coverage([])
    assert (found.origins, np.isnan(found.share), found.low, found.high) == (0, True, 0.0, 1.0)


# ---- comparison of losses
def test_difference_by_hand_without_overlap():
    # d = 2 1 3 2: mean 2, variance 2/4 = .5; factor (4+1-2)/4 = .75: error sqrt(.5/4/.75); t with 3 df
    found = scores.compare_losses([3, 2, 4, 3], [1, 1, 1, 1])
    error = np.sqrt(0.5 / 4 / 0.75)
    assert (found.mean, found.std_error) == (2.0, pytest.approx(error))
    assert found.p_value == pytest.approx(2 * stats.t.sf(2 / error, 3))


def test_difference_without_overlap_is_the_paired_t_test():
    rng = np.random.default_rng(3)
    a, b = rng.normal(size=(2, 20))
    found = scores.compare_losses(a, b)
    assert found.p_value == pytest.approx(stats.ttest_rel(a, b).pvalue, rel=1e-10)


def test_overlap_widens_the_error_when_neighbours_agree():
    d = np.repeat([1.0, -1.0, 2.0, -0.5, 1.5, 0.0], 4)
    assert (
        scores.compare_losses(d, 0 * d, horizon=4).std_error > 1.4 * scores.compare_losses(d, 0 * d).std_error
    )


def test_few_origins_give_no_error():
    found = scores.compare_losses([1, 2, 3, 4], [0, 0, 0, 0], horizon=3)
    assert found.mean == 2.5 and np.isnan(found.std_error) and np.isnan(found.p_value)


def test_identical_losses():
    found = scores.compare_losses([1, 2, 3], [1, 2, 3])
    assert (found.mean, found.std_error, found.p_value) == (0.0, 0.0, 1.0)
