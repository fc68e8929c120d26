"""Intervals of the long run by the delta method: by hand, and beside draws."""

import numpy as np
import pytest

from cohortflow.chain import Chain, Draws
from cohortflow.projector.joiners import Inflow, Joiners
from cohortflow.projector.longrun import long_run
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    MONTHS,
    STATES,
    P,
    dirichlet_draws,
    multinomial,
)

OTHER = np.vstack([P[0], [0, 0.5, 0.2, 0.2, 0.1], P[2:]])


def shares(found, measure, origin):
    frame = found.to_frame()
    rows = frame[(frame["measure"] == measure) & (frame["from"] == origin)]
    return dict(zip(rows["state"], rows["value"], strict=True))


def test_delta_and_draws_agree():
    M = dirichlet_draws(P, 800, 300)
    options = {"joiners": {"fresh": 10}, "start": {"steady": 1}}
    by_delta = long_run(CHAIN, covariance=multinomial(P, 800), **options)
    by_draws = long_run(CHAIN, draws=Draws.of_matrices(CHAIN.schedule, [M[:, None]]), **options)
    one, two = (f.to_frame().set_index(["measure", "state", "from"]) for f in (by_delta, by_draws))
    keys = [k for k in one.index if np.isfinite(one.loc[k, "low"])]
    assert {k[0] for k in keys} == {
        "limit_from_start", "remaining_retention", "remaining_mix", "settled_base", "settled_mix"
    }  # fmt: skip
    for key in keys:
        for side in ("low", "high"):
            assert one.loc[key, side] == pytest.approx(two.loc[key, side], rel=0.15, abs=0.01), key


def test_delta_interval_of_a_stationary_share_by_hand():
    # see test_projector_delta: var = 1.875^2 x .0009 + .625^2 x .0021 = .003984375; logit scale at .75
    Q = np.array([[0.9, 0.1], [0.3, 0.7]])
    found = long_run(Chain(States(["a", "b"]), Q), covariance=multinomial(Q, 100), level=0.95)
    row = found.to_frame().query("measure == 'stationary_share' and state == 'a'").iloc[0]
    step = 1.959963984540054 * np.sqrt(0.003984375) / (0.75 * 0.25)
    odds = 3 * np.exp([-step, step])
    assert [row["low"], row["high"]] == pytest.approx(list(odds / (1 + odds)))
    time = found.to_frame().query("measure == 'return_time' and state == 'a'").iloc[0]
    assert time["low"] < 4 / 3 < time["high"]
    limit = found.to_frame().query("measure == 'limit_from_start' and state == 'a'")
    assert limit["low"].tolist() == [row["low"]] * 2


def test_uncertain_joiners_widen_the_settled_base():
    sure = Inflow(np.full(3, 10.0), np.zeros((3, 3)), np.tile(np.eye(5)[0], (3, 1)))
    unsure = Inflow(np.full(3, 10.0), np.full((3, 3), 4.0), np.tile(np.eye(5)[0], (3, 1)))
    widths = []
    for inflow in (sure, unsure):
        joiners = Joiners(STATES, MONTHS, None, "test", {"joined": inflow})
        found = long_run(CHAIN, joiners=joiners, covariance=multinomial(P, 800)).to_frame()
        row = found.query("measure == 'settled_base' and state == 'all_live'").iloc[0]
        widths.append(np.log(row["high"] / row["low"]) ** 2)
    # relative variance 4/100 of the rate adds (2 z)^2 x .04 to the squared width on the log scale
    assert widths[1] - widths[0] == pytest.approx((2 * 1.6448536) ** 2 * 0.04, rel=1e-6)
