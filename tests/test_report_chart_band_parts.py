"""The chart of what the uncertainty is made of."""

import pytest

from cohortflow.errors import CallError
from cohortflow.report.chart.band_parts import PARTS, band_parts_chart, has_parts, shares_of
from cohortflow.report.wording import PART_NAMES
from tests import report_fixtures as made

ROWS = made.band_parts(made.VEG_BOX)


def test_shares_add_up_and_the_base_period_has_none():
    shares = shares_of(ROWS)
    assert shares["periods_ahead"].tolist() == list(range(1, 9))
    assert shares[list(PARTS)].sum(axis=1).tolist() == pytest.approx([1.0] * 8)
    # by hand, one period ahead: 3 + 40 + 60 + 25 = 128
    assert shares.loc[0, list(PARTS)].tolist() == pytest.approx([60 / 128, 25 / 128, 3 / 128, 40 / 128])
    assert shares["std_error"].iloc[0] == pytest.approx(128**0.5)


def test_the_title_names_the_largest_part():
    # at 8: common shocks 60 x 8^1.5 = 1,357.6 of 3,301.6; joiners 25 x 64 = 1,600, 48 %
    figure = band_parts_chart(ROWS, width=60)
    assert figure.texts[0].get_text().startswith("48% of the uncertainty about the number of live customers")
    assert PART_NAMES["joiners"] in figure.texts[0].get_text() and "at the end" in figure.alt


def test_a_part_that_is_nowhere_is_not_drawn():
    assert PART_NAMES["joiners"] not in band_parts_chart(ROWS, quantity="quiet").alt


def test_nothing_to_divide_and_unknown_names_are_refused():
    with pytest.raises(CallError, match='The bands have no "queit"'):
        shares_of(ROWS, quantity="queit")
    flat = ROWS.assign(total=0.0)
    assert has_parts(ROWS) and not has_parts(flat)
    with pytest.raises(CallError, match='The band of "all_live" has no width'):
        band_parts_chart(flat)
