"""Scenarios, levers and required changes in words; the chart of levers."""

import pandas as pd
import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.levers import levers_chart
from cohortflow.report.chart.style import svg
from cohortflow.report.plans import levers_table, required_table, scenario_table, target_words, whatif_text
from cohortflow.report.table import plain_text
from cohortflow.whatif import Change, Scenario, required_change, sensitivity, what_if
from tests.projector_cases import CHAIN
from tests.whatif_cases import JOINERS, MONEY, START, draws_of_chain

GIVEN = {"start": START, "joiners": JOINERS, "value": MONEY}
KEEP = Scenario("keep them", Change("steady", "left", add=-0.04), cost_per_customer=0.05)


def scenarios(**more):
    free = Scenario("free", Change("steady", "left", add=-0.01))
    made = [
        what_if(CHAIN, plan, periods=6, draws=draws_of_chain(60), **GIVEN, **more) for plan in (KEEP, free)
    ]
    return pd.concat([record.to_frame() for record in made], ignore_index=True)


def levers():
    made = [
        sensitivity(CHAIN, target=target, horizon=6, draws=draws_of_chain(40), **GIVEN)
        for target in ("value:total", "base", "life")
    ]
    return pd.concat([record.to_frame() for record in made], ignore_index=True)


def test_scenarios_in_one_row_each():
    table = scenario_table(scenarios(), currency="GBP")
    assert table.heads == ("scenario", "live customers", "value", "cost", "net", "pays after", "long run")
    first, second = table.rows
    assert first[0] == "keep them" and first[1].startswith("+") and first[2].startswith("+£")
    assert first[5].endswith("months") or first[5].endswith("month")
    assert second[3] == "£0" or second[3].startswith("£0 (") and second[5] == "no cost"
    plain = scenario_table(
        what_if(CHAIN, Change("steady", "left", add=-0.01), periods=2, start=START).to_frame()
    )
    assert plain.heads == ("scenario", "live customers", "long run")
    assert max(map(len, plain_text(table).splitlines())) <= 80


def test_levers_and_what_their_numbers_are():
    frame = levers()
    table = levers_table(frame, target="value:total", currency="GBP")
    assert table.caption == "Levers: contribution of base and joiners" and table.rows[0][0] == "1"
    assert "£" in table.rows[0][3] and table.rows[0][6].endswith("%")
    assert "£" not in levers_table(frame, target="base:all_live").rows[0][3]
    assert target_words("remaining_mix:steady", "month") == "share of steady among those who remain"


def test_the_change_needed_and_the_most_that_can_be_done():
    made = [
        required_change(CHAIN, move, target="base", horizon=3, reach=245, draws=draws_of_chain(20), **GIVEN)
        for move in (("steady", "left"), ("paused", "lapsed"))
    ]
    table = required_table(made)
    assert table.caption.startswith("Change needed: customers in live states at the horizon, now ")
    assert table.rows[0][3].endswith("points") and table.rows[1][3] == "cannot be reached"
    text = whatif_text({}, currency="GBP", kind="month", required=made)
    assert "Change needed" in text and text.endswith("\n")


def test_the_printout_has_everything_once():
    text = whatif_text(
        {"scenarios": scenarios(), "levers": levers()}, currency="GBP", kind="month", findings="Findings"
    )
    assert text.count("Levers: ") == 3 and text.count("Elasticity: percent") == 1
    assert text.startswith("Findings") and "keep them" in text


def test_the_chart_turns_every_lever_so_that_it_helps():
    figure = levers_chart(levers(), currency="GBP", width=9.0)
    assert "1 point fewer" in figure.alt and "-£" not in figure.alt and "One line a lever" in figure.alt
    assert svg(figure) == svg(levers_chart(levers(), currency="GBP", width=9.0))
    assert levers_chart(levers(), target="life:joiners", width=3.9).get_size_inches()[0] == 3.9
    with pytest.raises(CallError, match='There are no levers of "nothing"; there are "value:total"'):
        levers_chart(levers(), target="nothing")
