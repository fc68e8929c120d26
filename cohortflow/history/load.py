"""Sources into one typed table `rows`, a record a row, in the order of the files; rowid is the record's number.

customer  text, never changed          t     instant (events) in microseconds
label     period as written (history)  form  how the instant is written: 0 a day, 1 with a clock, 2 with an offset
fault     code of columns.FAULTS, 0 = good    code  place of the event or state; -1 ignored, -2 unknown
h         64 bits of the whole row            bad   the offending text, only with keep_values
amount, until, seg, weight, event_id, loaded, currency: only where the study names their columns
"""

from __future__ import annotations

from collections.abc import Callable
from dataclasses import dataclass, field

from cohortflow.errors import InputError, listed, nearest
from cohortflow.history.columns import (
    BLANK,
    IGNORED,
    UNKNOWN,
    Field,
    Money,
    amount_sql,
    code_sql,
    fault_sql,
    field_of,
    id_missing_sql,
    joined_text,
    money_style,
    row_hash,
    weight_sql,
)
from cohortflow.history.engine import Engine, quoted
from cohortflow.history.labels import period_of_label
from cohortflow.history.sources import Source
from cohortflow.history.times import DAY, LATEST, TimeFormat, detect_format, in_order, instant_sql, period_sql
from cohortflow.study import InputSpec, Study

FOREVER = 1_000_000_000  # ordinal of a valid-until day that never comes
FOREVER_INSTANT = 2**62
Progress = Callable[[str, float], None]
Check = tuple[str, str, str]  # reason, SQL condition, SQL of the offending text


@dataclass
class Loaded:
    """What stands in `rows` besides the fixed columns, and how the files were read."""

    sources: list[Source]
    has: set[str] = field(default_factory=set)
    time_format: TimeFormat | None = None
    money: Money | None = None
    segment_columns: tuple[tuple[str, str], ...] = ()
    names: list[tuple[str, str, str]] = field(
        default_factory=list
    )  # (name, its code, relation) of each source

    @property
    def rows(self) -> int:
        """Records in `rows` (records the reader could not split are not among them)."""
        return sum(source.rows for source in self.sources)


def load(
    engine: Engine, study: Study, sources: list[Source], progress: Progress, *, keep_values: bool = False
) -> Loaded:
    """Fill `rows`. InputError for columns, dates or money that cannot be told."""
    loaded = Loaded(sources, segment_columns=segment_columns(study.input))
    maker = _Maker(engine, study, loaded, keep_values)
    done, whole = 0, sum(s.size for s in sources) or 1
    for number, source in enumerate(sources):
        select = maker.select(source)
        verb = "INSERT INTO rows" if number else "CREATE TABLE rows AS"
        _run(engine, source, f"{verb} {select}")
        source.first = sum(s.rows for s in sources[:number])
        source.rows = int(engine.one("SELECT count(*) FROM rows")) - source.first
        _note_bad_records(engine, source, number)
        done += source.size
        progress("reading", done / whole)
    return loaded


def segment_columns(spec: InputSpec) -> tuple[tuple[str, str], ...]:
    """(column, role) in the order in which the values are kept."""
    roles = [*((c, "segment") for c in spec.segments), *((c, "attribute") for c in spec.attributes)]
    return (*roles, *(((spec.arm, "arm"),) if spec.arm else ()))


def _run(engine: Engine, source: Source, sql: str) -> None:
    try:
        engine.run(sql)
    except Exception as error:
        raise _unreadable(source, error) from None


def _unreadable(source: Source, error: Exception) -> InputError:
    """The engine's refusal as one of ours."""
    reason = next((line.strip() for line in str(error).splitlines() if line.strip()), type(error).__name__)
    return InputError(
        f"{source.name}: the file could not be read as {source.shown}: {reason}. Check `delimiter` and "
        "`encoding` in [input], or save the extract again as CSV in UTF-8."
    )


