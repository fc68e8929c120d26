"""Derivatives of time to exit, exits and the settled base: by complex step on plain formulae."""

import numpy as np
import pytest

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov import (
    absorb,
    exit_probability_derivative,
    exit_time_bias,
    exit_time_derivative,
    exit_variance_derivative,
    settled_base_derivative,
    visits_derivative,
)
from tests.markov_chains import LIFECYCLE, complex_step, positive

TOLERANCE = {"rel": 1e-9, "abs": 1e-10}
EXITS = [1, 4]
INSIDE = [0, 2, 3]


def two_exits() -> np.ndarray:
    P = positive(5, seed=9)
    P[1], P[4] = np.eye(5)[1], np.eye(5)[4]
    return P


def visits_of(P: np.ndarray, inside=INSIDE) -> np.ndarray:
    return np.linalg.inv(np.eye(len(inside)) - P[np.ix_(inside, inside)])


def outside_rows_fixed(step: np.ndarray, exits=EXITS) -> np.ndarray:
    """An exit's row is no parameter; the plain formulae do not read it anyway."""
    assert (step[:, exits] == 0).all()
    return step


def test_mean_time():
    P = two_exits()
    found = exit_time_derivative(P, EXITS)
    assert found.value == pytest.approx(absorb(P, EXITS).mean_time)
    step = complex_step(lambda X: visits_of(X).sum(axis=1), P)
    assert found.full() == pytest.approx(outside_rows_fixed(step), **TOLERANCE)


def test_variance():
    P = two_exits()

    def variance(X):
        N = visits_of(X)
        tau = N.sum(axis=1)
        return (2 * N - np.eye(3)) @ tau - tau**2

    found = exit_variance_derivative(P, EXITS)
    assert found.value == pytest.approx(variance(P))
    assert found.full() == pytest.approx(complex_step(variance, P), **TOLERANCE)


@pytest.mark.parametrize("exit", EXITS)
def test_probability_of_an_exit(exit):
    P = two_exits()
    found = exit_probability_derivative(P, EXITS, exit=exit)
    step = complex_step(lambda X: visits_of(X) @ X[INSIDE, exit], P)
    assert found.full() == pytest.approx(step, **TOLERANCE)


def test_probability_of_an_exit_where_some_never_leave():
    P = np.array([[0.5, 0.2, 0.2, 0.1], [0.1, 0.3, 0.0, 0.6], [0.0, 0.0, 1.0, 0.0], [0.0, 0.0, 0.0, 1.0]])
    found = exit_probability_derivative(P, [3], exit=3)
    step = complex_step(lambda X: visits_of(X, [0, 1]) @ X[[0, 1], 3], P)
    assert found.full()[:2] == pytest.approx(step, **TOLERANCE)
    assert found.value[2] == 0 and not found.gradient(2).any()


def test_visits_from_a_start():
    P, start = two_exits(), np.array([0.5, 0.0, 0.3, 0.2, 0.0])
    found = visits_derivative(P, EXITS, start)
    step = complex_step(lambda X: start[INSIDE] @ visits_of(X), P)
    assert found.full() == pytest.approx(step, **TOLERANCE)


def test_settled_base():
    P, joiners = two_exits(), np.array([100.0, 0.0, 30.0, 5.0, 0.0])
    found = settled_base_derivative(P, EXITS, joiners)
    step = complex_step(lambda X: joiners[INSIDE] @ visits_of(X), P)
    assert found.full() == pytest.approx(step, rel=1e-9, abs=1e-8)
    more = settled_base_derivative(P, EXITS, joiners + np.eye(5)[2])
    assert more.value - found.value == pytest.approx(absorb(P, EXITS).visits[1])  # dm/dr is N


def test_starts_from_which_exit_is_not_certain_have_no_slope():
    P = np.array([[0.5, 0.2, 0.3], [0.0, 1.0, 0.0], [0.0, 0.0, 1.0]])
    found = exit_time_derivative(P, [2])
    assert np.isinf(found.value).all() and np.isnan(found.gradient(0)[:, :2]).all()
    with pytest.raises(NotIdentified, match=r"exit is not certain from \[0\], where this start enters"):
        settled_base_derivative(P, [2], [10.0, 0.0, 0.0])
    with pytest.raises(NotIdentified, match=r"exit is not certain from \[1\]"):
        visits_derivative(P, [2], 1)


def test_an_exit_must_be_one_of_the_exits():
    with pytest.raises(CallError, match=r"exit is 0; it must be one of the exits \[4\]"):
        exit_probability_derivative(LIFECYCLE, [4], exit=0)


def test_bias_by_the_second_derivative():
    # E tau^ - tau ~ 1/2 sum_i sum_jl H[(i,j),(i,l)] Cov(p_ij, p_il): H by complex step over the slope's
    # differences
    n = np.array([60.0, 200.0, 300.0, 150.0, 0.0])
    h, bias = 1e-5, np.zeros(4)
    inside = [0, 1, 2, 3]
    for i in inside:
        row = LIFECYCLE[i, :4]
        C = (np.diag(row) - np.outer(row, row)) / n[i]
        for j in inside:
            up, down = LIFECYCLE.copy(), LIFECYCLE.copy()
            up[i, j] += h
            down[i, j] -= h

            def slope(X, i=i):
                step = complex_step(lambda Y: visits_of(Y, inside).sum(axis=1), X)
                return step[:, i, :4]

            bias += 0.5 * ((slope(up) - slope(down)) / (2 * h)) @ C[:, j]
    assert exit_time_bias(LIFECYCLE, [4], n) == pytest.approx(bias, rel=1e-6)


def test_bias_is_unknown_where_a_row_that_matters_was_not_seen():
    assert np.isnan(exit_time_bias(LIFECYCLE, [4], [60, 0, 300, 150, 0])).all()
