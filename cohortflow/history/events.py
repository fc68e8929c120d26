"""An event log into a Tally: load, settle duplicates, make cells, follow the customers, count.

The window: `complete` is the first complete period of the log (`log_start`, else the period of the first row),
warm-up periods follow it; the last period is the last complete one up to `as_of`.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import timedelta

import numpy as np
import pandas as pd

from cohortflow.errors import CallError, InputError, listed
from cohortflow.history.cells import decided_by_ties, fetch_columns, make_cells, make_splits, plan_cells
from cohortflow.history.columns import IGNORED, UNKNOWN
from cohortflow.history.customers import Customers, make_customers
from cohortflow.history.duplicates import find_repeats, mark
from cohortflow.history.follow import EventFollower, Followed, Span, Splits, empty_block
from cohortflow.history.reading import Reading
from cohortflow.history.rules import Rules
from cohortflow.history.sweep import Sweep, block_size, by_block
from cohortflow.history.tabulate import Block
from cohortflow.history.times import Clock, period_of, period_sql
from cohortflow.study import Study

CELLS_AT_ONCE = 6_000_000


@dataclass(frozen=True)
class Window:
    """Ordinals (first: of the first used row's period; complete; settled; last) and instants (start, end, as_of_end)."""

    first: int
    complete: int
    settled: int
    last: int
    start: int
    end: int
    as_of_end: int


def read_event_rows(reading: Reading) -> Sweep:
    """Label and count the loaded rows of an event log."""
    engine, study = reading.engine, reading.study
    reading.refuse_missing_ids()
    clock = _clock(reading)
    _settle_repeats(reading)
    window = _window(reading, clock)
    reading.outcome = _outcome_sql(window)
    engine.run("CREATE TABLE IF NOT EXISTS aside_rows (r BIGINT)")
    has = reading.loaded.has
    plan = plan_cells(
        study, amount="amount" in has, until="until" in has, first_rows="seg" in has or "weight" in has
    )
    rules = Rules(study, plan)
    period = period_sql(study.calendar, clock.local_sql("t"))
    sweep = Sweep(reading, first=window.complete, last=window.last)
    follower = EventFollower(rules, _span(window))
    count = _EventCount(reading, sweep, follower, period, window)
    parts = max(1, -(-reading.loaded.rows // CELLS_AT_ONCE))
    sweep.expect(parts, f"{reading.outcome} = 0")
    for k in range(parts):
        used = f"{reading.outcome} = 0" + ("" if parts == 1 else f" AND hash(customer) % {parts} = {k}")
        count.part(used)
        reading.progress("labelling", (k + 1) / parts)
    count.findings()
    return sweep


def _span(window: Window) -> Span:
    return Span(window.last - window.first + 1, window.complete - window.first, window.settled - window.first)


# ---- before the cells ----
def _clock(reading: Reading) -> Clock:
    """How instants relate to local time; InputError for offsets without a time zone, or offsets on some rows only."""
    engine, spec = reading.engine, reading.study.input
    zoned, naive, low, high = engine.rows(
        "SELECT count(*) FILTER (WHERE zoned), count(*) FILTER (WHERE NOT zoned), min(t), max(t) FROM rows "
        "WHERE fault = 0"
    )[0]
    if not zoned:
        return Clock(None, 0, 0)
    name = spec.time
    if spec.timezone is None:
        both = f" in {zoned:,} rows and not in {naive:,}" if naive else ""
        raise InputError(
            f'The instants in column "{name}" carry offsets from UTC{both}, so the days depend on the time zone. '
            'Set timezone in [input], for instance timezone = "Europe/London".'
        )
    clock = Clock(spec.timezone, int(low), int(high))
    if naive:
        lines = reading.examples("fault = 0 AND NOT zoned")
        engine.run(f"UPDATE rows SET t = {clock.instant_sql('t')} WHERE fault = 0 AND NOT zoned")
        reading.found("instants_without_offset", rows=int(naive), lines=lines, timezone=spec.timezone)
    return clock


def _settle_repeats(reading: Reading) -> None:
    engine, has = reading.engine, reading.loaded.has
    clocked = reading.whole.clocked if reading.whole else has_clock_times(reading)
    repeats = find_repeats(
        engine,
        rows=reading.loaded.rows,
        clocked=clocked,
        has_event_id="event_id" in has,
        has_loaded="loaded" in has,
    )
    mark(engine, repeats.identical, "identical")
    mark(engine, repeats.superseded, "superseded")
    if len(repeats.superseded):
        reading.found(
            "superseded_rows", rows=len(repeats.superseded), lines=reading.shown(repeats.superseded)
        )
    if len(repeats.kept):
        reading.found("identical_rows_kept", rows=len(repeats.kept), lines=reading.shown(repeats.kept))


def has_clock_times(reading: Reading) -> bool:
    """Whether any instant carries a time of day."""
    if reading.study.calendar.kind == "step":
        return False
    sql = "SELECT coalesce(bool_or(t % 86400000000 <> 0), false) FROM rows WHERE clock"
    return bool(reading.engine.one(sql))


def instants_present(reading: Reading) -> tuple[int | None, int | None]:
    """First and last instant of good rows."""
    low, high = reading.engine.rows("SELECT min(t), max(t) FROM rows WHERE fault = 0 AND code >= 0")[0]
    return low, high


def _window(reading: Reading, clock: Clock) -> Window:
    """The counted window; InputError when nothing lies in it."""
    study, calendar = reading.study, reading.study.calendar
    low, high = reading.whole.instants if reading.whole else instants_present(reading)
    if low is None:
        raise InputError(
            "No row of the extract can be used: none has a readable time, an id and an event that the study names. "
            f"The events known are {listed(study.known_events)}; the accounting of `check` says what the rows lack."
        )
    if calendar.kind == "step":
        assert high is not None
        last = int(high)
        return _with_warm_up(study, int(low), int(low), last, -(2**62), last + 1, last + 1)
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
            f"({study.as_of}) is {calendar.label(last)}: there is no complete period to count."
        )
    end = clock.start_of(calendar.end(last) + timedelta(days=1))
    return _with_warm_up(
        study, first, complete, last, start, end, clock.start_of(study.as_of + timedelta(days=1))
    )


def _log_start(reading: Reading, clock: Clock, low: int) -> tuple[int, int, int]:
    """(period in which the log begins, first complete one, instant from which rows are used)."""
    study, calendar = reading.study, reading.study.calendar
    given = study.input.log_start
    if given is not None:
        first = calendar.ordinal(given)
        whole = calendar.start(first) == given
        return first, first if whole else first + 1, clock.start_of(given)
    local = low + (_offset_at(clock, low) if clock.zone else 0)
    first = int(period_of(calendar, np.array([local]))[0])
    reading.found("log_start_assumed", serious=False, log_start=calendar.start(first).isoformat())
    return first, first, -(2**62)


def _offset_at(clock: Clock, instant: int) -> int:
    return next(offset for until, offset in clock.changes if instant < until or until == clock.changes[-1][0])


def _with_warm_up(
    study: Study, first: int, complete: int, last: int, start: int, end: int, as_of_end: int
) -> Window:
    return Window(first, complete, complete + study.warm_up, last, start, end, as_of_end)


def _outcome_sql(window: Window) -> str:
    return (
        f"(CASE WHEN fault > 0 THEN fault::INTEGER WHEN code = {IGNORED} THEN 40 WHEN code = {UNKNOWN} THEN 41 "
        f"WHEN t < {window.start} THEN 42 WHEN t >= {window.as_of_end} THEN 43 WHEN t >= {window.end} THEN 44 "
        "ELSE 0 END)"
    )


# ---- the cells, part by part ----
class _EventCount:
    """Follows and counts the customers of one part after the other, and sums up what was noticed."""

    def __init__(
        self, reading: Reading, sweep: Sweep, follower: EventFollower, period: str, window: Window
    ) -> None:
        self.reading, self.sweep, self.follower = reading, sweep, follower
        self.period, self.window, self.plan = period, window, follower.plan
        self.ties = self.without_join = 0
        self.any_exit = False

    def part(self, used: str) -> None:
        """Label and count the customers of the rows for which `used` holds."""
        engine = self.reading.engine
        make_cells(engine, self.plan, used=used, period=self.period)
        customers = make_customers(
            engine,
            weighted="weight" in self.reading.loaded.has,
            segmented="seg" in self.reading.loaded.has,
            segments=self.sweep.segments,
        )
        self.sweep.begin(customers)
        split = [self._split_cells(r, used) for r in range(len(self.plan.returns))]
        cells = self._fetched("cells")
        self.ties += decided_by_ties(engine, self.plan, self._verdicts())
        aside = self._blocks(customers, cells, split)
        self._set_aside(aside, used)
        engine.drop("cells", "customers", *(f"split_{r}" for r in range(len(self.plan.returns))))

    def _verdicts(self) -> list[tuple[int, frozenset[int]]]:
        place = self.follower.rules.place
        return [
            (
                self.plan.among.index(frozenset(place[n] for n in c.among)),
                frozenset(place[n] for n in c.events),
            )
            for c in self.follower.rules.conditions
            if c.kind == "last_event"
        ]

    def _split_cells(self, r: int, used: str) -> dict[str, np.ndarray] | None:
        many = make_splits(self.reading.engine, self.plan, r, used=used, period=self.period)
        return self._fetched(f"split_{r}") if many else None

    def _fetched(self, table: str) -> dict[str, np.ndarray]:
        columns = ", ".join(fetch_columns(self.plan))
        return self.reading.engine.arrays(
            f"SELECT c::INTEGER AS c, (p - {self.window.first})::INTEGER AS p, {columns} FROM {table} "
            "JOIN customers USING (customer)"
        )

    def _blocks(
        self, customers: Customers, cells: dict[str, np.ndarray], split: list[dict[str, np.ndarray] | None]
    ) -> pd.DataFrame:
        periods = self.window.last - self.window.first + 1
        size = block_size(periods)
        cuts, order = by_block(cells["c"], size, len(customers))
        pieces = [None if s is None else (s, *by_block(s["c"], size, len(customers))) for s in split]
        aside = []
        for k in range(len(cuts) - 1):
            begin, end = k * size, min((k + 1) * size, len(customers))
            block = empty_block(self.plan, periods, end - begin)
            mine = order[cuts[k] : cuts[k + 1]]
            p, c = cells["p"][mine], cells["c"][mine] - begin
            for name, column in block.items():
                column[p, c] = cells[name][mine]
            if "until" in block:
                self._relative(block["until"])
            parts = {r: self._splits(piece, k, begin, end - begin) for r, piece in enumerate(pieces) if piece}
            followed = self.follower.follow(block, parts)
            self._noticed(followed)
            aside.append(_aside_cells(followed, begin))
            self.sweep.tabulate(self._block(followed, begin, end))
        return pd.concat(aside, ignore_index=True)

    def _relative(self, until: np.ndarray) -> None:
        until[until > -(2**31)] -= self.window.first

    def _splits(
        self, piece: tuple[dict[str, np.ndarray], np.ndarray, np.ndarray], k: int, begin: int, size: int
    ) -> Splits:
        columns, cuts, order = piece
        mine = order[cuts[k] : cuts[k + 1]]
        here = {name: values[mine] for name, values in columns.items()}
        here["c"] = here["c"] - begin
        if "until" in here:
            here["until"] = here["until"].astype(np.int64)
            self._relative(here["until"])
        return Splits(here, size)

    def _noticed(self, followed: Followed) -> None:
        self.any_exit |= followed.any_exit
        self.without_join += int(followed.without_join.sum())

    def _block(self, followed: Followed, begin: int, end: int) -> Block:
        skip = self.window.complete - self.window.first
        f = followed
        arrays = [a[skip:] for a in (f.state, f.start, f.origin, f.tenure, f.memo, f.memo_state)]
        amount = None if f.amount is None else f.amount[skip:]
        return self.sweep.block(*arrays, begin=begin, end=end, amount=amount)

    def _set_aside(self, aside: pd.DataFrame, used: str) -> None:
        """Note the rows set aside after an exit."""
        if aside.empty:
            return
        engine = self.reading.engine
        engine.register("aside_cells", aside)
        backs = [f"WHEN r = {r} THEN back_{r}" for r in range(len(self.plan.returns))]
        back = f"CASE WHEN what = 1 THEN {2**63 - 1} {' '.join(backs)} END"
        cells = (
            f"SELECT customer, a.p, {back} AS back FROM aside_cells AS a JOIN customers USING (c) "
            f"JOIN (SELECT * REPLACE (p - {self.window.first} AS p) FROM cells) AS x USING (customer, p)"
        )
        rows = (
            f"SELECT rowid AS r, customer, {self.period} - {self.window.first} AS p, t * {self.plan.scale} + code AS key "
            f"FROM rows WHERE {used}"
        )
        engine.run(
            f"INSERT INTO aside_rows SELECT u.r FROM ({rows}) AS u JOIN ({cells}) AS a USING (customer, p) "
            "WHERE u.key < a.back ORDER BY 1"
        )
        engine.connection.unregister("aside_cells")

    def findings(self) -> None:
        """Notes about ties, joiners without a join event; NotIdentified without any exit."""
        if self.ties:
            self.reading.found("ties_decided_by_order", rows=self.ties, serious=False)
        if self.without_join:
            self.reading.found("joined_without_join_event", customers=self.without_join)
        self.sweep.refuse_without_exits(self.any_exit)


def _aside_cells(followed: Followed, begin: int) -> pd.DataFrame:
    p, c = np.nonzero(followed.aside)
    what, which = (a[p, c].astype(np.int64) for a in (followed.aside, followed.aside_set))
    return pd.DataFrame({"c": c + begin, "p": p, "what": what, "r": which})
