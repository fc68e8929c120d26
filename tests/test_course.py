"""The way of a base through given matrices, and what each move's change does."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad

from cohortflow import Chain, States
from cohortflow.chain import Component, Schedule
from cohortflow.runs.course import Course, move_effects, quantities_of, way

STATES = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
P0 = np.array([[0.1, 0.7, 0.2], [0, 0.9, 0.1], [0, 0, 1.0]])
P1 = np.array([[0.05, 0.8, 0.15], [0.1, 0.7, 0.2], [0, 0, 1.0]])
JOINERS = np.array([[10.0, 0, 0], [20, 0, 0], [5, 5, 0], [0, 0, 0]])
MONEY = np.array([[1.0, 2, 0], [3, 4, -1], [0, 0, 0]])
NONE = np.zeros((4, 3))


def course(matrix: np.ndarray, periods: int = 4) -> Course:
    return Course.of(Chain(STATES, matrix).schedule, 0, periods)


def outcome(matrix: np.ndarray) -> np.ndarray:
    """(n+1, K + 1) customers and money, by another loop."""
    x, rows = np.array([100.0, 50, 0]), [[100.0, 50, 0, 0]]
    for coming in JOINERS:
        paid = sum(x[i] * matrix[i, j] * MONEY[i, j] for i in range(3) for j in range(3))
        x = np.array([sum(x[i] * matrix[i, j] for i in range(3)) for j in range(3)]) + coming
        rows.append([*x, paid])
    return np.array(rows)


def effects() -> tuple[np.ndarray, np.ndarray]:
    return move_effects(course(P0), course(P1), [np.array([100.0, 50, 0])], JOINERS, NONE, MONEY)


def test_the_way_is_the_recursion():
    found = way(course(P0), [np.array([100.0, 50, 0])], JOINERS, NONE, MONEY)
    expected = outcome(P0)
    np.testing.assert_allclose(found.counts, expected[:, :3], rtol=1e-13)
    np.testing.assert_allclose(found.paid, expected[1:, 3], rtol=1e-13)


def test_effects_of_all_moves_add_up_to_the_change():
    customers, paid = effects()
    change = outcome(P1) - outcome(P0)
    np.testing.assert_allclose(customers.sum(axis=(0, 1)), change[:, :3], atol=1e-11)
    np.testing.assert_allclose(paid.sum(axis=(0, 1)), change[1:, 3], atol=1e-11)


@pytest.mark.parametrize("move", [(0, 1), (0, 2), (1, 0), (1, 2)])
def test_the_effect_of_one_move_is_the_integral_of_its_derivative(move):
    # independent: complex-step derivative along the move's direction, integrated by scipy
    i, j = move
    direction = np.zeros((3, 3))
    direction[i, j], direction[i, i] = (P1 - P0)[i, j], -(P1 - P0)[i, j]

    def slope(u: float, target: int) -> float:
        matrix = (1 - u) * P0 + u * P1 + 1e-20j * direction
        x = np.array([100.0, 50, 0], dtype=complex)
        for coming in JOINERS:
            x = x @ matrix + coming
        return float(x[target].imag / 1e-20)

    customers, _ = effects()
    for target in range(3):
        whole, _ = quad(slope, 0, 1, args=(target,), epsabs=1e-11)
        assert customers[i, j, -1, target] == pytest.approx(whole, abs=1e-9)


def test_staying_has_no_effect_of_its_own_where_states_are_not_split():
    customers, paid = effects()
    assert np.abs(customers[range(3), range(3)]).max() == 0 and np.abs(paid[range(3), range(3)]).max() == 0


def expanded(rate: float) -> Schedule:
    """`steady` split by how long one has been there; the move on within it is no move that is reported."""
    matrix = np.array([[0.1, 0.7, 0, 0.2], [0, 0, 1 - rate, rate], [0, 0, 0.95, 0.05], [0, 0, 0, 1]])
    start = np.array([[1.0, 0, 0, 0], [0, 0.4, 0.6, 0], [0, 0, 0, 1]])
    join = np.array([[1.0, 0, 0, 0], [0, 1, 0, 0], [0, 0, 0, 1]])
    return Schedule(STATES, (Component(matrix[None], np.array([0, 1, 1, 2]), start, join),))


def test_split_states_are_told_by_declared_moves():
    old, new = (Course.of(expanded(rate), 0, 4) for rate in (0.3, 0.2))
    opening = old.expand(np.array([100.0, 50, 0]))
    customers, _ = move_effects(old, new, opening, JOINERS, NONE, np.zeros((3, 3)))
    a, b = (way(c, opening, JOINERS, NONE, np.zeros((3, 3))).counts for c in (old, new))
    np.testing.assert_allclose(customers.sum(axis=(0, 1)), b - a, atol=1e-11)
    # only leaving from `steady` changed, and staying pays for it: nothing is left for another move
    assert np.abs(np.delete(customers.reshape(9, 5, 3), 5, axis=0)).max() < 1e-12


def test_courses_of_other_hidden_states_are_not_alike():
    assert not Course.of(expanded(0.3), 0, 2).like(course(P0, 2)) and course(P0).like(course(P1))


def test_many_openings_are_followed_at_once():
    found = way(course(P0), [np.eye(3) * 100], NONE, NONE, MONEY)
    alone = way(course(P0), [np.array([0, 100.0, 0])], NONE, NONE, MONEY)
    assert found.counts.shape == (3, 5, 3)
    np.testing.assert_allclose(found.counts[1], alone.counts)


def test_quantities_are_weighted_sums():
    assert quantities_of(np.array([[1.0, 2, 3]]), {"all": np.ones(3), "b": np.array([0, 1, 0])}).tolist() == [
        [6, 2]
    ]


@settings(max_examples=25)
@given(st.lists(st.floats(0.01, 1), min_size=12, max_size=12), st.integers(1, 9))
def test_effects_add_up_for_any_rates_and_horizon(values, periods):
    raw = np.array(values).reshape(2, 2, 3)
    a, b = (np.vstack([r / r.sum(axis=1, keepdims=True), [[0, 0, 1]]]) for r in raw)
    x, none = np.array([30.0, 70, 0]), np.zeros((periods, 3))
    old, new = course(a, periods), course(b, periods)
    customers, paid = move_effects(old, new, [x], none, none, MONEY)
    first, second = (way(c, [x], none, none, MONEY) for c in (old, new))
    np.testing.assert_allclose(customers.sum(axis=(0, 1)), second.counts - first.counts, atol=1e-9)
    np.testing.assert_allclose(paid.sum(axis=(0, 1)), second.paid - first.paid, atol=1e-9)
