"""[input] and [events]: where the extract is, how it is laid out, what its events are called."""

from __future__ import annotations

import codecs
import zoneinfo
from collections.abc import Iterable, Sequence

from cohortflow.errors import listed, nearest
from cohortflow.record import frozen_mapping
from cohortflow.states import States
from cohortflow.study.parts import LAYOUTS, ON_GAP, OTHERS, EventSpec, InputSpec, StateRule
from cohortflow.study.source import REQUIRED, Table

_COMMON = (
    "layout",
    "files",
    "segments",
    "attributes",
    "arm",
    "weight",
    "date_format",
    "delimiter",
    "decimal",
    "encoding",
    "timezone",
    "log_start",
)
NEEDED = {
    "events": ("customer", "time", "event"),
    "history": ("customer", "time", "state"),
    "wide": ("customer",),
    "spells": ("customer", "time", "end", "state"),
    "counts": ("time", "from", "to", "n"),
}
_OPTIONAL = {
    "events": ("event_id", "loaded_at", "amount", "currency", "valid_until", "joins", "returns", "tie_order"),
    "history": ("event_id", "loaded_at", "amount", "currency", "on_gap", "on_absent"),
    "wide": ("state", "on_gap", "on_absent"),
    "spells": ("event_id", "loaded_at", "amount", "currency", "on_absent", "end_reason", "end_is"),
    "counts": (),
}
INPUT_KEYS = tuple(
    dict.fromkeys((*_COMMON, *(k for d in (NEEDED, _OPTIONAL) for v in d.values() for k in v)))
)
EVENT_KEYS = ("map", "ignore", "others")
_COLUMNS = (
    "customer",
    "time",
    "event",
    "state",
    "end",
    "from",
    "to",
    "n",
    "event_id",
    "loaded_at",
    "amount",
    "currency",
    "valid_until",
    "arm",
    "weight",
    "end_reason",
)
_CLASH = ("customer", "time", "event", "end", "from", "to", "n", "event_id", "arm", "weight")


def read_input(table: Table, states: States) -> InputSpec:
    """The [input] table, checked for its layout."""
    layout = table.text("layout", choices=LAYOUTS)
    _check_layout(table, layout)
    columns = {key: table.text(key, REQUIRED if key in NEEDED[layout] else None) for key in _COLUMNS}
    columns["from_"] = columns.pop("from")
    spec = InputSpec(
        layout=layout,
        files=table.texts("files"),
        segments=table.texts("segments", ()),
        attributes=table.texts("attributes", ()),
        date_format=_date_format(table),
        delimiter=_delimiter(table),
        decimal=table.text("decimal", None, choices=(".", ",")),
        encoding=_encoding(table),
        timezone=_timezone(table),
        log_start=table.day("log_start", None),
        joins=table.texts("joins", ()),
        returns=table.texts("returns", None),
        tie_order=table.texts("tie_order", ()),
        on_gap=table.text("on_gap", "break"),
        on_absent=table.text("on_absent", None),
        end_is=table.text("end_is", "last_day", choices=("last_day", "day_after")),
        **columns,
    )
    _check_columns(table, spec)
    _check_fills(table, spec, states)
    return spec


def _check_layout(table: Table, layout: str) -> None:
    allowed = (*_COMMON, *NEEDED[layout], *_OPTIONAL[layout])
    for key in table.data:
        if key not in allowed:
            others = [name for name in LAYOUTS if key in (*NEEDED[name], *_OPTIONAL[name])]
            raise table.refuse(
                key, f'has no meaning in the layout "{layout}"; it belongs to {listed(others)}.'
            )
    if not table.data.get("files"):
        raise table.refuse("files", 'missing; it needs the files of the extract, like ["events-*.csv"].')


