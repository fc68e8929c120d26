"""Value: the published ladder, transition costs, sums, intervals, what is undefined."""

from types import SimpleNamespace

import numpy as np
import pytest

from cohortflow.chain import Chain, Draws
from cohortflow.errors import CallError
from cohortflow.projector.value import value
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    STATES,
    P,
    banded,
    dirichlet_draws,
    multinomial,
    seasonal,
    two_types,
)

LADDER = States(["r1", "r2", "r3", "r4", "gone"], exits=["gone"])


LADDER_P = [
    [0.3, 0.7, 0, 0, 0],
    [0.2, 0, 0.8, 0, 0],
    [0.15, 0, 0, 0.85, 0],
    [0.05, 0, 0, 0, 0.95],
    [0, 0, 0, 0, 1],
]


PAY = {"fresh": 5.0, "steady": 20.0}


def test_recency_ladder():
    # Pfeifer & Carraway (2000), J. Interactive Marketing 14(2): T = 4 means five payments t = 0..4
    # (MEMORY to 3 decimals; digits recomputed by solve, value iteration and mpmath)
    chain = Chain(LADDER, LADDER_P, period="year")
    options = {"per_period": [36, -4, -4, -4, 0], "discount_rate": 0.2, "timing": "start"}
    finite = value(chain, horizon=5, **options).customer
    np.testing.assert_allclose(finite, [50.11496914, 4.21990741, 0.59211034, -1.98013117], atol=5e-9)
    for_ever = value(chain, **options).customer
    np.testing.assert_allclose(for_ever, [52.31960944, 5.55378356, 1.25077299, -1.82001627], atol=5e-9)


def test_income_with_transition_costs():
    # R markovchain vignette 6.2 (after Bard 2000): income 100 in the first state, costs on moves; expected
    # value of step 5 (after five moves) from the first state 48.96009  (VERIFIED)
    chain = Chain(States(["on", "off"]), [[0.9, 0.1], [0.05, 0.95]], period="year")
    costs = [("on", "on", -20), ("on", "off", -30), ("off", "on", -40)]
    sums = [
        value(chain, per_period={"on": 100}, on_move=costs, timing="start", horizon=h).customer[0]
        for h in (5, 6)
    ]
    assert sums[1] - sums[0] == pytest.approx(48.96009, abs=5e-6)


def test_money_on_moves_and_the_cost_of_leaving():
    # steady pays nothing, every exit costs 5: undiscounted, every customer leaves once
    moves = [(s, e, -5.0) for s in ("fresh", "steady", "paused") for e in ("left", "lapsed")]
    np.testing.assert_allclose(value(CHAIN, per_period={}, on_move=moves).customer, -5)
    row = SimpleNamespace(from_="paused", to="steady", amount=2.0)
    # one period from paused: half return
    found = value(CHAIN, per_period={}, on_move=[row], horizon=1).customer
    np.testing.assert_allclose(found, [0, 0, 1.0])


def test_sums_over_the_base_and_a_cohort():
    found = value(
        CHAIN, per_period=PAY, timing="start", start={"steady": 3}, joiners={"fresh": 2}, currency="GBP"
    )
    frame = found.to_frame().set_index(["measure", "state"])
    steady = frame.loc[("customer_value", "steady"), "value"]
    # steady s = 1 + .8 s + .1 q, q = .5 s + .4 q -> q = s/1.2, s (1 - .8 - .1/1.2) = 1 -> s = 60/7
    assert steady == pytest.approx(20 * 60 / 7)
    assert frame.loc[("base", ""), "value"] == pytest.approx(3 * steady)
    fresh = frame.loc[("customer_value", "fresh"), "value"]
    assert fresh == pytest.approx(5 + 0.8 * steady)
    assert frame.loc[("joining_cohort", ""), "value"] == pytest.approx(2 * fresh)
    sd = frame.loc[("customer_sd", "steady"), "value"]
    assert frame.loc[("base_sd", ""), "value"] == pytest.approx(sd * np.sqrt(3))
    assert frame["currency"].eq("GBP").all() and "value of a customer for ever, 3 states, in GBP" in repr(
        found
    )


