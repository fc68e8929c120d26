"""Instants and periods as SQL: how a time column is written, and which period an instant falls in.

An instant is kept as whole microseconds: UTC where the text carries an offset, else the digits as written.
The period starts are brought to the instants' clock once, instead of each instant to local time.
"""

from __future__ import annotations

import re
from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass
from datetime import UTC, date, datetime, timedelta
from zoneinfo import ZoneInfo

import numpy as np

from cohortflow.errors import InputError
from cohortflow.history.engine import quoted
from cohortflow.periods import Calendar

DAY = 86_400_000_000  # microseconds
EARLIEST, LATEST = date(1700, 1, 1), date(2250, 1, 1)  # instants outside are unreadable; see cells.py for why
_CLOCKS = ("", " %H:%M", " %H:%M:%S")
_FRACTION = r"\d{4}-\d\d-\d\d[ T]\d\d:\d\d:\d\d\.\d{1,9}"
_ZONED = r"\d{4}-\d\d-\d\d[ T]\d\d:\d\d(:\d\d(\.\d{1,9})?)? ?([Zz]|[+-]\d\d(:?\d\d)?)"
_ISO = re.compile(rf"\d{{4}}-\d\d-\d\d([ T]\d\d:\d\d(:\d\d)?)?|{_FRACTION}|{_ZONED}")
_CLOCK = r"( \d{1,2}:\d\d(:\d\d)?)?"
_SHAPES = {
    "%Y%m%d": r"\d{8}",
    "%Y/%m/%d": rf"\d{{4}}/\d{{1,2}}/\d{{1,2}}{_CLOCK}",
    "%d.%m.%Y": rf"\d{{1,2}}\.\d{{1,2}}\.\d{{4}}{_CLOCK}",
    "a/b/%Y": rf"\d{{1,2}}/\d{{1,2}}/\d{{4}}{_CLOCK}",
    "a-b-%Y": rf"\d{{1,2}}-\d{{1,2}}-\d{{4}}{_CLOCK}",
    "%d-%b-%Y": rf"\d{{1,2}}-[A-Za-z]{{3}}-\d{{4}}{_CLOCK}",
    "%d %b %Y": rf"\d{{1,2}} [A-Za-z]{{3}} \d{{4}}{_CLOCK}",
}


@dataclass(frozen=True)
class TimeFormat:
    """How a column writes instants. kind: iso | pattern | typed | step.

    patterns: for kind "pattern", alternatives in strptime codes; `order_unknown`: "/" or "-" when the place
    of day and month must be found from all rows first; `width`: usual length of ISO text.
    """

    kind: str
    patterns: tuple[str, ...] = ()
    order_unknown: str = ""
    width: int = 19

    @property
    def shown(self) -> str:
        """For the accounting."""
        return " or ".join(self.patterns) if self.patterns else self.kind


def detect_format(samples: Sequence[str], *, where: str, given: str | None = None) -> TimeFormat:
    """The format that most values have; InputError shows some values when none is recognised."""
    if given:
        return TimeFormat("pattern", (given,))
    if len(samples) == 0:
        return TimeFormat("iso")  # no rows; that is refused where rows are counted
    values = [v.strip() for v in samples if v and v.strip()]
    votes = Counter(shape for shape in map(_shape, values) if shape)
    if not votes:
        shown = ", ".join(repr(v) for v in dict.fromkeys(values[:3])) or "blank"
        raise InputError(
            f"{where}: no value looks like a date (the first are {shown}). "
            'Set `date_format` in [input], for instance date_format = "%d.%m.%Y".'
        )
    best = max(sorted(votes), key=lambda shape: votes[shape])
    if best == "iso":
        widths = Counter(len(v) for v in values if len(v) in (10, 16, 19))
        return TimeFormat("iso", width=max(widths, key=lambda w: widths[w], default=19))
    if best.startswith("a"):
        return TimeFormat("pattern", order_unknown=best[1])
    return TimeFormat("pattern", tuple(best + clock for clock in _CLOCKS))


def _shape(value: str) -> str | None:
    if _ISO.fullmatch(value):
        return "iso"
    return next((name for name, shape in _SHAPES.items() if re.fullmatch(shape, value)), None)


