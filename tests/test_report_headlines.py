"""The figures that come first."""

from dataclasses import replace

import pandas as pd
import pytest

from cohortflow.report.headlines import headlines, summary
from tests import report_fixtures as made

FACTS = made.facts(made.VEG_BOX, currency="GBP")
TABLES = {**made.tables(made.VEG_BOX), "value": made.value(made.VEG_BOX)}
ROWS = made.projection(made.VEG_BOX)  # the base is counted in 2026-10; the quarter in progress ends 2 months on


def found(facts=FACTS, tables=TABLES):
    return {h.key: h for h in headlines(facts, tables)}


def live(ahead):
    return ROWS[(ROWS["state"] == "all_live") & (ROWS["periods_ahead"] == ahead)].iloc[0]


def test_five_each_with_a_band_and_a_sentence():
    assert list(found()) == ["quarter", "horizon", "churn", "joiners", "contribution"]
    assert all(h.basis.endswith(".") for h in found().values())
    facts = replace(FACTS, joining=(2400.0, 2300.0, 2500.0))
    assert all(h.band for h in found(facts).values()) and found(facts)["joiners"].band == "2,300 to 2,500"


def test_the_base_at_the_end_of_the_quarter_and_at_the_horizon():
    head, row = found()["quarter"], live(2)
    assert head.label == "All live customers at the end of 2026 Q4 (2026-12)"
    assert head.value == f"{round(row['customers']):,}"
    assert head.band == f"{round(row['low']):,} to {round(row['high']):,}"
    assert found()["horizon"].label == "All live customers at the end of 2027-06, the horizon"
    assert "on today's" in head.basis


def test_a_total_named_paying_stands_first():
    rows = pd.concat([ROWS, ROWS[ROWS["state"] == "all_live"].assign(state="paying", customers=77.0)])
    facts = replace(FACTS, totals={"books": ("weekly",), "paying": ("weekly",)})
    assert found(facts, {"projection": rows})["horizon"].label.startswith("Customers in paying") and (
        found(facts, {"projection": rows})["horizon"].value == "77"
    )


@pytest.mark.parametrize(
    "low, high, words",
    [(1e6, 2e6, "the whole band lies above it"), (0, 1, "the whole band lies below it"), (0, 1e6, "leaves open")],
)
def test_the_sentence_goes_as_far_as_the_band(low, high, words):
    rows = ROWS.copy()
    rows.loc[rows["periods_ahead"] > 0, ["low", "high"]] = low, high
    assert words in found(tables={"projection": rows})["horizon"].basis


def test_what_the_past_does_not_vouch_for_is_said():
    heads = found(replace(FACTS, borne={"all_live": 2}))
    assert "vouch" not in heads["quarter"].basis
    assert "Farther ahead than past forecasts vouch for" in heads["horizon"].basis


def test_leavers_of_the_quarter_over_the_opening_base():
    # all lost by the end of 2026-12 over live and away at the end of 2026-10, both from the same frame
    lost = ROWS[(ROWS["periods_ahead"] == 2) & ROWS["state"].isin(made.VEG_BOX.exits)]["customers"].sum()
    base = ROWS[(ROWS["periods_ahead"] == 0) & ROWS["state"].isin(made.VEG_BOX.remaining)]["customers"].sum()
    head = found()["churn"]
    assert (head.label, head.value) == ("Leaving in 2026 Q4", f"{100 * lost / base:.1f}%")
    assert "cancelled" in head.band and "card_lapsed" in head.band
    assert f"over {round(base):,} live and away" in head.basis


def test_without_a_quarter_ahead_churn_is_that_of_the_next_period():
    rates = pd.DataFrame({"segment": "all", "period": "2026-11", "kind": "forecast", "measure": "churn",
                          "exit": ["", "cancelled", "card_lapsed"], "numerator": [30.0, 20, 10], "denominator": 1000.0,
                          "value": [0.03, 0.02, 0.01], "low": [0.025, 0.016, 0.007], "high": [0.036, 0.025, 0.014],
                          })  # fmt: skip
    short = ROWS[ROWS["periods_ahead"] <= 1]
    facts = replace(FACTS, horizon=1)
    heads = found(facts, {"projection": short, "rates": rates})
    assert "quarter" not in heads
    head = heads["churn"]
    assert (head.label, head.value, head.band) == ("Leaving in 2026-11", "3.0%", "2.5 to 3.6%")
    assert head.basis.startswith("30 of 1,000 live and away at the opening: cancelled 2.0% (1.6 to 2.5%)")
    lost = short[(short["periods_ahead"] == 1) & short["state"].isin(made.VEG_BOX.exits)]["customers"].sum()
    base = short[(short["periods_ahead"] == 0) & short["state"].isin(made.VEG_BOX.remaining)]["customers"].sum()
    assert found(facts, {"projection": short})["churn"].value == f"{100 * lost / base:.1f}%"


def test_joiners_as_planned_are_taken_as_given():
    assert found(replace(FACTS, joiners="planned"))["joiners"].band == "taken as given"


def test_without_money_how_long_a_joiner_stays():
    tables = {k: v for k, v in TABLES.items() if k != "value"}
    assert list(found(tables=tables)) == ["quarter", "horizon", "churn", "joiners", "stay"]


def test_the_change_since_the_last_run():
    # 510,000 in the fixture
    before = {"horizon": live(8)["customers"] - 12, "contribution": 511_000.0, "churn": 0.0}
    heads = found(replace(FACTS, previous=before))
    assert heads["horizon"].change == "+12" and heads["contribution"].change == "-£1,000"
    assert heads["churn"].change.endswith(" points") and heads["quarter"].change == ""


def test_a_projection_that_is_not_known_is_not_a_number():
    rows = ROWS.copy()
    rows.loc[rows["periods_ahead"] > 0, ["customers", "low", "high"]] = float("nan")
    head = found(tables={"projection": rows})["horizon"]
    assert head.value == "not known" and head.basis == "Not projected: see what this rests on."


def test_the_summary_says_what_was_counted():
    assert "9,133 moves of 9,033 customers from 2024-11 to 2026-10" in summary(FACTS)
