"""The figures that come first."""

from dataclasses import replace

import pandas as pd

from cohortflow.report.headlines import headlines, summary
from tests import report_fixtures as made

FACTS = made.facts(made.VEG_BOX)
TABLES = made.tables(made.VEG_BOX)


def found(facts=FACTS, tables=TABLES):
    return {h.label: h for h in headlines(facts, tables)}


def test_at_most_five_each_with_what_it_rests_on():
    assert 3 <= len(found()) <= 5 and all(h.basis for h in found().values())


def test_the_base_at_the_horizon_has_its_band_and_today():
    rows = made.projection(made.VEG_BOX)
    last = rows[(rows["state"] == "all_live") & (rows["periods_ahead"] == 8)].iloc[0]
    head = found()["All live customers at the end of 2027-06"]
    assert (
        head.value == f"{round(last['customers']):,}"
        and head.band == f"{round(last['low']):,} to {round(last['high']):,}"
    )
    assert "on today's" in head.basis


def test_churn_comes_from_the_rates_with_its_denominator():
    rates = pd.DataFrame({"segment": "all", "period": "2026-11", "kind": "forecast", "measure": "churn",
                          "exit": ["", "cancelled", "card_lapsed"], "numerator": [30.0, 20, 10], "denominator": 1000.0,
                          "value": [0.03, 0.02, 0.01], "low": [0.025, 0.016, 0.007], "high": [0.036, 0.025, 0.014],
                          })  # fmt: skip
    head = found(tables={**TABLES, "rates": rates})["Leaving in 2026-11"]
    assert (head.value, head.band) == ("3.0%", "2.5 to 3.6%")
    assert head.basis.startswith("30 of 1,000 live and away at the opening: cancelled 2.0% (1.6 to 2.5%)")


def test_without_rates_the_projection_tells_the_leavers():
    # 1 - retained: lost in the first period over the opening base, both from the same frame
    rows = made.projection(made.VEG_BOX)
    lost = rows[(rows["periods_ahead"] == 1) & rows["state"].isin(made.VEG_BOX.exits)]["customers"].sum()
    base = rows[(rows["periods_ahead"] == 0) & rows["state"].isin(made.VEG_BOX.remaining)]["customers"].sum()
    assert found()["Leaving in 2026-11"].value == f"{100 * lost / base:.1f}%"


def test_a_projection_that_is_not_known_is_not_a_number():
    rows = made.projection(made.VEG_BOX)
    rows.loc[rows["periods_ahead"] > 0, ["customers", "low", "high"]] = float("nan")
    head = found(tables={"projection": rows})["All live customers at the end of 2027-06"]
    assert head.value == "not known" and head.basis == "not projected: see what this rests on"


def test_the_summary_says_what_was_counted_and_what_was_not_tested():
    text = summary(FACTS)
    assert "9,133 moves of 9,033 customers from 2024-11 to 2026-10" in text and "has not been tested" in text
    assert "Back-tests bear out 6 months" in summary(replace(FACTS, validated=6))
