"""Value: the published ladder, transition costs, every timing by hand, spread by simulation, what is undefined."""

from types import SimpleNamespace

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.chain import Chain, Draws
from cohortflow.errors import CallError
from cohortflow.projector.money import Terms, money_terms, value_derivative, worth
from cohortflow.projector.value import value
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    STATES,
    P,
    banded,
    chains,
    dirichlet_draws,
    multinomial,
    seasonal,
    two_types,
)

LADDER = States(["r1", "r2", "r3", "r4", "gone"], exits=["gone"])
LADDER_P = [[0.3, 0.7, 0, 0, 0], [0.2, 0, 0.8, 0, 0], [0.15, 0, 0, 0.85, 0], [0.05, 0, 0, 0, 0.95], [0, 0, 0, 0, 1]]
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
    # R markovchain vignette 6.2 (after Bard 2000): income 100 in the first state, costs on moves; expected value
    # of step 5 (after five moves) from the first state 48.96009  (VERIFIED)
    chain = Chain(States(["on", "off"]), [[0.9, 0.1], [0.05, 0.95]], period="year")
    costs = [("on", "on", -20), ("on", "off", -30), ("off", "on", -40)]
    sums = [value(chain, per_period={"on": 100}, on_move=costs, timing="start", horizon=h).customer[0] for h in (5, 6)]
    assert sums[1] - sums[0] == pytest.approx(48.96009, abs=5e-6)


def test_every_timing_by_hand():
    # one state, kept with .9, pays 10; yearly rate 25 % -> b = .8; two periods, from "in"
    chain = Chain(States(["in", "out"], exits=["out"]), [[0.9, 0.1], [0, 1]], period="year")

    def worth_of(timing, **options):
        return value(chain, per_period={"in": 10}, discount_rate=0.25, timing=timing, horizon=2, **options).customer[0]

    # start: 10 + .8 x 9; end: .8 x 9 + .64 x 8.1; middle: .8^.5 x 9.5 + .8^1.5 x 8.55
    assert worth_of("start") == pytest.approx(10 + 7.2)
    assert worth_of("end") == pytest.approx(7.2 + 5.184)
    assert worth_of("middle") == pytest.approx(0.8**0.5 * 9.5 + 0.8**1.5 * 8.55)
    # whole periods of discount, whatever the timing of the counts: first period by one, or by none
    assert worth_of("start", first_period_discounted=True) == pytest.approx(0.8 * 17.2)
    assert worth_of("end", first_period_discounted=False) == pytest.approx(9 + 0.8 * 8.1)
    assert worth_of("middle", first_period_discounted=False) == pytest.approx(9.5 + 0.8 * 8.55)
    assert worth_of("middle", first_period_discounted=True) == pytest.approx(0.8 * 9.5 + 0.64 * 8.55)


def test_a_yearly_rate_is_compounded_per_period():
    assert money_terms(STATES, PAY, discount_rate=0.08, periods_a_year=12).factor == pytest.approx(1.08 ** (-1 / 12))
    with pytest.raises(CallError, match="plain steps without a length"):
        value(Chain(LADDER, LADDER_P, period="step"), per_period=[1, 1, 1, 1, 0], discount_rate=0.1)


def test_money_on_moves_and_the_cost_of_leaving():
    # steady pays nothing, every exit costs 5: undiscounted, every customer leaves once
    moves = [(s, e, -5.0) for s in ("fresh", "steady", "paused") for e in ("left", "lapsed")]
    np.testing.assert_allclose(value(CHAIN, per_period={}, on_move=moves).customer, -5)
    row = SimpleNamespace(from_="paused", to="steady", amount=2.0)
    # from paused: each period there, .5 chance of the return; visits to paused from paused 1/(1 - .4 - .1*.5/.2)
    found = value(CHAIN, per_period={}, on_move=[row], horizon=1).customer
    np.testing.assert_allclose(found, [0, 0, 1.0])


