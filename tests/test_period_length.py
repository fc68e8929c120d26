"""Longer and shorter periods."""

import numpy as np
import pytest

from cohortflow.chain import Chain
from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.period_length import change_period
from cohortflow.states import States

STATES = States(["low", "mid", "high"])
# Craig & Sendi (2002): six-month rates from counts; here taken as a quarter to have a root of three
COUNTS = np.array([[682, 33, 25], [154, 64, 47], [19, 19, 43]])
P = COUNTS / COUNTS.sum(axis=1, keepdims=True)


def test_up_is_the_power_and_not_cell_by_cell():
    month = Chain(STATES, P, period="month")
    quarter = change_period(month, "quarter")
    assert np.allclose(quarter.chain.matrix, P @ P @ P) and quarter.how == "power"
    assert quarter.chain.period.kind == "quarter" and np.allclose(quarter.chain.matrix.sum(axis=1), 1)
    by_cell = 1 - (1 - P) ** 3
    assert np.abs(by_cell.sum(axis=1) - 1).max() > 0.05
    assert np.allclose(change_period(month, "year").chain.matrix, np.linalg.matrix_power(P, 12))


def test_down_and_up_again_is_where_it_began():
    down = change_period(Chain(STATES, P, period="quarter"), "month")
    assert down.how == "generator" and down.unique and down.residual < 1e-12
    assert np.allclose(change_period(down.chain, "quarter").chain.matrix, P)


def test_no_root_is_refused_with_advice_or_repaired_with_its_distance():
    swap = Chain(States(["a", "b"]), [[0.1, 0.9], [0.9, 0.1]], period="year")
    with pytest.raises(NotIdentified, match="has no root that is a chain"):
        change_period(swap, "quarter")
    credit = Chain(STATES, [[0.9, 0.1, 0.0], [0.05, 0.85, 0.1], [0.01, 0.0, 0.99]], period="year")
    repaired = change_period(credit, "month", repair_by="quasi_optimal")
    assert repaired.how == "repaired" and repaired.distance > 0 and repaired.residual < 0.02
    assert "repaired" in repr(repaired) and len(repaired.to_frame()) == 9


def test_moves_that_take_two_steps_become_possible():
    states = States(["a", "b", "x"], exits=["x"], impossible=[("a", "x")])
    month = Chain(states, [[0.5, 0.5, 0], [0, 0.5, 0.5], [0, 0, 1]], period="month")
    assert change_period(month, "quarter").chain.states.impossible == ()


def test_refusals():
    with pytest.raises(CallError, match='A chain per week has no whole number of steps in a "month"'):
        change_period(Chain(STATES, P, period="week"), "month")
    with pytest.raises(NotIdentified, match='Nothing is known about moves out of "mid"'):
        change_period(Chain(STATES, np.where([[0], [1], [0]], np.nan, P), period="month"), "year")
