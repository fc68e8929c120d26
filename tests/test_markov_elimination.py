"""Elimination without subtraction: against plain solves, and digit by digit where plain solves lose them."""

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings

from cohortflow.markov.elimination import eliminate
from tests.markov_chains import losing


def exact_inverse(moves: np.ndarray, leaving: np.ndarray) -> np.ndarray:
    """(D - Q)^{-1} in 50 digits, D from the moves and the ways out, as mpmath numbers."""
    with mpmath.workdps(50):
        size = len(moves)
        matrix = mpmath.matrix(size, size)
        for i in range(size):
            for j in range(size):
                matrix[i, j] = -mpmath.mpf(float(moves[i, j])) if i != j else mpmath.mpf(0)
            total = mpmath.fsum(mpmath.mpf(float(moves[i, j])) for j in range(size) if j != i)
            matrix[i, i] = total + mpmath.mpf(float(leaving[i]))
        inverse = matrix**-1
        return np.array([[inverse[i, j] for j in range(size)] for i in range(size)])


def relative_error(found: np.ndarray, exact: np.ndarray) -> float:
    with mpmath.workdps(50):
        return max(
            float(abs((mpmath.mpf(float(f)) - e) / e)) if e != 0 else float(abs(f))
            for f, e in zip(found.ravel(), exact.ravel(), strict=True)
        )


@given(losing())
@settings(deadline=None)
def test_it_solves_the_same_equations_as_a_plain_solve(Q):
    leaving = 1 - Q.sum(axis=1)
    step = eliminate(Q, leaving)
    plain = np.linalg.inv(np.eye(len(Q)) - Q)
    right = np.arange(1.0, len(Q) + 1)
    assert step.inverse() == pytest.approx(plain, rel=1e-10, abs=1e-12)
    assert step.solve(right) == pytest.approx(plain @ right, rel=1e-10)
    assert step.solve_left(right) == pytest.approx(right @ plain, rel=1e-10)
    assert step.solve_left(np.eye(len(Q))) == pytest.approx(plain, rel=1e-10, abs=1e-12)


@pytest.mark.parametrize("size", [15, 16, 17, 33, 50])
def test_panels_of_every_size_give_the_same_factors(size):
    rng = np.random.default_rng(size)
    Q = rng.dirichlet(np.ones(size), size) * 0.9
    step = eliminate(Q, np.full(size, 0.1))
    off = Q - np.diag(np.diag(Q))
    rebuilt = (step.upper + np.eye(size)) @ step.lower
    assert rebuilt == pytest.approx(np.diag(off.sum(axis=1) + 0.1) - off, abs=1e-14)


def test_every_entry_keeps_its_digits_when_hardly_anybody_leaves():
    # two blocks coupled by 1e-12, one of them leaving at 1e-13 a period: a plain solve keeps about three
    # digits
    moves = np.array(
        [[0.6, 0.4, 0.0, 1e-12], [0.3, 0.7, 0.0, 0.0], [0.0, 1e-12, 0.5, 0.5], [0.0, 0.0, 0.2, 0.8]]
    )
    leaving = np.array([0.0, 0.0, 0.0, 1e-13])
    exact = exact_inverse(moves, leaving)
    assert relative_error(eliminate(moves, leaving).inverse(), exact) < 1e-14
    rounded = np.diag(moves.sum(axis=1) + leaving - np.diag(moves)) - (moves - np.diag(np.diag(moves)))
    assert relative_error(np.linalg.inv(rounded), exact) > 1e-6  # what the care is for


def test_a_steep_chain_does_not_overflow():
    # birth and death with ratio 1e3 over 200 states: the law spans 597 powers of ten, more than a float holds
    size = 200
    moves = np.diag(np.full(size - 1, 0.5), 1) + np.diag(np.full(size - 1, 0.0005), -1)
    law = eliminate(moves, np.zeros(size)).left_null()
    assert law[-1] == pytest.approx(1 - 1e-3, rel=1e-12)  # geometric: pi_k ratio 1000, sum 1/(1 - 1/1000)
    assert law[-2] / law[-1] == pytest.approx(1e-3, rel=1e-12)
    assert law[0] == 0.0
