"""`--set table.key=value`: settings of a study replaced from outside, before it is checked."""

from __future__ import annotations

import copy
import tomllib
from collections.abc import Mapping
from typing import Any

from cohortflow.errors import CallError, listed, nearest


def apply_overrides(data: Mapping[str, Any], overrides: Mapping[str, Any]) -> dict[str, Any]:
    """A copy of the study's tables with settings replaced; keys are "table.key".

    A state or scenario is named by its name: "state.quiet.when". Values given as text are read as TOML where
    they are valid TOML (8, 0.95, ["a"], true) and kept as text otherwise. CallError for what has no place.

    >>> apply_overrides({"study": {"level": 0.9}}, {"study.level": "0.8", "model.exclude": '["2025-04"]'})
    {'study': {'level': 0.8}, 'model': {'exclude': ['2025-04']}}
    """
    changed = copy.deepcopy(dict(data))
    for dotted, value in overrides.items():
        path = dotted.split(".")
        if len(path) < 2 or not all(path):
            raise CallError(f'"{dotted}" names no setting; write table.key, for instance study.level.')
        _place(changed, path, _value(value), dotted)
    return changed


def _value(value: Any) -> Any:
    if not isinstance(value, str):
        return value
    try:
        return tomllib.loads(f"value = {value}")["value"]
    except tomllib.TOMLDecodeError:
        return value


def _place(data: dict[str, Any], path: list[str], value: Any, dotted: str) -> None:
    here: Any = data
    for step in path[:-1]:
        here = _named(here, step, dotted) if isinstance(here, list) else here.setdefault(step, {})
        if not isinstance(here, (dict, list)):
            raise CallError(f'"{dotted}" cannot be set: "{step}" is a value, not a table.')
    if isinstance(here, list):
        raise CallError(
            f'"{dotted}" cannot be set: name the {path[-2]} and its key, for instance {path[-2]}.NAME.when.'
        )
    here[path[-1]] = value


def _named(tables: list[Any], name: str, dotted: str) -> Any:
    names = [table.get("name") for table in tables if isinstance(table, dict)]
    if name not in names:
        known = [str(n) for n in names if n]
        raise CallError(
            f'"{dotted}" cannot be set: there is no "{name}"{nearest(name, known)}. Known: {listed(known)}.'
        )
    return tables[names.index(name)]
