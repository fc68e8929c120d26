"""The money of one customer: timings, discount, spread by simulation, derivatives by complex step."""

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.chain import Chain
from cohortflow.errors import CallError
from cohortflow.projector.money import Terms, money_terms, value_derivative, worth
from cohortflow.projector.value import value
from cohortflow.states import States
from tests.projector_cases import (
    CHAIN,
    STATES,
    P,
    chains,
)

PAY = {"fresh": 5.0, "steady": 20.0}


def test_every_timing_by_hand():
    # one state, kept with .9, pays 10; yearly rate 25 % -> b = .8; two periods, from "in"
    chain = Chain(States(["in", "out"], exits=["out"]), [[0.9, 0.1], [0, 1]], period="year")

    def worth_of(timing, **options):
        return value(
            chain, per_period={"in": 10}, discount_rate=0.25, timing=timing, horizon=2, **options
        ).customer[0]

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
    assert money_terms(STATES, PAY, discount_rate=0.08, periods_a_year=12).factor == pytest.approx(
        1.08 ** (-1 / 12)
    )
    with pytest.raises(CallError, match="plain steps without a length"):
        value(Chain(STATES, P, period="step"), per_period=PAY, discount_rate=0.1)


def test_spread_between_customers_by_simulation():
    # independent check: 40,000 simulated customers, yearly 12 % (b = 1.12^(-1/12)), amounts on moves as well
    terms = money_terms(
        STATES, PAY, on_move=[("paused", "steady", 3.0)], discount_rate=0.12, periods_a_year=12
    )
    rng = np.random.default_rng(7)
    state, total, y = np.zeros(40_000, dtype=int), np.zeros(40_000), terms.amounts()
    for period in range(150):
        following = (rng.random(40_000)[:, None] > P.cumsum(axis=1)[state][:, :-1]).sum(axis=1)
        total += terms.factor ** (period + terms.lag) * y[state, following]
        state = following
    found = worth(CHAIN.schedule, terms, horizon=None)
    assert total.mean() == pytest.approx(found.now[0], abs=4 * found.sd_now[0] / 200)
    assert total.std() == pytest.approx(found.sd_now[0], rel=0.03)


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
            np.testing.assert_allclose(
                [slope.gradient(a)[i, j] for a in range(5)], expected, rtol=1e-9, atol=1e-9
            )


@settings(max_examples=30, deadline=None)
@given(chains(), st.floats(0.5, 0.99))
def test_value_is_linear_in_money_and_longer_is_more(chain, factor):
    def of(pay, horizon=None):
        return worth(
            chain.schedule, Terms(np.array(pay, float), np.zeros((4, 4)), factor), horizon=horizon
        ).now

    np.testing.assert_allclose(of([1, 2, 0, 0]) + of([0, 1, 5, 0]), of([1, 3, 5, 0]), rtol=1e-9)
    assert (of([1, 1, 1, 0], 3) <= of([1, 1, 1, 0], 9) + 1e-12).all()
    assert (of([1, 1, 1, 0], 9) <= of([1, 1, 1, 0]) + 1e-9).all()
