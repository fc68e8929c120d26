"""Derivatives of value: by complex step on sums and solves written out plainly."""

import numpy as np
import pytest

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov import discounted_value_derivative, horizon_value_derivative
from tests.markov_chains import LIFECYCLE, complex_step, positive

P4 = positive(4)
REWARD = np.array([20.0, 30.0, -5.0, 0.0])
MOVES = np.arange(16.0).reshape(4, 4) - 6.0
TOLERANCE = {"rel": 1e-9, "abs": 1e-9}


def over_horizon(P, r, b, start, steps, g=0.0):
    total, base, money = 0.0, start, r + (P * g).sum(axis=1)
    for t in range(steps):
        total = total + b**t * (base @ money)
        base = base @ P
    return total


def for_ever(P, r, b, g=0.0):
    return np.linalg.solve(np.eye(len(P)) - b * P, r + (P * g).sum(axis=1))


@pytest.mark.parametrize("g", [np.zeros((4, 4)), MOVES])
@pytest.mark.parametrize(("b", "steps"), [(0.95, 6), (1.0, 3), (0.9, 1)])
def test_value_over_a_horizon(g, b, steps):
    start = np.array([100.0, 20.0, 5.0, 1.0])
    found = horizon_value_derivative(P4, start, REWARD, steps=steps, discount=b, move_reward=g)
    assert found.value[0] == pytest.approx(over_horizon(P4, REWARD, b, start, steps, g))
    step = complex_step(lambda P: over_horizon(P, REWARD, b, start, steps, g), P4)
    assert found.full() == pytest.approx(step, **TOLERANCE)
    h = 1e-30
    by_discount = over_horizon(P4, REWARD, b + 1j * h, start, steps, g).imag / h
    by_reward = [over_horizon(P4, REWARD + 1j * h * e, b, start, steps, g).imag / h for e in np.eye(4)]
    assert found.by_discount[0] == pytest.approx(by_discount, **TOLERANCE)
    assert found.by_reward[0] == pytest.approx(by_reward, **TOLERANCE)


@pytest.mark.parametrize("g", [np.zeros((4, 4)), MOVES])
def test_value_for_ever(g):
    b, h = 0.93, 1e-30
    found = discounted_value_derivative(P4, REWARD, discount=b, move_reward=g)
    assert found.value == pytest.approx(for_ever(P4, REWARD, b, g))
    assert found.full() == pytest.approx(complex_step(lambda P: for_ever(P, REWARD, b, g), P4), **TOLERANCE)
    assert found.by_discount == pytest.approx(for_ever(P4, REWARD, b + 1j * h, g).imag / h, **TOLERANCE)
    by_reward = np.array([for_ever(P4, REWARD + 1j * h * e, b, g).imag / h for e in np.eye(4)]).T
    assert found.by_reward == pytest.approx(by_reward, **TOLERANCE)


def test_the_example_of_the_method_page():
    # methods.md, section E (recomputed there): b = .95, rewards 20 30 60 5 0, v of N = 221.213898
    found = discounted_value_derivative(LIFECYCLE, [20, 30, 60, 5, 0], discount=0.95)
    assert found.value[0] == pytest.approx(221.213898, abs=5e-7)


def test_without_discount_the_moves_inside_suffice():
    # 34 a period, 20 % leave: 34 / 0.2
    found = discounted_value_derivative([[0.8]], [34.0], discount=1.0)
    assert found.value[0] == pytest.approx(170.0) and found.gradient(0)[0, 0] == pytest.approx(850.0)


def test_value_without_end_is_refused():
    with pytest.raises(
        NotIdentified, match="with discount 1 and states that are never left the value is infinite"
    ):
        discounted_value_derivative([[0.8, 0.2], [0.0, 1.0]], [34.0, 0.0], discount=1.0)


@pytest.mark.parametrize("discount", [0.0, 1.01, -0.5])
def test_the_discount_factor_is_checked(discount):
    with pytest.raises(CallError, match=r"discount is .*; the factor a period must lie in \(0, 1\]"):
        discounted_value_derivative(P4, REWARD, discount=discount)
    with pytest.raises(CallError, match="discount is"):
        horizon_value_derivative(P4, 0, REWARD, steps=2, discount=discount)


def test_rewards_must_fit():
    with pytest.raises(CallError, match=r"reward has shape \(2,\); it needs one number for each of 4 states"):
        discounted_value_derivative(P4, [1, 2], discount=0.9)
    with pytest.raises(
        CallError, match=r"move_reward has shape \(2, 2\); it must hold a finite number for every"
    ):
        discounted_value_derivative(P4, REWARD, discount=0.9, move_reward=np.zeros((2, 2)))
