"""The contribution of a projected base over the horizon, and its band."""

from dataclasses import replace

import numpy as np
import pytest

from cohortflow.chain import Chain
from cohortflow.projector import project, value
from cohortflow.projector.bands import quantile_band
from cohortflow.projector.contribution import MEASURE, contribution, contribution_row
from cohortflow.states import States
from tests.projector_cases import CHAIN, STATES, banded, two_types

START = {"fresh": 100, "steady": 300, "paused": 50}
PAY = {"fresh": 5.0, "steady": 20.0}


def terms_of(**options):
    return value(CHAIN, **{"per_period": PAY, **options}).terms


@pytest.mark.parametrize("timing", ["start", "middle", "end"])
def test_without_joiners_it_is_the_value_of_the_base(timing):
    # the recursion of value.py, an independent way to the same sum
    options = {"discount_rate": 0.1, "timing": timing, "on_move": [("paused", "steady", -3.0)]}
    ahead = project(CHAIN, start=START, periods=7, parts=())
    found = contribution(ahead, terms_of(**options))
    whole = value(CHAIN, per_period=PAY, horizon=7, start=START, **options)
    assert found.value == pytest.approx(whole.sums["base"][0], rel=1e-12)
    assert found.low == pytest.approx(found.value, rel=1e-12) and found.high == pytest.approx(found.value, rel=1e-12)


def test_by_hand_with_joiners():
    # one state here, 10 % leave; 100 there, 20 join at the end of each period; 10 a period, paid at its start:
    # period 1: 100 x 10; period 2: (90 + 20) x 10; together 2,100. Middle: + half of what those left at the ends
    # pay (90 and 99) and half at the starts: (100 + 90 + 110 + 99) / 2 x 10 = 1,995: joiners pay nothing on arrival
    chain = Chain(States(["here", "gone"], exits=["gone"], entries=["here"]), [[0.9, 0.1], [0, 1]])
    ahead = project(chain, start={"here": 100}, periods=2, joiners={"here": 20}, parts=())
    for timing, expected in (("start", 2100.0), ("middle", 1995.0), ("end", 1890.0)):
        terms = value(chain, per_period={"here": 10}, timing=timing).terms
        assert contribution(ahead, terms).value == pytest.approx(expected, abs=1e-9)


def test_the_band_is_that_of_the_drawn_counts():
    # paid at the start of each period, the drawn money is a plain sum of drawn counts
    ahead = project(CHAIN, start=START, periods=5, joiners={"fresh": 40}, parts=("chance", "joiners"), rng=4)
    found = contribution(ahead, terms_of(timing="start", discount_rate=0.1))
    b = 1.1 ** (-1 / 12)
    drawn = (ahead.simulated[:, :-1] @ [5, 20, 0, 0, 0]) @ b ** np.arange(5)
    assert [found.low, found.high] == pytest.approx(quantile_band(drawn, ahead.level).tolist(), rel=1e-3)
    assert found.low < found.value < found.high


def test_expanded_states_and_types_are_told_by_their_declared_states():
    for schedule, states in (banded(), two_types()):
        start = {states.names[0]: 200}
        ahead = project(schedule, start=start, periods=6, parts=(), base_period="2026-09")
        pay = {states.names[0]: 10.0}
        whole = value(schedule, per_period=pay, horizon=6, start=start, base_period="2026-09")
        assert contribution(ahead, whole.terms).value == pytest.approx(whole.sums["base"][0], rel=1e-12)


def test_estimated_prices_widen_the_band():
    ahead = project(CHAIN, start=START, periods=5, parts=("chance",), rng=4)
    terms = terms_of(timing="start")
    error = np.zeros((5, 5))
    error[1, 1] = 4.0  # the price of steady, 20, has a standard error of 2: a tenth
    plain = contribution(ahead, terms)
    wide = contribution(ahead, replace(terms, error=error))
    steady = 20 * ahead.mean[:-1, 1].sum()
    assert wide.value == plain.value
    # 90 % of a normal law lies within 1.645 standard errors (MEMORY); chance adds a little
    assert (wide.high - wide.low) / 2 == pytest.approx(1.645 * 0.1 * steady, rel=0.15)


def test_a_state_without_data_that_pays_leaves_it_unknown():
    chain = Chain(States(["a", "b", "gone"], exits=["gone"]), [[0.5, 0.4, 0.1], [np.nan] * 3, [0, 0, 1]])
    ahead = project(chain, start={"a": 10}, periods=3, parts=())
    terms = terms_of_states(chain, {"a": 1.0, "b": 2.0})
    assert np.isnan(contribution(ahead, terms).value) and np.isnan(contribution(ahead, terms).low)


def terms_of_states(chain, pay):
    from cohortflow.projector.money import money_terms

    return money_terms(chain.states, pay)


def test_the_row_of_the_table():
    ahead = project(CHAIN, start=START, periods=2, parts=())
    row = contribution_row(ahead, terms_of(timing="start"), "GBP").iloc[0]
    assert (row["measure"], row["state"], row["currency"]) == (MEASURE, "", "GBP")
    assert row["value"] == contribution(ahead, terms_of(timing="start")).value


def test_an_exit_that_pays_once_pays_for_those_who_leave():
    # 10 for each who leaves, at the end of the period: 10 x all lost by the horizon, draw by draw
    ahead = project(CHAIN, start=START, periods=5, parts=("chance",), rng=4)
    terms = replace(terms_of(per_period={"left": 10.0}, timing="end"), once=STATES.exit_mask)
    found, gone = contribution(ahead, terms), ahead.simulated[:, -1, STATES.index("left")]
    assert found.value == pytest.approx(10 * ahead.mean[-1, STATES.index("left")], rel=1e-12)
    assert [found.low, found.high] == pytest.approx((10 * quantile_band(gone, ahead.level)).tolist())
