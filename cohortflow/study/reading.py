"""Reading a study: TOML, overrides, the tables in order, into one frozen Study."""

from __future__ import annotations

import tomllib
from collections.abc import Mapping
from dataclasses import replace
from datetime import date
from pathlib import Path
from typing import Any

from cohortflow.errors import CohortflowError, StudyError
from cohortflow.periods import KINDS, WEEKDAYS, Calendar
from cohortflow.record import frozen_mapping
from cohortflow.states import ALL_LIVE, ROLES, States
from cohortflow.study import extract, forecast, plans
from cohortflow.study.overrides import apply_overrides
from cohortflow.study.parts import InputSpec, StateRule
from cohortflow.study.rules import read_rules
from cohortflow.study.side_files import read_calendar
from cohortflow.study.source import Source, Table, nearest_given, shown_value
from cohortflow.study.whole import Study

STUDY_KEYS = (
    "title",
    "period",
    "as_of",
    "horizon",
    "level",
    "seed",
    "week_starts",
    "fiscal_year_start",
    "calendar",
)
STATE_KEYS = ("name", "role", "when")
SINGLE = ("study", "input", "events", "moves", "totals", "model", "joiners", "value", "budget", "people")
MANY = ("state", "scenario", "adjustment")
KEYS: dict[str, tuple[str, ...] | None] = {
    "study": STUDY_KEYS,
    "input": extract.INPUT_KEYS,
    "events": extract.EVENT_KEYS,
    "moves": ("impossible",),
    "totals": None,
    "model": forecast.MODEL_KEYS,
    "joiners": forecast.JOINER_KEYS,
    "value": forecast.VALUE_KEYS,
    "budget": ("file",),
    "people": forecast.PEOPLE_KEYS,
    "state": STATE_KEYS,
    "scenario": plans.SCENARIO_KEYS,
    "adjustment": plans.ADJUSTMENT_KEYS,
}


def read_study(
    path: str | Path, *, overrides: Mapping[str, Any] | None = None, set_by: Mapping[str, str] | None = None
) -> Study:
    """Read and check a study file.

    `overrides` replaces settings ("study.level": 0.95), as `--set` does; `set_by` says where each came from
    ("option", "environment"), for `Study.origin_of`. StudyError names file, line, table and key.

    The warm-up is the largest k of any rule, doubled when no joins are named. `returns`, if given, ends every
    exit; else `joins` do, and for an exit by silence also the `of` events of its own rule.

    >>> import pathlib, tempfile
    >>> text = '''
    ... [study]
    ... period = "month"
    ... as_of = "2026-09-30"
    ... [input]
    ... layout = "history"
    ... files = ["members.csv"]
    ... customer = "id"
    ... time = "month"
    ... state = "state"
    ... on_absent = "left"
    ... [[state]]
    ... name = "left"
    ... role = "exit"
    ... [[state]]
    ... name = "fresh"
    ... role = "entry"
    ... [[state]]
    ... name = "steady"
    ... '''
    >>> with tempfile.TemporaryDirectory() as folder:
    ...     _ = (pathlib.Path(folder) / "club.toml").write_text(text)
    ...     study = read_study(pathlib.Path(folder) / "club.toml", overrides={"study.level": "0.8"})
    >>> study.states.names, study.level, study.origin_of["study.level"], study.origin_of["study.horizon"]
    (('left', 'fresh', 'steady'), 0.8, 'option', 'default')
    """
    path = Path(path)
    text, data = _load(path)
    changes = dict(overrides or {})
    source = Source(path.name, text, {key: (set_by or {}).get(key, "option") for key in changes})
    try:
        data = apply_overrides(data, changes)
    except CohortflowError as error:
        raise StudyError(f"{path.name}: {error}") from None
    return study_from(data, source, path)


def _load(path: Path) -> tuple[str, dict[str, Any]]:
    try:
        text = path.read_text(encoding="utf-8-sig")
        return text, tomllib.loads(text)
    except OSError as error:
        raise StudyError(f"{path}: cannot read the study file: {error.strerror}.") from None
    except UnicodeDecodeError:
        raise StudyError(f"{path.name}: the study file is not UTF-8 text; save it as UTF-8.") from None
    except tomllib.TOMLDecodeError as error:
        raise StudyError(f"{path.name}: the study file is not valid TOML: {error}.") from None


