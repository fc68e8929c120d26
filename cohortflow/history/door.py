"""The public calls: a study, files or frames in; a History, and of it a Tally, out."""

from __future__ import annotations

from collections.abc import Callable, Iterable, Mapping, Sequence
from dataclasses import replace
from datetime import date
from pathlib import Path
from typing import Any

import pandas as pd

from cohortflow.errors import CallError, InputError, listed
from cohortflow.history.check import Check, balanced
from cohortflow.history.counts import tally_of_counts
from cohortflow.history.engine import Engine, opened
from cohortflow.history.events import read_event_rows
from cohortflow.history.histories import read_state_rows
from cohortflow.history.load import load, refuse_unknown_names
from cohortflow.history.reading import History, InputFile, Reading
from cohortflow.history.sources import Source, file_source, found_files, frame_source, held, is_frame
from cohortflow.history.spells import read_spell_rows
from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.study import EventSpec, InputSpec, StateRule, Study
from cohortflow.tally import Tally

LABELLERS = {
    "events": read_event_rows,
    "history": read_state_rows,
    "wide": read_state_rows,
    "spells": read_spell_rows,
}
UNPACKED = 6  # a gzip extract is taken to be this many times larger
Progress = Callable[[str, float], None]


def read(
    study: Study,
    *,
    progress: Progress | None = None,
    memory_mb: int | None = None,
    threads: int | None = None,
    keep_values: bool = False,
) -> History:
    """Read, label and account for the extract that a study names.

    progress : called with a stage ("reading", "labelling", "counting") and a share from 0 to 1
    memory_mb : memory of the engine, default 1000; what does not fit goes to a work folder
    keep_values : `rejected` gets a column with the offending values (personal data, so not by default)

    Raises InputError (and StudyError, NotIdentified) with what came, where, and what to do.

    >>> import pathlib, tempfile, cohortflow as cf
    >>> text = '''
    ... [study]
    ... period = "month"
    ... as_of = "2026-03-31"
    ... [input]
    ... layout = "history"
    ... files = ["club.csv"]
    ... customer = "id"
    ... time = "month"
    ... state = "state"
    ... on_absent = "left"
    ... [[state]]
    ... name = "left"
    ... role = "exit"
    ... [[state]]
    ... name = "steady"
    ... '''
    >>> rows = "id,month,state\\n1,2026-01,steady\\n2,2026-01,steady\\n1,2026-02,steady\\n1,2026-03,steady\\n"
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     _ = (pathlib.Path(folder) / "club.toml").write_text(text)
    ...     _ = (pathlib.Path(folder) / "club.csv").write_text(rows)
    ...     history = cf.read(cf.read_study(pathlib.Path(folder) / "club.toml"))
    >>> history
    <history of 2 customers, 4 rows used of 4>
    >>> cf.count(history).counts().tolist()
    [[0, 0], [1, 2]]
    """
    files = found_files(study.input.files, study.folder)
    size = sum(path.stat().st_size * (UNPACKED if path.name.endswith(".gz") else 1) for _, path in files)
    with opened(input_bytes=size, memory_mb=memory_mb, threads=threads) as engine:
        spec = study.input
        sources = [
            file_source(engine, name, path, i, encoding=spec.encoding, delimiter=_delimiter(spec, path))
            for i, (name, path) in enumerate(files)
        ]
        if spec.layout == "counts":
            return _counts_history(engine, study, sources)
        return _history(engine, study, sources, progress, keep_values)


