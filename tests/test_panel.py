"""The generator from sightings at uneven times."""

import numpy as np
import pandas as pd
import pytest
from scipy.linalg import expm, expm_frechet
from scipy.optimize import minimize

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.exact_times import generator_from_panel
from cohortflow.estimator.panel import Panel, _block_adjoint, _exponentials
from cohortflow.states import States

FOUR = States(["new", "on", "quiet", "off"], exits=["off"])
Q = np.array([[-0.5, 0.35, 0.1, 0.05], [0, -0.3, 0.25, 0.05], [0, 0.4, -0.6, 0.2], [0, 0, 0, 0]])


def sightings(rows=3000, seed=1, *, gaps=(0.5, 1.0, 2.0, 3.5), dated=False):
    """Customers seen at uneven times; with `dated`, an exit within the gap is dated."""
    rng = np.random.default_rng(seed)
    out = []
    for _ in range(rows):
        state, gap = int(rng.integers(0, 3)), float(rng.choice(gaps))
        first, time = state, 0.0
        while True:
            stay = rng.exponential(-1 / Q[state, state])
            if time + stay > gap:
                out.append((first, state, gap, False))
                break
            time += stay
            state = int(rng.choice(4, p=np.maximum(Q[state], 0) / -Q[state, state]))
            if state == 3:
                out.append((first, 3, time if dated else gap, dated))
                break
    frame = pd.DataFrame(out, columns=["from", "to", "gap", "dated"])
    names = np.array(FOUR.names, dtype=object)
    return frame.assign(**{c: names[frame[c]] for c in ("from", "to")})


def test_two_states_in_closed_form():
    # counts 80/20 and 30/70 after one period: p = .2, q = .3, generator -log(1-s)/s [[-p, p], [q, -q]], s = .5
    frame = pd.DataFrame(
        {"from": ["a", "a", "b", "b"], "to": ["a", "b", "a", "b"], "gap": 1.0, "n": [80, 20, 30, 70]}
    )
    found = generator_from_panel(frame, States(["a", "b"]))
    assert (
        pytest.approx(np.array([[-0.27725887, 0.27725887], [0.41588831, -0.41588831]]), abs=1e-6) == found.Q
    )
    assert found.settings["converged"] and found.notes == ()


def test_cd4_six_month_counts_give_the_published_monthly_root():
    # Craig & Sendi (2002), Health Economics 11, 33; counts VERIFIED, root recomputed by three programs (12 digits)
    counts = [[682, 33, 25], [154, 64, 47], [19, 19, 43]]
    names = ["low", "mid", "high"]
    frame = pd.DataFrame([(names[i], names[j], 6.0, counts[i][j]) for i in range(3) for j in range(3)],
                         columns=["from", "to", "gap", "n"])  # fmt: skip
    found = generator_from_panel(frame, States(names), unit="month")
    root = [[0.981901592574, 0.012197289849, 0.005901117577], [0.17657652349, 0.751704389666, 0.071719086844],
            [0.017703483243, 0.099285451394, 0.883011065363]]  # fmt: skip
    assert np.allclose(found.matrix(1.0), root, atol=2e-6)
    assert np.allclose(found.matrix(6.0), np.array(counts) / np.sum(counts, axis=1, keepdims=True), atol=2e-6)


def test_the_gradient_is_the_derivative():
    panel = Panel.of_frame(sightings(400, dated=True), FOUR)
    _, slope = panel.log_likelihood(Q)
    for i, j in ((0, 1), (1, 3), (2, 2)):
        E = np.zeros((4, 4))
        E[i, j] = 1e-6
        numerical = (panel.log_likelihood(Q + E)[0] - panel.log_likelihood(Q - E)[0]) / 2e-6
        assert slope[i, j] == pytest.approx(numerical, rel=1e-6, abs=1e-5)


