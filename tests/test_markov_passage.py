"""First passages: against plain solves, simulation-free recursions and the identities they must keep."""

import mpmath
import numpy as np
import pytest
from hypothesis import given, settings

from cohortflow.errors import CallError
from cohortflow.markov import (
    analyse,
    first_passage_law,
    hit_before,
    mean_first_passage,
    mean_time_to,
    reach_probability,
    stationary,
    surely_reaches,
    variance_first_passage,
)
from cohortflow.markov.passage import scatter
from tests.markov_chains import LIFECYCLE, chains, positive


@given(chains())
@settings(deadline=None)
def test_return_times_and_stationary_shares_are_reciprocal(P):
    if analyse(P).irreducible:
        assert stationary(P) * np.diag(mean_first_passage(P)) == pytest.approx(1.0)


@given(chains())
@settings(deadline=None)
def test_times_are_finite_exactly_where_arrival_is_certain(P):
    M, V, F = mean_first_passage(P), variance_first_passage(P), reach_probability(P)
    for target in range(len(P)):
        certain = surely_reaches(P, [target])
        certain[target] = certain[P[target] > 0].all()
        assert np.isfinite(M[:, target]).tolist() == certain.tolist()
        assert (F[:, target] == 1.0).tolist() == certain.tolist()
    assert (np.isfinite(V) == np.isfinite(M)).all() and (V >= 0).all()
    assert (F >= 0).all() and (F <= 1 + 1e-12).all()


@given(chains(most=4))
@settings(deadline=None)
def test_mean_variance_and_chance_sum_up_the_law(P):
    steps = 3000
    n = np.arange(1, steps + 1)
    M, V, F = mean_first_passage(P), variance_first_passage(P), reach_probability(P)
    for target in range(len(P)):
        law = first_passage_law(P, target, steps=steps)
        assert law.sum(axis=0) == pytest.approx(F[:, target], abs=1e-6)
        for source in np.flatnonzero(np.isfinite(M[:, target])):
            mean = n @ law[:, source]
            assert mean == pytest.approx(M[source, target], rel=1e-6)
            assert (n - mean) ** 2 @ law[:, source] == pytest.approx(V[source, target], rel=1e-5, abs=1e-8)


def test_the_fundamental_matrix_gives_the_same_times():
    P = positive(6)
    pi = stationary(P)
    Z = np.linalg.inv(np.eye(6) - P + pi)
    M = (np.diag(Z)[None, :] - Z) / pi
    np.fill_diagonal(M, 1 / pi)
    assert mean_first_passage(P) == pytest.approx(M, rel=1e-10)


def test_times_within_a_group_keep_their_digits_beside_one_that_is_almost_cut_off():
    # within the pair (0, 1) a trip takes about 2 periods, to the pair (2, 3) about 1e12: exact by mpmath
    P = np.array(
        [
            [0.5, 0.5, 0.0, 0.0],
            [0.5, 0.5 - 1e-12, 1e-12, 0.0],
            [0.0, 0.0, 0.5, 0.5],
            [1e-12, 0.0, 0.5, 0.5 - 1e-12],
        ]
    )
    with mpmath.workdps(50):
        c = mpmath.mpf(1e-12)
        half = mpmath.mpf(0.5)
        # to state 1: m0 = 1 + m0/2 = 2 exactly; to state 2 from 1: m1 = 1 + m0/2 + (1 - 1/2 - c) m1, m0 =
        # 2 + m1
        to_two = (1 + half * 2) / (1 - (1 - half - c) - half)
    M = mean_first_passage(P)
    assert M[0, 1] == 2.0
    assert M[1, 2] == pytest.approx(float(to_two), rel=1e-14)


def test_a_set_is_entered_as_its_earliest_member():
    lumped = np.array([[0.7, 0.3], [0.0, 1.0]])  # states 1 and 2 of the chain below, taken together
    P = np.array([[0.7, 0.1, 0.2], [0.5, 0.2, 0.3], [0.1, 0.1, 0.8]])
    assert mean_time_to(P, [1, 2])[0] == pytest.approx(mean_time_to(lumped, [1])[0]) == pytest.approx(1 / 0.3)
    assert mean_time_to([[1.0, 0.0], [0.5, 0.5]], [1]).tolist() == [np.inf, 0.0]


def test_hitting_one_set_before_another_by_plain_solve():
    # from N R L D before C or L: unknown h_N, h_R, h_D with h_L = 1, h_C = 0
    inside = [0, 1, 3]
    plain = np.linalg.solve(np.eye(3) - LIFECYCLE[np.ix_(inside, inside)], LIFECYCLE[inside, 2])
    assert hit_before(LIFECYCLE, [2], [4])[inside] == pytest.approx(plain, rel=1e-12)


def test_meeting_neither_set_counts_as_not_meeting_the_first():
    P = np.array([[0.25, 0.25, 0.25, 0.25], [0, 1.0, 0, 0], [0, 0, 1.0, 0], [0, 0, 0, 1.0]])
    # each of the three ends has 1/3
    assert hit_before(P, [1], [2]).tolist() == pytest.approx([1 / 3, 1, 0, 0])


def test_sets_that_overlap_are_refused():
    with pytest.raises(CallError, match=r"states \[1\] stand in both sets"):
        hit_before(positive(3), [0, 1], [1, 2])


def test_the_added_variance_by_hand():
    # 0.5 (0 - 1)^2 + 0.5 (3 - 1)^2 = 2.5
    assert scatter(np.array([[0.5, 0.5]]), np.array([0.0, 3.0]), np.array([1.0])).tolist() == [2.5]