def read_events(
    data: Any,
    rules: Sequence[StateRule | Mapping[str, Any]],
    *,
    as_of: date | str | None = None,
    calendar: str | Calendar = "month",
    customer: str = "customer",
    time: str = "time",
    event: str = "event",
    joins: Iterable[str] = (),
    returns: Iterable[str] | None = None,
    log_start: date | str | None = None,
    impossible: Iterable[Sequence[str]] = (),
    events: Mapping[str, Any] | None = None,
    progress: Progress | None = None,
    keep_values: bool = False,
    **columns: Any,
) -> History:
    """An event log from a frame, anything with `__arrow_c_stream__`, or a path.

    rules : the states in order, as `StateRule` or as the [[state]] tables of a study file
    events : as [events] of a study file (map, ignore, others)
    columns : any other key of [input] (amount, event_id, segments, tie_order, timezone, ...)

    >>> import pandas as pd, cohortflow as cf
    >>> log = pd.DataFrame({"customer": ["a", "a", "a", "b"], "event": ["joined", "bought", "bought", "joined"],
    ...                     "time": ["2026-01-03", "2026-01-05", "2026-02-07", "2026-01-20"]})
    >>> rules = [{"name": "left", "role": "exit", "when": {"silent_for": 1, "of": ["bought"]}}, {"name": "buying"}]
    >>> history = cf.read_events(log, rules, as_of="2026-02-28", joins=["joined"])
    >>> cf.count(history).counts().tolist()
    [[0, 0], [1, 1]]
    """
    spec: dict[str, Any] = {"customer": customer, "time": time, "event": event, **columns}
    study = _events_study(rules, spec, calendar, as_of, joins, returns, log_start, impossible, events)
    return _read_data(data, study, progress, keep_values)


def read_history(
    data: Any,
    states: States,
    *,
    customer: str = "customer",
    period: str = "period",
    state: str = "state",
    segments: Iterable[str] = (),
    on_absent: str | None = None,
    on_gap: str = "break",
    calendar: str | Calendar | None = None,
    as_of: date | str | None = None,
    progress: Progress | None = None,
    keep_values: bool = False,
    **columns: Any,
) -> History:
    """A history of states (one row a customer and period) from a frame, an Arrow stream or a path.

    calendar : "day", "week", "month", "quarter", "year" or a Calendar. Left out, an integer period column counts
        steps, and anything else months
    on_absent : exit that customers take who stop appearing;  on_gap : "break", "carry" or a state
    columns : other keys of [input] (amount, attributes, arm, weight, event_id, loaded_at, date_format, ...)

    >>> import pandas as pd, cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = pd.DataFrame({"id": [1, 1, 1, 2, 2], "period": [1, 2, 3, 2, 3],
    ...                      "state": ["fresh", "steady", "left", "fresh", "steady"]})
    >>> history = cf.read_history(rows, states, customer="id")
    >>> cf.count(history).counts().tolist()
    [[0, 2, 0], [0, 0, 1], [0, 0, 0]]
    """
    for name in (on_absent, *((on_gap,) if on_gap not in ("break", "carry") else ())):
        if name is not None:
            states.index(name)
    if on_absent is not None and on_absent not in states.exits:
        raise CallError(
            f'on_absent must be an exit, got "{on_absent}". The exits are {listed(states.exits)}.'
        )
    data = held(data)
    known = calendar if calendar is not None else _calendar_of(data, period)
    spec = _input_spec(
        {"layout": "history", "customer": customer, "time": period, "state": state, "segments": tuple(segments),
         "on_absent": on_absent, "on_gap": on_gap, **columns}
    )  # fmt: skip
    study = Study(states, calendar=_calendar(known), as_of=_day(as_of, "as_of"), input=spec)
    return _read_data(data, study, progress, keep_values)


def read_wide(
    data: Any,
    states: States,
    *,
    customer: str = "customer",
    calendar: str | Calendar = "month",
    on_absent: str | None = None,
    on_gap: str = "break",
    as_of: date | str | None = None,
    progress: Progress | None = None,
    keep_values: bool = False,
    **columns: Any,
) -> History:
    """A history with one row a customer and one column a period (named 2026-09, 202609, Sep-26, ...).

    A row of the accounting is a cell: customers times periods; blank cells are set aside (`blank_cell`).

    >>> import pandas as pd, cohortflow as cf
    >>> states = cf.States(["steady", "left"], exits=["left"])
    >>> rows = pd.DataFrame({"customer": ["a", "b"], "2026-01": ["steady"] * 2, "2026-02": ["steady", "left"]})
    >>> cf.count(cf.history.read_wide(rows, states)).counts().tolist()
    [[1, 1], [0, 0]]
    """
    spec = _input_spec(
        {
            "layout": "wide",
            "customer": customer,
            "time": None,
            "on_absent": on_absent,
            "on_gap": on_gap,
            **columns,
        }
    )
    study = Study(states, calendar=_calendar(calendar), as_of=_day(as_of, "as_of"), input=spec)
    return _read_data(data, study, progress, keep_values)


