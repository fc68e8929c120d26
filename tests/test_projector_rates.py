"""Churn, retention and return rates: numerators and denominators on paper, compounding, forecasts."""

import numpy as np
import pytest
from statsmodels.stats.proportion import proportion_confint

from cohortflow.errors import CallError
from cohortflow.periods import Calendar
from cohortflow.projector.project import project
from cohortflow.projector.rates import rates_actual, rates_forecast, wilson
from tests.projector_cases import CHAIN, tally_of_stays

STAYS = [
    *[("joined", "", [(p, "steady") for p in range(1, 7)])] * 7,
    *[("joined", "", [(1, "fresh"), (2, "steady"), (3, "left")])] * 2,
    ("joined", "", [(1, "fresh"), (2, "paused"), (3, "lapsed")]),
    ("returned", "left", [(5, "steady"), (6, "steady")]),
]


def rate(frame, measure, period, leaving=""):
    row = frame[(frame["measure"] == measure) & (frame["period"] == period) & (frame["exit"] == leaving)]
    return row.iloc[0]


def test_churn_retention_and_return_by_hand():
    frame = rates_actual(tally_of_stays(STAYS))
    # into period 3: ten at risk (one of them away), two left and one lapsed
    churn = rate(frame, "churn", "3")
    assert (churn["numerator"], churn["denominator"], churn["value"]) == (3, 10, 0.3)
    assert (
        rate(frame, "churn", "3", "left")["value"] == 0.2
        and rate(frame, "churn", "3", "lapsed")["value"] == 0.1
    )
    assert rate(frame, "retention", "3")["value"] == pytest.approx(0.7)
    # three had left by the end of period 4; one came back in period 5, so two are left to return in period 6
    back = rate(frame, "return", "5")
    assert (back["numerator"], back["denominator"]) == (1, 3)
    assert rate(frame, "return", "6")["denominator"] == 2 and np.isnan(rate(frame, "return", "2")["value"])
    assert frame["measure"].unique().tolist() == ["churn", "retention", "return"]  # steps have no year


def test_interval_is_wilsons():
    # Newcombe (1998), Table I, method 3: 15/148 (.0624, .1605), 1/29 (.0061, .1718)  (VERIFIED)
    low, high = wilson(np.array([15, 1, 0]), np.array([148, 29, 0]), 0.95)
    assert low[:2].round(4).tolist() == [0.0624, 0.0061] and high[:2].round(4).tolist() == [0.1605, 0.1718]
    assert np.isnan(low[2])
    row = rate(rates_actual(tally_of_stays(STAYS), level=0.8), "churn", "3")
    assert (row["low"], row["high"]) == pytest.approx(proportion_confint(3, 10, 0.2, "wilson"))  # statsmodels
    with pytest.raises(CallError, match="level is 95"):
        wilson(np.array([1]), np.array([2]), 95)


def test_a_rate_kept_up_for_a_year_is_compounded():
    months = tally_of_stays(STAYS, calendar=Calendar("month"))
    frame = rates_actual(months)
    label = Calendar("month").label(3)
    # 30 % a month leave 1 - .7^12 = 98.6 % a year, not 360 %
    assert rate(frame, "churn_year", label)["value"] == pytest.approx(1 - 0.7**12)
    assert rate(frame, "retention_year", label)["value"] == pytest.approx(0.7**12)
    yearly, monthly = rate(frame, "churn_year", label), rate(frame, "churn", label)
    assert yearly["low"] == pytest.approx(1 - (1 - monthly["low"]) ** 12)


def test_forecast_rates_are_expected_losses_over_the_base():
    found = project(CHAIN, start={"steady": 100, "paused": 20}, periods=2, joiners={"fresh": 30}, draws=500,
                    base_period="2026-09")  # fmt: skip
    frame = rates_forecast(found)
    # first month: 10 + 1 left, 1 lapsed of 120
    first = rate(frame, "churn", "2026-10")
    assert (first["numerator"], first["denominator"]) == (pytest.approx(12), 120) and first[
        "low"
    ] < 0.1 < first["high"]
    assert rate(frame, "churn", "2026-10", "lapsed")["value"] == pytest.approx(1 / 120)
    kept = rate(frame, "retention", "2026-10")
    assert kept["value"] == pytest.approx(0.9) and kept["low"] == pytest.approx(1 - first["high"])
    # second month: 108 + 30 joined at risk
    assert rate(frame, "churn", "2026-11")["denominator"] == pytest.approx(138)
    assert frame["kind"].unique().tolist() == ["forecast"] and "churn_year" in set(frame["measure"])
