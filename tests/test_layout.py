"""Laying rows of rates into matrices of expanded states."""

import numpy as np

from cohortflow.estimator import fit
from cohortflow.estimator.layout import lay_out, unknown_states, with_exits
from cohortflow.estimator.rows import RowCounts
from cohortflow.states import States
from tests.bench.worlds import CHAIN, STATES, panel_tally, simulate


def test_a_ladder_by_hand():
    # one state on a ladder of two rungs and an exit: rung 0 leaves with .3, rung 1 with .1
    rates = np.array([[0.7, 0.3], [0.9, 0.1]])
    out = lay_out(rates, np.array([0, 1, 0]), np.array([[1, 2], [1, 2], [-1, -1]]))
    assert out.tolist() == [[0, 0.7, 0.3], [0, 0.9, 0.1], [0, 0, 0]]
    stacked = lay_out(np.stack([rates, rates]), np.array([0, 1, 0]), np.array([[1, 2], [1, 2], [-1, -1]]))
    assert stacked.shape == (2, 3, 3)


def test_exits_get_their_unit_rows():
    out = with_exits(np.full((2, 2, 2), np.nan), np.array([False, True]))
    assert np.isnan(out[:, 0]).all() and (out[:, 1] == [0, 1]).all()


def test_unknown_states_are_those_nobody_left():
    states = States(["a", "b", "x"], exits=["x"])
    assert unknown_states(RowCounts.of_matrix([[1, 2, 0], [0, 0, 0], [0, 0, 0]]), states) == ("b",)


def test_draws_of_a_shrunk_model_scatter_between_the_pools_and_the_rows_error():
    """Two segments of one law: the rates are pooled, and so is the error: about that of the plain model."""
    rng = np.random.default_rng(3)
    panel = simulate(CHAIN, np.zeros(2000, int), 13, rng)
    counts = panel_tally(panel, STATES, segment=rng.integers(0, 2, 2000))
    plain, split = fit(counts), fit(counts, model="segment", by="group")
    own = fit(counts.by_segment("group")["a"])
    sd = {f: f.draws(1500, rng=1).matrices[0][:, 0, 1, 4].std() for f in (plain, split, own)}
    assert 0.9 * sd[plain] < sd[split] < 1.05 * sd[own]