def read_spells(
    data: Any,
    states: States,
    *,
    as_of: date | str | None = None,
    customer: str = "customer",
    start: str = "start",
    end: str = "end",
    state: str = "state",
    end_reason: str | None = None,
    end_is: str = "last_day",
    calendar: str | Calendar = "month",
    on_absent: str | None = None,
    log_start: date | str | None = None,
    progress: Progress | None = None,
    keep_values: bool = False,
    **columns: Any,
) -> History:
    """Spells: one row for each time a customer spent in a state, with its first and last day (blank = goes on).

    >>> import pandas as pd, cohortflow as cf
    >>> states = cf.States(["steady", "left"], exits=["left"])
    >>> rows = pd.DataFrame({"customer": ["a", "b"], "start": ["2026-01-05", "2026-01-20"],
    ...                      "end": ["2026-02-10", ""], "state": ["steady"] * 2, "why": ["left", ""]})
    >>> history = cf.history.read_spells(rows, states, as_of="2026-03-31", end_reason="why")
    >>> cf.count(history).counts().tolist()
    [[2, 1], [0, 0]]
    """
    spec = _input_spec(
        {"layout": "spells", "customer": customer, "time": start, "end": end, "state": state, "end_reason": end_reason,
         "end_is": end_is, "on_absent": on_absent, "log_start": _day(log_start, "log_start"), **columns}
    )  # fmt: skip
    study = Study(states, calendar=_calendar(calendar), as_of=_day(as_of, "as_of"), input=spec)
    return _read_data(data, study, progress, keep_values)


def read_counts(
    data: Any,
    states: States,
    *,
    period: str = "period",
    from_: str = "from",
    to: str = "to",
    n: str = "n",
    calendar: str | Calendar | None = None,
) -> Tally:
    """Bare transition counts into a Tally that holds `moves` only.

    data : rows (period, from, to, n) as a frame, an Arrow stream, a path or a list of tuples; `period` is the one
        that the move starts in. Equal rows are added up.

    Whoever arrives in the last period is a customer of that period (`Tally.mix`). All customers are in one bucket,
    so errors between customers cannot be told. InputError for counts that are negative or not whole, unknown
    states, or moves out of an exit.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> tally = cf.read_counts([("2026-08", "fresh", "steady", 8), ("2026-08", "fresh", "left", 2)], states)
    >>> tally
    <tally of 10 customers, 2026-08 to 2026-09, 10 moves>
    >>> tally.mix().to_dict()
    {'fresh': 0, 'steady': 8, 'left': 0}
    """
    columns = (period, from_, to, n)
    if isinstance(data, (str, Path)):
        path = Path(data)
        spec = InputSpec(layout="counts", files=(path.name,), time=period, from_=from_, to=to, n=n)
        with opened() as engine:
            source = file_source(engine, path.name, found_files([path.name], path.parent)[0][1], 0)
            return tally_of_counts(_text_rows(engine, [source], spec), states, calendar=calendar)
    if is_frame(data):
        with opened() as engine:
            spec = InputSpec(layout="counts", time=period, from_=from_, to=to, n=n)
            return tally_of_counts(
                _text_rows(engine, [frame_source(engine, data)], spec), states, calendar=calendar
            )
    rows = pd.DataFrame([tuple(r) for r in data], columns=["period", "from", "to", "n"])
    del columns
    return tally_of_counts(rows, states, calendar=calendar)