def _note_bad_records(engine: Engine, source: Source, number: int) -> None:
    """Records that the reader could not split: (place of the record's first byte, reason)."""
    if source.dialect is None:
        return
    kinds = engine.rows(
        f"SELECT line_byte_position, error_type::VARCHAR, csv_line FROM bad_{number} "
        "QUALIFY row_number() OVER (PARTITION BY line_byte_position ORDER BY column_idx) = 1 "
        "ORDER BY line_byte_position"
    )
    for position, kind, text in kinds:
        _check_quote(source, kind, text)
        reason = "encoding_unreadable" if "ENCODING" in kind else "ragged_row"
        source.bad.append((int(position or 0), reason))
    engine.drop(f"bad_{number}", f"scan_{number}")


def _check_quote(source: Source, kind: str, text: str | None) -> None:
    """An unclosed quote swallows the rows after it, which would vanish from the accounting."""
    swallowed = (text or "").strip("\r\n").count("\n")
    if swallowed > 1 and ("QUOTE" in kind or '"' in (text or "")):
        start = (text or "").strip("\r\n").splitlines()[0][:60]
        raise InputError(
            f"{source.name}: a quotation mark is opened and not closed in the record that begins {start!r}; "
            f"it swallows {swallowed} more lines. Double it or remove it in the file."
        )


