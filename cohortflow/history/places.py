"""When the rows of an extract lie, and where in the customers' histories its names stand: what begins them, what
ends them, what comes back. Facts for a person to judge; an event after which nothing follows need not be an exit.
"""

from __future__ import annotations

from dataclasses import dataclass
from datetime import date, timedelta

from cohortflow.errors import InputError
from cohortflow.history.engine import Engine, quoted
from cohortflow.history.guess import Column, period_kind
from cohortflow.history.labels import period_of_label
from cohortflow.history.times import DAY, TimeFormat, detect_format, in_order, instant_sql, period_sql
from cohortflow.periods import Calendar

THIN = 0.1  # a period with less than this share of the usual rows is no part of the log proper
JUDGED = 0.8  # what follows a row is judged where at least a fifth of the time covered comes after it
USUAL = 0.95


@dataclass(frozen=True)
class Moments:
    """What a time column tells.

    kind : instant | period | step;  period : kind of period that suits;  sql : BIGINT over `extract`: microseconds,
        or the ordinal of the period;  low, high : of the rows within the log proper
    first, last : day or label of them;  after, before : rows outside;  unreadable : rows without a readable time
    zoned : instants carry offsets;  whole_days : none has a clock time;  edges : all are first or last days of months
    date_format : for the study, where it must be given, else ""
    """

    kind: str
    period: str
    sql: str
    low: int
    high: int
    first: str
    last: str
    before: int = 0
    after: int = 0
    unreadable: int = 0
    zoned: bool = False
    whole_days: bool = True
    edges: bool = False
    date_format: str = ""

    @property
    def period_sql(self) -> str:
        """Ordinal of the period, over `extract`."""
        return self.ordinal(f"({self.sql})")

    def ordinal(self, t: str) -> str:
        """Ordinal of the period of a value of `sql`."""
        return period_sql(Calendar(self.period), t) if self.kind == "instant" else f"({t})"


@dataclass(frozen=True)
class Name:
    """An event or state and its place.

    begins : share of its rows that are a customer's first
    ends : share of `of` rows after which the customer has no further row (rows late in the extract are not asked)
    leaves : rows that are followed by a row of another name
    gap : periods that nearly all (95 %) of the gaps between two periods with it do not exceed; 0 = it does not recur
    """

    name: str
    rows: int
    customers: int
    begins: float = 0.0
    ends: float = 0.0
    of: int = 0
    leaves: int = 0
    gap: int = 0


def moments(engine: Engine, c: str, column: Column, date_format: str | None) -> Moments:
    """What the time column `c` of `extract` tells; InputError when day and month cannot be told apart."""
    if column.kind == "instant" or (date_format and column.kind != "number"):
        return _instants(engine, c, column, date_format)
    if column.kind == "period":
        return _labels(engine, c, column)
    sql = f"try_cast(trim({c}) AS BIGINT)"
    low, high, lost = engine.rows(f"SELECT min({sql}), max({sql}), count(*) - count({sql}) FROM extract")[0]
    if low is None:
        raise InputError(f'The column "{column.name}" holds no dates, periods or whole numbers.')
    return Moments("step", "step", sql, int(low), int(high), str(low), str(high), unreadable=int(lost))


