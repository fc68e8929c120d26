"""The calendar against the standard library's own date arithmetic."""

from datetime import date, timedelta

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st

from cohortflow.errors import CallError
from cohortflow.periods import WEEKDAYS, Calendar

DATED = ("day", "week", "month", "quarter", "year")
days = st.dates(date(1950, 1, 1), date(2090, 12, 31))
calendars = st.builds(
    Calendar, st.sampled_from(DATED), week_starts=st.sampled_from(WEEKDAYS),
    fiscal_year_start=st.integers(1, 12),
)


@given(calendars, days)
def test_each_day_lies_within_its_period_and_the_label_leads_back(calendar, day):
    ordinal = calendar.ordinal(day)
    assert calendar.start(ordinal) <= day <= calendar.end(ordinal)
    assert calendar.parse(calendar.label(ordinal)) == ordinal
    assert calendar.start(ordinal + 1) == calendar.end(ordinal) + timedelta(days=1)
    assert 0 <= calendar.position(ordinal) < calendar.cycle


@given(days)
def test_iso_weeks_agree_with_the_standard_library(day):
    year, week, _ = day.isocalendar()
    calendar = Calendar("week")
    assert calendar.label(calendar.ordinal(day)) == f"{year}-W{week:02d}"


def test_the_year_is_cut_where_the_fiscal_year_begins():
    months = Calendar("month", fiscal_year_start=4)
    september = months.parse("2026-09")
    # April 2026 begins fiscal year 2026/27: September is the sixth month, so the second quarter
    assert months.fiscal_quarter(september) == "2026/27 Q2"
    assert months.fiscal_year(months.parse("2026-03")) == "2025/26"
    quarters = Calendar("quarter", fiscal_year_start=2)
    first = quarters.ordinal(date(2026, 2, 1))
    assert (quarters.start(first), quarters.end(first)) == (date(2026, 2, 1), date(2026, 4, 30))


def test_an_own_calendar_of_four_four_five_weeks():
    rows = tuple(
        (f"P{i + 1}", date(2026, 1, 5) + timedelta(weeks=w), date(2026, 1, 4) + timedelta(weeks=w + n))
        for i, (w, n) in enumerate([(0, 4), (4, 4), (8, 5)])
    )
    calendar = Calendar("own", own=rows)
    assert calendar.label(calendar.ordinal(date(2026, 3, 1))) == "P2"
    assert calendar.days_in(2) == 35
    outside = calendar.ordinals(np.array(["2026-01-04", "2026-04-06"], dtype="datetime64[D]"))
    assert outside.tolist() == [-1, -1]
    with pytest.raises(CallError, match="calendar file ends at 2026-04-05"):
        calendar.label(3)
    with pytest.raises(CallError, match='"P9" is not in the calendar file'):
        calendar.parse("P9")


@pytest.mark.parametrize(
    ("build", "text"),
    [
        (lambda: Calendar("fortnight"), 'Unknown period "fortnight"'),
        (lambda: Calendar("week", week_starts="mon"), 'Unknown weekday "mon"'),
        (lambda: Calendar("month", fiscal_year_start=13), "from 1 to 12; got 13"),
        (lambda: Calendar("own"), "at least one"),
        (lambda: Calendar("own", own=(("a", date(2026, 1, 2), date(2026, 1, 1)),)), "before it starts"),
        (lambda: Calendar("own", own=(("a", date(2026, 1, 1), date(2026, 1, 2)),) * 2), "more than once"),
        (
            lambda: Calendar("own", own=(("a", date(2026, 1, 1), date(2026, 1, 2)),
                                         ("b", date(2026, 1, 4), date(2026, 1, 5)))),
            "without gaps",
        ),
        (lambda: Calendar("month").parse("2026-13"), 'not a month label; one looks like "2026-09"'),
        (lambda: Calendar("month").ordinals(np.array(["NaT"], dtype="datetime64[D]")), "missing dates"),
        (lambda: Calendar("step").start(3), "have no dates"),
        (lambda: Calendar("step").ordinal(date(2026, 1, 1)), "have no dates"),
    ],
)
def test_wrong_calendars_are_refused_with_the_reason(build, text):
    with pytest.raises(CallError, match=text):
        build()