class _Maker:
    """Builds the statement that reads one source."""

    def __init__(self, engine: Engine, study: Study, loaded: Loaded, keep_values: bool) -> None:
        self.engine, self.study, self.loaded = engine, study, loaded
        self.spec, self.keep_values = study.input, keep_values

    def select(self, source: Source) -> str:
        """SELECT of one source in the columns of `rows`."""
        columns: dict[str, str] = {}
        checks: list[Check] = []
        who = field_of(source, self.spec.customer or "", "customer").text
        columns["customer"] = who
        checks.append(("id_missing", id_missing_sql(who), who))
        relation = source.relation
        if self.spec.layout == "events":
            self._event(source, columns, checks)
        elif self.spec.layout == "spells":
            self._spell(source, columns, checks)
        elif self.spec.layout == "wide":
            relation = self._wide(source, columns, checks)
        else:
            period = field_of(source, self.spec.time or "", "time").text
            state = field_of(source, self.spec.state or "", "state").text
            self._state(period, state, relation, columns, checks)
        self._extras(source, columns, checks)
        self.loaded.has |= set(columns) | ({"bad"} if self.keep_values else set())
        named = ", ".join(f"{sql} AS {name}" for name, sql in columns.items())
        tests = ", ".join(f"{condition} AS k{i}" for i, (_, condition, _) in enumerate(checks))
        texts = [f"{text} AS x{i}" for i, (_, _, text) in enumerate(checks)] if self.keep_values else []
        inner = ", ".join([named, f"{row_hash(source)} AS h", tests, *texts])
        fault = fault_sql([(reason, f"k{i}") for i, (reason, _, _) in enumerate(checks)])
        bad = f", {_first_text(len(checks))} AS bad" if self.keep_values else ""
        return f"SELECT {', '.join(columns)}, h, {fault} AS fault{bad} FROM (SELECT {inner} FROM {relation})"

    # ---- what happened ----
    def _event(self, source: Source, columns: dict[str, str], checks: list[Check]) -> None:
        when = field_of(source, self.spec.time or "", "time")
        form = self._time_format(source, when.name, when.sql, when.type)
        time = instant_sql(when.sql if when.is_text or form.kind != "step" else when.text, form, when.type)
        event = field_of(source, self.spec.event or "", "event").text
        columns |= {"t": time.instant, "form": time.form}
        columns["code"] = code_sql(event, event_codes(self.study), str(UNKNOWN))
        self.loaded.names.append((event, columns["code"], source.relation))
        checks.append(("time_unreadable", f"({time.instant}) IS NULL", when.text))
        if self.study.events.others != "ignore":
            checks.append(("unknown_event", f"({columns['code']}) = {UNKNOWN}", event))

    def _state(
        self, period: str, state: str, relation: str, columns: dict[str, str], checks: list[Check]
    ) -> None:
        columns["label"] = f"coalesce(trim({period}), '')"
        columns["code"] = code_sql(f"trim({state})", state_codes(self.study), str(UNKNOWN))
        self.loaded.names.append((state, columns["code"], relation))
        checks.append(("time_unreadable", f"({columns['label']}) = ''", period))
        if self.study.events.others != "ignore":
            checks.append(("unknown_state", f"({columns['code']}) = {UNKNOWN}", state))

    def _wide(self, source: Source, columns: dict[str, str], checks: list[Check]) -> str:
        """One column a period: every cell becomes a row, the blank ones too, so that records keep their numbers."""
        cells = self._period_columns(source)
        labels = ", ".join(quoted(source.columns[i]) for i in cells)
        states = ", ".join(Field(f"c{i}", source.types[i], source.columns[i]).text for i in cells)
        cell = f"unnest([{labels}]) AS wide_label, unnest([{states}]) AS wide_state"
        relation = f"(SELECT *, {cell} FROM {source.relation})"
        source.cells = len(cells)
        self._state("wide_label", "wide_state", relation, columns, checks)
        blank = "coalesce(trim(wide_state), '') = ''"
        columns["code"] = f"(CASE WHEN {blank} THEN {BLANK} ELSE {columns['code']} END)::SMALLINT"
        self.loaded.names[-1] = ("wide_state", columns["code"], relation)
        if checks[-1][0] == "unknown_state":
            checks[-1] = ("unknown_state", f"({columns['code']}) = {UNKNOWN}", "wide_state")
        return relation

    def _period_columns(self, source: Source) -> list[int]:
        """The columns whose names are periods; InputError when there are none."""
        spec, calendar = self.spec, self.study.calendar
        others = {spec.customer, spec.weight, *(name for name, _ in self.loaded.segment_columns)}
        found = [
            i
            for i, name in enumerate(source.columns)
            if name not in others and period_of_label(name, calendar, spec.date_format) is not None
        ]
        if not found:
            raise InputError(
                f"{source.name}: no column is named for a {calendar.kind}. The columns are {listed(source.columns)}; "
                "in the layout wide each period has a column named like 2026-09. See `period` in [study]."
            )
        return found

    def _spell(self, source: Source, columns: dict[str, str], checks: list[Check]) -> None:
        start = field_of(source, self.spec.time or "", "time")
        end = field_of(source, self.spec.end or "", "end")
        state = field_of(source, self.spec.state or "", "state").text
        first = instant_sql(
            start.sql, self._time_format(source, start.name, start.sql, start.type), start.type
        ).instant
        there = f"({end.sql} IS NOT NULL AND trim({end.text}) <> '')"
        columns["t"], columns["code"] = (
            first,
            code_sql(f"trim({state})", state_codes(self.study), str(UNKNOWN)),
        )
        columns["until"] = self._last_day(source, end, there)
        self.loaded.names.append((state, columns["code"], source.relation))
        checks.append(("time_unreadable", f"({first}) IS NULL", start.text))
        checks.append(("end_unreadable", f"{there} AND ({columns['until']}) IS NULL", end.text))
        if self.study.events.others != "ignore":
            checks.append(("unknown_state", f"({columns['code']}) = {UNKNOWN}", state))
        checks.append(("end_before_start", f"coalesce(({columns['until']}) < ({first}), false)", end.text))
        if self.spec.end_reason:
            self._reason(source, columns, checks)

    def _last_day(self, source: Source, end: Field, there: str) -> str:
        """SQL: the instant of the last day of a spell; FOREVER for blank and far-off ends."""
        step = self.study.calendar.kind == "step"
        if not end.is_text or step:
            form = TimeFormat("step" if step else "typed")
        else:
            samples = source.samples.get(end.name, ())
            where = f'{source.name}, column "{end.name}"'
            blank = not any(v.strip() for v in samples)
            form = (
                TimeFormat("iso")
                if blank
                else detect_format(samples, where=where, given=self.spec.date_format)
            )
            if form.order_unknown:
                form = self._ordered(source, end.sql, form, where)
        far = f"substr(trim({end.text}), 1, 4) BETWEEN '{LATEST.year}' AND '9999' AND NOT {str(step).lower()}"
        day = instant_sql(end.sql, form, end.type).instant
        less = (1 if step else DAY) if self.spec.end_is == "day_after" else 0
        return f"CASE WHEN NOT {there} OR {far} THEN {FOREVER_INSTANT} ELSE ({day}) - {less} END"

    def _reason(self, source: Source, columns: dict[str, str], checks: list[Check]) -> None:
        """The exit that ended a spell; blank = none."""
        reason = field_of(source, self.spec.end_reason or "", "end_reason").text
        exits = {n: c for n, c in state_codes(self.study).items() if c < 0 or self.study.states.exit_mask[c]}
        code = code_sql(f"trim({reason})", exits, str(UNKNOWN))
        columns["reason"] = (
            f"(CASE WHEN coalesce(trim({reason}), '') = '' THEN {BLANK} ELSE {code} END)::SMALLINT"
        )
        self.loaded.names.append((reason, columns["reason"], source.relation))
        if self.study.events.others != "ignore":
            checks.append(("unknown_state", f"({columns['reason']}) = {UNKNOWN}", reason))

    def _time_format(self, source: Source, name: str, sql: str, sql_type: str) -> TimeFormat:
        known = self.loaded.time_format
        if self.study.calendar.kind == "step":
            form = TimeFormat("step")
        elif sql_type.startswith("TIMESTAMP") or sql_type == "DATE":
            form = TimeFormat("typed")
        elif sql_type != "VARCHAR":
            raise InputError(
                f'{source.name}: the column "{name}" holds numbers ({sql_type}), not dates. Give dates as text '
                'or timestamps, or use period = "step" for plain integers.'
            )
        else:
            where = f'{source.name}, column "{name}"'
            form = detect_format(source.samples.get(name, ()), where=where, given=self.spec.date_format)
            if form.order_unknown:
                form = known if known and known.patterns else self._ordered(source, sql, form, where)
        self.loaded.time_format = known or form
        return form

    def _ordered(self, source: Source, sql: str, form: TimeFormat, where: str) -> TimeFormat:
        mark = quoted(form.order_unknown)
        first, second = (f"try_cast(split_part(trim({sql}), {mark}, {i}) AS INTEGER)" for i in (1, 2))
        sql = (
            f"SELECT coalesce(bool_or({first} BETWEEN 13 AND 31), false), "
            f"coalesce(bool_or({second} BETWEEN 13 AND 31), false) FROM {source.relation}"
        )
        try:
            found = self.engine.rows(sql)[0]
        except Exception as error:
            raise _unreadable(source, error) from None
        return in_order(form, bool(found[0]), bool(found[1]), where=where)

    # ---- the rest ----
    def _extras(self, source: Source, columns: dict[str, str], checks: list[Check]) -> None:
        spec = self.spec
        if spec.amount:
            amount = field_of(source, spec.amount, "amount")
            samples = source.samples.get(amount.name, ())
            delimiter = source.dialect.delimiter if source.dialect else None
            self.loaded.money = money_style(samples, delimiter, spec.decimal)
            columns["amount"], bad = amount_sql(amount, self.loaded.money)
            checks.append(("amount_unreadable", bad, amount.text))
        if spec.valid_until:
            columns["until"], bad = self._until(source)
            text = field_of(source, spec.valid_until, "valid_until").text
            checks.append(("valid_until_unreadable", bad, text))
        if spec.weight:
            weight = field_of(source, spec.weight, "weight")
            columns["weight"], bad = weight_sql(weight)
            checks.append(("weight_unreadable", bad, weight.text))
        if self.loaded.segment_columns:
            fields = [field_of(source, name, role) for name, role in self.loaded.segment_columns]
            columns["seg"] = joined_text(fields)
        for key in ("event_id", "currency"):
            if name := getattr(spec, key):
                columns[key] = f"nullif(trim({field_of(source, name, key).text}), '')"
        if spec.loaded_at:
            columns["loaded"] = f"coalesce(trim({field_of(source, spec.loaded_at, 'loaded_at').text}), '')"

    def _until(self, source: Source) -> tuple[str, str]:
        """(ordinal of the period of the valid-until day, whether it is there but unreadable)."""
        column = field_of(source, self.spec.valid_until or "", "valid_until")
        there = f"({column.sql} IS NOT NULL AND trim({column.text}) <> '')"
        if self.study.calendar.kind == "step" or not column.is_text:
            form = TimeFormat("step" if self.study.calendar.kind == "step" else "typed")
        else:
            where = f'{source.name}, column "{column.name}"'
            samples = source.samples.get(column.name, ())
            if not any(v.strip() for v in samples):
                form = TimeFormat("iso")
            else:
                form = detect_format(samples, where=where, given=self.spec.date_format)
            if form.order_unknown:
                form = self._ordered(source, column.sql, form, where)
        instant = instant_sql(column.sql, form, column.type).instant
        period = period_sql(self.study.calendar, f"({instant})")
        far = f"substr(trim({column.text}), 1, 4) BETWEEN '{LATEST.year}' AND '9999'"
        value = f"CASE WHEN NOT {there} THEN NULL WHEN {far} THEN {FOREVER} ELSE {period} END"
        if self.study.calendar.kind == "own":
            value = f"CASE WHEN ({value}) = -1 THEN {self._past_own(instant)} ELSE ({value}) END"
        return value, f"({there} AND NOT coalesce({far}, false) AND ({instant}) IS NULL)"

    def _past_own(self, instant: str) -> str:
        """A valid-until day outside an own calendar: never comes, or is long past."""
        end = self.study.calendar.own[-1][2].isoformat()
        return f"(CASE WHEN make_timestamp({instant}) > TIMESTAMP '{end}' THEN {FOREVER} ELSE -{FOREVER} END)"


