"""A slow second implementation of labelling and counting, for the tests only.

Written from the words of the contract ("What the rules mean"), not from cohortflow/history: one customer at a
time, one period at a time, plain lists and loops. Where the contract is silent, the decision taken is named
beside the line.

    told = tell(study, rows)            # rows: dicts of text, in file order; record numbers count from 1
    told.labels                         # (customer, period, state, counted)
    told.accounting()                   # {(outcome, reason): rows}
    told.tables()                       # the tables of a Tally, as DataFrames
"""

from __future__ import annotations

import hashlib
from collections import Counter
from collections.abc import Iterable, Mapping, Sequence
from dataclasses import dataclass, field
from datetime import datetime
from decimal import Decimal, InvalidOperation
from itertools import groupby, pairwise
from typing import Any
from zoneinfo import ZoneInfo

import pandas as pd

from cohortflow.tally import ENDS, FINEST_BITS, KEYS, KINDS, MEMOS, VALUES

PLACEHOLDERS = ("", "0", "-1", "unknown", "test")
STEPS_AHEAD = 12
Keyed = Counter[tuple[Any, ...]]
Sums = dict[str, Keyed]


# ---------------------------------------------------------------- rows and what became of them
@dataclass
class Row:
    """One row of the extract, as typed by the oracle."""

    number: int
    customer: str
    period: int
    instant: datetime | int
    rank: int = 0
    event: str = ""
    amount: Decimal | None = None
    valid_until: int | None = None
    segment: tuple[str, ...] = ()
    state: str = ""


@dataclass
class Stay:
    """From joining (or returning) to the exit: (period, state) at period ends, the exit's row included."""

    start: int
    kind: str
    known: bool
    from_state: int = -1
    rows: list[tuple[int, int]] = field(default_factory=list)


@dataclass
class Person:
    """What the oracle says about one customer."""

    name: str
    segment: tuple[str, ...]
    stays: list[Stay] = field(default_factory=list)
    memos: list[tuple[int, str, int]] = field(default_factory=list)
    labels: list[tuple[int, int, bool]] = field(default_factory=list)
    sums: dict[int, int] = field(default_factory=dict)


@dataclass
class Window:
    """Periods: the log's first, its first complete one, where unknown histories begin to count, the last."""

    first: int
    complete: int
    origin: int
    last: int


@dataclass
class Told:
    """The oracle's answer for one extract."""

    study: Any
    window: Window
    people: list[Person]
    outcomes: dict[int, tuple[str, str]]
    has_amounts: bool

    @property
    def labels(self) -> list[tuple[str, str, str, bool]]:
        names, label = self.study.states.names, self.study.calendar.label
        return [(p.name, label(t), names[s], counted) for p in self.people for t, s, counted in p.labels]

    @property
    def segments(self) -> list[tuple[str, ...]]:
        return sorted({p.segment for p in self.people})

    def accounting(self) -> dict[tuple[str, str], int]:
        return dict(Counter(self.outcomes.values()))

    def tables(self, *, bits: int = FINEST_BITS) -> dict[str, pd.DataFrame]:
        return _tables(self, bits)


def tell(study: Any, rows: Sequence[Mapping[str, Any]]) -> Told:
    """Label and account for the rows of one extract (layout events or history)."""
    return _tell_events(study, rows) if study.input.layout == "events" else _tell_history(study, rows)


# ---------------------------------------------------------------- reading
def _text(row: Mapping[str, Any], column: str | None) -> str:
    value = row.get(column, "") if column else ""
    return "" if value is None else str(value)


def _rule_events(study: Any) -> list[str]:
    """Events in the order in which the rules name them, top to bottom."""
    found: list[str] = []
    for rule in study.rules:
        for branch in rule.when:
            for condition in branch:
                found += [*condition.events, *condition.among]
    return list(dict.fromkeys(found))


def _known_events(study: Any) -> set[str]:
    spec = study.input
    return {*_rule_events(study), *spec.joins, *(spec.returns or ()), *spec.tie_order}


