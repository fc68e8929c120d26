"""Rates over time spent, with Garwood's limits."""

import numpy as np
import pandas as pd
import pytest
from scipy import stats

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.exact_times import garwood, rates_from_spells
from cohortflow.projector import project
from cohortflow.states import States

STATES = States(["on", "paused", "off"], exits=["off"], away=["paused"])


@pytest.mark.parametrize(
    ("n", "low", "high"),
    # Garwood (1936), 95 %: table values from MEMORY, recomputed from the chi-square quantiles
    [(0, 0, 3.6888795), (1, 0.025317808, 5.5716434), (2, 0.24220928, 7.2246877), (5, 1.6234864, 11.668332),
     (10, 4.7953887, 18.390356), (20, 12.21652, 30.888378), (50, 37.110964, 65.918767), (100, 81.363991, 121.62679)],
)  # fmt: skip
def test_garwood(n, low, high):
    assert [float(side) for side in garwood(n)] == pytest.approx([low, high], rel=5e-8)


def test_the_limits_hold_the_tails():
    low, high = garwood(7, level=0.9)
    assert stats.poisson.sf(6, low) == pytest.approx(0.05) and stats.poisson.cdf(7, high) == pytest.approx(
        0.05
    )


def spells():
    # on: 30 + 60 + 10 days, one pause, one leaves, one goes on; paused: 20 days, back once
    return pd.DataFrame(
        {
            "customer": ["a", "b", "c", "a"],
            "state": ["on", "on", "on", "paused"],
            "next_state": ["paused", None, "off", "on"],
            "exposure": [30.0, 60.0, 10.0, 20.0],
        }
    )


def test_by_hand():
    found = rates_from_spells(spells(), STATES)
    assert np.allclose(found.Q, [[-0.02, 0.01, 0.01], [0.05, -0.05, 0], [0, 0, 0]])
    frame = found.to_frame().set_index(["from", "to"])
    assert frame.loc[("on", "off"), ["events", "exposure", "rate"]].tolist() == [1, 100, 0.01]
    assert frame.loc[("on", "off"), ["low", "high"]].tolist() == pytest.approx(
        [0.025317808 / 100, 5.5716434 / 100]
    )
    # paused to off was possible and not seen: rate 0 with an upper limit
    assert frame.loc[("paused", "off"), ["rate", "low", "high"]].tolist() == pytest.approx(
        [0, 0, 3.6888795 / 20]
    )
    assert "4 rates a day of 3 states" in repr(found)


def test_the_chain_of_any_length_feeds_the_projector():
    found = rates_from_spells(spells(), STATES)
    ten, twenty = found.matrix(10), found.matrix(20)
    assert np.allclose(ten @ ten, twenty) and np.allclose(ten.sum(axis=1), 1)
    ahead = project(found.chain(30), start={"on": 100}, periods=2)
    assert ahead.mean[2].sum() == pytest.approx(100)
    drawn = found.draws(4000, 10, rng=1)
    assert np.allclose(drawn.matrices[0].sum(axis=3), 1)
    rates = found.drawn_rates(20000, np.random.default_rng(2))
    # Gamma(1, 100) for one event in 100 days; half an event where none was seen
    assert rates[:, 0, 2].mean() == pytest.approx(0.01, rel=0.05)
    assert rates[:, 0, 2].std() == pytest.approx(0.01, rel=0.05)
    assert rates[:, 1, 2].mean() == pytest.approx(0.5 / 20, rel=0.05)


def test_clustered_limits_are_wider_when_one_customer_does_it_all():
    rng = np.random.default_rng(1)
    rows = []
    for c in range(60):
        rate = rng.gamma(0.5, 2.0)  # customers differ
        rows += [(c, "on", "paused", t) for t in rng.exponential(1 / max(rate, 1e-3), 12)]
    frame = pd.DataFrame(rows, columns=["customer", "state", "next_state", "exposure"])
    plain, robust = (rates_from_spells(frame, STATES, clustered=c) for c in (False, True))
    assert robust.high[0, 1] - robust.low[0, 1] > 1.5 * (plain.high[0, 1] - plain.low[0, 1])
    assert robust.method == "exposure_clustered"
    # by hand for two customers: q = 2/30; scores 1 - 10q = 1/3, 1 - 20q = -1/3; var q = 2 x 2/9 / 900
    two = pd.DataFrame({"customer": [1, 2], "state": "on", "next_state": "paused", "exposure": [10.0, 20.0]})
    found = rates_from_spells(two, STATES, clustered=True)
    assert found.log_covariance[1, 1] == pytest.approx(2 * (2 / 9) / 900 / (2 / 30) ** 2)


def test_refusals():
    with pytest.raises(CallError, match="pass states="):
        rates_from_spells(spells())
    with pytest.raises(CallError, match="exposure is missing"):
        rates_from_spells(spells().drop(columns="exposure"), STATES)
    with pytest.raises(CallError, match="time of 0 or more"):
        rates_from_spells(spells().assign(exposure=-1.0), STATES)
    with pytest.raises(CallError, match="Every spell is spent in a state; some have none"):
        rates_from_spells(spells().assign(state=None), STATES)
    with pytest.raises(CallError, match='Unknown state "onn"'):
        rates_from_spells(spells().replace("on", "onn"), STATES)
    with pytest.raises(NotIdentified, match='Spells of "on" ended in "paused" without time spent'):
        rates_from_spells(spells().assign(exposure=0.0), STATES)
    with pytest.raises(NotIdentified, match="compare customers, and there is one"):
        rates_from_spells(spells().assign(customer=1), STATES, clustered=True)
    with pytest.raises(CallError, match="number of draws is at least 1; got 0"):
        rates_from_spells(spells(), STATES).draws(0, 1.0, rng=1)
