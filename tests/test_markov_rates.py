"""Generators: against scipy's integrator and matrix exponential, and closed forms."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.integrate import quad_vec
from scipy.linalg import expm

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov import (
    check_generator,
    mean_time_to_absorption,
    occupation_times,
    stationary,
    stationary_of_rates,
    transition_matrix,
)
from tests.markov_chains import chains, positive

TWO = np.array([[-0.4, 0.4], [0.1, -0.1]])


def generator_of(P: np.ndarray, pace: float = 1.0) -> np.ndarray:
    return pace * (P - np.eye(len(P)))


@given(chains(), st.floats(0.01, 20.0))
@settings(deadline=None)
def test_moves_within_a_time_are_a_chain(P, t):
    G = generator_of(P)
    moved = transition_matrix(G, t)
    assert moved.sum(axis=1) == pytest.approx(1.0, abs=1e-15) and (moved >= 0).all()
    assert moved == pytest.approx(expm(G * t), abs=1e-12)
    assert transition_matrix(G, t / 2) @ transition_matrix(G, t / 2) == pytest.approx(moved, abs=1e-12)


def test_what_cannot_be_reached_is_exactly_zero():
    moved = transition_matrix([[-1.0, 1.0, 0.0], [0.5, -0.5, 0.0], [0.1, 0.0, -0.1]], 3.0)
    assert (moved[:2, 2] == 0).all()


def test_two_states_in_closed_form():
    # p_00(t) = (q10 + q01 exp(-(q01 + q10) t)) / (q01 + q10)
    assert transition_matrix(TWO, 2.5)[0, 0] == pytest.approx(
        (0.1 + 0.4 * math.exp(-0.5 * 2.5)) / 0.5, rel=1e-14
    )


@given(chains(most=4))
@settings(deadline=None, max_examples=25)
def test_time_spent_is_the_integral(P):
    G = generator_of(P, pace=0.7)
    spent = occupation_times(G, 3.0)
    assert spent.sum(axis=1) == pytest.approx(3.0)
    assert spent == pytest.approx(quad_vec(lambda s: expm(G * s), 0, 3.0)[0], abs=1e-8)


def test_the_long_run_is_that_of_the_skeleton():
    G = generator_of(positive(6), pace=3.0)
    law = stationary_of_rates(G)
    assert law @ G == pytest.approx(0, abs=1e-15)
    assert law == pytest.approx(stationary(transition_matrix(G, 0.3)), rel=1e-12)
    assert stationary_of_rates([[-1.0, 1.0], [0.0, 0.0]]).tolist() == [0.0, 1.0]


def test_time_to_absorption_by_plain_solve():
    G = generator_of(positive(5), pace=2.0)
    inside = [0, 1, 3, 4]
    plain = np.linalg.solve(-G[np.ix_(inside, inside)], np.ones(4))
    assert mean_time_to_absorption(G, [2])[inside] == pytest.approx(plain, rel=1e-12)


def test_absorption_that_is_not_certain_takes_for_ever():
    G = [[-1.0, 0.5, 0.5], [0.0, 0.0, 0.0], [0.0, 0.0, 0.0]]
    assert mean_time_to_absorption(G, [2]).tolist() == [math.inf, math.inf, 0.0]
    assert mean_time_to_absorption(G, [1, 2]).tolist() == [1.0, 0.0, 0.0]


def test_slow_ways_out_keep_their_digits():
    # two states in turn at rates a = 1, b = 2 with a way out at 1e-14 from the second: 1/a + ... by hand
    # t1 = (1 + t0 b) / (b + e), t0 = 1/a + t1  ->  t1 = (1 + b/a) / e
    e = 1e-14
    G = np.array([[-1.0, 1.0, 0.0], [2.0, -2.0 - e, e], [0.0, 0.0, 0.0]])
    assert mean_time_to_absorption(G, [2])[1] == pytest.approx(3 / e, rel=1e-14)


def test_several_closed_classes_have_no_single_law():
    with pytest.raises(
        NotIdentified, match=r"the closed classes \[\(0,\), \(1,\)\] each have a law of their own"
    ):
        stationary_of_rates(np.zeros((2, 2)))


@pytest.mark.parametrize(
    ("G", "words"),
    [
        ([-1.0, 1.0], r"G has shape \(2,\); it must be a square matrix"),
        (
            [[0.0, np.nan], [0.0, 0.0]],
            "row 0 of G holds nan: nothing was observed there, and a rate is not invented",
        ),
        ([[0.1, -0.1], [0.0, 0.0]], r"G\[0, 1\] is -0\.1; a rate of moving is never negative"),
        ([[-0.2, 0.1], [0.0, 0.0]], "row 0 of G sums to -0.1; a row of rates sums to 0"),
    ],
)
def test_what_is_no_generator_is_refused(G, words):
    with pytest.raises(CallError, match=words):
        check_generator(G)


def test_large_rates_are_judged_by_their_size():
    assert check_generator([[-3e6, 3e6 + 1e-4], [0.0, 0.0]]).shape == (2, 2)


@pytest.mark.parametrize("t", [-1.0, np.nan, np.inf])
def test_a_length_of_time_is_checked(t):
    with pytest.raises(CallError, match="t is .*; a length of time is a finite number, not below 0"):
        transition_matrix(TWO, t)
