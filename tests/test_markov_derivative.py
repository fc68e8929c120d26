"""Derivatives of mixes, long-run laws and passage times: each by complex step on plain formulae."""

import numpy as np
import pytest

from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov import (
    first_passage_derivative,
    fundamental_derivative,
    fundamental_matrix,
    joined,
    kemeny_constant,
    kemeny_derivative,
    mean_first_passage,
    mix_derivative,
    remaining,
    remaining_mix_derivative,
    retention_derivative,
    sequence_derivative,
    stationary,
    stationary_derivative,
)
from tests.markov_chains import LIFECYCLE, along_rows, complex_step, positive

P4 = positive(4)
TOLERANCE = {"rel": 1e-9, "abs": 1e-11}


def law_of(P: np.ndarray) -> np.ndarray:
    """pi (I - P + 1 1') = 1' for rows that sum to 1: complex-capable, unlike elimination."""
    return np.linalg.solve((np.eye(len(P)) - P + 1).T, np.ones(len(P)))


def z_of(P: np.ndarray) -> np.ndarray:
    return np.linalg.inv(np.eye(len(P)) - P + law_of(P)[None, :])


def on_rows(function):
    """The function along directions that keep row sums: E_ij minus its even spread over the row."""

    def moved(P: np.ndarray) -> np.ndarray:
        return function(P - (P.imag.sum(axis=1, keepdims=True) * 1j) / len(P))

    return moved


def test_n_step_mix():
    start, steps = np.array([5.0, 0.0, 2.0, 1.0]), 7
    found = mix_derivative(P4, start, steps=steps)
    assert found.value == pytest.approx(start @ np.linalg.matrix_power(P4, steps), rel=1e-13)
    step = complex_step(lambda P: start @ np.linalg.matrix_power(P, steps), P4)
    assert found.full() == pytest.approx(step, **TOLERANCE)


def test_n_step_totals():
    paying = np.array([[1.0, 0.0], [1.0, 2.0], [0.0, -1.0], [1.0, 0.5]])
    found = mix_derivative(P4, 2, steps=5, weights=paying)
    step = complex_step(lambda P: np.eye(4)[2] @ np.linalg.matrix_power(P, 5) @ paying, P4)
    assert found.full() == pytest.approx(step, **TOLERANCE)
    assert found.along([2.0, -1.0]) == pytest.approx(2 * step[0] - step[1], **TOLERANCE)


def test_one_matrix_of_a_sequence():
    chain = [positive(4, seed) for seed in (5, 6, 7)]
    joiners = np.arange(12.0).reshape(3, 4)
    found = sequence_derivative(chain, [1.0, 2.0, 3.0, 4.0], joiners=joiners)
    for place in range(3):

        def end(P, place=place):
            base = np.array([1.0, 2.0, 3.0, 4.0])
            for k, matrix in enumerate(chain):
                base = base @ (P if k == place else matrix) + joiners[k]
            return base

        assert found[place].value == pytest.approx(end(chain[place]), rel=1e-13)
        assert found[place].full() == pytest.approx(complex_step(end, chain[place]), **TOLERANCE)


def test_a_season_that_comes_round():
    summer, winter = positive(3, 1), positive(3, 2)
    found = sequence_derivative([summer, winter, summer, winter], 0)
    step = complex_step(lambda P: np.eye(3)[0] @ P @ winter @ P @ winter, summer)
    assert joined([found[0], found[2]]).full() == pytest.approx(step, **TOLERANCE)


def test_stationary_law():
    found = stationary_derivative(P4)
    assert found.value == pytest.approx(law_of(P4), rel=1e-13)
    assert along_rows(found.full()) == pytest.approx(complex_step(on_rows(law_of), P4), **TOLERANCE)


def test_stationary_law_with_transient_states():
    P = np.array([[0.2, 0.5, 0.3], [0.0, 0.6, 0.4], [0.0, 0.1, 0.9]])
    found = stationary_derivative(P)
    assert along_rows(found.full()) == pytest.approx(complex_step(on_rows(law_of), P), **TOLERANCE)
    assert found.full()[:, 0].tolist() == np.zeros((3, 3)).tolist()  # nobody is in state 0 in the end


def test_kemeny_constant():
    found = kemeny_derivative(P4)
    assert found.value[0] == pytest.approx(kemeny_constant(P4), rel=1e-13)
    step = complex_step(on_rows(lambda P: np.trace(z_of(P))), P4)
    assert along_rows(found.full()) == pytest.approx(step, **TOLERANCE)


def test_fundamental_matrix():
    start = np.array([0.1, 0.2, 0.3, 0.4])
    found = fundamental_derivative(P4, start)
    assert found.value == pytest.approx(start @ fundamental_matrix(P4), rel=1e-12)
    step = complex_step(on_rows(lambda P: start @ z_of(P)), P4)
    assert along_rows(found.full()) == pytest.approx(step, **TOLERANCE)