def _tie_ranks(study: Any) -> dict[str, int]:
    """Order at one instant: tie_order; joins and returns that no rule names; the order of the rules."""
    spec, rules = study.input, _rule_events(study)
    unnamed = [e for e in (*spec.joins, *(spec.returns or ())) if e not in rules]
    return {event: place for place, event in enumerate(dict.fromkeys([*spec.tie_order, *unnamed, *rules]))}


def _instant(text: str, study: Any) -> tuple[datetime, bool] | None:
    """(local instant, carries a clock time), or None when it cannot be read."""
    text = text.strip()
    try:
        form = study.input.date_format
        read = datetime.strptime(text, form) if form else datetime.fromisoformat(text)
    except ValueError:
        return None
    if read.tzinfo is not None:
        read = read.astimezone(ZoneInfo(study.input.timezone)).replace(tzinfo=None)
    return read, len(text) > 10


def _money(text: str) -> Decimal | None:
    return Decimal(text.strip()) if text.strip() else None


def _name_of_event(study: Any, spelling: str) -> str:
    for name, spellings in study.events.map.items():
        if spelling in spellings:
            return name
    return spelling


def _fault(study: Any, row: Mapping[str, Any], event: str, known: set[str]) -> str | None:
    """Why a row is rejected, looking at customer, time, event, amount, valid_until in this order."""
    spec = study.input
    if _text(row, spec.customer).strip().lower() in PLACEHOLDERS:
        return "id_missing"
    if _instant(_text(row, spec.time), study) is None:
        return "time_unreadable"
    if study.events.others == "reject" and event not in known and event not in study.events.ignore:
        return "unknown_event"
    try:
        _money(_text(row, spec.amount))
    except InvalidOperation:
        return "amount_unreadable"
    until = _text(row, spec.valid_until).strip()
    if until and _instant(until, study) is None:
        return "valid_until_unreadable"
    return None


def _paid_to(study: Any, text: str) -> int | None:
    """Period in which a paid-up-to date falls; days outside an own calendar are long past or far ahead."""
    if not text.strip():
        return None
    day, own = _instant(text, study)[0].date(), study.calendar.own
    if own and not own[0][1] <= day <= own[-1][2]:
        return -(10**6) if day < own[0][1] else 10**6
    return study.calendar.ordinal(day)


def _segment(study: Any, row: Mapping[str, Any]) -> tuple[str, ...]:
    spec = study.input
    columns = [*spec.segments, *spec.attributes, *([spec.arm] if spec.arm else [])]
    return tuple(_text(row, c) for c in columns)


def _tell_events(study: Any, raw: Sequence[Mapping[str, Any]]) -> Told:
    known, ranks = _known_events(study), _tie_ranks(study)
    outcomes: dict[int, tuple[str, str]] = {}
    good: list[Row] = []
    seen: set[tuple[str, ...]] = set()
    events = {}
    for number, row in enumerate(raw, start=1):
        event = events[number] = _name_of_event(study, _text(row, study.input.event))
        reason = _fault(study, row, event, known)
        if reason:
            outcomes[number] = ("rejected", reason)
            continue
        instant, clock = _instant(_text(row, study.input.time), study)
        whole = tuple(str(v) for v in row.values())
        if whole in seen and (clock or _text(row, study.input.event_id).strip()):
            outcomes[number] = ("duplicate", "identical")
            continue
        seen.add(whole)
        if event in study.events.ignore:
            outcomes[number] = ("set_aside", "ignored_event")
        elif event not in known:
            outcomes[number] = ("set_aside", "unknown_event")
        else:
            until = _text(row, study.input.valid_until)
            good.append(
                Row(
                    number=number,
                    customer=_text(row, study.input.customer),
                    period=study.calendar.ordinal(instant.date()),
                    instant=instant,
                    rank=ranks[event],
                    event=event,
                    amount=_money(_text(row, study.input.amount)),
                    valid_until=_paid_to(study, until),
                    segment=_segment(study, row),
                )
            )
    good = _latest_versions(study, raw, good, outcomes)
    window, good = _window(study, good, outcomes)
    people = [_follow_events(study, window, rows, outcomes) for rows in _by_customer(good, key=_moment)]
    for row in good:
        outcomes.setdefault(row.number, ("used", ""))
    return Told(study, window, people, outcomes, bool(study.input.amount))