def _first_text(checks: int) -> str:
    """The text of the first fault of a row."""
    return "CASE " + " ".join(f"WHEN k{i} THEN x{i}" for i in range(checks)) + " END"


def event_codes(study: Study) -> dict[str, int]:
    """Every accepted spelling -> position in `Study.event_order`; ignored events: IGNORED."""
    place = {name: i for i, name in enumerate(study.event_order)}
    ignored = dict.fromkeys(study.events.ignore, IGNORED)
    spelled = {
        s: (place | ignored)[n] for n, ss in study.events.map.items() for s in ss if n in place | ignored
    }
    return {**ignored, **place, **spelled}


def state_codes(study: Study) -> dict[str, int]:
    """Every accepted spelling of a state -> its position; ignored ones: IGNORED."""
    place = {name: i for i, name in enumerate(study.states.names)}
    ignored = dict.fromkeys(study.events.ignore, IGNORED)
    spelled = {
        s: (place | ignored)[n] for n, ss in study.events.map.items() for s in ss if n in place | ignored
    }
    return {**ignored, **place, **spelled}


def refuse_unknown_names(engine: Engine, study: Study, loaded: Loaded) -> None:
    """InputError that lists event or state names used nowhere, with their counts and the nearest known name."""
    if study.events.others != "refuse" or not engine.one("SELECT count(*) FROM rows WHERE fault IN (3, 7)"):
        return
    each = [
        f"SELECT coalesce({name}, '') AS name FROM {relation} WHERE ({code}) = {UNKNOWN}"
        for name, code, relation in loaded.names
    ]
    found = engine.rows(
        f"SELECT name, count(*) FROM ({' UNION ALL '.join(each)}) GROUP BY 1 ORDER BY 2 DESC, 1 LIMIT 13"
    )
    what = "event" if study.input.layout == "events" else "state"
    known = [n for n, c in (event_codes if what == "event" else state_codes)(study).items() if c >= 0]
    shown = "; ".join(f'"{name}" {count:,} times{nearest(name, known)}' for name, count in found[:12])
    more = " and more" if len(found) > 12 else ""
    raise InputError(
        f"The extract has {what}s that the study does not name: {shown}{more}. Known: {listed(known)}. In "
        f"[events], map a spelling to a name (map = {{ {known[0] if known else 'name'} = [...] }}), put it "
        'under `ignore`, or set others = "reject" or "ignore".'
    )