def study_from(data: Mapping[str, Any], source: Source, path: Path | None) -> Study:
    """The Study that the tables describe."""
    single, many = _tables(data, source)
    folder = path.parent if path else Path()
    head = _head(single["study"], folder, path)
    states, rules = _states(many["state"], single["moves"])
    spec = extract.read_input(single["input"], states)
    if spec.layout != "events":
        _check_plain_states(many["state"], single["events"], spec)
    else:
        rules = read_rules(many["state"], [rule.role for rule in rules])
    events = extract.read_events(single["events"])
    if spec.layout == "events":
        extract.check_event_names(single, spec, events, rules)
    base = Study(states, **head, rules=rules, input=spec, events=events, path=path)
    ground = forecast.Ground(
        folder,
        states,
        base.calendar,
        base.last_complete,
        spec,
        forecast.read_totals(single["totals"], states),
    )
    return replace(
        base, **_forecast(single, many, ground, data), origin_of=frozen_mapping(source.sorted_origins())
    )


def _forecast(
    single: dict[str, Table], many: dict[str, list[Table]], ground: forecast.Ground, data: Mapping[str, Any]
) -> dict[str, Any]:
    return {
        "totals": ground.totals,
        "model": forecast.read_model(single["model"], ground.calendar),
        "joiners": forecast.read_joiners(single["joiners"], ground),
        "value": forecast.read_value(single["value"], ground) if "value" in data else None,
        "scenarios": plans.read_scenarios(many["scenario"], ground),
        "adjustments": plans.read_adjustments(many["adjustment"], ground),
        "budget": forecast.read_budget(single["budget"], ground) if "budget" in data else (),
        "people": forecast.read_people(single["people"]),
    }


def _tables(data: Mapping[str, Any], source: Source) -> tuple[dict[str, Table], dict[str, list[Table]]]:
    """Every table of the file, unknown tables and keys refused, needed tables present."""
    root = Table(source, "", data, keys=(*SINGLE, *MANY), shown="top level")
    for needed in ("study", "input", "state"):
        if needed not in data:
            header = f"[[{needed}]]" if needed in MANY else f"[{needed}]"
            raise root.refuse(needed, f"missing; a study file needs {header}{nearest_given(needed, data)}.")
    single = {}
    for name in SINGLE:
        root.get(name, {}, dict, f"a table [{name}]")
        single[name] = Table(source, name, data.get(name, {}), keys=KEYS[name])
    many = {name: _many(root, name, source) for name in MANY}
    return single, many


def _many(root: Table, name: str, source: Source) -> list[Table]:
    items = root.get(name, [], list, f"tables headed [[{name}]]")
    tables = []
    for number, item in enumerate(items):
        if not isinstance(item, dict):
            raise root.refuse(name, f"needs tables headed [[{name}]], got {shown_value(item)}.")
        called = item.get("name")
        shown = f'[[{name}]] "{called}"' if called else f"[[{name}]] number {number + 1}"
        tables.append(Table(source, name, item, keys=KEYS[name], number=number, shown=shown))
    return tables


def _head(table: Table, folder: Path, path: Path | None) -> dict[str, Any]:
    """The settings of [study]."""
    kind = table.text("period", choices=KINDS)
    calendar = _calendar(table, kind, folder)
    head = {
        "calendar": calendar,
        "title": table.text("title", path.stem if path else ""),
        "as_of": _as_of(table, calendar),
        "horizon": table.integer("horizon", 12, least=1),
        "level": _level(table),
        "seed": table.integer("seed", 1, least=0),
    }
    if calendar.kind == "own":
        _check_covers(table, calendar, head["as_of"], head["horizon"])
    return head