def test_without_exit_and_discount_nothing_is_said():
    states = States(["a", "b", "gone"], exits=["gone"])
    chain = Chain(states, [[0.5, 0.3, 0.2], [0, 1, 0], [0, 0, 1]])
    found = value(chain, per_period={"a": 1, "b": 1}, start={"a": 1})
    assert np.isnan(found.customer).all() and found.reasons == (
        "no_exit_no_discount:a",
        "no_exit_no_discount:b",
    )
    assert np.isnan(found.sums["base"][0])
    # with a discount, over a horizon, or where the place nobody leaves pays nothing, there is a value
    assert np.isfinite(value(chain, per_period={"b": 1}, discount_rate=0.1).customer).all()
    assert np.isfinite(value(chain, per_period={"b": 1}, horizon=3).customer).all()
    assert value(chain, per_period={"a": 1}, timing="start").customer.tolist() == pytest.approx([2, 0])


def test_kinds_bands_and_seasons():
    # half of the customers are worth 10/.02, half 10/.2
    assert value(two_types()[0], per_period={"here": 10}, timing="start").customer[0] == pytest.approx(275)
    schedule, _ = banded()
    found = value(schedule, per_period={"live": 10}, timing="start", start={"live": 1}, joiners={"live": 1})
    # old 100, new 10 + .7 x 100 = 80; now in live: .25 x 80 + .75 x 100; a joiner is new
    assert found.customer[0] == pytest.approx(95) and found.sums["joining_cohort"][0] == pytest.approx(80)
    other = np.vstack([P[0], [0, 0.5, 0.2, 0.2, 0.1], P[2:]])
    cycle = seasonal([P, other])
    brute, law = 0.0, np.eye(5)[1]
    for step in range(800):
        brute += 1.1 ** (-step / 12) * law @ [5, 20, 0, 0, 0]
        law = law @ [P, other][step % 2]
    found = value(cycle, per_period=PAY, timing="start", discount_rate=0.1).customer[1]
    assert found == pytest.approx(brute, rel=1e-10)


def test_delta_interval_by_hand_and_draws():
    # V = 10/(1 - p) = 100 at p = .9, dV/dp = 1000, se = 1000 x .015 = 15; log scale
    chain = Chain(States(["in", "out"], exits=["out"]), [[0.9, 0.1], [0, 1]])
    found = value(chain, per_period={"in": 10}, timing="start", covariance=multinomial(chain.matrix, 400),
                  level=0.95, start={"in": 2})  # fmt: skip
    low, high = found.limits["customer_value", "in"]
    z = 1.959963984540054
    assert (low, high) == pytest.approx((100 * np.exp(-0.15 * z), 100 * np.exp(0.15 * z)))
    assert found.limits["base", ""] == pytest.approx((2 * low, 2 * high))
    mixed = value(chain, per_period={"in": 10}, on_move=[("in", "out", -15)], timing="start",
                  covariance=multinomial(chain.matrix, 400), level=0.95)  # fmt: skip
    low, high = mixed.limits["customer_value", "in"]  # amounts of both signs: plain scale, symmetric
    assert mixed.customer[0] - low == pytest.approx(high - mixed.customer[0])
    M = dirichlet_draws(P, 800, 300)
    by_draws = value(CHAIN, per_period=PAY, draws=Draws.of_matrices(CHAIN.schedule, [M[:, None]]))
    by_delta = value(CHAIN, per_period=PAY, covariance=multinomial(P, 800))
    for key, (low, high) in by_delta.limits.items():
        assert by_draws.limits[key] == pytest.approx((low, high), rel=0.05)


def test_a_row_without_data_makes_missing_what_reaches_it():
    gap = P.copy()
    gap[0] = np.nan
    found = value(Chain(STATES, gap), per_period=PAY, start={"steady": 1})
    assert np.isnan(found.customer).tolist() == [True, False, False]
    assert found.reasons == ("rows_without_data:fresh",) and np.isfinite(found.sums["base"][0])


def test_refusals():
    with pytest.raises(CallError, match=r'Unknown timing "midle" \(did you mean "middle"'):
        value(CHAIN, per_period=PAY, timing="midle")
    with pytest.raises(CallError, match="discount_rate is -2; it is a yearly rate above -1"):
        value(CHAIN, per_period=PAY, discount_rate=-2)
    with pytest.raises(
        CallError, match="per_period takes an amount by state name, or one finite number for each"
    ):
        value(CHAIN, per_period=[1, 2])
