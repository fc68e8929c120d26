"""Logarithms, generators behind a chain, and roots: closed forms, scipy, and chains that have none."""

import math

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from scipy.linalg import expm, fractional_matrix_power, logm

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov import embedding, principal_logarithm, root, transition_matrix
from tests.markov_chains import chains, positive

CYCLE = np.array([[0.0, 1.0, 0.0], [0.0, 0.0, 1.0], [1.0, 0.0, 0.0]])
# A credit-type chain: most stay, moves to neighbours, an absorbing end; its logarithm has small negative
# rates
CREDIT = np.array(
    [
        [0.9000, 0.0800, 0.0150, 0.0050, 0.0000],
        [0.0200, 0.8800, 0.0800, 0.0150, 0.0050],
        [0.0010, 0.0500, 0.8500, 0.0800, 0.0190],
        [0.0000, 0.0010, 0.0700, 0.8300, 0.0990],
        [0.0000, 0.0000, 0.0000, 0.0000, 1.0000],
    ]
)


@given(st.floats(0.01, 0.98), st.floats(0.01, 0.98))
@settings(deadline=None)
def test_two_states_are_embeddable_exactly_when_they_stay_more_than_they_move(p, q):
    found = embedding([[1 - p, p], [q, 1 - q]])
    if abs(p + q - 1) > 1e-6:
        assert found.code == ("embeddable" if p + q < 1 else "not_embeddable")
    if p + q < 1 - 1e-6:
        # methods.md, section G: -log(1 - s) / s [[-p, p], [q, -q]], s = p + q
        factor = -math.log(1 - p - q) / (p + q)
        assert found.generator == pytest.approx(factor * np.array([[-p, p], [q, -q]]), rel=1e-8)
        assert found.unique is True


@given(chains(most=4), st.floats(0.05, 0.8))
@settings(deadline=None)
def test_a_chain_made_from_rates_is_found_out(P, pace):
    G = pace * (P - np.eye(len(P)))
    moved = transition_matrix(G, 1.0)
    found = embedding(moved)
    if found.code == "embeddable":  # equal eigenvalues may leave rounding in the logarithm
        assert expm(found.generator) == pytest.approx(moved, abs=1e-8)
    else:
        assert found.code == "undecided"
    if (np.diag(moved) > 0.5).all() and found.code == "embeddable":
        assert found.unique is True


def test_the_logarithm_is_scipys_with_rows_of_zero():
    P = 0.4 * positive(5) + 0.6 * np.eye(5)
    log = principal_logarithm(P)
    assert log == pytest.approx(logm(P).real, abs=1e-12)
    assert log.sum(axis=1) == pytest.approx(0, abs=1e-16)


def test_several_generators_are_counted():
    # a cycle run fast: eigenvalues of G are 0 and r(-3/2 +- i sqrt(3)/2), r = 2 pi / sqrt(3) * 2 turns the
    # pair once round, so that exp(G) has real eigenvalues and other generators stand behind the same chain
    r = 3.8
    P = expm(r * (CYCLE - np.eye(3)))
    found = embedding(P / P.sum(axis=1, keepdims=True))
    assert found.code == "embeddable"
    assert found.unique is False  # the principal branch, and the branch that ran with the cycle
    assert expm(found.generator) == pytest.approx(P, abs=1e-10)


@pytest.mark.parametrize(
    ("P", "failing"),
    [
        ([[0.1, 0.9], [0.9, 0.1]], "det P > 0"),
        (CYCLE, "det P <= prod p_ii"),
        ([[0.5, 0.5, 0.0], [0.0, 0.5, 0.5], [0.0, 0.0, 1.0]], "reached in one period if ever"),
    ],
)
def test_necessary_conditions_rule_a_generator_out(P, failing):
    found = embedding(P)
    assert found.code == "not_embeddable" and found.generator is None and found.unique is None
    assert found.reason.startswith(f"no generator: {failing} fails")
    assert not {c.name: c.holds for c in found.conditions}[failing]


def test_every_condition_is_listed_with_its_figures():
    found = embedding([[0.8, 0.2], [0.3, 0.7]])
    assert [c.name for c in found.conditions] == [
        "det P > 0",
        "det P <= prod p_ii",
        "reached in one period if ever",
        "negative eigenvalues in pairs",
        "no other eigenvalue of modulus 1",
        "eigenvalues in Runnenberg's region",
    ]
    assert all(c.holds for c in found.conditions)
    assert found.conditions[1].detail == "det P = 0.5, prod p_ii = 0.56"


def test_eigenvalues_outside_the_region_are_seen():
    # three states on a ring with a strong sense of turning: eigenvalue 0.1 + 0.9 w, w = exp(2 pi i / 3)
    P = 0.1 * np.eye(3) + 0.9 * CYCLE
    angle = abs(np.angle(np.log(0.1 + 0.9 * np.exp(2j * math.pi / 3))))
    assert angle < (0.5 + 1 / 3) * math.pi
    failed = [c.name for c in embedding(P).conditions if not c.holds]
    assert "eigenvalues in Runnenberg's region" in failed


def test_a_single_negative_eigenvalue_and_a_unit_one_are_seen():
    def failed(P):
        return [c.name for c in embedding(P).conditions if not c.holds]

    assert "negative eigenvalues in pairs" in failed([[0.1, 0.9], [0.9, 0.1]])
    assert "no other eigenvalue of modulus 1" in failed(CYCLE)