def _check_columns(table: Table, spec: InputSpec) -> None:
    """One column has one job (an arm or segment may not be the customer, and so on)."""
    jobs = {key: table.data[key] for key in _CLASH if key in table}
    seen: dict[str, str] = {}
    for key, column in [
        *jobs.items(),
        *(("segments", s) for s in spec.segments),
        *(("attributes", a) for a in spec.attributes),
    ]:
        if column in seen:
            raise table.refuse(key, f'the column "{column}" is already used as {seen[column]}.')
        seen[column] = key
    if spec.currency and not spec.amount:
        raise table.refuse("currency", "does nothing without `amount`, the column of the money.")
    if spec.loaded_at and not spec.event_id:
        raise table.refuse(
            "loaded_at", "does nothing without `event_id`, which tells the versions of a row apart."
        )


def _check_fills(table: Table, spec: InputSpec, states: States) -> None:
    if spec.on_gap not in ON_GAP:
        table.one_of("on_gap", spec.on_gap, (*ON_GAP, *states.remaining), "rule")
    if spec.on_absent is not None and spec.on_absent not in states.exits:
        table.one_of("on_absent", spec.on_absent, states.exits, "exit")


def _date_format(table: Table) -> str | None:
    value: str | None = table.text("date_format", None)
    if value is not None and "%" not in value:
        raise table.refuse("date_format", f'"{value}" has no % codes; write for instance "%d.%m.%Y".')
    return value


def _delimiter(table: Table) -> str | None:
    value: str | None = table.get("delimiter", None, str, "one character")
    if value is not None and len(value) != 1:
        raise table.refuse("delimiter", f'needs one character, got "{value}" ({len(value)} characters).')
    return value


def _encoding(table: Table) -> str | None:
    value: str | None = table.text("encoding", None)
    try:
        codecs.lookup(value or "utf-8")
    except LookupError:
        raise table.refuse(
            "encoding", f'unknown encoding "{value}"; for instance "utf-8" or "cp1252".'
        ) from None
    return value


def _timezone(table: Table) -> str | None:
    value: str | None = table.text("timezone", None)
    if value is None:
        return None
    try:
        return zoneinfo.ZoneInfo(value).key
    except (zoneinfo.ZoneInfoNotFoundError, ValueError, OSError):
        hint = nearest(value, zoneinfo.available_timezones())
        raise table.refuse(
            "timezone", f'unknown time zone "{value}"{hint}; names look like "Europe/London".'
        ) from None


def read_events(table: Table) -> EventSpec:
    """The [events] table."""
    spellings = {}
    given = table.get("map", {}, dict, "a table of name = [spellings]")
    inner = table.inner("map", given, None)
    owner: dict[str, str] = {}
    for name in given:
        spellings[name] = inner.texts(name)
        for spelling in spellings[name]:
            if owner.setdefault(spelling, name) != name:
                raise inner.refuse(name, f'the spelling "{spelling}" already means "{owner[spelling]}".')
    return EventSpec(
        frozen_mapping(spellings), table.texts("ignore", ()), table.text("others", "refuse", choices=OTHERS)
    )


def check_event_names(
    tables: dict[str, Table], spec: InputSpec, events: EventSpec, rules: Sequence[StateRule]
) -> None:
    """Every event named outside the rules means something; none is both used and ignored."""
    conditions = [c for rule in rules for c in rule.conditions]
    ruled = [e for c in conditions for e in (*c.events, *c.among)]
    used = list(dict.fromkeys((*ruled, *spec.joins, *(spec.returns or ()))))
    _check_known(tables["input"], "tie_order", spec.tie_order, used, "rules, joins or returns")
    _check_known(
        tables["events"], "map", events.map, [*used, *events.ignore], "rules, joins, returns or ignore"
    )
    for name in events.ignore:
        if name in used:
            raise tables["events"].refuse("ignore", f'"{name}" is also used by a rule, joins or returns.')
    for name, wanted in events.map.items():
        for spelling in wanted:
            if spelling in used and spelling != name:
                raise tables["events"].refuse(
                    "map", f'the spelling "{spelling}" of "{name}" is itself a name used here.'
                )


def _check_known(table: Table, key: str, names: Iterable[str], known: Sequence[str], where: str) -> None:
    for name in names:
        if name not in known:
            raise table.refuse(
                key,
                f'"{name}" is named by none of {where}{nearest(name, known)}. Named there: {listed(known)}.',
            )
