"""The calendar: periods as whole numbers (ordinals), with labels, first and last days, and place in the year.

Everything behind `history/` works on ordinals; labels are made at the door and in tables.
A quarter or year that does not begin in January is labelled by the calendar quarter or year it begins in.
"""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import date, timedelta
from functools import cached_property

import numpy as np

from cohortflow.errors import CallError, listed, nearest

KINDS = ("day", "week", "month", "quarter", "year", "step")
WEEKDAYS = ("monday", "tuesday", "wednesday", "thursday", "friday", "saturday", "sunday")
_MONTHS = {"month": 1, "quarter": 3, "year": 12}
_PER_YEAR = {"day": 365.25, "week": 365.25 / 7, "month": 12.0, "quarter": 4.0, "year": 1.0}
_CYCLE = {"day": 7, "week": 52, "month": 12, "quarter": 4}
_SHAPES = {
    "day": r"(\d{4})-(\d{2})-(\d{2})",
    "week": r"(\d{4})-W(\d{2})",
    "month": r"(\d{4})-(\d{2})",
    "quarter": r"(\d{4})-Q([1-4])",
    "year": r"(\d{4})",
    "step": r"(-?\d+)",
}


@dataclass(frozen=True)
class Calendar:
    """How dates fall into periods.

    Parameters
    ----
    kind : "day", "week", "month", "quarter", "year", "step" (plain integers) or "own" (a calendar file)
    week_starts : first day of the week
    fiscal_year_start : month (1..12) in which the fiscal year begins; quarters and years follow it
    own : for kind "own": (label, first day, last day) rows in order, without gaps

    >>> months = Calendar("month")
    >>> months.label(months.parse("2026-09") + 4), months.end(months.parse("2026-02")).isoformat()
    ('2027-01', '2026-02-28')
    """

    kind: str = "month"
    week_starts: str = "monday"
    fiscal_year_start: int = 1
    own: tuple[tuple[str, date, date], ...] = ()

    def __post_init__(self) -> None:
        if self.kind not in (*KINDS, "own"):
            raise CallError(
                f'Unknown period "{self.kind}"{nearest(self.kind, KINDS)}. Allowed: {listed(KINDS)}.'
            )
        if self.week_starts not in WEEKDAYS:
            raise CallError(f'Unknown weekday "{self.week_starts}". Allowed: {listed(WEEKDAYS)}.')
        if not 1 <= self.fiscal_year_start <= 12:
            raise CallError(f"fiscal_year_start is a month from 1 to 12; got {self.fiscal_year_start}.")
        if self.kind == "own":
            _check_own(self.own)

    # ---- dates to ordinals ----
    def ordinals(self, days: np.ndarray) -> np.ndarray:
        """Ordinal of the period that each day (datetime64[D], NaT allowed -> CallError) falls in; int64.

        Days outside an own calendar get -1.
        """
        days = np.asarray(days, dtype="datetime64[D]")
        if np.isnat(days).any():
            raise CallError("Calendar.ordinals got missing dates; drop them first.")
        if self.kind == "day":
            return days.astype(np.int64)
        if self.kind == "week":
            return (days.astype(np.int64) - self._week_origin) // 7
        if self.kind in _MONTHS:
            return (days.astype("datetime64[M]").astype(np.int64) - self._month_offset) // _MONTHS[self.kind]
        if self.kind == "own":
            return self._own_ordinals(days)
        raise CallError('Periods of kind "step" are plain integers and have no dates.')

    def ordinal(self, day: date) -> int:
        """Ordinal of the period that `day` falls in."""
        return int(self.ordinals(np.array([day], dtype="datetime64[D]"))[0])

    def start(self, ordinal: int) -> date:
        """First day of a period."""
        if self.kind == "day":
            return date(1970, 1, 1) + timedelta(days=int(ordinal))
        if self.kind == "week":
            return date(1970, 1, 1) + timedelta(days=self._week_origin + 7 * int(ordinal))
        if self.kind in _MONTHS:
            month = int(ordinal) * _MONTHS[self.kind] + self._month_offset
            return date(1970 + month // 12, month % 12 + 1, 1)
        if self.kind == "own":
            return self._own_row(ordinal)[1]
        raise CallError('Periods of kind "step" are plain integers and have no dates.')

    def end(self, ordinal: int) -> date:
        """Last day of a period."""
        if self.kind == "own":
            return self._own_row(ordinal)[2]
        return self.start(ordinal + 1) - timedelta(days=1)

    def days_in(self, ordinal: int) -> int:
        """Number of days of a period."""
        return (self.end(ordinal) - self.start(ordinal)).days + 1

    # ---- labels ----
    def label(self, ordinal: int) -> str:
        """2026-09-30, 2026-W39, 2026-09, 2026-Q3, 2026, or the plain integer of a step."""
        if self.kind == "step":
            return str(int(ordinal))
        if self.kind == "own":
            return self._own_row(ordinal)[0]
        first = self.start(ordinal)
        if self.kind == "week":
            year, week, _ = (first - timedelta(days=WEEKDAYS.index(self.week_starts))).isocalendar()
            return f"{year}-W{week:02d}"
        if self.kind == "quarter":
            return f"{first.year}-Q{(first.month - 1) // 3 + 1}"
        return first.isoformat()[: {"day": 10, "month": 7, "year": 4}[self.kind]]

    def labels(self, ordinals: Sequence[int] | np.ndarray) -> list[str]:
        """Label of each ordinal."""
        known = {int(o): self.label(int(o)) for o in np.unique(np.asarray(ordinals, dtype=np.int64))}
        return [known[int(o)] for o in ordinals]

    def parse(self, label: str | int) -> int:
        """Ordinal of a label; the inverse of `label`. CallError says what a label looks like."""
        text = str(label).strip()
        if self.kind == "own":
            names = [row[0] for row in self.own]
            if text not in names:
                raise CallError(f'Period "{text}" is not in the calendar file{nearest(text, names)}.')
            return names.index(text)
        match = re.fullmatch(_SHAPES[self.kind], text)
        ordinal = self._parsed(match) if match else None
        if ordinal is None:
            raise CallError(
                f'"{text}" is not a {self.kind} label; one looks like "{self.label(self._example)}".'
            )
        return ordinal

    def _parsed(self, match: re.Match[str]) -> int | None:
        numbers = [int(g) for g in match.groups()]
        try:
            if self.kind == "step":
                return numbers[0]
            if self.kind == "week":
                monday = date.fromisocalendar(numbers[0], numbers[1], 1)
                return self.ordinal(monday + timedelta(days=WEEKDAYS.index(self.week_starts)))
            month = {"quarter": numbers[-1] * 3, "year": 12}.get(self.kind, numbers[1] if numbers[1:] else 1)
            return self.ordinal(date(numbers[0], month, numbers[2] if self.kind == "day" else 1))
        except ValueError:
            return None

    # ---- place in the year ----
    @property
    def per_year(self) -> float:
        """Periods in a year (NaN for steps)."""
        if self.kind == "own":
            days = (self.own[-1][2] - self.own[0][1]).days + 1
            return 365.25 * len(self.own) / days
        return _PER_YEAR.get(self.kind, float("nan"))

    @property
    def cycle(self) -> int:
        """Length of the season's cycle in periods (months 12, quarters 4, weeks 52, days 7; none: 1)."""
        return max(1, round(self.per_year)) if self.kind == "own" else _CYCLE.get(self.kind, 1)

    def position(self, ordinal: int) -> int:
        """Place in the season's cycle, 0 .. cycle-1 (January, first quarter, first week = 0)."""
        if self.cycle == 1 or self.kind == "own":
            return int(ordinal) % self.cycle
        if self.kind == "week":
            return min(int(self.label(ordinal)[-2:]), 52) - 1
        if self.kind == "day":
            return (self.start(ordinal).weekday() - WEEKDAYS.index(self.week_starts)) % 7
        return (self.start(ordinal).month - 1) // _MONTHS[self.kind]

    def fiscal_year(self, ordinal: int) -> str:
        """Fiscal year that a period ends in: "2026" or, when it begins within a calendar year, "2026/27"."""
        last = self.end(ordinal)
        first_year = last.year - (last.month < self.fiscal_year_start)
        if self.fiscal_year_start == 1:
            return str(first_year)
        return f"{first_year}/{(first_year + 1) % 100:02d}"

    def fiscal_quarter(self, ordinal: int) -> str:
        """Fiscal quarter that a period ends in, for instance "2026/27 Q2"."""
        quarter = (self.end(ordinal).month - self.fiscal_year_start) % 12 // 3 + 1
        return f"{self.fiscal_year(ordinal)} Q{quarter}"

    # ---- inner ----
    @cached_property
    def _week_origin(self) -> int:
        """Days from 1970-01-01 (a Thursday) to a day on which the week starts."""
        return WEEKDAYS.index(self.week_starts) - 3

    @property
    def _month_offset(self) -> int:
        step = _MONTHS[self.kind]
        return (self.fiscal_year_start - 1) % step if step > 1 else 0

    @property
    def _example(self) -> int:
        return 3 if self.kind == "step" else self.ordinal(date(2026, 9, 30))

    def _own_row(self, ordinal: int) -> tuple[str, date, date]:
        if not 0 <= ordinal < len(self.own):
            raise CallError(
                f"The calendar file ends at {self.own[-1][2]} ({len(self.own)} periods); period number "
                f"{int(ordinal) + 1} was asked for. Add rows to the calendar file."
            )
        return self.own[int(ordinal)]

    def _own_ordinals(self, days: np.ndarray) -> np.ndarray:
        firsts = np.array([row[1] for row in self.own], dtype="datetime64[D]")
        found = np.searchsorted(firsts, days, side="right") - 1
        return np.where(days > np.datetime64(self.own[-1][2], "D"), -1, found).astype(np.int64)


def _check_own(rows: tuple[tuple[str, date, date], ...]) -> None:
    if not rows:
        raise CallError('A calendar of kind "own" needs at least one (label, start, end) row.')
    labels = [row[0] for row in rows]
    for label, first, last in rows:
        if labels.count(label) > 1:
            raise CallError(f'The calendar has the label "{label}" more than once.')
        if last < first:
            raise CallError(f'The calendar\'s period "{label}" ends ({last}) before it starts ({first}).')
    for before, after in zip(rows, rows[1:], strict=False):
        if after[1] != before[2] + timedelta(days=1):
            raise CallError(
                f'The calendar must be without gaps: "{before[0]}" ends {before[2]}, "{after[0]}" starts '
                f"{after[1]}."
            )
