"""An event log into a Tally: settle versions, find the window, then block by block duplicates, cells, states, counts.

The window: `complete` is the first complete period of the log (`log_start`, else the period of the first row),
warm-up periods follow it; the last period is the last complete one up to `as_of`.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date, timedelta

import numpy as np

from cohortflow.errors import CallError, InputError, listed
from cohortflow.history.accounts import ASIDE, USED
from cohortflow.history.cells import NO_DATE, Cells, Columns, plan_cells
from cohortflow.history.columns import FAULT_OF, IGNORED, UNKNOWN
from cohortflow.history.duplicates import mark_superseded, repeated
from cohortflow.history.fetch import ordered
from cohortflow.history.follow import EventFollower, Span
from cohortflow.history.reading import Reading
from cohortflow.history.rules import Rules
from cohortflow.history.sweep import Labelled, Sweep, first_rows
from cohortflow.history.times import Clock, period_of
from cohortflow.study import Study

LONG_AGO = -(2**62)


@dataclass(frozen=True)
class Window:
    """Ordinals: first (period of the first used rows), complete, settled (after the warm-up), last.

    bounds : instants at which the periods first .. last begin, and the one at which the last ends
    start, end, as_of_end : instants from which, and up to which, rows are used; the end of the as-of day
    """

    first: int
    complete: int
    settled: int
    last: int
    start: int
    as_of_end: int
    bounds: np.ndarray

    @property
    def end(self) -> int:
        """The instant at which the last period ends."""
        return int(self.bounds[-1])

    @property
    def periods(self) -> int:
        """Periods from first to last."""
        return self.last - self.first + 1


def read_event_rows(reading: Reading) -> Sweep:
    """Label and count the loaded rows of an event log."""
    reading.refuse_missing_ids()
    clock = _clock(reading)
    has = reading.loaded.has
    if "event_id" in has:
        older = mark_superseded(reading.engine, has_loaded="loaded" in has)
        if older:
            lines = reading.examples(f"fault = {FAULT_OF['superseded']}")
            reading.found("superseded_rows", rows=older, lines=lines)
    window = _window(reading, clock)
    layout = EventLayout(reading, window)
    sweep = Sweep(reading, first=window.complete, last=window.last, periods=window.periods)
    sweep.run(layout)
    return sweep


class EventLayout:
    """What a block of rows of an event log means."""

    def __init__(self, reading: Reading, window: Window) -> None:
        self.reading, self.window = reading, window
        has = reading.loaded.has
        self.plan = plan_cells(reading.study, amount="amount" in has, until="until" in has)
        self.rules = Rules(reading.study, self.plan)
        span = Span(window.periods, window.complete - window.first, window.settled - window.first)
        self.follower = EventFollower(self.rules, span)
        self.clocked = reading.whole.clocked if reading.whole else has_clock_times(reading)
        self.joins = ""
        self.columns = ["coalesce(t, 0) AS t", "code", "h", "form"]
        self.columns += ["(event_id IS NOT NULL) AS own"] if "event_id" in has else []
        self.columns += ["coalesce(amount, 0) AS amount"] if "amount" in has else []
        self.columns += [f"coalesce(until, {NO_DATE}) AS until"] if "until" in has else []

    def label(self, rows: Columns, size: int) -> Labelled:
        """Outcomes and states of a block of `size` customers."""
        outcome = self._outcomes(rows)
        good = np.flatnonzero(rows["fault"] == 0)
        order, tied = ordered([rows[name][good] for name in ("c", "t", "code")], rows["r"][good])
        order = good[order]
        kept = self._drop_repeated(order, tied, rows, outcome)
        used = order[outcome[order] == USED]
        mine = {name: rows[name][used] for name in ("c", "t", "code")}
        mine["p"] = (np.searchsorted(self.window.bounds, mine["t"], side="right") - 1).astype(np.int32)
        if self.plan.amount:
            mine["amount"] = rows["amount"][used]
        if self.plan.until:
            until = rows["until"][used].astype(np.int64)
            mine["until"] = np.where(until > NO_DATE, until - self.window.first, NO_DATE)
        cells = Cells(self.plan, mine, periods=self.window.periods, size=size)
        followed = self.follower.follow(cells)
        for places in followed.aside:
            outcome[used[places]] = ASIDE["after_exit"]
        skip = self.window.complete - self.window.first
        amount = None if followed.amount is None else followed.amount[skip:]
        return Labelled(
            state=followed.state[skip:],
            start=followed.start[skip:],
            origin=followed.origin[skip:],
            tenure=followed.tenure[skip:],
            memo=followed.memo[skip:],
            memo_state=followed.memo_state[skip:],
            amount=amount,
            outcome=outcome,
            first=first_rows(used, mine["c"], size),
            used=used,
            any_exit=followed.any_exit,
            silences=followed.silences,
            notes={
                "identical_rows_kept": kept,
                "ties_decided_by_order": cells.decided_by_ties(self.asked),
                "joined_without_join_event": int(followed.without_join.sum()),
            },
        )

    @property
    def asked(self) -> list[tuple[int, frozenset[int]]]:
        """(place of the `among` set, listed events) of each last_event condition."""
        place = self.rules.place
        return [
            (
                self.plan.among.index(frozenset(place[n] for n in c.among)),
                frozenset(place[n] for n in c.events),
            )
            for c in self.rules.conditions
            if c.kind == "last_event"
        ]

    def _outcomes(self, rows: Columns) -> np.ndarray:
        """Outcome of each row before duplicates; later lines of the table below go first."""
        t, code, window, fault = rows["t"], rows["code"], self.window, rows["fault"]
        outcome = fault.astype(np.int16)
        if fault.any() or t.min() < window.start or t.max() >= window.end or code.min() < 0:
            good = fault == 0
            early = window.bounds[0] if window.start == LONG_AGO else window.start
            for reason, where in (
                ("incomplete_period", t >= window.end),
                ("after_as_of", t >= window.as_of_end),
                ("outside_calendar", t < early),
                ("before_log_start", t < window.start),
                ("unknown_event", code == UNKNOWN),
                ("ignored_event", code == IGNORED),
            ):
                outcome[where & good] = ASIDE[reason]
        return outcome

    def _drop_repeated(self, order: np.ndarray, tied: np.ndarray, rows: Columns, outcome: np.ndarray) -> int:
        """Mark identical rows as duplicates where that is certain; how many others are kept."""
        again = repeated(order, tied, rows)
        if len(again) == 0:
            return 0
        certain = rows["form"][again] > 0 if self.clocked else np.zeros(len(again), dtype=bool)
        if "own" in rows:
            certain = certain | rows["own"][again].astype(bool)
        outcome[again[certain]] = FAULT_OF["identical"]
        return int((~certain).sum())


# ---- the window ----
def _clock(reading: Reading) -> Clock:
    """How instants relate to local time; InputError for offsets without a time zone, or on some rows only."""
    engine, spec = reading.engine, reading.study.input
    zoned, naive, low, high = engine.rows(
        "SELECT count(*) FILTER (WHERE form = 2), count(*) FILTER (WHERE form < 2), min(t), max(t) FROM rows "
        "WHERE fault = 0"
    )[0]
    if not zoned:
        return Clock(None, 0, 0)
    if spec.timezone is None:
        both = f" in {zoned:,} rows and not in {naive:,}" if naive else ""
        raise InputError(
            f'The instants in column "{spec.time}" carry offsets from UTC{both}, so the days depend on the time '
            'zone. Set timezone in [input], for instance timezone = "Europe/London".'
        )
    clock = Clock(spec.timezone, int(low), int(high))
    if naive:
        lines = reading.examples("fault = 0 AND form < 2")
        engine.run(f"UPDATE rows SET t = {clock.instant_sql('t')} WHERE fault = 0 AND form < 2")
        reading.found("instants_without_offset", rows=int(naive), lines=lines, timezone=spec.timezone)
    return clock


def has_clock_times(reading: Reading) -> bool:
    """Whether any instant carries a time of day."""
    if reading.study.calendar.kind == "step":
        return False
    sql = "SELECT coalesce(bool_or(t % 86400000000 <> 0), false) FROM rows WHERE form > 0 AND fault = 0"
    return bool(reading.engine.one(sql))


def instants_present(reading: Reading) -> tuple[int | None, int | None]:
    """First and last instant of good rows."""
    low, high = reading.engine.rows("SELECT min(t), max(t) FROM rows WHERE fault = 0 AND code >= 0")[0]
    return low, high


def _window(reading: Reading, clock: Clock) -> Window:
    """The counted window; InputError when nothing lies in it."""
    study, calendar = reading.study, reading.study.calendar
    low, high = reading.whole.instants if reading.whole else instants_present(reading)
    if low is None or high is None:
        raise InputError(
            "No row of the extract can be used: none has a readable time, an id and an event that the study names. "
            f"The events known are {listed(study.known_events)}; the accounting of `check` says what the rows lack."
        )
    if calendar.kind == "step":
        bounds = np.arange(int(low), int(high) + 2)
        complete = int(low)
        return Window(
            complete, complete, complete + study.warm_up, int(high), LONG_AGO, int(high) + 1, bounds
        )
    if study.as_of is None:
        raise CallError(
            "An event log needs as_of, the last day the extract can be trusted: as_of=date(2026, 9, 30) in the call, "
            'or as_of = "2026-09-30" under [study].'
        )
    last = study.last_complete
    assert last is not None
    first, complete, start = _log_start(reading, clock, int(low))
    if complete > last:
        raise InputError(
            f"The log begins in {calendar.label(first)}, but the last complete period before as_of "
            f"({study.as_of}) is {calendar.label(last) if last >= 0 or calendar.kind != 'own' else 'none'}: there is "
            "no complete period to count."
        )
    starts = [clock.start_of(calendar.start(p)) for p in range(first, last + 1)]
    bounds = np.array([*starts, clock.start_of(calendar.end(last) + timedelta(days=1))], dtype=np.int64)
    as_of_end = clock.start_of(study.as_of + timedelta(days=1))
    return Window(first, complete, complete + study.warm_up, last, start, as_of_end, bounds)


def _log_start(reading: Reading, clock: Clock, low: int) -> tuple[int, int, int]:
    """(period in which the log begins, first complete one, instant from which rows are used)."""
    study, calendar = reading.study, reading.study.calendar
    given = study.input.log_start
    if given is not None:
        first = _ordinal(study, given)
        whole = calendar.start(first) == given
        return first, first if whole else first + 1, clock.start_of(given)
    first = int(period_of(calendar, np.array([clock.local(low)]))[0])
    if calendar.kind == "own":
        first = max(first, 0)
    reading.found("log_start_assumed", serious=False, log_start=calendar.start(first).isoformat())
    return first, first, LONG_AGO


def _ordinal(study: Study, day: date) -> int:
    found = study.calendar.ordinal(day)
    if study.calendar.kind == "own" and found < 0:
        raise InputError(
            f"log_start {day} lies outside the calendar file, which covers {study.calendar.own[0][1]} to "
            f"{study.calendar.own[-1][2]}. Add periods to the file or begin later."
        )
    return found
