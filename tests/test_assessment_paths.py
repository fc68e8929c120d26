"""Paths: decoding, moves, panels of stays, simulated panels."""

import numpy as np
import pandas as pd
import pytest

from cohortflow.assessment.paths import Paths, shares
from cohortflow.errors import NotIdentified
from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.tally import Meta, Tally
from tests.adequacy_cases import tally_of, world

STATES = States(["a", "b", "left"], exits=["left"], impossible=[("b", "a")])


def tally_with(*paths, n=1, last=19):
    table = pd.DataFrame({"segment": 0, "level": 62, "path": list(paths), "n": n})
    return Tally.build(Meta(STATES, Calendar("step"), 10, last, len(paths), "x"), {"paths": table})


def moves(paths):
    out = np.zeros((3, 3), dtype=int)
    customer, origin, target, n = paths.moves
    np.add.at(out, (origin, target), n)
    return out.tolist()


def test_runs_stays_and_moves_by_hand():
    # periods 10.. : a a b (gap) b left (gap) a: three stays; moves a-a, a-b, b-left
    paths = Paths.of(tally_with("10 0*2 1*1 -*1 1*1 2*1 -*2 0*1"))
    assert paths.state.tolist() == [0, 1, 1, 2, 0]
    assert paths.start.tolist() == [10, 12, 14, 15, 18]
    assert paths.stay.tolist() == [0, 0, 1, 1, 2]
    assert moves(paths) == [[1, 1, 0], [0, 0, 1], [0, 0, 0]]
    assert paths.entry.tolist() == [10]


def test_a_return_straight_after_an_exit_is_a_new_stay_not_a_move():
    paths = Paths.of(tally_with("10 0*1 2*1 0*2"))
    assert paths.stay.tolist() == [0, 0, 1]
    assert moves(paths) == [[1, 0, 1], [0, 0, 0], [0, 0, 0]]


def test_a_move_declared_impossible_breaks_the_stay():
    paths = Paths.of(tally_with("10 1*2 0*2"))
    assert paths.stay.tolist() == [0, 1]
    assert moves(paths) == [[1, 0, 0], [0, 1, 0], [0, 0, 0]]


def test_panel_keeps_exits_to_the_end_and_cuts_at_gaps():
    # stays: a a b (then unseen), b left left ..., the stay that is an exit only is left out
    panel = Paths.of(tally_with("10 0*2 1*1 -*1 1*1 2*1", "12 2*1", last=17)).panel()
    assert panel.grid.T.tolist() == [[0, 0, 1, -1, -1, -1, -1, -1], [-1, -1, -1, -1, 1, 2, 2, 2]]
    assert panel.first.tolist() == [0, 4]
    assert panel.last.tolist() == [2, 7]
    # two steps ahead: a->b once (10 to 12); b at 14 -> left at 16
    assert panel.counts(2).tolist() == [[0, 1, 0], [0, 0, 1], [0, 0, 0]]


def test_repeated_paths_count_as_so_many_customers():
    assert Paths.of(tally_with("10 0*3", n=4)).customers == 4


def test_sampling_takes_so_many():
    tally = tally_with("10 0*3", n=40)
    assert Paths.of(tally, most=7, rng=np.random.default_rng(1)).customers == 7


def test_moves_and_steps_agree_with_the_tally():
    tally = world("markov", 300)
    paths = Paths.of(tally)
    customer, origin, target, n = paths.moves
    out = np.zeros((5, 5), dtype=int)
    np.add.at(out, (origin, target), n)
    assert out.tolist() == tally.counts().tolist()
    assert paths.panel().counts().tolist() == tally.counts().tolist()


def test_simulated_panels_keep_windows_and_follow_the_chain():
    panel = Paths.of(world("markov", 2000)).panel()
    P = shares(panel.counts())
    other = panel.simulated(P, np.random.default_rng(5))
    seen = panel.grid >= 0
    assert ((other.grid >= 0) == seen).all()
    rows = np.arange(len(panel.first))
    assert (other.grid[panel.first, rows] == panel.grid[panel.first, rows]).all()
    n = panel.counts().sum(axis=1)
    # each share within five multinomial standard errors of the chain it came from
    error = np.sqrt(P * (1 - P) / other.counts().sum(axis=1)[:, None])
    gap = np.abs(shares(other.counts()) - P)[n > 0]
    assert (gap <= 5 * error[n > 0] + 1e-12).all()


def test_simulated_rows_without_data_stay():
    panel = Paths.of(tally_of(["00", "00"])).panel()
    other = panel.simulated(np.full((3, 3), np.nan), np.random.default_rng(1))
    assert other.grid.tolist() == [[0, 0], [0, 0]]


def test_bare_counts_have_no_paths():
    meta = Meta(STATES, Calendar("step"), 0, 5, 1, "x", tables=("moves",))
    with pytest.raises(NotIdentified, match="do not hold the table"):
        Paths.of(Tally.build(meta, {}))
