"""The chart of scenarios."""

import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.scenarios import scenarios_chart
from tests import report_fixtures as made

ROWS = made.scenarios(made.VEG_BOX)


def test_the_title_names_the_best_in_money_and_what_it_does_to_the_base():
    # the third scenario: 9,000 x 2 - 900 = 17,100; customers 40 - 120 = -80
    title = scenarios_chart(ROWS, currency="GBP", width=60).texts[0].get_text()
    assert title == (
        f"{made.VEG_BOX.remaining[2]} brings the most: +£17,100 (£17,095 to £17,106), value less cost, all periods; "
        "live customers -80 (-85 to -74)"
    )


def test_without_money_customers_alone():
    figure = scenarios_chart(ROWS[ROWS["quantity"] == "all_live"], width=60)
    assert len(figure.axes) == 1 and "brings the most: +40 (35 to 46), live customers, end of 2027-06" in figure.alt


def test_a_sign_that_is_not_certain_is_said():
    rows = ROWS.assign(low=-1e6)
    assert "its sign is not certain" in scenarios_chart(rows, currency="GBP").alt


def test_no_scenario_is_refused():
    with pytest.raises(CallError, match="There is no scenario to draw"):
        scenarios_chart(ROWS.iloc[:0].drop(columns="segment"))