def in_order(form: TimeFormat, first_over_12: bool, second_over_12: bool, *, where: str) -> TimeFormat:
    """The format once it is known whether any first or second number exceeds 12; InputError when neither does."""
    mark = form.order_unknown
    if first_over_12 == second_over_12:
        why = "both places" if first_over_12 else "neither place"
        raise InputError(
            f"{where}: cannot tell day from month: {why} of the dates ever exceed 12. Set `date_format` in "
            f'[input]: date_format = "%d{mark}%m{mark}%Y" or "%m{mark}%d{mark}%Y".'
        )
    base = f"%d{mark}%m{mark}%Y" if first_over_12 else f"%m{mark}%d{mark}%Y"
    return TimeFormat("pattern", tuple(base + clock for clock in _CLOCKS))


@dataclass(frozen=True)
class TimeSql:
    """SQL over a column: the instant, NULL when unreadable; how it is written (0 day, 1 clock, 2 zoned)."""

    instant: str
    form: str


def instant_sql(column: str, form: TimeFormat, sql_type: str = "VARCHAR") -> TimeSql:
    """SQL for a column (an expression) written in `form` or typed by the file."""
    if form.kind == "step":
        number = f"try_cast({column} AS BIGINT)"
        return TimeSql(f"CASE WHEN abs({number}) < 1000000000 THEN {number} END", "0::UTINYINT")
    if form.kind == "typed":
        zoned = "TIME ZONE" in sql_type
        stamp = f"{column}::{'TIMESTAMPTZ' if zoned else 'TIMESTAMP'}"
        return TimeSql(_bounded(stamp), f"{2 if zoned else int(sql_type != 'DATE')}::UTINYINT")
    if form.kind == "pattern":
        return _pattern_sql(f"trim({column})", form.patterns)
    return _iso_sql(column, form.width)


def _pattern_sql(text: str, patterns: tuple[str, ...]) -> TimeSql:
    listed = "[" + ", ".join(map(quoted, patterns)) + "]"
    clock = "0"
    if any("%H" in p or "%I" in p for p in patterns):
        clock = f"CASE WHEN length({text}) > 11 THEN 1 ELSE 0 END" if len(patterns) > 1 else "1"
    if any("%z" in p for p in patterns):
        clock = "2"
    return TimeSql(_bounded(f"try_strptime({text}, {listed})"), f"({clock})::UTINYINT")


def _iso_sql(column: str, width: int) -> TimeSql:
    """The engine's cast takes any tail ("10:00 foo") and forgets offsets, so the shape is looked at first.

    Values of the usual width are told by one or two characters; only others are looked at closely.
    """
    usual = {10: f"length({column}) = 10"}.get(
        width, f"length({column}) = {width} AND substr({column}, {width - 2}, 1) = ':'"
    )
    text = f"trim({column})"
    plain = (
        f"(length({text}) = 10 OR (length({text}) IN (16, 19) AND substr({text}, 14, 1) = ':' "
        f"AND (length({text}) = 16 OR substr({text}, 17, 1) = ':')))"
    )
    zoned = f"(length({text}) > 16 AND regexp_full_match({text}, '{_ZONED}'))"
    fraction = f"(length({text}) > 19 AND regexp_full_match({text}, '{_FRACTION}'))"
    instant = (
        f"CASE WHEN {usual} THEN {_bounded(f'try_cast({column} AS TIMESTAMP)')} "
        f"WHEN {plain} OR {fraction} THEN {_bounded(f'try_cast({text} AS TIMESTAMP)')} "
        f"WHEN {zoned} THEN {_bounded(f'try_cast({text} AS TIMESTAMPTZ)')} END"
    )
    form = (
        f"(CASE WHEN {usual} THEN {int(width > 10)} WHEN length({text}) = 10 THEN 0 WHEN {plain} OR {fraction} THEN 1 "
        f"WHEN {zoned} THEN 2 ELSE 0 END)::UTINYINT"
    )
    return TimeSql(instant, form)


def _bounded(stamp: str) -> str:
    """Whole microseconds of a moment within bounds; the engine's infinities are outside."""
    return (
        f"(CASE WHEN {stamp} >= '{EARLIEST}'::TIMESTAMP AND {stamp} < '{LATEST}'::TIMESTAMP "
        f"THEN epoch_us({stamp}) END)"
    )


def micros(day: date) -> int:
    """Microseconds since 1970 of a day's first instant."""
    return (day - date(1970, 1, 1)).days * DAY


