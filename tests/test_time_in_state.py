"""The ladder of time in a state: repairs states that are defined by silence."""

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.estimator import fit
from cohortflow.projector import project
from cohortflow.states import States
from tests.bench.worlds import panel_tally

STATES = States(["buying", "silent", "gone"], exits=["gone"], entries=["buying"])
BUYS, WINDOW = 0.25, 6


def silence(customers=8000, periods=37, seed=1):
    """Buying: a purchase this period. Silent: none for 1..5 periods. Gone: none for 6."""
    rng = np.random.default_rng(seed)
    entry = rng.integers(0, periods - 1, customers)
    buys = rng.random((customers, periods)) < BUYS
    buys[np.arange(customers), entry] = True
    since, panel = np.zeros(customers, int), np.full((customers, periods), -1)
    alive = np.zeros(customers, bool)
    for t in range(periods):
        alive |= entry == t
        since = np.where(buys[:, t], 0, since + 1)
        panel[:, t] = np.where(~alive, -1, np.where(since == 0, 0, np.where(since < WINDOW, 1, 2)))
        alive &= since < WINDOW
    return panel_tally(panel, STATES)


def test_the_ladder_reproduces_silence_exactly_where_the_plain_chain_cannot():
    counts = silence()
    f, plain = fit(counts, model="time_in_state"), fit(counts)
    assert f.settings["ladder"] == {"buying": 1, "silent": 5}
    gone = {m: 1 - project(m, start={"buying": 1}, periods=7).mean[:, :2].sum(axis=1) for m in (f, plain)}
    # from a purchase nobody can be gone before period 6; then (3/4)^6 = .178 (closed form)
    assert np.allclose(gone[f][:6], 0, atol=1e-12)
    assert gone[f][6] == pytest.approx(0.75**6, abs=0.012)
    assert gone[plain][3] > 0.08  # methods table: .098 from the complete follow-up


def test_draws_keep_the_impossible_impossible():
    f = fit(silence(2000), model="time_in_state")
    part = f.schedule.components[0]
    drawn = f.draws(40, rng=1).matrices[0][:, 0]
    assert np.allclose(drawn.sum(axis=2), 1)
    buying, gone = (int(np.flatnonzero(part.report == k)[0]) for k in (0, 2))
    assert (drawn[:, buying, gone] < 0.01).all()


def test_a_given_ladder_and_refusal():
    f = fit(silence(500), model="time_in_state", ladder=3)
    assert f.settings["ladder"] == {"buying": 3, "silent": 3}
    with pytest.raises(CallError, match="ladder is a number of rungs from 1 on; got 0"):
        fit(silence(500), model="time_in_state", ladder=0)


def test_a_memoryless_state_has_no_ladder():
    rng = np.random.default_rng(2)
    states = States(["a", "b"])
    panel = rng.integers(0, 2, (400, 20))
    f = fit(panel_tally(panel, states), model="time_in_state")
    assert f.settings["ladder"] == {"a": 1, "b": 1} and "no_ladder" in f.notes
