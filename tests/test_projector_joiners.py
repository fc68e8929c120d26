"""The joiners' record: moments of numbers and of the split, draws, plans by hand."""

import numpy as np
import pytest

from cohortflow.errors import CallError
from cohortflow.projector.joiners import Inflow, Joiners, nobody, planned_numbers
from tests.projector_cases import MONTHS, SEPTEMBER, STATES


def inflow(concentration=np.inf):
    mean = np.array([50.0, 80.0])
    extra = np.array([[100.0, 60.0], [60.0, 200.0]])
    return Inflow(mean, extra, np.tile([0.5, 0.3, 0.2, 0, 0], (2, 1)), concentration)


@pytest.mark.parametrize("concentration", [np.inf, 10.0])
def test_draws_have_the_stated_moments(concentration):
    found = inflow(concentration)
    drawn = found.draw(40_000, np.random.default_rng(2))
    numbers = drawn.sum(axis=2)
    # numbers: mean 50, 80; covariance extra + diag(mean) = [[150, 60], [60, 280]]
    np.testing.assert_allclose(numbers.mean(axis=0), [50, 80], rtol=0.01)
    np.testing.assert_allclose(np.cov(numbers.T), [[150, 60], [60, 280]], rtol=0.06)
    # first period by state: split noise + mix mix' Var N
    expected = found.state_noise()[0] + np.outer(found.mix[0], found.mix[0]) * 150
    np.testing.assert_allclose(np.cov(drawn[:, 0].T)[:3, :3], expected[:3, :3], rtol=0.08, atol=0.5)


def test_split_noise_by_hand():
    # a fixed mix: 50 x (diag q - q q'); q = .5 .3 .2: 50 x .25 = 12.5, -50 x .15 = -7.5
    assert inflow().state_noise()[0, 0, :2].tolist() == pytest.approx([12.5, -7.5])
    # Dirichlet 10: plus E[N(N-1)] / 11 x the same, E[N(N-1)] = 100 + 50^2 = 2600
    assert inflow(10.0).state_noise()[0, 0, 0] == pytest.approx(12.5 + 2600 / 11 * 0.25)


def test_planned_numbers_and_their_table():
    plan = planned_numbers(STATES, {"fresh": 30}, returned={"steady": 2}, periods=2, base=SEPTEMBER)
    frame = plan.to_frame()
    assert frame.values.tolist()[0] == ["2026-10", 1, "joined", "fresh", 30.0, pytest.approx(np.sqrt(30))]
    assert frame["period"].tolist() == ["2026-10", "2026-11"] * 2
    assert plan.expected("returned").tolist() == [[0, 2, 0, 0, 0]] * 2
    assert plan.expected("nonsense").sum() == 0 and plan.a_period().tolist() == [30, 2, 0, 0, 0]
    assert plan.about()["notes"] == {"joined": "plan_taken_as_given", "returned": "plan_taken_as_given"}
    assert "planned, 2 periods: 32.0 a period" in repr(plan)


def test_nobody_is_nobody():
    none = nobody(STATES, MONTHS, None, 3)
    assert none.expected().sum() == 0 and none.draw(5, np.random.default_rng(1)).sum() == 0
    assert none.relative_error() == 0.0


def test_what_the_periods_share_does_not_average_out():
    # off-diagonal covariance 60 over mean rate (50 + 80)/2 squared
    one = Joiners(STATES, MONTHS, None, "test", {"joined": inflow()})
    assert one.relative_error() == pytest.approx(60 / 65**2)
    assert one.cut(1).periods == 1 and one.cut(1).relative_error() == 0.0


def test_refusals():
    with pytest.raises(CallError, match="The joiners are forecast for 2 periods, the projection asks for 3"):
        Joiners(STATES, MONTHS, None, "test", {"joined": inflow()}).cut(3)
    with pytest.raises(CallError, match='Nobody joins into the exit "left"'):
        planned_numbers(STATES, {"left": 1}, periods=2)
    with pytest.raises(CallError, match="Customers who return are numbers not below 0: one a state"):
        planned_numbers(STATES, None, returned=[1, 2], periods=2)
    with pytest.raises(CallError, match="An inflow of 2 periods needs mean"):
        Inflow([1, -1], np.zeros((2, 2)), np.ones((2, 1)))
