"""The error of latent types: against numerical derivatives and against repetition."""

import numpy as np
import pytest

from cohortflow.estimator import fit
from cohortflow.estimator.em import Types, membership, run, stayer_start
from cohortflow.estimator.mixture_error import TypeSampler, _Parts
from cohortflow.estimator.patterns import patterns_of
from cohortflow.estimator.window import choose_window
from cohortflow.states import States
from tests.bench.worlds import panel_tally, simulate

TWO = States(["a", "b"])
STICKY, MOBILE = np.array([[0.95, 0.05], [0.1, 0.9]]), np.array([[0.4, 0.6], [0.5, 0.5]])


def data(customers=1000, seed=3):
    rng = np.random.default_rng(seed)
    start, half = rng.integers(0, 2, customers), customers // 2
    panel = np.vstack([simulate(STICKY, start[:half], 12, rng), simulate(MOBILE, start[half:], 12, rng)])
    return panel_tally(panel, TWO)


def shifted(types, x, cells):
    """The types with log-weights moved by x: cells of each type, then memberships."""
    G, F = types.count, len(cells)
    P = types.P.copy()
    for g in range(G):
        P[g, cells[:, 0], cells[:, 1]] *= np.exp(x[g * F : (g + 1) * F])
    share = types.share * np.exp(x[G * F :].reshape(types.share.shape))
    return Types(P / P.sum(axis=2, keepdims=True), share / share.sum(axis=1, keepdims=True))


def test_scores_and_slopes_equal_numerical_ones():
    counts = data()
    patterns = patterns_of(counts, choose_window(counts))
    types = fit(counts, model="mixture", types=2).sampler.types
    parts = _Parts(patterns, types, 0.0)
    score = (parts._score() * patterns.n[:, None]).sum(axis=0)
    slope = parts._slopes(parts.counts()).reshape(-1, 2, len(score))
    step, d = 1e-6, len(score)
    for k in range(d):
        up, down = (shifted(types, s * np.eye(d)[k], patterns.cells) for s in (step, -step))
        numerical = (membership(patterns, up)[1] - membership(patterns, down)[1]) / (2 * step)
        assert score[k] == pytest.approx(numerical, abs=2e-4 * (1 + abs(numerical)))
        rates = ((up.P - down.P) / (2 * step)).reshape(4, 2)
        assert np.allclose(slope[:4, :, k], rates, atol=1e-7)
        now = [_now(patterns, t) for t in (up, down)]
        assert np.allclose(slope[4:6, :, k], (now[0] - now[1]) / (2 * step), atol=1e-6)


def _now(patterns, types):
    z, _ = membership(patterns, types)
    return np.stack(
        [(patterns.n * (patterns.now == k)) @ z / patterns.n[patterns.now == k].sum() for k in (0, 1)]
    )


def test_the_error_is_that_of_repetition():
    found = []
    for seed in range(60):
        f = fit(data(800, seed), model="mixture", types=2, starts=3)
        found.append(f.schedule.components[0].matrices[0][1, 1])
        if seed == 0:
            first = f.draws(3000, rng=1).matrices[0][:, 0, 1, 1].std()
    assert first == pytest.approx(np.std(found), rel=0.35)


def test_stayers_do_not_scatter_and_movers_do():
    counts = data()
    patterns = patterns_of(counts, choose_window(counts))
    f = fit(counts, model="mover_stayer")
    drawn = f.draws(300, rng=1)
    by_name = {c.name: m for c, m in zip(f.schedule.components, drawn.matrices, strict=True)}
    assert (by_name["stayers"] == np.eye(2)).all() and by_name["movers"].std(axis=0).min() > 1e-3
    sampler = TypeSampler(patterns, run(patterns, stayer_start(patterns), prior=0.0), 0.0)
    assert sampler.draws(f.schedule, 5, rng=1, covariance="customer").size == 5
