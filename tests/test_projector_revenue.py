"""Money of a period by cause and how much of it is kept: on paper, against sums of customers, intervals."""

from types import SimpleNamespace

import numpy as np
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from cohortflow.chain import Chain, Draws
from cohortflow.errors import CallError, NotIdentified
from cohortflow.projector.project import project
from cohortflow.projector.revenue import (
    revenue_actual,
    revenue_forecast,
    revenue_retention,
    revenue_retention_actual,
)
from cohortflow.states import States
from cohortflow.tally import Tally
from tests.projector_cases import CHAIN, P, chains, dirichlet_draws, multinomial, tally_of_stays, two_types

PAY = {"fresh": 5.0, "steady": 20.0}
STAYS = [
    ("joined", "", [(1, "fresh"), (2, "steady"), (3, "steady")]),
    ("joined", "", [(1, "steady"), (2, "paused"), (3, "left")]),
    ("returned", "left", [(2, "steady"), (3, "lapsed")]),
]
SIGN = {"moved_down": -1, "lost": -1, "unobserved_out": -1, "closing": -1}


def balance(frame):
    signed = frame["amount"] * frame["line"].map(SIGN).fillna(1)
    return signed.groupby(frame["period"]).sum()


def test_counted_money_on_paper():
    frame = revenue_actual(tally_of_stays(STAYS, last=3), PAY, currency="GBP")
    second = frame[(frame["period"] == "2") & (frame["amount"] != 0)].set_index("line")["amount"]
    # 5 + 20; one goes up by 15, one pauses, down by 20; 20 come back
    assert second.to_dict() == {
        "opening": 25,
        "returned": 20,
        "moved_up": 15,
        "moved_down": 20,
        "closing": 40,
    }
    third = frame[(frame["period"] == "3") & (frame["amount"] != 0)].set_index(["line", "exit"])["amount"]
    # the paused one leaves without money, the returned one with 20
    assert third.to_dict() == {("opening", ""): 40, ("lost", "lapsed"): 20, ("closing", ""): 20}
    assert frame["currency"].eq("GBP").all() and np.allclose(balance(frame), 0)


def test_a_price_change_stands_apart():
    tally = tally_of_stays([("joined", "", [(1, "steady"), (2, "steady")])] * 2, last=2)
    rows = pd.DataFrame({"bucket": 0, "segment": 0, "period": [1, 2], "state": 1, "n": 2,
                         "total": [4000, 5000],
                         "squares": 0})  # fmt: skip
    frame = revenue_actual(Tally.build(tally.meta, {**tally.tables, "amounts": rows}), margin=0.5)
    # two customers pay 20, then 25 each; half counts
    assert frame.loc[frame["amount"] != 0, ["line", "amount"]].values.tolist() == [
        ["opening", 20], ["price_change", 5], ["closing", 25]
    ]  # fmt: skip


@settings(max_examples=25, deadline=None)
@given(chains(), st.lists(st.floats(-5, 50), min_size=4, max_size=4), st.integers(1, 6))
def test_forecast_money_closes(chain, pay, periods):
    found = project(
        chain, start=[30, 20, 10, 0], periods=periods, joiners={"s1": 7}, draws=2, base_period="2026-09"
    )
    frame = revenue_forecast(found, pay)
    np.testing.assert_allclose(balance(frame), 0, atol=1e-9)
    closing = frame[frame["line"] == "closing"]["amount"]
    np.testing.assert_allclose(closing, found.mean[1:, :3] @ pay[:3], atol=1e-9)


def test_gross_and_net_by_hand():
    states = States(["small", "large", "left"], exits=["left"])
    chain = Chain(states, [[0.7, 0.2, 0.1], [0.1, 0.8, 0.1], [0, 0, 1]])
    found = revenue_retention(
        chain, {"small": 10, "large": 30}, window=1, start={"small": 30, "large": 10}, base_period="2026-09"
    )
    gross, net = found.to_dict("records")
    # of 300 + 300: small keep 27 x 10, large keep 8 x 30 and 1 x 10; net counts 6 x 30 for those who moved up
    assert (gross["measure"], gross["numerator"]) == ("gross", pytest.approx(270 + 240 + 10))
    assert (net["measure"], net["numerator"]) == ("net", pytest.approx(210 + 180 + 240 + 10))
    assert net["denominator"] == 600 and net["cohort"] == "2026-09" and net["window"] == 1


def test_kept_money_of_two_kinds_of_customers():
    found = revenue_retention(two_types()[0], {"here": 10}, window=24, start={"here": 5})
    assert found["value"].tolist() == pytest.approx([0.5 * 0.98**24 + 0.5 * 0.8**24] * 2)


def test_counted_retention_of_money_on_paper():
    steps = pd.DataFrame(
        {"segment": 0, "period": 1, "k": 2, "state": [0, 1, 1], "later": [1, 1, 3], "n": [2, 3, 1]}
    )
    tally = tally_of_stays(STAYS, last=3)
    found = revenue_retention_actual(Tally.build(tally.meta, {**tally.tables, "steps": steps}), PAY, window=2)
    # paid 2 x 5 + 4 x 20 = 90; kept gross 10 + 60, net 40 + 60
    assert found[["measure", "numerator", "denominator"]].values.tolist() == [
        ["gross", 70, 90],
        ["net", 100, 90],
    ]
    with pytest.raises(CallError, match="These counts hold no states 5 periods apart; they hold"):
        revenue_retention_actual(Tally.build(tally.meta, {**tally.tables, "steps": steps}), PAY, window=5)


def test_intervals_by_hand_and_by_draws():
    # one paying state: value p^2, se 2 p sqrt(p (1 - p)/400); log scale
    chain = Chain(States(["in", "out"], exits=["out"]), [[0.9, 0.1], [0, 1]])
    options = {"window": 2, "start": {"in": 3}, "level": 0.95}
    row = revenue_retention(chain, {"in": 7}, covariance=multinomial(chain.matrix, 400), **options).iloc[1]
    half = 1.959963984540054 * 2 * 0.9 * 0.015 / 0.81
    assert [row["low"], row["high"]] == pytest.approx([0.81 * np.exp(-half), 0.81 * np.exp(half)])
    M = dirichlet_draws(P, 800, 2000)
    options = {"window": 6, "start": {"fresh": 30, "steady": 70}}
    by_delta = revenue_retention(CHAIN, PAY, covariance=multinomial(P, 800), **options)
    by_draws = revenue_retention(CHAIN, PAY, draws=Draws.of_matrices(CHAIN.schedule, [M[:, None]]), **options)
    np.testing.assert_allclose(by_delta[["low", "high"]], by_draws[["low", "high"]], rtol=0.03)


def test_a_base_that_pays_nothing_keeps_nothing():
    with pytest.raises(NotIdentified, match="The base pays nothing at the opening"):
        revenue_retention(CHAIN, PAY, start={"paused": 5})
    model = SimpleNamespace(schedule=CHAIN.schedule)
    with pytest.raises(CallError, match="A projection needs opening counts"):
        revenue_retention(model, PAY)