def _latest_versions(
    study: Any, raw: Sequence[Mapping[str, Any]], rows: list[Row], outcomes: dict[int, tuple[str, str]]
) -> list[Row]:
    """Of rows with one event id, the one loaded last counts, else the last in the extract."""
    if not study.input.event_id:
        return rows
    best: dict[str, Row] = {}
    for row in sorted(rows, key=lambda r: (_text(raw[r.number - 1], study.input.loaded_at), r.number)):
        name = _text(raw[row.number - 1], study.input.event_id)
        before = best.get(name) if name else None
        if before:
            outcomes[before.number] = ("duplicate", "superseded")
        best[name] = row
    return [row for row in rows if row.number not in outcomes]


def _moment(row: Row) -> tuple[Any, ...]:
    return (row.instant, row.rank, row.number)


def _by_customer(rows: Iterable[Row], *, key: Any) -> list[list[Row]]:
    found: dict[str, list[Row]] = {}
    for row in rows:
        found.setdefault(row.customer, []).append(row)
    return [sorted(found[name], key=key) for name in sorted(found)]


def _last_complete(study: Any) -> int:
    last = study.calendar.ordinal(study.as_of)
    return last if study.calendar.end(last) == study.as_of else last - 1


def _window(study: Any, rows: list[Row], outcomes: dict[int, tuple[str, str]]) -> tuple[Window, list[Row]]:
    """The counted window, and the rows inside it; the others are set aside."""
    last, calendar = _last_complete(study), study.calendar
    log_start = study.input.log_start
    if log_start is None:
        first = complete = min((r.period for r in rows), default=last)
    else:
        first = calendar.ordinal(log_start)
        complete = first if calendar.start(first) == log_start else first + 1
    kept = []
    for row in rows:
        day = row.instant.date()
        if log_start is not None and day < log_start:
            outcomes[row.number] = ("set_aside", "before_log_start")
        elif day > study.as_of:
            outcomes[row.number] = ("set_aside", "after_as_of")
        elif row.period > last:
            outcomes[row.number] = ("set_aside", "incomplete_period")
        else:
            kept.append(row)
    return Window(first, complete, complete + _warm_up(study), last), kept


def _warm_up(study: Any) -> int:
    sizes = [c.k for rule in study.rules for branch in rule.when for c in branch if c.kind != "last_event"]
    longest = max(sizes, default=0)
    return longest if study.input.joins else 2 * longest


# ---------------------------------------------------------------- the rules, one condition at a time
def _holds(
    condition: Any, t: int, stay: Stay, rows: list[Row], memory: list[Row], default: list[str]
) -> bool:
    """Does one condition hold at the end of t?  rows: all used so far; memory: those since the return."""
    k, kind = condition.k, condition.kind
    of = set(condition.events or default)
    began_by = stay.start <= t - k
    window = [r for r in rows if t - k + 1 <= r.period <= t]
    if kind == "last_event":
        among = set(condition.among or default)
        latest = [r.event for r in memory if r.event in among][-1:]
        return bool(latest) and latest[0] in condition.events
    if kind == "silent_for":
        earlier = any(r.event in of and r.period <= t - k for r in rows)
        return not any(r.event in of for r in window) and (began_by or earlier)
    if kind == "at_least":
        return sum(r.event in of for r in window) >= condition.n
    if kind == "at_most":
        return began_by and sum(r.event in of for r in window) <= condition.n
    if kind == "spent_at_least":
        spent = sum((r.amount or Decimal(0)) for r in window if not condition.events or r.event in of)
        return spent >= Decimal(str(condition.amount))
    if kind == "tenure_below":
        return stay.known and t - stay.start < k
    until = max((r.valid_until for r in rows if r.valid_until is not None), default=None)
    if until is None:
        return False
    if kind == "expired_for":
        return until + k <= t
    if kind == "due_within":
        return t + 1 <= until <= t + k
    raise AssertionError(f"the oracle does not know the condition {kind}")