def count(history: History) -> Tally:
    """The Tally of a history: tables of counts in which no customer is left.

    >>> import pandas as pd, cohortflow as cf
    >>> states = cf.States(["steady", "left"], exits=["left"])
    >>> rows = pd.DataFrame({"customer": ["a", "a", "b"], "period": [1, 2, 1], "state": ["steady"] * 3})
    >>> cf.count(cf.read_history(rows, states, on_absent="left"))
    <tally of 2 customers, 1 to 2, 2 moves>
    """
    if not isinstance(history, History):
        raise CallError(
            f"count takes the History that read, read_events or read_history gives; got {type(history).__name__}."
        )
    return history.tally


# ---- inner ----
def _history(
    engine: Engine, study: Study, sources: list[Source], progress: Progress | None, keep_values: bool
) -> History:
    told = progress or (lambda stage, share: None)
    loaded = load(engine, study, sources, told, keep_values=keep_values)
    if loaded.rows == 0:
        raise InputError(
            f"{listed(s.name for s in sources)}: no rows under the header line. Give an extract with rows."
        )
    refuse_unknown_names(engine, study, loaded)
    reading = Reading(engine, study, loaded, told)
    sweep = LABELLERS[study.input.layout](reading)
    told("counting", 0.0)
    tally = sweep.tally()
    check = reading.accounting(sweep.accounts)
    told("counting", 1.0)
    return History(
        states=study.states,
        calendar=study.calendar,
        check=check,
        rejected=reading.rejected(sweep.accounts),
        inputs=reading.inputs(),
        tally=tally,
    )


def _read_data(data: Any, study: Study, progress: Progress | None, keep_values: bool) -> History:
    if isinstance(data, (str, Path)):
        path = Path(data)
        spec = replace(study.input, files=(str(path.resolve()),))
        return read(replace(study, input=spec), progress=progress, keep_values=keep_values)
    size = int(getattr(data, "nbytes", 0)) if not isinstance(data, pd.DataFrame) else len(data) * 40
    with opened(input_bytes=size) as engine:
        return _history(engine, study, [frame_source(engine, data)], progress, keep_values)


def _delimiter(spec: InputSpec, path: Path) -> str | None:
    if spec.delimiter:
        return spec.delimiter
    return "\t" if path.name.lower().endswith((".tsv", ".tsv.gz")) else None


def _calendar(calendar: str | Calendar) -> Calendar:
    return calendar if isinstance(calendar, Calendar) else Calendar(calendar)


def _calendar_of(data: Any, period: str) -> str:
    """ "step" for an integer column, else "month"."""
    if isinstance(data, pd.DataFrame):
        return "step" if period in data and pd.api.types.is_integer_dtype(data[period]) else "month"
    with opened() as engine:
        if isinstance(data, (str, Path)):
            source = file_source(engine, Path(data).name, Path(data), 0, fingerprint=False)
        else:
            source = frame_source(engine, data)
        place = source.column(period, "period")
        if source.types[place] != "VARCHAR":
            return "step" if "INT" in source.types[place] else "month"
        values = [v.strip() for v in source.samples.get(source.columns[place], ()) if v.strip()]
    return "step" if values and all(v.lstrip("-").isdigit() and len(v) < 5 for v in values) else "month"


def _day(day: date | str | None, key: str) -> date | None:
    if day is None or isinstance(day, date):
        return day
    try:
        return date.fromisoformat(day)
    except ValueError:
        raise CallError(f'{key} is a date like "2026-09-30"; got "{day}".') from None


def _input_spec(given: Mapping[str, Any]) -> InputSpec:
    lists = ("segments", "attributes", "joins", "returns", "tie_order", "files")
    values: dict[str, Any] = {k: tuple(v) if k in lists and v is not None else v for k, v in given.items()}
    try:
        return InputSpec(**values)
    except TypeError:
        known = [k for k in InputSpec.__dataclass_fields__ if k not in ("layout", "files")]
        wrong = [k for k in values if k not in InputSpec.__dataclass_fields__]
        raise CallError(
            f"Unknown options {listed(wrong)}. Options that name columns: {listed(known, 40)}."
        ) from None


