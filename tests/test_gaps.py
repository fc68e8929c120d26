"""Missing periods inside histories: EM with powers of P, against dropping and against direct search."""

import numpy as np
import pandas as pd
import pytest
from scipy.optimize import minimize

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator import fit
from cohortflow.estimator.gaps import expected_moves, inside
from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.tally import Meta, Tally
from tests.bench.worlds import simulate

THREE = States(["a", "b", "c"])
TRUE = np.array([[0.72, 0.18, 0.1], [0.2, 0.6, 0.2], [0.15, 0.1, 0.75]])


def gappy(customers=2000, missing=0.2, seed=1, states=THREE, P=TRUE):
    """Histories of 12 periods with rows missing by chance, and moves over gaps counted as such."""
    rng = np.random.default_rng(seed)
    panel = simulate(P, rng.integers(0, 2, customers), 12, rng)
    panel[:, 1:][rng.random((customers, 11)) < missing] = -1
    rows = []
    for c, path in enumerate(panel):
        at = np.flatnonzero(path >= 0)
        for t, u in zip(at, at[1:], strict=False):
            rows.append((c, 0, t, u - t, 0, path[t], path[u], 1, 1))
    columns = ["bucket", "segment", "period", "gap", "end", "state", "next_state", "n", "weight"]
    return Tally.build(
        Meta(states, Calendar("step"), 0, 11, customers, "gaps"),
        {"moves": pd.DataFrame(rows, columns=columns)},
    )


def test_both_ways_are_right_and_em_is_the_maximum():
    tally = gappy()
    drop, em = (fit(tally, gaps=way) for way in ("drop", "em"))
    P = em.chain.matrix
    assert np.abs(drop.P - TRUE).max() < 0.02 and np.abs(P - TRUE).max() < 0.02
    moves = tally.table("moves")
    counts = moves.groupby(["gap", "state", "next_state"])["n"].sum()

    def loss(x):
        W = np.exp(np.insert(x.reshape(3, 2), 0, 0.0, axis=1))
        M = W / W.sum(axis=1, keepdims=True)
        return -sum(n * np.log(np.linalg.matrix_power(M, g)[i, j]) for (g, i, j), n in counts.items())

    best = minimize(loss, np.zeros(6), method="BFGS").x
    W = np.exp(np.insert(best.reshape(3, 2), 0, 0.0, axis=1))
    assert np.allclose(P, W / W.sum(axis=1, keepdims=True), atol=1e-4)


def test_em_is_nearer_to_the_truth_over_repetitions():
    errors = []
    for seed in range(25):
        tally = gappy(150, 0.45, seed)
        errors.append([np.square(fit(tally, gaps=w).chain.matrix - TRUE).sum() for w in ("drop", "em")])
    drop, em = np.mean(errors, axis=0)
    assert em < 0.95 * drop


def test_expected_moves_by_hand():
    # a pair a . b two apart with P = [[.5, .5], [.5, .5]]: ways a a b and a b b, each 1/2: moves aa .5, ab 1, bb .5
    found = inside(np.full((2, 2), 0.5), np.array([[0.0, 1.0], [0, 0]]), 2)
    assert found.tolist() == [[0.5, 0.5 + 0.0], [0.0, 0.5]] or np.allclose(found, [[0.5, 1.0], [0, 0.5]])
    assert found.sum() == pytest.approx(2.0)


def test_an_exit_comes_last():
    states = States(["on", "off"], exits=["off"])
    gaps = np.zeros((4, 2, 2))
    gaps[3, 0, 1] = 5.0  # five customers seen on, then off three periods later: two stays and one exit each
    total, _ = expected_moves(np.array([[20.0, 2.0], [0, 0]]), gaps, states)
    assert total.tolist() == pytest.approx(np.array([[30.0, 7.0], [0, 0]]))


def test_refusals():
    with pytest.raises(CallError, match='Unknown way "carry" for gaps. Allowed: "drop", "em"'):
        fit(gappy(50), gaps="carry")
    with pytest.raises(NotIdentified, match=r"1 pair\(s\) of rows 2 periods apart cannot follow"):
        inside(np.array([[1.0, 0], [0, 1.0]]), np.array([[0.0, 1.0], [0, 0]]), 2)
    tally = gappy(50)
    moves = tally.table("moves").copy()
    moves.loc[0, "gap"] = 61
    far = Tally.build(tally.meta, {"moves": moves})
    with pytest.raises(NotIdentified, match="A gap of 61 periods is too long"):
        fit(far, gaps="em")
