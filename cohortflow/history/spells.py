"""Spells (customer, first day, last day, state, perhaps why it ended) into a Tally.

- The state of a period is that of the spell which covers its last day; of several, the one that began last (then the
  later record): such periods are counted in the finding `overlapping_spells`.
- A blank or far-off last day: the spell goes on. `end_is = "day_after"`: the column holds the first day after it.
- `end_reason`: the exit is reached in the period in which the day after the last day lies, unless another spell covers
  the end of that period. A spell that covers no period's end is joining and leaving within one period.
- With `log_start` customers whose first spell begins in the first period have joined; without, they are unknown.
- `on_absent` as in a history of states.
"""

from __future__ import annotations

from datetime import date, timedelta

import numpy as np

from cohortflow.errors import CallError, InputError
from cohortflow.history.accounts import ASIDE, USED
from cohortflow.history.cells import Columns, ranges
from cohortflow.history.columns import IGNORED, UNKNOWN
from cohortflow.history.fetch import ordered
from cohortflow.history.histories import HistoryFollower
from cohortflow.history.load import FOREVER_INSTANT
from cohortflow.history.reading import Reading
from cohortflow.history.sweep import Labelled, Sweep, first_rows
from cohortflow.history.times import DAY, micros, period_of


def read_spell_rows(reading: Reading) -> Sweep:
    """Label and count the loaded rows of spells."""
    reading.refuse_missing_ids()
    layout = SpellLayout(reading)
    sweep = Sweep(reading, first=layout.first, last=layout.last, periods=layout.last - layout.first + 1)
    sweep.run(layout)
    return sweep


class SpellLayout:
    """What a block of rows of spells means."""

    def __init__(self, reading: Reading) -> None:
        self.study = study = reading.study
        self.step = study.calendar.kind == "step"
        self.first, self.last = self._window(reading)
        periods = self.last - self.first + 1
        self.ends = np.array([self._end(p) for p in range(self.first, self.last + 1)])
        self.as_of_end = (
            2**61 if self.step or study.as_of is None else micros(study.as_of + timedelta(days=1))
        )
        self.follower = HistoryFollower(study, periods, np.arange(periods))
        self.has_reason = "reason" in reading.loaded.has
        self.has_amount = "amount" in reading.loaded.has
        self.joins = ""
        self.columns = ["coalesce(t, 0) AS t", f"coalesce(until, {FOREVER_INSTANT}) AS until", "code", "h"]
        self.columns += ["reason"] if self.has_reason else []
        self.columns += ["coalesce(amount, 0) AS amount"] if self.has_amount else []

    def _end(self, period: int) -> int:
        """The last day (its first instant) of a period."""
        return period if self.step else micros(self.study.calendar.end(period))

    def _window(self, reading: Reading) -> tuple[int, int]:
        study = self.study
        low, high = reading.engine.rows("SELECT min(t), max(t) FROM rows WHERE fault = 0 AND code >= 0")[0]
        if low is None:
            raise InputError(
                "No row of the spells can be used: none has an id, a first day and a known state."
            )
        last = int(high) if self.step else study.last_complete
        if last is None:
            raise CallError(
                "Spells need as_of, the last day the extract can be trusted: as_of=date(2026, 9, 30) in the call, or "
                'as_of = "2026-09-30" under [study].'
            )
        given: date | None = study.input.log_start
        if given is not None and not self.step:
            first = study.calendar.ordinal(given)
            first += study.calendar.start(first) != given
        else:
            first = max(
                int(period_of(study.calendar, np.array([int(low)]))[0]), 0 if study.calendar.own else -(2**31)
            )
        if first > last:
            raise InputError(
                f"The spells begin in {study.calendar.label(first)}, after the last complete period before as_of "
                f"({study.as_of}): there is nothing to count."
            )
        return first, last

    def label(self, rows: Columns, size: int) -> Labelled:
        """Outcomes and states of a block of `size` customers."""
        outcome = self._outcomes(rows)
        places = np.flatnonzero(outcome == USED)
        used = places[ordered([rows["c"][places], rows["t"][places]], rows["r"][places])[0]]
        c, code = rows["c"][used], rows["code"][used]
        begin = np.searchsorted(self.ends, rows["t"][used] // self._day * self._day)
        end = np.searchsorted(self.ends, rows["until"][used], side="right")
        given = np.full((len(self.ends), size), -1, dtype=np.int8)
        p, owner = ranges(begin, np.maximum(end, begin))
        given[p, c[owner]] = code[owner]  # spells in the order of their first days: the later one stays
        overlaps = len(p) - int((given >= 0).sum())
        self._write_exits(given, rows, used, c, end)
        amount = None
        if self.has_amount:
            amount = np.zeros(given.shape, dtype=np.int64)
            inside = begin < len(self.ends)
            np.add.at(amount, (begin[inside], c[inside]), rows["amount"][used][inside])
        f = self.follower.follow(given, self._joined_first(rows, used, c, size))
        return Labelled(
            f.state,
            f.start,
            f.origin,
            f.tenure,
            f.memo,
            f.memo_state,
            outcome,
            first=first_rows(used, c, size),
            used=used,
            any_exit=f.any_exit,
            amount=amount,
            notes={"overlapping_spells": overlaps},
        )

    @property
    def _day(self) -> int:
        return 1 if self.step else DAY

    def _outcomes(self, rows: Columns) -> np.ndarray:
        outcome, t, code = rows["fault"].astype(np.int16), rows["t"], rows["code"]
        before = self._end(self.first - 1) if self.first else None
        for reason, where in (
            ("incomplete_period", t >= self.ends[-1] + self._day),
            ("after_as_of", t >= self.as_of_end),
            (
                "before_log_start",
                rows["until"] <= before if before is not None else np.zeros(len(t), dtype=bool),
            ),
            ("unknown_event", code == UNKNOWN),
            ("ignored_event", code == IGNORED),
        ):
            outcome[where & (rows["fault"] == 0)] = ASIDE[reason]
        return outcome

    def _write_exits(
        self, given: np.ndarray, rows: Columns, used: np.ndarray, c: np.ndarray, end: np.ndarray
    ) -> None:
        """Exits by reason, in the period after whose end the spell no longer runs, where no other spell runs then."""
        if not self.has_reason:
            return
        reason = rows["reason"][used]
        ended = (reason >= 0) & (rows["until"][used] < self.ends[-1]) & (end < len(self.ends))
        at, who = end[ended], c[ended]
        free = given[at, who] < 0
        given[at[free], who[free]] = reason[ended][free]

    def _joined_first(self, rows: Columns, used: np.ndarray, c: np.ndarray, size: int) -> np.ndarray:
        """Who is known to have joined in the first period."""
        out = np.zeros(size, dtype=bool)
        if self.study.input.log_start is None or self.step:
            return out
        first = first_rows(used, c, size)
        there = first >= 0
        began = micros(self.study.calendar.start(self.first))
        out[there] = rows["t"][first[there]] >= began
        return out