def test_sums_over_the_base_and_a_cohort():
    found = value(CHAIN, per_period=PAY, timing="start", start={"steady": 3}, joiners={"fresh": 2}, currency="GBP")
    frame = found.to_frame().set_index(["measure", "state"])
    # tau visits: from steady, 48/7 periods steady (480/7 for ten a period): 20 x 50/7 by hand below
    steady = frame.loc[("customer_value", "steady"), "value"]
    # steady s = 1 + .8 s + .1 q, q = .5 s + .4 q -> q = s/1.2, s (1 - .8 - .1/1.2) = 1 -> s = 60/7
    assert steady == pytest.approx(20 * 60 / 7)
    assert frame.loc[("base", ""), "value"] == pytest.approx(3 * steady)
    fresh = frame.loc[("customer_value", "fresh"), "value"]
    assert fresh == pytest.approx(5 + 0.8 * steady)
    assert frame.loc[("joining_cohort", ""), "value"] == pytest.approx(2 * fresh)
    sd = frame.loc[("customer_sd", "steady"), "value"]
    assert frame.loc[("base_sd", ""), "value"] == pytest.approx(sd * np.sqrt(3))
    assert frame["currency"].eq("GBP").all() and "value of a customer for ever, 3 states, in GBP" in repr(found)


def test_spread_between_customers_by_simulation():
    # independent check: 40,000 simulated customers, yearly 12 % (b = 1.12^(-1/12)), amounts on moves as well
    terms = money_terms(STATES, PAY, on_move=[("paused", "steady", 3.0)], discount_rate=0.12, periods_a_year=12)
    rng = np.random.default_rng(7)
    state, total, y = np.zeros(40_000, dtype=int), np.zeros(40_000), terms.amounts()
    for period in range(150):
        following = (rng.random(40_000)[:, None] > P.cumsum(axis=1)[state][:, :-1]).sum(axis=1)
        total += terms.factor ** (period + terms.lag) * y[state, following]
        state = following
    found = worth(CHAIN.schedule, terms, horizon=None)
    assert total.mean() == pytest.approx(found.now[0], abs=4 * found.sd_now[0] / 200)
    assert total.std() == pytest.approx(found.sd_now[0], rel=0.03)


def test_without_exit_and_discount_nothing_is_said():
    states = States(["a", "b", "gone"], exits=["gone"])
    chain = Chain(states, [[0.5, 0.3, 0.2], [0, 1, 0], [0, 0, 1]])
    found = value(chain, per_period={"a": 1, "b": 1}, start={"a": 1})
    assert np.isnan(found.customer).all() and found.reasons == ("no_exit_no_discount:a", "no_exit_no_discount:b")
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


def test_derivatives_by_complex_step():
    terms = Terms(np.array([5.0, 20, 0, 0, 0]), np.zeros((5, 5)), 0.97, 0.5, 0.5)
    terms.on_move[2, 1] = 3.0
    rng = np.random.default_rng(0)
    for horizon in (None, 7):
        slope = value_derivative(P, terms, horizon=horizon)
        for _ in range(6):
            i, j = rng.integers(0, 5, 2)
            if i > 2 and horizon is None:
                continue
            step = P.astype(complex)
            step[i, j] += 1e-30j
            b, y = terms.factor, terms.amounts()
            if horizon is None:
                v = np.linalg.solve(np.eye(5) - b * step, (step * y).sum(axis=1))
            else:
                v = np.zeros(5, dtype=complex)
                for _ in range(horizon):
                    v = (step * y).sum(axis=1) + b * step @ v
            expected = (b**terms.lag * v).imag / 1e-30
            np.testing.assert_allclose([slope.gradient(a)[i, j] for a in range(5)], expected, rtol=1e-9, atol=1e-9)


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


@settings(max_examples=30, deadline=None)
@given(chains(), st.floats(0.5, 0.99))
def test_value_is_linear_in_money_and_longer_is_more(chain, factor):
    def of(pay, horizon=None):
        return worth(chain.schedule, Terms(np.array(pay, float), np.zeros((4, 4)), factor), horizon=horizon).now

    np.testing.assert_allclose(of([1, 2, 0, 0]) + of([0, 1, 5, 0]), of([1, 3, 5, 0]), rtol=1e-9)
    assert (of([1, 1, 1, 0], 3) <= of([1, 1, 1, 0], 9) + 1e-12).all()
    assert (of([1, 1, 1, 0], 9) <= of([1, 1, 1, 0]) + 1e-9).all()


def test_refusals():
    with pytest.raises(CallError, match=r'Unknown timing "midle" \(did you mean "middle"'):
        value(CHAIN, per_period=PAY, timing="midle")
    with pytest.raises(CallError, match="discount_rate is -2; it is a yearly rate above -1"):
        value(CHAIN, per_period=PAY, discount_rate=-2)
    with pytest.raises(CallError, match="per_period takes an amount by state name, or one finite number for each"):
        value(CHAIN, per_period=[1, 2])