class Clock:
    """The instants' clock against local time.

    zone : the study's time zone, None when instants carry no offsets (they are local already)
    """

    def __init__(self, zone: str | None, first: int, last: int) -> None:
        self.zone = ZoneInfo(zone) if zone else None
        self.changes = _changes(self.zone, first // DAY * DAY - 2 * DAY, last + 2 * DAY) if self.zone else []

    def start_of(self, day: date) -> int:
        """The instant at which a local day begins."""
        if self.zone is None:
            return micros(day)
        local = datetime(day.year, day.month, day.day, tzinfo=self.zone)
        return int(local.timestamp()) * 1_000_000

    def local(self, instant: int) -> int:
        """Local microseconds of an instant."""
        return instant + next((o for until, o in self.changes if instant < until), 0)

    def instant_sql(self, local: str) -> str:
        """The instant of local microseconds; of an hour that comes twice, the first."""
        if not self.changes:
            return local
        pairs = list(zip(self.changes, self.changes[1:], strict=False))
        whens = " ".join(
            f"WHEN {local} < {until + max(offset, after)} THEN {offset}"
            for (until, offset), (_, after) in pairs
        )
        shift = f"CASE {whens} ELSE {self.changes[-1][1]} END" if whens else str(self.changes[-1][1])
        return f"({local} - {shift})"


def _changes(zone: ZoneInfo, first: int, last: int) -> list[tuple[int, int]]:
    """(instant until which, offset) pairs in microseconds; the last one has no end."""

    def offset(instant: int) -> int:
        moment = datetime.fromtimestamp(instant // 1_000_000, tz=UTC).astimezone(zone)
        return int((moment.utcoffset() or timedelta()).total_seconds()) * 1_000_000

    out: list[tuple[int, int]] = []
    here, now = first, offset(first)
    while here < last:
        ahead = here + DAY
        if offset(ahead) != now:
            low, high = here, ahead
            while high - low > 1_000_000:
                middle = (low + high) // 2 // 1_000_000 * 1_000_000
                low, high = (middle, high) if offset(middle) == now else (low, middle)
            out.append((high, now))
            now = offset(ahead)
        here = ahead
    return [*out, (last, now)]


def period_sql(calendar: Calendar, local: str) -> str:
    """Ordinal of the period of local microseconds, as `Calendar.ordinals` gives it (own calendars: -1 outside)."""
    if calendar.kind == "step":
        return f"({local})::INTEGER"
    day = f"(make_timestamp({local})::DATE - DATE '1970-01-01')"
    if calendar.kind == "day":
        return f"{day}::INTEGER"
    if calendar.kind == "week":
        origin = (calendar.start(0) - date(1970, 1, 1)).days
        return f"(({day} - {origin} + 700000) // 7 - 100000)::INTEGER"
    if calendar.kind == "own":
        return f"({_own_sql(calendar, day)})::INTEGER"
    width = {"month": 1, "quarter": 3, "year": 12}[calendar.kind]
    offset = calendar.start(0).month - 1 if width > 1 else 0
    month = f"datediff('month', DATE '1970-01-01', make_timestamp({local})::DATE)"
    if width == 1:
        return f"{month}::INTEGER"
    return f"(({month} - {offset} + 12000) // {width} - {12000 // width})::INTEGER"


def _own_sql(calendar: Calendar, day: str) -> str:
    """Nested choices, as deep as the logarithm of the number of periods."""
    starts = [(row[1] - date(1970, 1, 1)).days for row in calendar.own]
    end = (calendar.own[-1][2] - date(1970, 1, 1)).days

    def between(low: int, high: int) -> str:
        if high - low == 1:
            return str(low)
        middle = (low + high) // 2
        return (
            f"CASE WHEN {day} < {starts[middle]} THEN {between(low, middle)} ELSE {between(middle, high)} END"
        )

    return f"CASE WHEN {day} < {starts[0]} OR {day} > {end} THEN -1 ELSE {between(0, len(starts))} END"


def period_of(calendar: Calendar, instants: np.ndarray) -> np.ndarray:
    """Ordinals of local microseconds (for small arrays in memory)."""
    if calendar.kind == "step":
        return np.asarray(instants, dtype=np.int64)
    days = np.floor_divide(instants, DAY).astype("datetime64[D]")
    return calendar.ordinals(days)