def _state_at(study: Any, t: int, stay: Stay, rows: list[Row], memory: list[Row]) -> int:
    default = _rule_events(study)
    for place, rule in enumerate(study.rules):
        if not rule.when:
            return place
        for branch in rule.when:
            if all(_holds(c, t, stay, rows, memory, default) for c in branch):
                return place
    raise AssertionError("no rule matched; the study needs a state without a rule")


# ---------------------------------------------------------------- one customer of an event log
def _follow_events(
    study: Any, window: Window, rows: list[Row], outcomes: dict[int, tuple[str, str]]
) -> Person:
    person = Person(rows[0].customer, rows[0].segment)
    first = rows[0].period
    joined = first >= window.origin or any(r.event in study.input.joins for r in rows if r.period == first)
    count_from = max(first, window.complete) if joined else window.origin
    stay = Stay(first, "joined" if joined else "unknown", known=joined)
    used: list[Row] = []
    memory: list[Row] = []
    left: int | None = None
    for t in range(first, window.last + 1):
        now = [r for r in rows if r.period == t]
        if left is not None:
            ends = study.returns_of(study.states.names[left])
            back = next((i for i, r in enumerate(now) if r.event in ends), len(now))
            for row in now[:back]:
                outcomes[row.number] = ("set_aside", "after_exit")
            now = now[back:]
            if not now:
                continue
            person.stays.append(stay)
            stay, memory, left = Stay(t, "returned", known=True, from_state=left), [], None
        used, memory = used + now, memory + now
        person.sums[t] = sum(int((r.amount or 0) * 100) for r in now)
        state = _state_at(study, t, stay, used, memory)
        is_exit = study.rules[state].role == "exit"
        if is_exit and not stay.rows:  # came and went within one period: a memo, not a move
            if stay.kind != "unknown" and t >= count_from:
                memo = "joined_and_left" if stay.kind == "joined" else "returned_and_left"
                person.memos.append((t, memo, state))
            person.labels.append((t, state, False))
        else:
            stay.rows.append((t, state))
        left = state if is_exit else None
    person.stays.append(stay)
    return _finish(person, study, count_from)


def _finish(person: Person, study: Any, count_from: int) -> Person:
    """Labels from all stays; the stays themselves cut to what counts."""
    for stay in person.stays:
        person.labels += [(t, s, False) for t, s in stay.rows if t < count_from]
    stays = [s for s in (_cut(s, study, count_from) for s in person.stays) if s.rows]
    for stay in stays:
        person.labels += [(t, s, True) for t, s in stay.rows]
    person.stays = [part for stay in stays for part in _parted(stay, study.states)]
    return person


def _parted(stay: Stay, states: Any) -> list[Stay]:
    """A stay without its impossible moves: each is set aside, and what follows it starts as unknown.

    An exit that was entered by such a move is not written: nobody left by a move that cannot be.
    """
    parts, rows = [], [stay.rows[0]]
    kind, from_state = stay.kind, stay.from_state
    for before, after in pairwise(stay.rows):
        if not states.allowed[before[1], after[1]]:
            parts.append(Stay(stay.start, kind, stay.known, from_state, rows))
            kind, from_state, rows = "unknown", -1, []
        rows.append(after)
    if len(parts) == 0 or states.names[rows[0][1]] not in states.exits:
        parts.append(Stay(stay.start, kind, stay.known, from_state, rows))
    return parts


def _cut(stay: Stay, study: Any, count_from: int) -> Stay:
    """A stay under way when counting begins starts there, in the state then held; others are dropped.

    The stay of an unknown customer who left and came back inside the warm-up also starts as "unknown": the
    warm-up yields no moves for a customer of unknown history.
    """
    if stay.start >= count_from:
        return stay
    rows = [(t, s) for t, s in stay.rows if t >= count_from]
    if rows and study.rules[rows[0][1]].role == "exit":
        rows = []
    return Stay(stay.start, "unknown", stay.known, -1, rows)