def _calendar(table: Table, kind: str, folder: Path) -> Calendar:
    week_starts = table.text("week_starts", "monday", choices=WEEKDAYS)
    fiscal = table.integer("fiscal_year_start", 1, least=1)
    file = table.text("calendar", None)
    if fiscal > 12:
        raise table.refuse("fiscal_year_start", f"is a month from 1 to 12, got {fiscal}.")
    if file is None:
        return Calendar(kind, week_starts, fiscal)
    if kind == "step":
        raise table.refuse("calendar", 'cannot be used with period = "step": steps have no dates.')
    own = read_calendar(table, "calendar", folder, file)
    return table.attempt("calendar", lambda: Calendar("own", week_starts, fiscal, own))


def _as_of(table: Table, calendar: Calendar) -> date | None:
    if calendar.kind == "step":
        if "as_of" in table:
            raise table.refuse(
                "as_of", 'has no meaning with period = "step": steps have no dates; leave it out.'
            )
        return None
    return table.day("as_of")


def _level(table: Table) -> float:
    level: float = table.number_of("level", 0.90)
    if not 0.0 < level < 1.0:
        raise table.refuse("level", f"needs a number between 0 and 1, like 0.90; got {level:g}.")
    return level


def _check_covers(table: Table, calendar: Calendar, as_of: date, horizon: int) -> None:
    first, last = calendar.own[0][1], calendar.own[-1][2]
    if not first <= as_of <= last:
        raise table.refuse("as_of", f"{as_of} is outside the calendar file, {first} to {last}.")
    here = calendar.ordinal(as_of)
    ahead = len(calendar.own) - 1 - (here if calendar.end(here) <= as_of else here - 1)
    if ahead < horizon:
        raise table.refuse(
            "horizon",
            f"{horizon} periods ahead are wanted, but the calendar file ends {last}, "
            f"{ahead} ahead of as_of; add rows to it.",
        )


def _states(tables: list[Table], moves: Table) -> tuple[States, tuple[StateRule, ...]]:
    """The states with their roles, and their rules without `when` yet."""
    if not tables:
        raise moves.refuse("state", "a study needs at least one [[state]].")
    names = [table.text("name") for table in tables]
    roles = [table.text("role", "live", choices=ROLES) for table in tables]
    for table, name in zip(tables, names, strict=True):
        if names.count(name) > 1:
            raise table.refuse("name", f'the state "{name}" is there more than once.')
        if name == ALL_LIVE:
            raise table.refuse("name", f'"{ALL_LIVE}" is reserved for the sum of the live states.')
    if not any(role in ("live", "entry") for role in roles):
        raise tables[0].refuse("role", "no state is live: at least one needs the role live or entry.")
    by_role = {role: [n for n, r in zip(names, roles, strict=True) if r == role] for role in ROLES}
    states = States(
        names,
        exits=by_role["exit"],
        entries=by_role["entry"],
        away=by_role["away"],
        impossible=_impossible(moves, names, by_role["exit"]),
    )
    return states, tuple(StateRule(name, role) for name, role in zip(names, roles, strict=True))


def _impossible(moves: Table, names: list[str], exits: list[str]) -> list[tuple[str, str]]:
    pairs = []
    for pair in moves.get("impossible", [], list, 'a list of pairs like [["steady", "fresh"]]'):
        if not isinstance(pair, list) or len(pair) != 2:
            raise moves.refuse("impossible", f'needs pairs ["from", "to"], got {pair!r}.')
        origin, target = (moves.one_of("impossible", name, names, "state") for name in pair)
        if origin in exits:
            raise moves.refuse("impossible", f'"{origin}" is an exit; no customer moves out of it anyway.')
        pairs.append((origin, target))
    for name in names:
        if all((name, other) in pairs for other in names):
            raise moves.refuse("impossible", f'leaves no move from "{name}", not even staying.')
    return pairs


def _check_plain_states(tables: list[Table], events: Table, spec: InputSpec) -> None:
    """Layouts whose rows carry the state have neither rules nor events."""
    for table in tables:
        if "when" in table:
            raise table.refuse(
                "when", f'has no meaning in the layout "{spec.layout}", whose rows carry the state.'
            )
    for key in events.data:
        raise events.refuse(key, f'has no meaning in the layout "{spec.layout}", whose rows carry the state.')
