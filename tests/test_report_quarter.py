"""The end of the next fiscal quarter."""

from datetime import date

import pytest

from cohortflow.periods import Calendar
from cohortflow.report.quarter import quarter_end


@pytest.mark.parametrize(
    "calendar, last, horizon, expected",
    [
        (Calendar("month"), "2026-09", 12, (3, "2026 Q4")),  # October to December
        (Calendar("month", fiscal_year_start=2), "2026-09", 12, (1, "2026/27 Q3")),  # August to October
        (Calendar("quarter"), "2026-Q3", 2, (1, "2026 Q4")),
        (Calendar("day"), "2026-12-29", 5, (2, "2026 Q4")),
        (Calendar("month"), "2026-09", 2, None),
        (Calendar("year"), "2026", 3, None),
        (Calendar("step"), "7", 3, None),
        (Calendar("month"), "", 3, None),
    ],
)
def test_where_it_ends(calendar, last, horizon, expected):
    assert quarter_end(calendar, last, horizon) == expected


def test_an_own_calendar_that_ends_has_none():
    rows = (("P1", date(2026, 10, 1), date(2026, 10, 31)), ("P2", date(2026, 11, 1), date(2026, 11, 30)))
    assert quarter_end(Calendar("own", own=rows), "P1", 1) is None