# ---------------------------------------------------------------- a history of states
def _tell_history(study: Any, raw: Sequence[Mapping[str, Any]]) -> Told:
    outcomes: dict[int, tuple[str, str]] = {}
    good: list[Row] = []
    for number, row in enumerate(raw, start=1):
        name, state = _text(row, study.input.customer), _text(row, study.input.state)
        period = _period(study, _text(row, study.input.time))
        if name.strip().lower() in PLACEHOLDERS:
            outcomes[number] = ("rejected", "id_missing")
        elif period is None:
            outcomes[number] = ("rejected", "time_unreadable")
        else:
            segment = _segment(study, row)
            amount = _money(_text(row, study.input.amount))
            good.append(Row(number, name, period, period, state=state, segment=segment, amount=amount))
    if study.calendar.kind != "step":
        complete = _last_complete(study)
        for row in [r for r in good if r.period > complete]:
            late = study.calendar.start(row.period) > study.as_of
            outcomes[row.number] = ("set_aside", "after_as_of" if late else "incomplete_period")
        good = [r for r in good if r.period <= complete]
    good = _one_look_a_period(raw, good, outcomes)
    periods = sorted({r.period for r in good})
    window = Window(
        periods[0], periods[0], periods[0], periods[-1]
    )  # to the last period that the extract has rows for
    people = [
        _follow_history(study, window, periods, rows)
        for rows in _by_customer(good, key=lambda r: (r.period, r.number))
    ]
    for row in good:
        outcomes[row.number] = ("used", "")
    return Told(study, window, people, outcomes, bool(study.input.amount))


def _one_look_a_period(
    raw: Sequence[Mapping[str, Any]], rows: list[Row], outcomes: dict[int, tuple[str, str]]
) -> list[Row]:
    """Of several rows for one customer and period the last in the extract counts."""
    last = {(row.customer, row.period): row for row in rows}
    for row in rows:
        counts = last[row.customer, row.period]
        if row is not counts:
            again = [r for r in rows if r.number > row.number and raw[r.number - 1] == raw[row.number - 1]]
            outcomes[row.number] = ("duplicate", "identical" if again else "superseded")
    return list(last.values())


def _period(study: Any, text: str) -> int | None:
    try:
        return study.calendar.parse(text.strip())
    except ValueError:
        return None


def _follow_history(study: Any, window: Window, periods: list[int], rows: list[Row]) -> Person:
    states, person = study.states, Person(rows[0].customer, rows[0].segment)
    cells = _gaps_filled(study, {r.period: states.index(r.state) for r in rows})
    end = max(cells)
    if study.input.on_absent and states.names[cells[end]] not in states.exits:
        later = [t for t in periods if t > end]
        if later:
            cells[later[0]] = states.index(study.input.on_absent)
    for row in rows:
        person.sums[row.period] = int((row.amount or 0) * 100)
    first = min(cells)
    known = first > window.first
    stay = Stay(first, "joined" if known else "unknown", known)
    left: int | None = None
    for t in sorted(cells):
        state = cells[t]
        is_exit = states.names[state] in states.exits
        if left is not None:
            if is_exit:  # still gone; the exit first reached holds, the row says nothing new and is used
                continue
            person.stays.append(stay)
            stay, left = Stay(t, "returned", True, from_state=left), None
        if is_exit and not stay.rows:
            if stay.kind == "joined":
                person.memos.append((t, "joined_and_left", state))
            person.labels.append((t, state, False))
        else:
            stay.rows.append((t, state))
        left = state if is_exit else None
    person.stays.append(stay)
    return _finish(person, study, first)


def _gaps_filled(study: Any, cells: dict[int, int]) -> dict[int, int]:
    rule = study.input.on_gap or "break"
    if rule == "break":
        return cells
    filled: dict[int, int] = {}
    before = -1
    for t in range(min(cells), max(cells) + 1):
        if t in cells:
            filled[t] = cells[t]
        elif (
            study.states.names[before] not in study.states.exits
        ):  # nothing is filled between exit and return
            filled[t] = before if rule == "carry" else study.states.names.index(rule)
        before = filled.get(t, before)
    return filled


# ---------------------------------------------------------------- counting
def _bucket(name: str, bits: int) -> int:
    return int(hashlib.md5(name.encode()).hexdigest(), 16) >> (128 - bits)


