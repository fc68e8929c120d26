"""Paths into patterns of moves."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.errors import NotIdentified
from cohortflow.estimator.patterns import parse_paths, patterns_of
from cohortflow.estimator.window import choose_window
from cohortflow.states import States
from tests.bench.worlds import CHAIN, STATES, panel_tally, simulate

THREE = States(["a", "b", "x"], exits=["x"], entries=["a"])


def test_runs_of_paths():
    runs = parse_paths(pd.Series(["5 0*2 1*1", "7 -*1 2*1"]))
    assert runs.to_numpy().tolist() == [[0, 0, 5, 2], [0, 1, 7, 1], [1, -1, 7, 1], [1, 2, 8, 1]]


def test_patterns_by_hand():
    # a a b a (from the left edge) twice; a b . b (joined in period 1, a gap); b x
    panel = np.array([[0, 0, 1, 0, 0], [0, 0, 1, 0, 0], [-1, 0, 1, -1, 1], [1, 2, -1, -1, -1]])
    tally = panel_tally(panel, THREE)
    found = patterns_of(tally, choose_window(tally))
    assert found.table().tolist() == [[4, 3, 0], [2, 0, 1], [0, 0, 0]]
    assert np.array_equal(found.table(), tally.counts())
    two = found.n == 2
    assert found.now[two].tolist() == [0] and found.group[two].tolist() == [0 + 3]  # already there: plus K
    assert sorted(found.group.tolist()) == [0, 3, 4] and found.n.sum() == 4


def test_the_counts_equal_the_tallys_in_any_window():
    rng = np.random.default_rng(2)
    panel = simulate(CHAIN, np.zeros(400, int), 15, rng, entry=rng.integers(0, 14, 400))
    panel[rng.random(panel.shape) < 0.05] = -1
    panel = panel[(panel >= 0).any(axis=1)]
    tally = panel_tally(panel, STATES)
    for options in ({}, {"window": 5}, {"exclude": [4, 9]}, {"half_life": 3.0}):
        window = choose_window(tally, **options)
        moves = tally.one_step[window.keeps(tally.one_step["period"])]
        weight = moves["n"] * window.weight(moves["period"].to_numpy())
        expected = np.zeros((5, 5))
        np.add.at(expected, (moves["state"], moves["next_state"]), weight)
        assert np.allclose(patterns_of(tally, window).table(), expected)


def test_halves_and_samples_keep_customers_whole():
    rng = np.random.default_rng(1)
    tally = panel_tally(simulate(CHAIN, np.zeros(500, int), 8, rng), STATES)
    found = patterns_of(tally, choose_window(tally))
    one, two = found.halves(rng)
    assert one.n.sum() + two.n.sum() == 500 and np.allclose(one.table() + two.table(), found.table())
    assert found.sample(100, rng).n.sum() == 100 and found.sample(1000, rng) is found


def test_customers_seen_once_tell_nothing():
    tally = panel_tally([[0, 1, -1], [-1, 0, 1]], THREE)
    with pytest.raises(NotIdentified, match="customers seen over two moves or more"):
        patterns_of(tally, choose_window(tally))
