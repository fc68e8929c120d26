"""The section on past forecasts."""

import numpy as np

from cohortflow.assessment import choose
from cohortflow.report.past import Trust, parting, past_section, standing
from tests import report_fixtures as made
from tests.backtest_cases import past_record

FACTS = made.facts(made.VEG_BOX)


def test_without_a_backtest_it_says_so():
    assert past_section(FACTS, Trust()) == ()
    assert standing(FACTS, Trust()) == ("Not validated: the forecast has not been tested against past forecasts.",)


def test_chart_table_and_choice():
    trust = Trust(past_record(), choose(past_record(), rng=1))
    (section,) = past_section(FACTS, trust)
    assert len(section.lead) == 2 and [e.key for e in section.exhibits] == ["backtest"]
    assert standing(FACTS, trust) == section.lead


def test_where_two_curves_part():
    # off by 1, 6 and 3 against half of 10: first more than 5 after two months
    plain, chosen, half = np.array([100, 99, 94, 97.0]), np.array([100.0] * 4), np.array([0, 10, 10, 10.0])
    assert "they part after 2 months" in parting(FACTS, plain, chosen, half)
    assert "they do not part" in parting(FACTS, chosen + 1, chosen, half)
