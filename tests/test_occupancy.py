"""Aalen-Johansen shares: plain shares without censoring, statsmodels with it, errors against repetition."""

import numpy as np
import pandas as pd
import pytest
from statsmodels.duration.survfunc import CumIncidenceRight, SurvfuncRight

from cohortflow.errors import CallError
from cohortflow.estimator.exact_times import occupancy
from cohortflow.states import States

STATES = States(["on", "quit", "lapsed"], exits=["quit", "lapsed"])


def competing(n=300, seed=1):
    rng = np.random.default_rng(seed)
    time = np.round(rng.exponential(10, n), 1) + 0.1  # ties
    cause = rng.choice([0, 1, 2], n, p=[0.3, 0.5, 0.2])
    names = np.array([None, "quit", "lapsed"], dtype=object)
    frame = pd.DataFrame(
        {"customer": np.arange(n), "start": 0.0, "stop": time, "state": "on", "next_state": names[cause]}
    )
    return frame, time, cause


def test_equals_statsmodels_cumulative_incidence():
    frame, time, cause = competing()
    found = occupancy(frame, STATES)
    theirs = CumIncidenceRight(time, cause)
    for k in (1, 2):
        at = np.searchsorted(found.times, theirs.times, side="right") - 1
        assert np.allclose(found.share[at, k], theirs.cinc[k - 1], atol=1e-12)
    survival = SurvfuncRight(time, (cause > 0).astype(int))
    at = np.searchsorted(found.times, survival.surv_times, side="right") - 1
    assert np.allclose(found.share[at, 0], survival.surv_prob, atol=1e-12)
    some = survival.surv_prob > 0  # theirs is missing at 0
    assert np.allclose(found.greenwood[at, 0][some], survival.surv_prob_se[some], atol=1e-10)
    # one decision a customer: both errors are one
    assert np.allclose(found.greenwood, found.jackknife, atol=1e-10)


def three_states(n=200, seed=2, censored=False):
    """on -> paused -> on -> off with exact times."""
    rng = np.random.default_rng(seed)
    rows = []
    for c in range(n):
        time, state, end = 0.0, "on", rng.exponential(15) + 1 if censored else 1e9
        speed = rng.gamma(2.0, 0.5) if seed >= 100 else 1.0
        while state != "off" and time < end:
            stay = rng.exponential(4 / speed)
            after = str(rng.choice(["paused", "off"] if state == "on" else ["on", "off"], p=[0.6, 0.4]))
            stop = min(time + stay, end)
            rows.append((c, time, stop, state, after if stop < end else None))
            time, state = stop, after
    return pd.DataFrame(rows, columns=["customer", "start", "stop", "state", "next_state"])


PAUSING = States(["on", "paused", "off"], exits=["off"], away=["paused"])


def test_without_censoring_the_shares_are_the_plain_shares():
    frame = three_states()
    found = occupancy(frame, PAUSING)
    for time in (2.0, 5.0, 11.0):
        here = frame[(frame["start"] < time) & (frame["stop"] >= time)]
        share = np.array([(here["state"] == s).mean() * len(here) / 200 for s in ("on", "paused")])
        assert found.at(time)["share"].to_numpy()[:2] == pytest.approx(share, abs=1e-12)
        # and the jackknife error is that of a share
        p = found.at(time)["share"].to_numpy()
        assert found.at(time)["jackknife"].to_numpy() == pytest.approx(np.sqrt(p * (1 - p) / 200), abs=1e-10)


def test_the_jackknife_is_right_by_repetition_when_customers_differ():
    shares, errors = [], []
    for seed in range(100, 160):
        at = occupancy(three_states(120, seed, censored=True), PAUSING).at(8.0)
        shares.append(at["share"].iloc[1])
        errors.append(at["jackknife"].iloc[1])
    assert np.mean(errors) == pytest.approx(np.std(shares), rel=0.25)


def test_entry_after_the_origin_counts_from_then_on():
    # the second customer is seen from time 2: at time 1 one of one leaves; at 3 one of one
    frame = pd.DataFrame(
        {
            "customer": [1, 2, 3],
            "start": [0.0, 2.0, 0.0],
            "stop": [1.0, 3.0, 4.0],
            "state": "on",
            "next_state": ["quit", "quit", None],
        }
    )
    found = occupancy(frame, STATES)
    assert found.share[:, 0].tolist() == pytest.approx([1, 1 / 2, 1 / 4])
    assert "2 times" not in repr(found) and found.to_frame().shape == (9, 5)


def test_refusals():
    frame, _, _ = competing(10)
    with pytest.raises(CallError, match="stop is missing"):
        occupancy(frame.drop(columns="stop"), STATES)
    with pytest.raises(CallError, match="Every spell is spent in a state; some have none"):
        occupancy(frame.assign(state=None), STATES)
    with pytest.raises(CallError, match="A spell stops after it starts; 10 do not"):
        occupancy(frame.assign(stop=0.0), STATES)
    with pytest.raises(CallError, match="No spell begins at the origin -5"):
        occupancy(frame, STATES, origin=-5)
    with pytest.raises(CallError, match="lies before the first time"):
        occupancy(frame, STATES).at(-1.0)
