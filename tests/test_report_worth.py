"""What customers are worth, and low, base and high."""

from dataclasses import replace

from cohortflow.report.worth import cases_table, money_section, sums_table, value_table
from tests import report_fixtures as made

FACTS = made.facts(made.VEG_BOX, currency="GBP", terms=("Contribution as given.",))
VALUE = made.value(made.VEG_BOX)
CASES = {made.VEG_BOX.remaining[0]: "high", made.VEG_BOX.remaining[1]: "low"}


def test_value_by_state_with_interval_and_spread():
    assert value_table(VALUE).rows[0] == (made.VEG_BOX.remaining[0], "£300 (£280 to £330)", "£250")


def test_sums_say_how_far_they_are_counted():
    rows = sums_table(VALUE, kind="month").rows
    assert rows[0] == ("those who join in one month", "£80,000 (£76,000 to £85,000)", "until they leave")
    assert rows[2][1:] == ("£510,000 (£470,000 to £560,000)", "until the horizon")


def test_the_section_states_terms_and_cautions():
    (section,) = money_section(FACTS, {"value": VALUE})
    assert section.lead == ("Contribution as given.",) and "not revenue" in section.cautions[0]
    assert money_section(FACTS, {}) == ()


def test_low_base_and_high_side_by_side():
    table = cases_table(replace(FACTS, cases=CASES), {"scenarios": made.scenarios(made.VEG_BOX)})
    low, high = made.VEG_BOX.remaining[1], made.VEG_BOX.remaining[0]
    assert table.heads == ("figure", f"low: {low}", "base", f"high: {high}")
    # fixture: by 2026-12 the first scenario is 10 up, the second 20 down on 4,000
    assert table.rows[0] == ("all live customers, end of 2026-12", "3,980", "4,000", "4,010")
    assert table.rows[2] == ("contribution less cost, up to the horizon", "£518,100", "£510,000", "£509,100")
    assert "not limits of chance" in table.note


def test_one_case_alone_and_none():
    one = cases_table(replace(FACTS, cases={"x": "low", **dict([next(iter(CASES.items()))])}),
                      {"scenarios": made.scenarios(made.VEG_BOX)})  # fmt: skip
    assert one.heads[1:] == ("base", f"high: {made.VEG_BOX.remaining[0]}")
    assert cases_table(FACTS, {"scenarios": made.scenarios(made.VEG_BOX)}) is None
    assert cases_table(replace(FACTS, cases=CASES), {}) is None