def _tables(told: Told, bits: int) -> dict[str, pd.DataFrame]:
    segments = told.segments
    sums: Sums = {name: Counter() for name in KEYS}
    extra: Sums = {name: Counter() for name in KEYS}
    squares: Keyed = Counter()
    for person in told.people:
        if not (person.stays or person.memos):
            continue
        b, g = _bucket(person.name, bits), segments.index(person.segment)
        for t, memo, state in person.memos:
            sums["memos"][g, t, MEMOS.index(memo), state] += 1
        path = _path(person)
        if path:
            sums["paths"][g, _level(person.name), path] += 1
        for stay in person.stays:
            _count_moves(told, sums, stay, b, g)
            _count_contexts(told, sums, stay, b, g)
            _count_ages_and_steps(told, sums, stay, g)
            for t, state in stay.rows:
                key, money = (b, g, t, state), person.sums.get(t, 0)
                sums["amounts"][key] += 1
                extra["amounts"][key] += money
                squares[key] += money * money
    return {name: _frame(name, sums[name], extra[name], squares) for name in sums}


def _path(person: Person) -> str:
    """First period, then state*periods; a dash for periods without a row."""
    at = {t: state for stay in person.stays for t, state in stay.rows}
    if not at:
        return ""
    line = [at.get(t, "-") for t in range(min(at), max(at) + 1)]
    return " ".join([str(min(at)), *(f"{state}*{len(list(run))}" for state, run in groupby(line))])


def _level(name: str) -> int:
    """Zero bits that the second half of the id's hash begins with."""
    return 64 - int(hashlib.md5(name.encode()).hexdigest()[16:], 16).bit_length()


def _frame(name: str, n: Keyed, total: Keyed, squares: Keyed) -> pd.DataFrame:
    values = VALUES[name]
    lines = []
    for key in sorted(n):
        line = [*key, n[key]]
        if "weight" in values:
            line.append(n[key])
        if "total" in values:
            line += [total[key], squares[key]]
        lines.append(line)
    return pd.DataFrame(lines, columns=[*KEYS[name], *values])


def _is_exit(told: Told, state: int) -> bool:
    return told.study.states.names[state] in told.study.states.exits


def _count_moves(told: Told, sums: Sums, stay: Stay, b: int, g: int) -> None:
    start, state = stay.rows[0]
    sums["starts"][b, g, start, state, KINDS.index(stay.kind), stay.from_state] += 1
    for i, (t, state) in enumerate(stay.rows):
        if i + 1 < len(stay.rows):
            later, following = stay.rows[i + 1]
            key = (b, g, t, later - t, ENDS.index("moved"), state, following)
        elif _is_exit(told, state):
            key = (b, g, t, 0, ENDS.index("exit"), state, -1)
        else:
            end = "as_of" if t == told.window.last else "unseen"
            key = (b, g, t, 0, ENDS.index(end), state, -1)
        sums["moves"][key] += 1


def _count_contexts(told: Told, sums: Sums, stay: Stay, b: int, g: int) -> None:
    """Tenure, periods already spent in the state, state one period before; for consecutive periods."""
    at = dict(stay.rows)
    for t, state in stay.rows:
        if t + 1 not in at:
            continue
        since = t
        while at.get(since - 1) == state:
            since -= 1
        seen_arriving = since - 1 in at or (since == stay.rows[0][0] and stay.kind != "unknown")
        spell = t - since if seen_arriving else -1
        previous = at.get(t - 1, -1)
        tenure = t - stay.start if stay.known else -1
        sums["contexts"][b, g, t, tenure, spell, previous, state, at[t + 1]] += 1


def _count_ages_and_steps(told: Told, sums: Sums, stay: Stay, g: int) -> None:
    at = dict(stay.rows)
    end, final = stay.rows[-1]
    for t, state in stay.rows:
        if stay.kind != "unknown":
            sums["ages"][g, stay.start, KINDS.index(stay.kind), t - stay.start, state] += 1
        if _is_exit(told, state):
            continue
        for k in range(1, STEPS_AHEAD + 1):
            if t + k > told.window.last:
                break
            gone = _is_exit(told, final) and t + k >= end
            later = final if gone else at.get(t + k)
            if later is not None:
                sums["steps"][g, t, k, state, later] += 1
