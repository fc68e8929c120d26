"""Draws of rates: probability rows, the asked covariance, the multinomial case is the Dirichlet."""

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from cohortflow.errors import CallError
from cohortflow.estimator.covariance import covariance
from cohortflow.estimator.draws import draw_rows, generator
from cohortflow.estimator.rows import RowCounts


def heterogeneous(customers=400, seed=8):
    rng = np.random.default_rng(seed)
    moves = []
    for c in range(customers):
        P = rng.dirichlet([4.0, 2.0, 1.0], size=2)
        state = int(rng.integers(2))
        for t in range(10):
            following = int(rng.choice(3, p=P[state]))
            moves.append((c, t, state, following))
            if following == 2:
                break
            state = following
    table = pd.DataFrame(moves, columns=["bucket", "period", "row", "column"]).assign(n=1)
    return RowCounts.of_table(table, np.ones((3, 3), bool), np.ones(len(table)))


def test_multinomial_draws_are_the_dirichlet_law():
    # counts 50, 5, 30, 15 without prior: marginals Beta(N_j, n - N_j)
    rows = RowCounts.of_matrix([[50, 5, 30, 15]])
    drawn = draw_rows(rows, covariance(rows, "multinomial"), 20_000, rng=3)[:, 0]
    for j, x in enumerate((50, 5, 30, 15)):
        assert stats.kstest(drawn[:, j], stats.beta(x, 100 - x).cdf).statistic < 0.015


@pytest.mark.parametrize("kind", ["multinomial", "customer", "two_way"])
def test_mean_and_covariance_at_first_order(kind):
    rows = heterogeneous()
    cov = covariance(rows, kind)
    drawn = draw_rows(rows, cov, 40_000, rng=1)[:, :2].reshape(40_000, -1)
    assert np.allclose(drawn.mean(axis=0), rows.P[:2].ravel(), atol=4e-4)
    wide = cov.df / (cov.df - 2) if np.isfinite(cov.df) else 1.0  # variance of Student's t
    sd = cov.std_error[:2].ravel()
    got = np.cov(drawn.T)
    assert np.allclose(np.sqrt(np.diag(got)), sd * np.sqrt(wide), rtol=0.03)
    expected = cov.matrix[:6, :6] / np.outer(sd, sd)
    assert np.allclose(np.corrcoef(drawn.T), expected, atol=0.04)


def test_rows_are_probability_rows_and_zeros_keep_their_meaning():
    allowed = [[1, 1, 0, 1], [1, 1, 1, 1], [1, 1, 1, 1]]
    rows = RowCounts.of_matrix([[40, 10, 0, 0], [0, 3, 0, 0], [0, 0, 0, 0]], allowed)
    drawn = draw_rows(rows, covariance(rows, "multinomial"), 5000, rng=2)
    assert np.allclose(drawn[:, :2].sum(axis=2), 1) and (drawn[:, :2] >= 0).all()
    assert (drawn[:, 0, 2] == 0).all()  # structural zero
    assert np.isnan(drawn[:, 2]).all()  # no data
    # the unseen cell of row 0 has Gamma(1/2) / 50 against 50 seen: mean about .5 / 50.5, 97.5 % near 2.5 / 50
    assert drawn[:, 0, 3].mean() == pytest.approx(0.5 / 50.5, rel=0.1)
    assert np.quantile(drawn[:, 0, 3], 0.975) == pytest.approx(2.51 / 52.5, rel=0.12)
    # row 1: three unseen cells share one half
    assert (1 - drawn[:, 1, 1]).mean() == pytest.approx(0.5 / 3.5, rel=0.1)


def test_a_row_whose_weights_all_vanish_keeps_its_estimate():
    # a millionth of a move: gamma weights of shape 1e-6 are 0 in double precision nearly always
    rows = RowCounts.of_matrix([[1e-6, 1e-6]], [[True, True]])
    drawn = draw_rows(rows, covariance(rows, "multinomial"), 200, rng=1)
    assert np.allclose(drawn.sum(axis=2), 1)


def test_the_seed_decides_and_inputs_stay():
    rows = heterogeneous(50)
    cov = covariance(rows, "customer")
    one, two = (draw_rows(rows, cov, 10, rng=7) for _ in range(2))
    other = draw_rows(rows, cov, 10, rng=8)
    assert np.array_equal(one[:, :2], two[:, :2]) and not np.array_equal(one[:, :2], other[:, :2])


def test_refusals():
    rows = RowCounts.of_matrix([[1, 1]])
    with pytest.raises(CallError, match="number of draws is at least 1; got 0"):
        draw_rows(rows, covariance(rows, "multinomial"), 0, rng=1)
    with pytest.raises(CallError, match="whole number from 0 on or a numpy Generator; got None"):
        generator(None)
