"""Intervals against published figures, each case by itself."""

import numpy as np
import pytest
from scipy import stats
from statsmodels.stats.proportion import multinomial_proportions_confint, proportion_confint

from cohortflow.estimator.covariance import covariance
from cohortflow.estimator.draws import draw_rows
from cohortflow.estimator.interval import (
    agresti_coull,
    clopper_pearson,
    goodman,
    jeffreys,
    mid_p,
    quesenberry_hurst,
    wilson,
    wilson_cc,
)
from cohortflow.estimator.rows import RowCounts

# Newcombe (1998), Statistics in Medicine 17, 857-872, Table I, method 3 (score without continuity
# correction):
# VERIFIED in several stored public test suites. Methods 4 and 5 (score with correction, exact): figures from
# memory, recomputed. mid-P, Jeffreys, Agresti-Coull: recomputed for this project.
NEWCOMBE = {
    (81, 263): {"wilson": (0.2553, 0.3662), "wilson_cc": (0.2535, 0.3682), "cp": (0.2527, 0.3676),
                "mid_p": (0.2544, 0.3658), "jeffreys": (0.2545, 0.3656), "ac": (0.2552, 0.3663)},
    (15, 148): {"wilson": (0.0624, 0.1605), "wilson_cc": (0.0598, 0.1644), "cp": (0.0578, 0.1617),
                "mid_p": (0.0601, 0.1581), "jeffreys": (0.0604, 0.1576), "ac": (0.0614, 0.1615)},
    (0, 20): {"wilson": (0, 0.1611), "wilson_cc": (0, 0.2005), "cp": (0, 0.1684),
              "mid_p": (0, 0.1391), "jeffreys": (0, 0.1166), "ac": (0, 0.1898)},
    (1, 29): {"wilson": (0.0061, 0.1718), "wilson_cc": (0.0018, 0.1963), "cp": (0.0009, 0.1776),
              "mid_p": (0.0017, 0.1585), "jeffreys": (0.0037, 0.1501), "ac": (0, 0.1863)},
}  # fmt: skip
OURS = {"wilson": wilson, "wilson_cc": wilson_cc, "cp": clopper_pearson, "mid_p": mid_p, "jeffreys": jeffreys,
        "ac": agresti_coull}  # fmt: skip
CASES = [(x, n, name) for (x, n), by_name in NEWCOMBE.items() for name in by_name]


@pytest.mark.parametrize(("x", "n", "name"), CASES, ids=[f"{x}-of-{n}-{m}" for x, n, m in CASES])
def test_newcombe_cases(x, n, name):
    low, high = OURS[name](x, n, level=0.95)
    assert (low, high) == pytest.approx(NEWCOMBE[x, n][name], abs=5.001e-5)  # half a unit of the last digit


def test_eighteen_of_twenty_as_printed_by_r():
    # statsmodels' test suite, values from R's binom package (VERIFIED): 18 of 20
    assert agresti_coull(18, 20) == pytest.approx((0.68675611, 0.98434376), abs=5e-9)
    assert wilson(18, 20) == pytest.approx((0.69896635, 0.97213352), abs=5e-9)
    assert clopper_pearson(18, 20) == pytest.approx((0.68301729, 0.98765147), abs=5e-9)


@pytest.mark.parametrize(
    ("ours", "theirs"),
    [(wilson, "wilson"), (clopper_pearson, "beta"), (jeffreys, "jeffreys"), (agresti_coull, "agresti_coull")],
)
def test_statsmodels_agrees_away_from_the_ends(ours, theirs):
    x, n = np.meshgrid(np.arange(1, 30, 4), [30, 77, 591])
    low, high = ours(x, n, level=0.9)
    expected = proportion_confint(x, n, alpha=0.1, method=theirs)
    assert np.allclose(low, np.maximum(expected[0], 0), atol=2e-14)
    assert np.allclose(high, np.minimum(expected[1], 1), atol=2e-14)


SISON_GLAZ_COUNTS = [56, 72, 73, 59, 62, 87, 58]


def test_goodman_seven_cells():
    # Goodman (1965) intervals for the counts of Sison & Glaz (1995), JASA 90, 366; statsmodels test file, 3
    # digits
    low, high = goodman(SISON_GLAZ_COUNTS)
    printed = [[0.085, 0.166], [0.115, 0.204], [0.116, 0.207], [0.091, 0.173], [0.096, 0.181], [0.143, 0.239],
               [0.089, 0.171]]  # fmt: skip
    assert np.allclose(np.stack([low, high], axis=1), printed, atol=5.001e-4)
    assert np.allclose(
        np.stack([low, high], axis=1), multinomial_proportions_confint(SISON_GLAZ_COUNTS, method="goodman")
    )


SIX = [44, 55, 43, 32, 67, 78]


def test_goodman_six_cells():
    # run of the CRAN package CoinMinD (VERIFIED)
    low, high = goodman(SIX)
    assert np.allclose(
        low, [0.09468368, 0.12376893, 0.09208527, 0.06412671, 0.15637944, 0.18692732], atol=5e-9
    )
    assert np.allclose(
        high, [0.19664128, 0.23504889, 0.19310398, 0.15356968, 0.27606696, 0.31301194], atol=5e-9
    )