def passage_of(P: np.ndarray, target: int) -> np.ndarray:
    others = [s for s in range(len(P)) if s != target]
    ahead = np.linalg.solve(np.eye(len(others)) - P[np.ix_(others, others)], np.ones(len(others)))
    out = np.zeros(len(P), dtype=P.dtype)
    out[others] = ahead
    out[target] = 1 + P[target, others] @ ahead
    return out


@pytest.mark.parametrize("target", range(4))
def test_first_passage_with_every_entry_free(target):
    found = first_passage_derivative(P4, target)
    assert found.value == pytest.approx(mean_first_passage(P4)[:, target], rel=1e-13)
    assert found.full() == pytest.approx(complex_step(lambda P: passage_of(P, target), P4), **TOLERANCE)


def test_first_passage_where_arrival_is_not_certain():
    found = first_passage_derivative(LIFECYCLE, 4)
    assert found.value.tolist() == pytest.approx(mean_first_passage(LIFECYCLE)[:, 4].tolist())
    assert np.isfinite(found.gradient(0)).all()
    never = first_passage_derivative(LIFECYCLE, 1)
    assert np.isinf(never.value).all() and np.isnan(never.gradient(0)).all()


def run_down(Q: np.ndarray) -> tuple[np.ndarray, complex]:
    """u and lambda by a long product: complex-capable, and with no eigenvalue routine in it."""
    law = np.full(len(Q), 1 / len(Q), dtype=Q.dtype)
    for _ in range(800):
        law = law @ Q
        kept = law.sum()
        law = law / kept
    return law, kept


@pytest.mark.parametrize(
    "Q",
    [
        positive(4, 3) * np.array([[0.95], [0.8], [0.9], [0.99]]),
        LIFECYCLE[:4, :4],  # an entry state that is never entered again
        np.array([[0.6, 0.2, 0.1], [0.3, 0.6, 0.05], [0.0, 0.0, 0.4]]),  # a class that is only fed
    ],
)
def test_remaining_mix_and_retention(Q):
    assert remaining(Q).ratio < 0.95
    mix, rate = remaining_mix_derivative(Q), retention_derivative(Q)
    assert mix.full() == pytest.approx(complex_step(lambda X: run_down(X)[0], Q), **TOLERANCE)
    assert rate.full() == pytest.approx(complex_step(lambda X: run_down(X)[1], Q), **TOLERANCE)


def test_where_classes_tie_there_is_no_derivative():
    for Q in ([[0.5, 0.2], [0.0, 0.5]], np.eye(2) * 0.5, [[0.0, 0.5], [0.0, 0.0]]):
        with pytest.raises(NotIdentified, match="the mix of those remaining has no derivative here: "):
            remaining_mix_derivative(Q)
        with pytest.raises(NotIdentified, match="has no derivative here"):
            retention_derivative(Q)


def test_several_closed_classes_have_no_derivative_of_one_law():
    for derivative in (stationary_derivative, kemeny_derivative):
        with pytest.raises(NotIdentified, match="there are 2 closed classes, so no single stationary law"):
            derivative(np.eye(2))


@pytest.mark.parametrize(
    ("call", "words"),
    [
        (lambda: sequence_derivative([], 0), "matrices must hold at least one matrix, all of the same shape"),
        (lambda: sequence_derivative([np.eye(2), np.eye(3)], 0), "all of the same shape"),
        (lambda: sequence_derivative([[[0.5, 0.4], [0, 1]]], 0), r"row 0 of matrices\[0\] sums to 0.9"),
        (
            lambda: mix_derivative(P4, 0, steps=0),
            "steps is 0; it must be a whole number of periods, at least 1",
        ),
        (
            lambda: mix_derivative(P4, 0, steps=2, weights=[1, 2]),
            r"weights has shape \(2,\); it must hold finite",
        ),
        (
            lambda: sequence_derivative([P4], 0, joiners=[1, 2]),
            r"joiners has shape \(2,\); it must hold finite",
        ),
    ],
)
def test_bad_calls_are_refused(call, words):
    with pytest.raises(CallError, match=words):
        call()


def test_three_hundred_states():
    P = positive(300)
    law, slope = stationary(P), stationary_derivative(P).gradient(7)
    assert slope.shape == (300, 300)
    # finite difference along a move of 1e-6 from cell (3, 4) to cell (3, 5)
    moved = P.copy()
    moved[3, 4] -= 1e-6
    moved[3, 5] += 1e-6
    change = (stationary(moved)[7] - law[7]) / 1e-6
    assert change == pytest.approx(slope[3, 5] - slope[3, 4], rel=1e-4)
