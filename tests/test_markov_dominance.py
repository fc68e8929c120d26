"""Dominant classes, lines of tied ones and their vectors, against numpy's eigenvalues and long products."""

import numpy as np
import pytest
from hypothesis import given, settings

from cohortflow.markov.dominance import Dominance, dominant_pair
from tests.markov_chains import losing, positive

# two lines from state 0: 0 -> 1 and 0 -> 2 -> (3, which keeps less); classes 0, 1, 2 tie at 0.5
LINES = np.array(
    [
        [0.5, 0.2, 0.1, 0.0],
        [0.0, 0.5, 0.0, 0.0],
        [0.0, 0.0, 0.5, 0.2],
        [0.0, 0.0, 0.0, 0.2],
    ]
)


@pytest.mark.parametrize("size", [2, 3, 10, 40])
def test_the_pair_is_that_of_the_eigenvalue_solver(size):
    block = positive(size, seed=size) * 0.9
    block[0] *= 0.5
    value, left, right = dominant_pair(block)
    assert value == pytest.approx(np.abs(np.linalg.eigvals(block)).max(), rel=1e-13)
    assert left @ block == pytest.approx(value * left, rel=1e-12)
    assert block @ right == pytest.approx(value * right, rel=1e-12)
    assert left.sum() == pytest.approx(1) and right.sum() == pytest.approx(1)


def test_a_periodic_class_has_its_pair_too():
    value, left, right = dominant_pair(np.array([[0.0, 0.8], [0.2, 0.0]]))
    assert value == pytest.approx(0.4)  # sqrt(0.8 * 0.2)
    assert left == pytest.approx([1 / 3, 2 / 3])  # u1 = 0.2 u2 / 0.4
    assert right == pytest.approx([2 / 3, 1 / 3])


def test_a_pair_that_hardly_mixes():
    value, left, _ = dominant_pair(np.array([[0.9, 1e-12], [1e-12, 0.9]]))
    assert value == pytest.approx(0.9 + 1e-12, rel=1e-15)
    assert left == pytest.approx([0.5, 0.5], abs=1e-3)


@given(losing())
@settings(deadline=None)
def test_the_top_is_the_spectral_radius(Q):
    # equal eigenvalues in a triangular block come out of a solver with a root of its rounding error
    assert Dominance(Q).top == pytest.approx(np.abs(np.linalg.eigvals(Q)).max(), abs=2e-3)


def test_lines_and_ends_by_eye():
    found = Dominance(LINES)
    assert found.top == 0.5 and sorted(found.tied) == [0, 1, 2] and not found.cyclic
    assert [found.ends(state) for state in range(4)] == [{1, 2}, {1}, {2}, set()]


def test_shares_of_two_ends_by_hand():
    # crossings 0.2 into class 1 and 0.1 into class 2; the law of class 2 holds 0.6 in state 2 and 0.4 in
    # state 3 (u3 = 0.2 u2 / (0.5 - 0.2)), so per unit in state 2 it counts 1/0.6: 0.2 : 0.1/0.6 = 6 : 5
    found = Dominance(LINES)
    assert found.left(2).tolist() == pytest.approx([0, 0, 0.6, 0.4])
    assert found.shares(np.array([1.0, 0, 0, 0])) == pytest.approx({1: 6 / 11, 2: 5 / 11})


def test_weights_before_a_tied_class_are_infinite():
    found = Dominance(np.array([[0.5, 0.2, 0.0], [0.0, 0.5, 0.0], [0.3, 0.1, 0.4]]))
    assert found.right(1).tolist() == [np.inf, 1.0, np.inf]


def test_a_line_keeps_a_rhythm_only_if_all_its_classes_do():
    flip = np.array([[0.0, 0.5], [0.5, 0.0]])
    steady_last = np.block([[flip, np.array([[0.1], [0.1]])], [np.zeros((1, 2)), np.array([[0.5]])]])
    flip_last = np.block([[np.array([[0.5]]), np.array([[0.1, 0.0]])], [np.zeros((2, 1)), flip]])
    assert Dominance(flip).cyclic and not Dominance(np.array([[0.5]])).cyclic
    assert not Dominance(steady_last).cyclic  # from the flip, too, all who remain end in the steady state
    assert Dominance(flip_last).cyclic  # a start in the flip goes to and fro for ever
