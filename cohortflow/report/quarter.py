"""The end of the next fiscal quarter, where a forecast has one."""

from __future__ import annotations

from cohortflow.errors import CallError
from cohortflow.periods import Calendar


def quarter_end(calendar: Calendar, last: str, horizon: int) -> tuple[int, str] | None:
    """(periods ahead, the quarter's name) of the first end of a fiscal quarter after the period `last`; None where
    the periods have no dates, are years, or the horizon ends before.

    >>> months = Calendar("month", fiscal_year_start=4)
    >>> quarter_end(months, "2026-09", 12), quarter_end(months, "2026-10", 12), quarter_end(months, "2026-09", 2)
    ((3, '2026/27 Q3'), (2, '2026/27 Q3'), None)
    """
    if calendar.kind in ("step", "year") or not last:
        return None
    base = calendar.parse(last)
    try:
        for ahead in range(1, horizon + 1):
            name = calendar.fiscal_quarter(base + ahead)
            if calendar.fiscal_quarter(base + ahead + 1) != name:
                return ahead, name
    except CallError:  # an own calendar ends here
        return None
    return None
