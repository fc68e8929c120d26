"""Segments fitted apart and shrunk; their projections add up to the total."""

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.estimator import fit
from cohortflow.projector import project
from tests.bench.worlds import CHAIN, STATES, panel_tally, simulate

LEAVY = np.array([[0, 0.4, 0.1, 0.2, 0.3], [0, 0.6, 0.1, 0.1, 0.2], [0, 0.1, 0.7, 0.1, 0.1], [0, 0.1, 0,
0.5, 0.4],
                  [0, 0, 0, 0, 1]])  # fmt: skip


def counts(seed=1):
    rng = np.random.default_rng(seed)
    entry = rng.integers(0, 20, 3000)
    one = simulate(CHAIN, np.zeros(2000, int), 21, rng, entry=entry[:2000])
    two = simulate(LEAVY, np.zeros(1000, int), 21, rng, entry=entry[2000:])
    return panel_tally(np.vstack([one, two]), STATES, segment=np.r_[np.zeros(2000, int), np.ones(1000, int)])


def test_two_laws_are_kept_apart_and_add_up():
    tally = counts()
    f = fit(tally, model="segment", by="group")
    a, b = f.schedule.components
    assert (a.name, b.name) == ("a", "b") and np.abs(a.matrices[0][1] - CHAIN[1]).max() < 0.04
    assert np.abs(b.matrices[0][1] - LEAVY[1]).max() < 0.06
    assert np.allclose((a.start + b.start).sum(axis=1), 1)
    # the base of now, segment by segment, is what the start law says
    parts = tally.by_segment("group")
    assert np.allclose(tally.mix().to_numpy() @ a.start, parts["a"].mix())
    total = project(f, periods=6).mean
    by_hand = sum(
        parts[n].mix().to_numpy() @ np.linalg.matrix_power(c.matrices[0], 6) for n, c in (("a", a), ("b", b))
    )
    assert np.allclose(total[6], by_hand) and sorted(f.segments) == ["a", "b"]


def test_joiners_fall_into_segments_as_the_latest_did():
    tally = counts()
    a, b = fit(tally, model="segment", by="group").schedule.components
    starts = tally.table("starts").query("period > @tally.meta.last - 12 and state == 0")
    share = starts.loc[starts["segment"] == 0, "n"].sum() / starts["n"].sum()
    assert a.join[0].sum() == pytest.approx(share)


def test_needs_a_segment():
    with pytest.raises(CallError, match=r"The segment model needs by=, one of the segments: \['group'\]"):
        fit(counts(), model="segment")
