"""What two forecasts rest on: each ingredient taken from the one or the other."""

from dataclasses import replace

import numpy as np
import pytest

from cohortflow.runs.drivers import GROUPS, RATES, Drivers, Hand, segment_counts
from cohortflow.study.parts import Adjustment, JoinerSpec, ModelSpec, ValueSpec
from tests.comparison_cases import PLAIN, opened, tally

LONG = {"hhhhhhg": 3, "hahhhhh": 5, "hg": 2, "1.hhahhh@north": 3, "2.hhg@north": 2, "haag": 4, "3.hhaa": 3}


@pytest.mark.parametrize("name", ["plain", "recent", "tenure", "time_in_state"])
def test_all_of_the_later_side_is_the_later_forecast(name):
    study = replace(
        PLAIN, horizon=4, joiners=JoinerSpec("constant"), model=ModelSpec(name),
        adjustments=(Adjustment(8, "away", 2.0, "flood"),),
    )  # fmt: skip
    old, new = (opened(tally(LONG, last=t), study) for t in (4, 6))
    drivers = Drivers.of(old, new)
    made = drivers.outcome(frozenset(GROUPS))
    said = new.projection.pivot(index="periods_ahead", columns="state", values="customers")
    expected = said[list(drivers.weights)].to_numpy()[: drivers.steps + 1]
    np.testing.assert_allclose(made, expected, rtol=1e-12, atol=1e-12)


def test_none_of_it_is_the_earlier_forecast_where_nothing_was_restated():
    study = replace(PLAIN, horizon=5, joiners=JoinerSpec("constant"), model=ModelSpec("tenure"))
    old, new = (opened(tally(LONG, last=t), study) for t in (4, 6))
    drivers = Drivers.of(old, new)
    assert (drivers.gap, drivers.steps) == (2, 3)
    said = old.projection.pivot(index="periods_ahead", columns="state", values="customers")
    expected = said[list(drivers.weights)].to_numpy()[2:]
    np.testing.assert_allclose(drivers.outcome(frozenset()), expected, rtol=1e-12, atol=1e-12)


def test_only_groups_that_differ_are_active():
    old = opened(tally(LONG, last=6))
    assert Drivers.of(old, old).active == ()
    later = Drivers.of(opened(tally(LONG, last=4)), old)
    assert later.active == ("opening", "segments", "rates")
    assert later.items("model", frozenset()) == {}


def test_money_needs_one_currency_on_both_sides():
    counts = tally(LONG, last=6)
    pounds, euros = (replace(PLAIN, value=ValueSpec(c, {"here": 2.0})) for c in ("GBP", "EUR"))
    assert Drivers.of(opened(counts, pounds), opened(counts, pounds)).quantities[-1] == "contribution"
    for pair in ((pounds, euros), (PLAIN, pounds)):
        drivers = Drivers.of(*(opened(counts, study) for study in pair))
        assert "contribution" not in drivers.quantities and not drivers.money(frozenset()).any()


def test_a_total_defined_differently_is_no_quantity():
    counts = tally(LONG, last=6)
    a, b = (replace(PLAIN, totals={"known": m, "same": ("here",)}) for m in (("here",), ("here", "away")))
    assert set(Drivers.of(opened(counts, a), opened(counts, b)).weights) == {
        "here",
        "away",
        "all_live",
        "same",
    }


def test_contribution_is_paid_by_those_there_at_the_start():
    # last=2 of: 10 here, 2 leave, then 4 of 8: 4 left, a third leaves; 10 pounds at the start of the period
    study = replace(PLAIN, value=ValueSpec("GBP", {"here": 10.0}, timing="start"))
    drivers = Drivers.of(*[opened(tally({"hg": 2, "hhg": 4, "hhh": 4}, last=2), study)] * 2)
    paid = drivers.outcome(frozenset())[:, -1]
    assert paid == pytest.approx([0.0, 40.0, 40 * 2 / 3])


def test_observed_amounts_that_are_not_there_give_no_money():
    study = replace(PLAIN, value=ValueSpec("GBP", None, margin=0.3))
    assert Hand.of(study, tally(LONG, last=6), None).money is None


def test_segments_add_up_to_the_pooled_counts():
    counts = tally(LONG, last=6)
    fitted = Hand.of(PLAIN, counts, None).fit(counts)
    parts = segment_counts(fitted, "town")
    assert parts.shape == (2, 3, 3)
    np.testing.assert_array_equal(parts.sum(axis=0), fitted.n)


def test_periods_that_earlier_counts_do_not_hold_cannot_be_excluded_there():
    study = replace(PLAIN, model=ModelSpec("plain", exclude=(6,)))
    hand = Hand.of(study, tally(LONG, last=6), None)
    assert hand.fit(tally(LONG, last=4)).excluded == () and hand.fit(hand.tally).excluded == (6,)


def test_rates_are_split_only_between_models_of_one_form():
    old, new = (opened(tally(LONG, last=t), replace(PLAIN, horizon=4)) for t in (4, 6))
    items = Drivers.of(old, new).items(RATES, frozenset())
    assert all(kind == "" and origin != "gone" for kind, origin, _ in items)
    changed = Drivers.of(
        old, opened(tally(LONG, last=6), replace(PLAIN, horizon=4, model=ModelSpec("tenure")))
    )
    assert changed.items(RATES, frozenset({"model"}))