def test_majority_stayers_with_a_negative_rate_have_no_generator():
    # the zeros of the credit-type chain made positive, too little for the several-period moves around them
    P = CREDIT.copy()
    P[0, 4] = P[3, 0] = 1e-6
    P[0, 0], P[3, 3] = P[0, 0] - 1e-6, P[3, 3] - 1e-6
    found = embedding(P)
    assert found.code == "not_embeddable" and all(c.holds for c in found.conditions)
    assert (
        "negative rate of -" in found.reason and "every p_ii > 1/2 leaves no other candidate" in found.reason
    )
    assert logm(P).real[0, 4] < -1e-4


def test_without_a_majority_every_branch_is_looked_at():
    # rates found by random search: the principal logarithm has a negative rate, the branch one turn on is
    # G itself
    G = np.array([[-4.3, 4.2, 0.1], [0.0, -4.9, 4.9], [6.6, 1.5, -8.1]])
    P = transition_matrix(G, 1.0)
    assert logm(P).real[1, 2] < -0.05
    found = embedding(P)
    assert (found.code, found.unique) == ("embeddable", True) and "another branch is" in found.reason
    assert found.generator == pytest.approx(G, abs=1e-7)
    # distinct positive eigenvalues: the only real logarithm is the principal one, and that has a negative
    # rate
    H = np.array([[0.81, 0.11, 0.08], [0.02, 0.43, 0.55], [0.49, 0.22, 0.29]])
    assert (np.linalg.eigvals(H).real > 0).all() and (np.linalg.eigvals(H).imag == 0).all()
    assert "no other real logarithm is a generator" in embedding(H).reason


def test_equal_eigenvalues_leave_the_question_open():
    # P = 1 pi' + 0.1 (I - 1 pi') + N with N N = 0: eigenvalue 0.1 twice, in one Jordan block; the
    # logarithm is log 0.1 (I - 1 pi') + N / 0.1, and N_02 = -0.2 gives a rate of 2.303 / 3 - 2 < 0
    N = 0.1 * np.array([[1.0, 1.0, -2.0], [-1.0, -1.0, 2.0], [0.0, 0.0, 0.0]])
    P = np.full((3, 3), 0.3) + 0.1 * np.eye(3) + N
    found = embedding(P)
    assert found.code == "undecided" and "equal eigenvalues or too many branches" in found.reason


def test_too_many_branches_leave_the_question_open():
    ring = np.roll(np.eye(12), 1, axis=1)
    found = embedding(transition_matrix(6 * (ring - np.eye(12)), 1.0))
    assert found.code == "undecided" and found.generator is None


def test_no_logarithm_where_there_is_none():
    with pytest.raises(
        NotIdentified, match="P has the negative eigenvalue -0.8, so its principal logarithm is not real"
    ):
        principal_logarithm([[0.1, 0.9], [0.9, 0.1]])
    with pytest.raises(NotIdentified, match=r"P is singular \(an eigenvalue is 0\), so it has no logarithm"):
        principal_logarithm([[0.5, 0.5], [0.5, 0.5]])


@given(st.floats(0.01, 0.49), st.floats(0.01, 0.49), st.integers(1, 12))
@settings(deadline=None)
def test_roots_multiply_back(p, q, n):
    P = np.array([[1 - p, p], [q, 1 - q]])
    found = root(P, n)
    assert np.linalg.matrix_power(found.matrix, n) == pytest.approx(P, abs=1e-12)
    assert found.matrix == pytest.approx(fractional_matrix_power(P, 1 / n), abs=1e-9)
    assert (found.how, found.distance, found.unique) == ("generator", 0.0, True) and found.residual < 1e-12


def test_a_principal_root_may_do_without_a_generator():
    # the square of a chain with a zero: its root is that chain, though no generator stands behind either
    half = np.array([[0.90, 0.10, 0.00], [0.05, 0.90, 0.05], [0.00, 0.10, 0.90]])
    found = root(half @ half, 2)
    assert found.matrix == pytest.approx(half, abs=1e-12)
    assert (found.how, found.generator) == ("principal_root", None) and found.residual < 1e-14


def test_a_root_that_is_no_chain_is_refused_with_advice():
    with pytest.raises(
        NotIdentified, match=r"1/12 of the period: .* the principal root has an entry of -.*Count the moves"
    ):
        root(CREDIT, 12)
    with pytest.raises(
        NotIdentified, match="1/2 of the period: P has the negative eigenvalue .*Count the moves again"
    ):
        root([[0.1, 0.9], [0.9, 0.1]], 2)


@pytest.mark.parametrize("by", ["diagonal", "weighted", "quasi_optimal"])
def test_a_repaired_root_states_its_distance(by):
    found = root(CREDIT, 12, repair_by=by)
    assert found.how == "repaired" and found.distance > 0
    assert (found.matrix >= 0).all() and found.matrix.sum(axis=1) == pytest.approx(1)
    assert found.residual == pytest.approx(np.abs(np.linalg.matrix_power(found.matrix, 12) - CREDIT).max())
    assert 1e-6 < found.residual < 5e-3


def test_absorbing_states_stay_absorbing():
    found = root([[0.8, 0.15, 0.05], [0.1, 0.8, 0.1], [0.0, 0.0, 1.0]], 3)
    assert found.matrix[2].tolist() == [0.0, 0.0, 1.0] and found.generator[2].tolist() == [0.0, 0.0, 0.0]


def test_parts_are_whole():
    with pytest.raises(CallError, match="n is 0; it must be a whole number of periods, at least 1"):
        root([[0.8, 0.2], [0.3, 0.7]], 0)