def _instants(engine: Engine, c: str, column: Column, date_format: str | None) -> Moments:
    some = [str(r[0]) for r in engine.rows(f"SELECT {c} FROM extract WHERE trim({c}) <> '' LIMIT 2000")]
    form = detect_format(some, where=f'column "{column.name}"', given=date_format)
    form = _ordered(engine, c, form, column.name) if form.order_unknown else form
    time = instant_sql(c, form)
    found = engine.rows(
        f"SELECT count(*) - count(t), coalesce(bool_or(f = 2), false), coalesce(bool_and(t % {DAY} = 0), true), "
        f"min(t), max(t) FROM (SELECT ({time.instant}) AS t, ({time.form}) AS f FROM extract)"
    )[0]
    if found[3] is None:
        raise InputError(f'The column "{column.name}" holds no readable date.')
    low, high = _proper(engine, f"({time.instant})")
    period = period_kind((high - low) // DAY)
    days = f"make_timestamp({time.instant})::DATE"
    edges = engine.one(
        f"SELECT bool_and(day({days}) = 1) OR bool_and(last_day({days}) = {days}) FROM extract "
        f"WHERE ({time.instant}) BETWEEN {low} AND {high}"
    )
    before, after = engine.rows(
        f"SELECT count(*) FILTER (WHERE t < {low}), count(*) FILTER (WHERE t > {high}) "
        f"FROM (SELECT ({time.instant}) AS t FROM extract)"
    )[0]
    return Moments(
        "instant", "month" if edges else period, time.instant, low, high, _day(low), _day(high), int(before),
        int(after), int(found[0]), bool(found[1]), bool(found[2]), bool(edges), date_format or "",
    )  # fmt: skip


def _ordered(engine: Engine, c: str, form: TimeFormat, name: str) -> TimeFormat:
    first, second = (
        f"coalesce(bool_or(try_cast(split_part(trim({c}), {quoted(form.order_unknown)}, {i}) AS INTEGER) "
        "BETWEEN 13 AND 31), false)"
        for i in (1, 2)
    )
    found = engine.rows(f"SELECT {first}, {second} FROM extract")[0]
    return in_order(form, bool(found[0]), bool(found[1]), where=f'column "{name}"')


def _proper(engine: Engine, instant: str) -> tuple[int, int]:
    """First and last instant of the months that have a fair share of the rows: mistyped years lie outside."""
    by_month = engine.rows(
        f"SELECT min(t), max(t), count(*) FROM (SELECT {instant} AS t FROM extract) WHERE t IS NOT NULL "
        "GROUP BY date_trunc('month', make_timestamp(t)) ORDER BY 1"
    )
    usual = sorted(n for _, _, n in by_month)[len(by_month) // 2]
    kept = [row for row in by_month if row[2] >= THIN * usual]
    return int(kept[0][0]), int(kept[-1][1])


def _labels(engine: Engine, c: str, column: Column) -> Moments:
    calendar = Calendar(column.period)
    labels = [str(r[0]) for r in engine.rows(f"SELECT DISTINCT trim({c}) FROM extract WHERE trim({c}) <> ''")]
    known = {label: period_of_label(label, calendar) for label in labels}
    read = {label: ordinal for label, ordinal in known.items() if ordinal is not None}
    if not read:
        raise InputError(f'The column "{column.name}" holds no readable period.')
    cases = " ".join(f"WHEN {quoted(label)} THEN {ordinal}" for label, ordinal in read.items())
    sql = f"(CASE trim({c}) {cases} END)::BIGINT"
    low, high = min(read.values()), max(read.values())
    lost = int(engine.one(f"SELECT count(*) - count({sql}) FROM extract"))
    return Moments(
        "period", column.period, sql, low, high, calendar.label(low), calendar.label(high), unreadable=lost
    )


def once_a_period(engine: Engine, who: str, when: Moments) -> bool:
    """Whether nearly every customer has at most one row a period."""
    more, all_ = engine.rows(
        f"SELECT count(*) FILTER (WHERE n > 1), count(*) FROM (SELECT count(*) AS n FROM extract "
        f"WHERE ({when.sql}) IS NOT NULL GROUP BY trim({who}), {when.period_sql})"
    )[0]
    return bool(more <= 0.01 * all_)


def names_of(engine: Engine, rows: str, *, steps_of: Moments | None = None) -> tuple[Name, ...]:
    """The names of rows (who, t, name, r), most frequent first.

    steps_of : for the gaps between the periods in which a name recurs
    """
    engine.drop("placed")
    engine.run(
        "CREATE TABLE placed AS SELECT who, t, name, lead(name) OVER w AS next, lag(name) OVER w AS previous "
        f"FROM ({rows}) WINDOW w AS (PARTITION BY who ORDER BY t, r)"
    )
    cut = engine.rows("SELECT min(t), max(t) FROM placed")[0]
    if cut[0] is None:
        return ()
    late = int(cut[0]) + int(JUDGED * (int(cut[1]) - int(cut[0])))
    found = engine.rows(
        "SELECT name, count(*), count(DISTINCT who), avg((previous IS NULL)::INTEGER), "
        f"coalesce(avg((next IS NULL)::INTEGER) FILTER (WHERE t <= {late}), 0), count(*) FILTER (WHERE t <= {late}), "
        "count(*) FILTER (WHERE next <> name) FROM placed GROUP BY 1 ORDER BY 2 DESC, 1"
    )
    gaps = _gaps(engine, steps_of) if steps_of else {}
    return tuple(
        Name(str(n), int(a), int(b), float(c), float(d), int(e), int(f), gaps.get(str(n), 0))
        for n, a, b, c, d, e, f in found
    )


def _gaps(engine: Engine, when: Moments) -> dict[str, int]:
    found = engine.rows(
        f"SELECT name, quantile_disc(gap, {USUAL}) FROM (SELECT name, p - lag(p) OVER (PARTITION BY who, name "
        f"ORDER BY p) AS gap FROM (SELECT DISTINCT who, name, {when.ordinal('t')} AS p FROM placed)) "
        "WHERE gap IS NOT NULL GROUP BY 1 HAVING count(*) >= 20"
    )
    return {str(name): int(gap) for name, gap in found}


def stop_appearing(engine: Engine) -> int:
    """Customers of `placed` whose last row lies before the last moment of all."""
    return int(
        engine.one(
            "SELECT count(*) FROM (SELECT max(t) AS last FROM placed GROUP BY who) "
            "WHERE last < (SELECT max(t) FROM placed)"
        )
    )


def _day(instant: int) -> str:
    return (date(1970, 1, 1) + timedelta(days=instant // DAY)).isoformat()