def _events_study(
    rules: Sequence[StateRule | Mapping[str, Any]],
    spec: dict[str, Any],
    calendar: str | Calendar,
    as_of: date | str | None,
    joins: Iterable[str],
    returns: Iterable[str] | None,
    log_start: date | str | None,
    impossible: Iterable[Sequence[str]],
    events: Mapping[str, Any] | None,
) -> Study:
    from cohortflow.study.rules import read_rules
    from cohortflow.study.source import Source as Origin
    from cohortflow.study.source import Table

    if not all(isinstance(r, StateRule) for r in rules):
        origin = Origin("call", "", {})
        tables = [
            Table(
                origin, "state", _as_table(r), keys=("name", "role", "when"), number=i, shown=f"rule {i + 1}"
            )
            for i, r in enumerate(rules)
        ]
        roles = [t.text("role", "live", choices=("live", "entry", "away", "exit")) for t in tables]
        rules = read_rules(tables, roles)
    typed: tuple[StateRule, ...] = tuple(r for r in rules if isinstance(r, StateRule))
    by_role = {role: [r.name for r in typed if r.role == role] for role in ("exit", "entry", "away")}
    states = States(
        [r.name for r in typed], exits=by_role["exit"], entries=by_role["entry"], away=by_role["away"],
        impossible=impossible,
    )  # fmt: skip
    extra = {
        "layout": "events",
        "joins": joins,
        "returns": returns,
        "log_start": _day(log_start, "log_start"),
    }
    given = events or {}
    event_spec = EventSpec(
        {k: tuple(v) for k, v in given.get("map", {}).items()},
        tuple(given.get("ignore", ())),
        given.get("others", "refuse"),
    )
    return Study(
        states,
        calendar=_calendar(calendar),
        as_of=_day(as_of, "as_of"),
        rules=typed,
        input=_input_spec({**spec, **extra}),
        events=event_spec,
    )


def _as_table(rule: StateRule | Mapping[str, Any]) -> dict[str, Any]:
    if isinstance(rule, StateRule):
        raise CallError("Give all rules as StateRule or all as tables like those of a study file, not both.")
    return dict(rule)


def _counts_history(engine: Engine, study: Study, sources: list[Source]) -> History:
    """Bare counts of a study as a History: every row is used, no customer is known."""
    spec = study.input
    if spec.segments or spec.attributes or spec.arm or spec.weight:
        raise InputError(
            "Bare counts are read without segments, attributes, arm or weight in this version; leave these "
            "keys out of [input], or make one file of counts for each segment."
        )
    parts = [_text_rows(engine, [source], spec) for source in sources]
    rows = pd.concat(parts, ignore_index=True)
    tally = tally_of_counts(rows, study.states, calendar=study.calendar, definitions=study.digest())
    lines = [("used", "", s.name, len(part), 0) for s, part in zip(sources, parts, strict=True)]
    inputs = tuple(
        InputFile(s.name, s.size, s.sha256, len(part), s.shown)
        for s, part in zip(sources, parts, strict=True)
    )
    rejected = pd.DataFrame(columns=["file", "line", "column", "reason"])
    return History(study.states, study.calendar, Check(balanced(lines, {}), ()), rejected, inputs, tally)


def _text_rows(engine: Engine, sources: list[Source], spec: InputSpec) -> pd.DataFrame:
    """period, from, to, n of all sources as text."""
    parts = []
    for source in sources:
        wanted = (("time", spec.time), ("from", spec.from_), ("to", spec.to), ("n", spec.n))
        places = [source.column(name or key, key) for key, name in wanted]
        columns = ", ".join(f"c{i}::VARCHAR AS k{k}" for k, i in enumerate(places))
        frame = engine.connection.execute(f"SELECT {columns} FROM {source.relation}").df()
        parts.append(frame.set_axis(["period", "from", "to", "n"], axis=1))
    return pd.concat(parts, ignore_index=True)
