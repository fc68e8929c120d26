"""Time to exit and which exit: published walks, hand arithmetic, other models, intervals, what is missing."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.chain import Chain, Draws
from cohortflow.errors import NotIdentified
from cohortflow.projector.exits import time_to_exit
from cohortflow.states import States
from tests.projector_cases import CHAIN, STATES, P, chains, dirichlet_draws, multinomial, seasonal, two_types


def test_receivables_with_two_exits():
    # UC Limited, printed limit rows (.95, .05), (.87, .13)  (VERIFIED); exact 37/39 2/39 34/39 5/39
    states = States(["current", "overdue", "paid", "bad"], exits=["paid", "bad"])
    chain = Chain(states, [[0.5, 0.2, 0.3, 0], [0.3, 0.1, 0.5, 0.1], [0, 0, 1, 0], [0, 0, 0, 1]])
    found = time_to_exit(chain).values["probability"]
    np.testing.assert_allclose(found, [[37 / 39, 2 / 39], [34 / 39, 5 / 39]], rtol=1e-13)
    assert found.round(2).tolist() == [[0.95, 0.05], [0.87, 0.13]]
    # Sh 100,000, 70/30 current and overdue: 92,564.10 paid
    assert round(float(np.array([70_000, 30_000]) @ found[:, 0]), 2) == 92_564.10


def test_drunkards_walk():
    # Grinstead & Snell, walk on 0..4: times 3, 4, 3; exits .75 .5 .25 (VERIFIED); variance 8 8 8 (recomputed)
    states = States(["bar", "one", "two", "three", "home"], exits=["bar", "home"])
    walk = np.eye(5)
    for i in (1, 2, 3):
        walk[i] = 0
        walk[i, i - 1] = walk[i, i + 1] = 0.5
    found = time_to_exit(Chain(states, walk)).values
    np.testing.assert_allclose(found["mean_time"], [3, 4, 3])
    np.testing.assert_allclose(found["probability"][:, 0], [0.75, 0.5, 0.25])
    np.testing.assert_allclose(found["sd_time"] ** 2, [8, 8, 8])


def test_by_hand_and_as_a_table():
    frame = time_to_exit(CHAIN).to_frame().set_index(["from", "measure", "exit"])
    # steady: t = 1 + .8 t + .1 r, paused: r = 1 + .5 t + .4 r -> t = r = 10; fresh 1 + .8 x 10
    assert frame.loc[("steady", "mean_time", ""), "value"] == pytest.approx(10)
    assert frame.loc[("fresh", "mean_time", ""), "value"] == pytest.approx(9)
    # at most half left: fresh keeps .8 x .9^(t-1): .472 after 6, .525 after 5
    assert frame.loc[("fresh", "median_time", ""), "value"] == 6
    assert frame["low"].isna().all() and len(frame) == 3 * 5
    assert "from 3 states, in periods (month), level 0.9 (none)" in repr(time_to_exit(CHAIN))


def test_two_kinds_of_customers_are_weighted():
    schedule, _ = two_types(share=0.25)
    found = time_to_exit(schedule).values
    # .25 x 50 + .75 x 5; second moments of geometric times (2 - p)/p^2: 4950, 45
    assert found["mean_time"][0] == pytest.approx(16.25)
    assert found["sd_time"][0] == pytest.approx(np.sqrt(0.25 * 4950 + 0.75 * 45 - 16.25**2))
    # half left: .25 x .98^t + .75 x .8^t <= .5: .5085 after 4, .4717 after 5
    assert found["median_time"][0] == 5


def test_a_cycle_by_direct_summation():
    other = np.vstack([P[0], [0, 0.5, 0.2, 0.2, 0.1], P[2:]])
    schedule = seasonal([P, other, P])
    from tests.projector_cases import SEPTEMBER

    found = time_to_exit(schedule, base_period=SEPTEMBER + 1).values
    law, kept, left, gone = np.eye(5)[:3], [], np.zeros((3, 2)), np.zeros((3, 2))
    for step in range(2000):
        kept.append(law[:, :3].sum(axis=1))
        law = law @ [P, other, P][(step + 1) % 3]
        gone = law[:, 3:]
    left = gone
    np.testing.assert_allclose(found["mean_time"], np.sum(kept, axis=0), rtol=1e-10)
    np.testing.assert_allclose(found["probability"], left, rtol=1e-10)


def test_never_and_perhaps():
    states = States(["a", "b", "c", "gone"], exits=["gone"])
    chain = Chain(states, [[0.5, 0.2, 0.1, 0.2], [0, 1, 0, 0], [0, 0, 0.5, 0.5], [0, 0, 0, 1]])
    found = time_to_exit(chain)
    assert found.reasons == ("may_not_exit:a", "never_exits:b")
    assert found.values["mean_time"].tolist() == [np.inf, np.inf, 2]
    assert np.isnan(found.values["sd_time"][:2]).all()
    # from a: .2 + .1 x 1 of the half that moves: .3/.5 = .6 leave in the end; b never
    np.testing.assert_allclose(found.values["probability"][:, 0], [0.6, 0, 1])
    assert found.values["median_time"][1] == np.inf and np.isfinite(found.values["median_time"][0])


def test_a_row_without_data_makes_missing_only_what_reaches_it():
    gap = P.copy()
    gap[0] = np.nan
    found = time_to_exit(Chain(STATES, gap))
    assert np.isnan(found.values["mean_time"]).tolist() == [True, False, False]
    assert found.reasons == ("rows_without_data:fresh",)
    with pytest.raises(NotIdentified, match="no state of this model is one: name it"):
        time_to_exit(Chain(States(["a", "b"]), [[0.5, 0.5], [0.5, 0.5]]))


def test_delta_interval_of_a_geometric_time_by_hand():
    # stay .9 of 400 departures: tau = 10, d tau / d p_stay = 100, se = 100 sqrt(.09/400) = 1.5
    chain = Chain(States(["in", "out"], exits=["out"]), [[0.9, 0.1], [0, 1]])
    found = time_to_exit(chain, covariance=multinomial(chain.matrix, 400), level=0.95)
    z = 1.959963984540054
    assert found.low["mean_time"][0] == pytest.approx(10 * np.exp(-z * 0.15))
    assert found.high["mean_time"][0] == pytest.approx(10 * np.exp(z * 0.15))
    assert (found.low["probability"][0, 0], found.high["probability"][0, 0]) == (1, 1)  # one exit, certain
    # .9^t on the logit scale: half first reached in period 7; its limits bracket it
    assert found.low["median_time"][0] <= 7 <= found.high["median_time"][0] and found.method == "delta"


def test_delta_and_draws_agree():
    covariance = multinomial(P, 800)
    M = dirichlet_draws(P, 800, 400)
    by_delta = time_to_exit(CHAIN, covariance=covariance)
    by_draws = time_to_exit(CHAIN, draws=Draws.of_matrices(CHAIN.schedule, [M[:, None]]))
    assert (by_delta.method, by_draws.method) == ("delta", "draws")
    for measure in ("mean_time", "sd_time", "probability"):
        for side in ("low", "high"):
            one, two = getattr(by_delta, side)[measure], getattr(by_draws, side)[measure]
            np.testing.assert_allclose(one, two, rtol=0.12)


def test_draws_without_an_exit_stay_infinite():
    chain = Chain(States(["in", "out"], exits=["out"]), [[0.9, 0.1], [0, 1]])
    drawn = np.stack([chain.matrix[None]] * 6 + [np.eye(2)[None]] * 4)
    found = time_to_exit(chain, draws=Draws.of_matrices(chain.schedule, [drawn]))
    assert found.values["mean_time"][0] == pytest.approx(10) and found.high["mean_time"][0] == np.inf


@settings(max_examples=40, deadline=None)
@given(chains(exits=2))
def test_exits_add_up_and_times_are_sums_of_retention(chain):
    found = time_to_exit(chain).values
    np.testing.assert_allclose(found["probability"].sum(axis=1), 1, atol=1e-12)
    kept, law = np.zeros(2), np.eye(4)[:2]
    for _ in range(3000):
        kept += law[:, :2].sum(axis=1)
        law = law @ chain.matrix
    np.testing.assert_allclose(found["mean_time"], kept, rtol=1e-8)


@settings(max_examples=30, deadline=None)
@given(st.floats(0.01, 0.5), st.floats(0.01, 0.5), st.floats(0.1, 0.9))
def test_sorting_makes_the_pooled_mean_too_short(one, two, share):
    # Jensen: the mean of 1/p is at least 1 / the mean of p
    schedule, _ = two_types(share, one, two)
    pooled = 1 / (share * one + (1 - share) * two)
    assert time_to_exit(schedule).values["mean_time"][0] >= pooled * (1 - 1e-12)
