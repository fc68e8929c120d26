"""Shrinkage: the amount is estimated; nothing where groups agree, all of their own where they differ."""

import numpy as np
import pytest

from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.shrink import Shrink, customer_noise, kept, scatter, shrink_rows


def test_scatter_by_hand():
    # two groups of 10: shares .6/.4 and .4/.6, pooled .5: Q = 10 x (.01/.5 + .01/.5) x 2 = .8; n - sum
    # n^2/n = 10
    assert scatter(np.array([[0.6, 0.4], [0.4, 0.6]]), np.array([10.0, 10.0])) == pytest.approx(
        (0.8, 1, 10.0)
    )


def test_kept_by_hand():
    # three groups of 100 with shares .2, .5, .8: pooled .5, Q = 2 x 100 x (.09/.5) x 2 = 72, df 2, noise 1:
    # t2 = (72/2 - 1) x 2 / (300 - 100) = .35; w = 100 / (100 + 1/.35) = .9722
    p = np.array([[0.2, 0.8], [0.5, 0.5], [0.8, 0.2]])
    assert kept(p, np.full(3, 100.0), 1.0) == pytest.approx(np.full(3, 100 / (100 + 1 / 0.35)))
    # with the noise of design effect 36 the scatter is chance
    assert kept(p, np.full(3, 100.0), 36.0).tolist() == [0, 0, 0]
    assert kept(p[:1], np.array([5.0]), 1.0).tolist() == [1.0]


def test_groups_that_agree_are_pooled_and_groups_that_differ_are_kept():
    rng = np.random.default_rng(1)
    same = rng.multinomial(200, [0.7, 0.2, 0.1], size=6)
    apart = np.array([rng.multinomial(200, rng.dirichlet([7, 2, 1])) for _ in range(6)])
    rows = RowCounts.of_matrix(np.vstack([same, apart]))
    shrink = shrink_rows(rows, np.repeat([0, 1], 6), np.ones(2))
    assert shrink.w[:6].max() < 0.6 and shrink.w[6:].min() > 0.8
    out = shrink.apply(rows.P)
    assert np.allclose(out.sum(axis=1), 1)
    # the pool's mean, weighted by departures, stays where it was when all groups have the same size
    assert np.allclose(out[6:].mean(axis=0), rows.P[6:].mean(axis=0))


def test_the_shrunk_rates_are_nearer_to_the_truth():
    rng = np.random.default_rng(2)
    errors = []
    for _ in range(60):
        truth = rng.dirichlet([14, 4, 2], size=8)
        rows = RowCounts.of_matrix([rng.multinomial(60, p) for p in truth])
        shrink = shrink_rows(rows, np.zeros(8, dtype=int), np.ones(1))
        errors.append([np.square(rows.P - truth).sum(), np.square(shrink.apply(rows.P) - truth).sum()])
    own, shrunk = np.mean(errors, axis=0)
    assert shrunk < 0.85 * own


def test_rows_without_departures_take_the_pool_and_pools_without_any_stay_unknown():
    shrink = Shrink(np.array([0, 0, 1]), np.array([10.0, 0.0, 0.0]), np.array([0.3, 0.0, 0.0]))
    out = shrink.apply(np.array([[0.5, 0.5], [np.nan, np.nan], [np.nan, np.nan]]))
    assert out[:2].tolist() == [[0.5, 0.5], [0.5, 0.5]] and np.isnan(out[2]).all()
    assert shrink.inflate.tolist() == pytest.approx([1 / 0.3, 20, 20])


def test_a_move_that_was_missed_where_it_was_expected_stays_out_when_asked():
    # pool: 100 of 200 to column 1; the second row saw none of its 50 expected
    rows = RowCounts.of_matrix([[0, 100], [100, 0]])
    state, noise = np.zeros(2, dtype=int), np.ones(1)
    assert shrink_rows(rows, state, noise, bar_missed=True).apply(rows.P).tolist() == [[0, 1], [1, 0]]
    assert (shrink_rows(rows, state, noise).apply(rows.P) > 0).all()


def test_noise_is_the_design_effect_of_customers():
    # ten customers who always do the same, each moves ten times: design effect of the row is 10 x 10/9
    moves = np.array([(c, c % 2) for c in range(10) for _ in range(10)])
    rows = RowCounts(np.ones((1, 2), bool), np.zeros(100, int), moves[:, 1], moves[:, 0], np.arange(100) % 10,
                     np.ones(100), np.ones(100), np.ones(100))  # fmt: skip
    assert customer_noise(rows) == pytest.approx([10 * 10 / 9])
    assert customer_noise(RowCounts.of_matrix([[3, 2]])).tolist() == [1.0]