def test_quesenberry_hurst_six_cells():
    # run of the CRAN package CoinMinD (VERIFIED)
    low, high = quesenberry_hurst(SIX)
    assert np.allclose(
        low, [0.085766471, 0.11335512, 0.08331399, 0.057091201, 0.14452754, 0.1739052], atol=5e-8
    )
    assert np.allclose(
        high, [0.21438304, 0.25344681, 0.21077621, 0.17034657, 0.29498614, 0.3322609], atol=5e-8
    )


def test_sison_glaz_as_an_outside_alternative_is_of_like_width():
    # Sison & Glaz (1995) as statsmodels computes it: cell 1 as printed by R (VERIFIED run). Goodman's cell
    # 1 is .081 wide against .085: both are whole-row intervals for balanced cells.
    sg = multinomial_proportions_confint(SISON_GLAZ_COUNTS, method="sison-glaz")
    assert sg[0] == pytest.approx((0.079229122, 0.16435573), abs=1e-8)
    low, high = goodman(SISON_GLAZ_COUNTS)
    assert np.all(np.abs((high - low) / (sg[:, 1] - sg[:, 0]) - 1) < 0.15)


def test_weather_rows_sison_glaz_and_ours_hold_the_same_shares():
    # R markovchain vignette section 5.2, counts [[48,42,29],[42,43,14],[28,14,104]]; Sison-Glaz limits
    # (VERIFIED)
    counts = np.array([[48, 42, 29], [42, 43, 14], [28, 14, 104]])
    lower = [
        [0.3109244, 0.2605042, 0.1512605],
        [0.3232323, 0.33333333, 0.04040404],
        [0.1232877, 0.02739726, 0.64383562],
    ]
    upper = [
        [0.503124, 0.4527039, 0.3434602],
        [0.5284189, 0.53852, 0.2455907],
        [0.2655683, 0.1696779, 0.7861162],
    ]
    for row, low, high in zip(counts, lower, upper, strict=True):
        assert np.allclose(
            multinomial_proportions_confint(row, method="sison-glaz"), np.transpose([low, high]), atol=5e-7
        )
    low, high = goodman(counts)
    p = counts / counts.sum(axis=1, keepdims=True)
    assert np.all((low < p) & (p < high))


@pytest.mark.parametrize(
    ("n", "upper"),
    # nothing seen in n: two-sided 95 % upper limits Clopper-Pearson, Wilson, Jeffreys (methods table;
    # recomputed)
    [(10, (0.30849711, 0.2775328, 0.21719627)), (30, (0.11570331, 0.11351339, 0.079678174)),
     (100, (0.036216693, 0.036993498, 0.02474527)), (1000, (0.0036820839, 0.0038267585, 0.0025081643))],
)  # fmt: skip
def test_upper_limit_when_nothing_was_seen(n, upper):
    for method, expected in zip((clopper_pearson, wilson, jeffreys), upper, strict=True):
        low, high = method(0, n)
        assert low == 0 and high == pytest.approx(expected, abs=6e-9)


def test_dirichlet_posterior_of_a_row():
    # counts 50, 5, 30, 15 with 1/2 added to each: Dirichlet means and the interval of cell 2 (methods, scipy beta)
    rows = RowCounts.of_matrix([[50.5, 5.5, 30.5, 15.5]])
    drawn = draw_rows(rows, covariance(rows, "multinomial"), 40_000, rng=1)[:, 0]
    assert drawn.mean(axis=0) == pytest.approx([0.49509804, 0.053921569, 0.29901961, 0.15196078], abs=8e-4)
    assert drawn.std(axis=0) == pytest.approx([0.049264096, 0.022254929, 0.045111177, 0.035371634], rel=0.02)
    assert np.quantile(drawn[:, 1], [0.025, 0.975]) == pytest.approx([0.019137869, 0.10508351], rel=0.03)


def _coverage(method, n, p):
    x = np.arange(n + 1)
    low, high = method(x, np.full(n + 1, n))
    return stats.binom.pmf(x, n, p)[(low <= p) & (p <= high)].sum()


@pytest.mark.parametrize(
    ("n", "method", "least", "mean", "mean_small"),
    # exact coverage over p in (0, .5]: minimum / mean / mean for p < .05, by enumeration (methods table;
    # recomputed)
    [(20, wilson, 0.852, 0.953, 0.947), (20, jeffreys, 0.894, 0.951, 0.969), (20, clopper_pearson, 0.958,
    0.977, 0.990),
     (50, wilson, 0.861, 0.952, 0.953), (50, jeffreys, 0.884, 0.950, 0.969), (50, clopper_pearson, 0.953,
     0.969, 0.988), (50, agresti_coull, 0.935, 0.958, 0.980), (50, mid_p, 0.925, 0.955, 0.979)],
)  # fmt: skip
def test_exact_coverage(n, method, least, mean, mean_small):
    grid = np.linspace(0.0005, 0.5, 1000)
    got = np.array([_coverage(method, n, p) for p in grid])
    assert least - 0.025 < got.min() < least + 0.006  # the dips are spikes: a finer grid finds them deeper
    assert got.mean() == pytest.approx(mean, abs=0.002)
    assert got[grid < 0.05].mean() == pytest.approx(mean_small, abs=0.004)
