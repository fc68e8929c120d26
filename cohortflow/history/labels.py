"""Periods as extracts write them: 2024-03, 202403, 31.03.2024, Mar-24, 2026-W39, 2026-Q3, dates, plain integers."""

from __future__ import annotations

import re
from collections.abc import Iterable
from datetime import date, datetime

from cohortflow.errors import CallError, InputError
from cohortflow.periods import Calendar

MONTHS = ("jan", "feb", "mar", "apr", "may", "jun", "jul", "aug", "sep", "oct", "nov", "dec")
_DAY_LAST = re.compile(r"(\d{4})-(\d{2})-(\d{2})([ T]00:00(:00(\.0+)?)?)?")
_DAY_FIRST = re.compile(r"(\d{1,2})\.(\d{1,2})\.(\d{4})")
_MONTH_NAME = re.compile(r"([A-Za-z]{3})[A-Za-z]*[- ](\d{2}|\d{4})")
_COMPACT = re.compile(r"(\d{4})(\d{2})(\d{2})?")
_SLASHED = re.compile(r"(\d{4})/(\d{1,2})(/(\d{1,2}))?")
_QUARTER = re.compile(r"(\d{4}) ?-?[Qq]([1-4])|[Qq]([1-4])[ -/](\d{4})")


def period_of_label(label: str, calendar: Calendar, date_format: str | None = None) -> int | None:
    """Ordinal of the period that a label of an extract means; None when it cannot be read.

    A date means the period it lies in. Two-digit years are of this century.

    >>> months = Calendar("month")
    >>> {months.label(period_of_label(text, months)) for text in ("2024-03", "202403", "31.03.2024", "Mar-24")}
    {'2024-03'}
    """
    text = label.strip()
    if re.fullmatch(r"-?\d+\.0", text):
        text = text[:-2]
    if date_format:
        day = _by_format(text, date_format)
        return None if day is None else _ordinal(day, calendar)
    try:
        return calendar.parse(text)
    except CallError:
        pass
    if calendar.kind == "step":
        return None
    day = _day(text)
    return None if day is None else _ordinal(day, calendar)


def _by_format(text: str, date_format: str) -> date | None:
    try:
        return datetime.strptime(text, date_format).date()
    except ValueError:
        return None


def _ordinal(day: date, calendar: Calendar) -> int | None:
    found = calendar.ordinal(day)
    return None if calendar.kind == "own" and found < 0 else found


def _day(text: str) -> date | None:
    """A day within the period that the text means."""
    try:
        if m := _DAY_LAST.fullmatch(text):
            return date(int(m[1]), int(m[2]), int(m[3]))
        if m := _DAY_FIRST.fullmatch(text):
            return date(int(m[3]), int(m[2]), int(m[1]))
        if m := _SLASHED.fullmatch(text):
            return date(int(m[1]), int(m[2]), int(m[4] or 1))
        if m := _COMPACT.fullmatch(text):
            return date(int(m[1]), int(m[2]), int(m[3] or 1))
        if m := _QUARTER.fullmatch(text):
            return date(int(m[1] or m[4]), 3 * int(m[2] or m[3]), 1)
        if (m := _MONTH_NAME.fullmatch(text)) and m[1].lower() in MONTHS:
            year = int(m[2]) + (2000 if len(m[2]) == 2 else 0)
            return date(year, MONTHS.index(m[1].lower()) + 1, 1)
    except ValueError:
        return None
    return None


def refuse_ambiguous(labels: Iterable[str], date_format: str | None, where: str) -> None:
    """InputError for dates like 03/04/2024, whose order of day and month the file does not tell."""
    slashed = [text for text in labels if re.fullmatch(r"\d{1,2}[/-]\d{1,2}[/-]\d{4}", text.strip())]
    if slashed and not date_format:
        raise InputError(
            f'{where}: "{slashed[0]}" does not tell day from month. Set `date_format` in [input], for instance '
            'date_format = "%d/%m/%Y".'
        )
