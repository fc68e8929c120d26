"""The setting of a comparison: money, joiners, costs and dates of both sides."""

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.projector import planned_numbers
from cohortflow.whatif.change import Change
from cohortflow.whatif.scenario import Scenario
from cohortflow.whatif.setting import Setting, for_segment
from tests.projector_cases import CHAIN, SEPTEMBER, STATES, two_types
from tests.whatif_cases import JOINERS, MONEY, START

KEEP = Change("steady", "left", add=-0.04)


def setting(plan, periods=4, **more):
    given = {"start": START, "joiners": JOINERS, "value": MONEY, "base_period": SEPTEMBER} | more
    return Setting.of(CHAIN, plan, periods=periods, **given)


def test_prices_hold_in_their_window_and_stay_if_nothing_ends_them():
    at = setting(Scenario("dear", per_period={"steady": 30.0}, starts="2026-11"))
    assert [at.under.prices(h).per_period[1] for h in range(3)] == [20, 30, 30]
    assert at.under.later_prices(99).per_period[1] == 30 and at.without.prices(2).per_period[1] == 20
    ended = setting(Scenario("dear", per_period={"steady": 30.0}, ends="2026-10"))
    assert [ended.under.prices(h).per_period[1] for h in range(2)] == [30, 20]
    assert ended.under.later_prices(99).per_period[1] == 20


def test_costs_discount_and_beginning():
    at = setting(
        Scenario("call", KEEP, cost_per_customer=2.0, fixed_cost=5.0, starts="2026-11", ends="2026-12")
    )
    treated = np.array([[0.0], [10], [20], [0]])
    assert at.costs(treated).ravel().tolist() == [0, 25, 45, 0] and at.fixed_costs.tolist() == [0, 5, 5, 0]
    assert at.late_costs(np.array([10.0])).tolist() == [20.0]  # the fixed cost has ended
    assert at.discount == pytest.approx(1.1 ** (-(np.arange(4) + 0.5) / 12)) and at.begins == 1
    assert setting(Scenario("more", joiners_multiply=2.0, starts="2026-12")).begins == 2
    plain = setting(Scenario("keep", KEEP), value=None)
    assert plain.discount.tolist() == [1, 1, 1, 1]


def test_inflows_of_both_sides_and_for_ever():
    coming = planned_numbers(STATES, {"fresh": 10}, returned={"steady": 3}, periods=4, base=SEPTEMBER)
    at = setting(Scenario("more", joiners_multiply=2.0, ends="2026-10"), joiners=coming)
    now, new = at.inflows()
    assert now[:, 0, 0].tolist() == [10] * 4 and new[:, 0, 0].tolist() == [20, 10, 10, 10]
    assert now[:, 1, 0].tolist() == new[:, 1, 0].tolist() == [3] * 4
    assert at.long_inflows()[1].tolist() == [10, 3, 0, 0, 0]  # what ends is not for ever
    kept = setting(Scenario("more", joiners_multiply=2.0), joiners=coming)
    assert kept.long_inflows()[1].tolist() == [20, 3, 0, 0, 0]
    one, two = kept.inflows(500, np.random.default_rng(1))
    assert one.shape == (4, 5, 500) and two[0, 0].mean() == pytest.approx(20, rel=0.05)
    assert (two[:, 0] == 2 * one[:, 0]).all() and (two[:, 1] == one[:, 1]).all()


def test_a_segment_is_a_part_of_the_model_or_a_fit_of_its_own():
    schedule, _ = two_types()
    plan = Scenario("x", Change("here", "gone", multiply=0.5), segment="fragile")
    assert for_segment(schedule, plan, "all") == (schedule, "all")
    with pytest.raises(CallError, match='this model knows no such part .*"sticky", "fragile"'):
        for_segment(schedule, Scenario("x", KEEP, segment="robust"), "all")


def test_given_prices_carry_no_error():
    from cohortflow.projector.amounts import Amounts

    seen = Amounts(STATES, [4.0, 20.0, 0, 0, 0], np.diag([1.0, 4.0, 0, 0, 0]), [10, 10, 10, 1, 1])
    at = setting(Scenario("dear", per_period={"steady": 30.0}), value={"per_period": seen})
    assert np.diag(at.under.prices(0).error).tolist() == [1, 0, 0, 0, 0]
    shift = at.drawn_shift(4000, np.random.default_rng(2))
    assert shift.shape == (5, 4000) and shift[1].std() == pytest.approx(2, rel=0.05)
    assert setting(Scenario("keep", KEEP)).drawn_shift(5, np.random.default_rng(2)) is None
