"""Expectation and maximisation: it climbs, it finds what was put in, one type is the chain."""

import numpy as np
import pytest
from scipy.optimize import minimize

from cohortflow.estimator.em import Types, membership, ordered, random_start, run, stayer_start
from cohortflow.estimator.patterns import patterns_of
from cohortflow.estimator.window import choose_window
from cohortflow.states import States
from tests.bench.worlds import panel_tally, simulate

TWO = States(["a", "b"])
STICKY, MOBILE = np.array([[0.95, 0.05], [0.1, 0.9]]), np.array([[0.4, 0.6], [0.5, 0.5]])


def patterns(customers=600, periods=12, seed=3):
    rng = np.random.default_rng(seed)
    half = customers // 2
    start = rng.integers(0, 2, customers)
    panel = np.vstack(
        [simulate(STICKY, start[:half], periods, rng), simulate(MOBILE, start[half:], periods, rng)]
    )
    tally = panel_tally(panel, TWO)
    return patterns_of(tally, choose_window(tally))


def test_two_types_are_found():
    data = patterns(4000)
    found = run(data, random_start(data, 2, np.random.default_rng(1)), prior=0.0)
    found = ordered(found, np.ones(2))
    assert found.converged
    assert np.allclose(found.P[0], STICKY, atol=0.02) and np.allclose(found.P[1], MOBILE, atol=0.03)
    assert found.share[2:] == pytest.approx(np.full((2, 2), 0.5), abs=0.06)


def test_the_maximum_is_that_of_a_general_optimiser():
    """Direct search (BFGS) over logits of the same likelihood, written apart."""
    data = patterns(300)
    found = run(data, random_start(data, 2, np.random.default_rng(1)), prior=0.0, tolerance=1e-9)

    def loss(x):
        a, b = 1 / (1 + np.exp(-x[:4].reshape(2, 2))), 1 / (1 + np.exp(-x[4:]))
        P = np.stack(
            [np.stack([a, 1 - a], axis=-1)[0], np.stack([a, 1 - a], axis=-1)[1]]
        )  # (type, origin, to a)
        logs = [data.moves @ np.log(P[g][data.cells[:, 0], data.cells[:, 1]]) for g in (0, 1)]
        w = b[data.group - 2]
        return -(data.n * np.log(w * np.exp(logs[0]) + (1 - w) * np.exp(logs[1]))).sum()

    start = np.array([2.0, -2.0, 0.0, 0.0, 0.0, 0.0])
    best = min(minimize(loss, start * k, method="BFGS").fun for k in (1, -1, 0.5))
    assert -found.loglik == pytest.approx(best, abs=1e-5)


def test_it_never_falls_and_one_type_is_the_pooled_chain():
    data = patterns()
    start = random_start(data, 2, np.random.default_rng(5))
    scores = [run(data, start, prior=0.25, rounds=k, tolerance=0).score for k in (1, 2, 4, 8, 16)]
    assert np.all(np.diff(scores) >= -1e-9)
    one = run(data, random_start(data, 1, np.random.default_rng(5)), prior=0.0)
    table = data.table()
    assert np.allclose(one.P[0], table / table.sum(axis=1, keepdims=True))
    assert one.loglik == pytest.approx((table * np.log(one.P[0])).sum())


def test_memberships_are_laws_and_a_fixed_type_stays_fixed():
    data = patterns()
    found = run(data, stayer_start(data), prior=0.0)
    z, _ = membership(data, found)
    assert np.allclose(z.sum(axis=1), 1) and np.array_equal(found.P[1], np.eye(2))
    moved = data.moves[:, 1] + data.moves[:, 2] > 0
    assert (z[moved, 1] < 1e-12).all()
    turned = ordered(found, np.ones(2))
    assert turned.fixed == 0 and np.array_equal(turned.P[0], np.eye(2))


def test_types_are_counted():
    assert Types(np.zeros((3, 2, 2)), np.zeros((4, 3))).count == 3
