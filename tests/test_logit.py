"""Multinomial logit from grouped counts, against statsmodels."""

import numpy as np
import pytest
import statsmodels.api as sm

from cohortflow.errors import NotIdentified
from cohortflow.estimator.logit import fit_logit, separation


def data(n=3000, seed=1):
    rng = np.random.default_rng(seed)
    X = np.column_stack([np.ones(n), rng.integers(0, 2, n), rng.integers(0, 5, n) / 2])
    B = np.array([[0, 0, 0], [-0.5, 0.8, -0.3], [-1.0, -0.4, 0.5]])
    eta = X @ B.T
    p = np.exp(eta) / np.exp(eta).sum(axis=1, keepdims=True)
    y = (rng.random(n)[:, None] > p.cumsum(axis=1)[:, :2]).sum(axis=1)
    return X, y, B


def grouped(X, y, cluster):
    key, where = np.unique(np.column_stack([X, cluster]), axis=0, return_inverse=True)
    Y = np.zeros((len(key), 3))
    np.add.at(Y, (where.reshape(-1), y), 1)
    return key[:, :3], Y, key[:, 3].astype(int)


def test_equals_statsmodels_mnlogit_and_its_sandwich():
    X, y, _ = data()
    cluster = np.arange(len(y)) % 40
    ours = fit_logit(*grouped(X, y, cluster))
    assert ours.reference == np.bincount(y).argmax() == 0 and ours.converged
    theirs = sm.MNLogit(y, X).fit(disp=0, tol=1e-12)
    assert np.allclose(ours.B[1:], theirs.params.T, atol=1e-7)
    assert ours.loglik == pytest.approx(theirs.llf, abs=1e-8)
    plain = fit_logit(*grouped(X, y, cluster)[:2])
    assert np.allclose(plain.covariance[3:, 3:], theirs.cov_params(), atol=1e-8)
    # the sandwich by hand from statsmodels' scores: G/(G-1) sum of squares
    gap = np.eye(3)[y][:, 1:] - theirs.predict()[:, 1:]
    score = (gap[:, :, None] * X[:, None, :]).reshape(len(y), -1)
    summed = np.array([score[cluster == g].sum(axis=0) for g in range(40)])
    bread = np.asarray(theirs.cov_params())
    assert np.allclose(ours.covariance[3:, 3:], bread @ summed.T @ summed @ bread * 40 / 39, atol=1e-8)


def test_the_truth_is_near():
    X, y, B = data(40_000)
    found = fit_logit(X, np.eye(3)[y])
    error = np.sqrt(np.diag(found.covariance)).reshape(3, 3)
    assert np.all(np.abs(found.B - B) < 4 * error + 1e-12)
    assert np.allclose(found.rates(X[:5]).sum(axis=1), 1)


def test_a_two_by_two_table_in_closed_form():
    # odds 20/80 and 40/60: log(1/4) and log(2/3) - log(1/4)
    found = fit_logit(np.array([[1.0, 0], [1, 1]]), np.array([[80.0, 20], [60, 40]]))
    assert found.B[1] == pytest.approx([np.log(0.25), np.log(2 / 3) - np.log(0.25)])


def test_separation_is_seen_and_held():
    X = np.array([[1.0, 0], [1, 1]])
    Y = np.array([[80.0, 20], [50, 0]])
    assert separation(X, Y) == ((1, 1),)
    found = fit_logit(X, Y)
    assert found.separated == ((1, 1),) and found.converged and -15 < found.B[1, 1] < -2


def test_columns_that_repeat_each_other_are_refused():
    X = np.array([[1.0, 0, 1], [1, 1, 0], [1, 1, 0]])
    with pytest.raises(NotIdentified, match="covariates repeat each other"):
        fit_logit(X, np.ones((3, 2)))