def test_both_ways_to_the_adjoint_agree_with_scipys_derivative():
    rng = np.random.default_rng(1)
    M, gaps = rng.random((2, 4, 4)), np.array([0.7, 2.0])
    P, adjoint = _exponentials(Q, gaps)
    assert np.allclose(P, [expm(Q * g) for g in gaps])
    E = rng.random((4, 4))
    by_scipy = sum((M[w] * expm_frechet(Q * g, E * g, compute_expm=False)).sum() for w, g in enumerate(gaps))
    for found in (adjoint(M), _block_adjoint(Q, gaps, M)):
        assert (found * E).sum() == pytest.approx(by_scipy, rel=1e-10)
    # a generator without a basis of eigenvectors takes the block exponential
    chain = np.array([[-1.0, 1.0, 0], [0, -1.0, 1.0], [0, 0, -1.0]])
    P, adjoint = _exponentials(chain, gaps)
    assert np.allclose(P[0], expm(chain * 0.7)) and np.isfinite(adjoint(M[:, :3, :3])).all()


@pytest.mark.parametrize("dated", [False, True])
def test_the_truth_is_found_and_limits_hold_it(dated):
    inside = []
    for seed in range(8):
        found = generator_from_panel(sightings(3000, seed, dated=dated), FOUR, moves=Q > 0)
        assert found.settings["converged"]
        cells = Q > 0
        inside.append(((found.low <= Q) & (found.high >= Q))[cells])
    assert np.abs(found.Q - Q).max() < 0.08 and np.mean(inside) > 0.85


def test_it_is_the_maximum_of_an_independent_likelihood():
    frame = sightings(600)
    found = generator_from_panel(frame, FOUR, moves=Q > 0)
    cells = np.argwhere(Q > 0)
    index = {n: k for k, n in enumerate(FOUR.names)}
    seen = frame.groupby(["from", "to", "gap"]).size()

    def loss(x):
        G = np.zeros((4, 4))
        G[tuple(cells.T)] = np.exp(x)
        np.fill_diagonal(G, -G.sum(axis=1))
        P = {g: expm(G * g) for g in (0.5, 1.0, 2.0, 3.5)}
        return -sum(n * np.log(P[g][index[a], index[b]]) for (a, b, g), n in seen.items())

    best = minimize(loss, np.full(len(cells), -1.5), method="BFGS", options={"gtol": 1e-3}).fun
    assert -found.settings["log_likelihood"] == pytest.approx(best, abs=1e-4)


def test_dated_exits_are_worth_more():
    loose, sharp = (generator_from_panel(sightings(2000, dated=d), FOUR, moves=Q > 0) for d in (False, True))
    gap = [np.log(f.high[2, 3] / f.low[2, 3]) for f in (loose, sharp)]
    assert gap[1] < gap[0]


def test_a_move_that_the_data_do_not_want_is_reported():
    frame = pd.DataFrame({"from": ["a"] * 2, "to": ["a", "b"], "gap": 1.0, "n": [80, 20]})
    states = States(["a", "b", "c"], exits=["b", "c"])
    found = generator_from_panel(frame, states)
    assert any(n == "at_zero:a>c" for n in found.notes)
    assert found.Q[0, 1] == pytest.approx(-np.log(0.8), abs=1e-4)


def test_refusals():
    frame = sightings(50)
    with pytest.raises(CallError, match="gap is missing"):
        generator_from_panel(frame.drop(columns="gap"), FOUR)
    with pytest.raises(CallError, match="a state before and after; some are missing"):
        generator_from_panel(frame.assign(to=None), FOUR)
    with pytest.raises(CallError, match="time above 0"):
        generator_from_panel(frame.assign(gap=0.0), FOUR)
    with pytest.raises(CallError, match="Only moves into an exit can be dated"):
        generator_from_panel(frame.assign(dated=True), FOUR)
    with pytest.raises(NotIdentified, match="never seen with a later sighting"):
        generator_from_panel(frame[frame["from"] != "quiet"], FOUR)
