"""Derivatives as vectors, and variances from them: by hand and against numpy.einsum on full tensors."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.errors import CallError
from cohortflow.markov import Derivative, delta_variance, joined, multinomial_variance
from cohortflow.markov.gradient import base_row
from tests.markov_chains import positive


@given(st.integers(1, 3), st.integers(1, 4), st.booleans(), st.booleans(), st.integers(0, 99))
@settings(deadline=None)
def test_terms_shared_or_not_add_up_to_the_full_tensor(terms, targets, left_shared, right_shared, seed):
    rng, size = np.random.default_rng(seed), 3
    left = rng.normal(size=(terms, 1 if left_shared else targets, size))
    right = rng.normal(size=(terms, 1 if right_shared else targets, size))
    rows, cells = rng.normal(size=(targets, size)), rng.normal(size=(size, size))
    found = Derivative(np.zeros(targets), left, right, rows, cells)
    wide = np.broadcast_to(left, (terms, targets, size)), np.broadcast_to(right, (terms, targets, size))
    full = np.einsum("rti,rtj->tij", *wide) + rows[:, :, None] * cells
    assert found.full() == pytest.approx(full)
    weights = rng.normal(size=targets)
    assert found.along(weights) == pytest.approx(np.einsum("t,tij->ij", weights, full))
    assert found.along(np.zeros(targets)).tolist() == np.zeros((size, size)).tolist()


def test_joining_adds():
    one = Derivative(np.array([1.0]), np.ones((1, 1, 2)), np.array([[[1.0, 2.0]]]))
    assert joined([one, one, one]).gradient().tolist() == [[3.0, 6.0], [3.0, 6.0]]


def multinomial_covariance(P: np.ndarray, n: np.ndarray) -> np.ndarray:
    return np.stack([(np.diag(row) - np.outer(row, row)) / count for row, count in zip(P, n, strict=True)])


def test_all_forms_of_one_covariance_agree():
    P, n = positive(4), np.array([50.0, 80.0, 120.0, 400.0])
    slope = np.random.default_rng(3).normal(size=(4, 4))
    rows = multinomial_covariance(P, n)
    full = np.zeros((4, 4, 4, 4))
    for i in range(4):
        full[i, :, i, :] = rows[i]
    found = delta_variance(slope, rows)
    assert delta_variance(slope, full) == pytest.approx(found, rel=1e-12)
    assert delta_variance(slope, full.reshape(16, 16)) == pytest.approx(found, rel=1e-12)
    assert multinomial_variance(slope, P, n) == pytest.approx(found, rel=1e-12)


def test_a_share_has_its_binomial_variance():
    # g = dp_00: p q / n = 0.3 * 0.7 / 50
    assert multinomial_variance([[1, 0], [0, 0]], [[0.3, 0.7], [0, 1]], [50, 0]) == pytest.approx(
        0.3 * 0.7 / 50
    )


def test_a_row_nobody_was_seen_in_makes_the_variance_unknown_if_it_matters():
    P = [[0.5, 0.5], [0.5, 0.5]]
    assert math.isnan(multinomial_variance([[1, 0], [2, 0]], P, [100, 0]))
    assert multinomial_variance([[1, 0], [2, 2]], P, [100, 0]) == pytest.approx(0.0025)


def test_directions_off_the_row_sums_do_not_count():
    P, n = positive(3), [10.0, 20.0, 30.0]
    slope = np.random.default_rng(1).normal(size=(3, 3))
    assert multinomial_variance(slope + 7.0, P, n) == pytest.approx(multinomial_variance(slope, P, n))


def test_shapes_are_checked():
    with pytest.raises(CallError, match=r"gradient has shape \(2, 3\); it must be \(K, K\)"):
        delta_variance(np.zeros((2, 3)), np.zeros((2, 2, 2)))
    with pytest.raises(
        CallError, match=r"covariance has shape \(3,\); for 2 states it must be \(2, 2, 2, 2\)"
    ):
        delta_variance(np.zeros((2, 2)), np.zeros(3))
    with pytest.raises(CallError, match=r"gradient has shape \(3, 3\); it must be that of P, \(2, 2\)"):
        multinomial_variance(np.zeros((3, 3)), np.eye(2), [1, 1])
    with pytest.raises(CallError, match="at_risk holds -1; numbers of customers at risk are never negative"):
        multinomial_variance(np.zeros((2, 2)), np.eye(2), [1, -1])
    with pytest.raises(CallError, match="weights has shape"):
        Derivative(np.zeros(2), np.zeros((1, 1, 2)), np.zeros((1, 1, 2))).along([1.0])


def test_a_base_may_be_counts_or_a_state():
    assert base_row([120, 40], 2).tolist() == [120.0, 40.0]
    assert base_row(1, 2).tolist() == [0.0, 1.0]
