"""The Study: everything that one forecast is made from, and the questions that its parts answer together."""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field, fields
from datetime import date
from functools import cached_property
from pathlib import Path
from types import MappingProxyType
from typing import Any

import numpy as np

from cohortflow.errors import CallError, listed, nearest
from cohortflow.periods import Calendar
from cohortflow.record import plain
from cohortflow.states import States
from cohortflow.study.parts import (
    Adjustment,
    BudgetRow,
    EventSpec,
    InputSpec,
    JoinerSpec,
    ModelSpec,
    People,
    ScenarioSpec,
    StateRule,
    ValueSpec,
)

_NOT_SHOWN = ("path", "origin_of")


def _empty() -> Mapping[str, Any]:
    return MappingProxyType({})


@dataclass(frozen=True)
class Study:
    """Everything that one forecast is made from. Made by `read_study`, `default_study`, or by hand.

    `path` is the study file (None when made by hand); relative names of files start from its folder.
    `as_of` is the last day the extract can be trusted (None: for steps, the extract's last one).
    `origin_of["study.level"]`: where a setting came from: "study file", "option", "environment", "default".

    >>> from cohortflow.study import Condition
    >>> silent = Condition("silent_for", ("bought",), k=3)
    >>> rules = (StateRule("left", "exit", ((silent,),)), StateRule("buying"))
    >>> study = Study(States(["left", "buying"], exits=["left"]), rules=rules)
    >>> study.warm_up, study.returns_of("left"), len(study.digest())
    (6, ('bought',), 64)
    """

    states: States
    calendar: Calendar = field(default_factory=Calendar)
    path: Path | None = None
    title: str = ""
    as_of: date | None = None
    horizon: int = 12
    level: float = 0.90
    seed: int = 1
    rules: tuple[StateRule, ...] = ()
    input: InputSpec = field(default_factory=InputSpec)
    events: EventSpec = field(default_factory=EventSpec)
    totals: Mapping[str, tuple[str, ...]] = field(default_factory=_empty)
    model: ModelSpec = field(default_factory=ModelSpec)
    joiners: JoinerSpec = field(default_factory=JoinerSpec)
    value: ValueSpec | None = None
    scenarios: tuple[ScenarioSpec, ...] = ()
    adjustments: tuple[Adjustment, ...] = ()
    budget: tuple[BudgetRow, ...] = ()
    people: People = field(default_factory=People)
    origin_of: Mapping[str, str] = field(default_factory=_empty)

    @property
    def folder(self) -> Path:
        """The folder that relative file names start from."""
        return self.path.parent if self.path else Path()

    @cached_property
    def used_events(self) -> tuple[str, ...]:
        """Events that any rule names, in the order of the file: what `of` and `among` are when left out."""
        conditions = [c for rule in self.rules for c in rule.conditions]
        return tuple(dict.fromkeys(e for c in conditions for e in (*c.events, *c.among)))

    @cached_property
    def known_events(self) -> tuple[str, ...]:
        """Events that mean something here: joins and returns that no rule names, those of the rules in the
        order of the file, and the tie order's."""
        spec = self.input
        unnamed = [e for e in (*spec.joins, *(spec.returns or ())) if e not in self.used_events]
        return tuple(dict.fromkeys((*unnamed, *self.used_events, *spec.tie_order)))

    @cached_property
    def event_order(self) -> tuple[str, ...]:
        """Order of events at one instant, earliest first: `tie_order`, then the rest as the rules name it."""
        return tuple(dict.fromkeys((*self.input.tie_order, *self.known_events)))

    @property
    def warm_up(self) -> int:
        """Periods after `log_start` whose rows only help labelling: the largest k of any rule, 0 without one;
        twice that when no `joins` are named."""
        longest = max((c.k for rule in self.rules for c in rule.conditions), default=0)
        return longest if self.input.joins else 2 * longest

    @property
    def last_complete(self) -> int | None:
        """Ordinal of the last period that ends on or before `as_of`; None when there is no `as_of`."""
        if self.as_of is None or self.calendar.kind == "step":
            return None
        here = self.calendar.ordinal(self.as_of)
        return here if self.calendar.end(here) <= self.as_of else here - 1

    def returns_of(self, exit_name: str) -> tuple[str, ...]:
        """Events that end an exit: `returns` when the file has it (then for every exit); else `joins`, plus,
        for an exit by silence, the `of` events of its own `silent_for`. CallError for what is no exit.
        """
        if exit_name not in self.states.exits:
            raise CallError(
                f'"{exit_name}" is not an exit{nearest(exit_name, self.states.exits)}. '
                f"The exits are {listed(self.states.exits)}."
            )
        if self.input.returns is not None:
            return self.input.returns
        own = [c for rule in self.rules if rule.name == exit_name for c in rule.conditions]
        silent = [event for c in own if c.kind == "silent_for" for event in c.events]
        return tuple(dict.fromkeys((*self.input.joins, *silent)))

    def definitions(self) -> dict[str, Any]:
        """Whatever changes what a count means, JSON-ready: states, roles, rules, impossible moves, calendar,
        joins, returns, ties, gap rules, spellings. Not paths, horizon, level, seed or the as-of day.
        """
        spec = self.input
        return {
            "states": [(name, self.states.role(name)) for name in self.states.names],
            "impossible": sorted(self.states.impossible),
            "calendar": as_plain(self.calendar),
            "rules": [as_plain(rule) for rule in self.rules],
            "joins": sorted(spec.joins),
            "returns": None if spec.returns is None else sorted(spec.returns),
            "order": list(self.event_order),
            "on_gap": spec.on_gap,
            "on_absent": spec.on_absent,
            "end_is": spec.end_is,
            "timezone": spec.timezone,
            "map": {name: sorted(spellings) for name, spellings in sorted(self.events.map.items())},
            "ignore": sorted(self.events.ignore),
            "others": self.events.others,
        }

    def digest(self) -> str:
        """SHA-256 of the definitions: counts made under two digests must not be mixed."""
        text = json.dumps(self.definitions(), sort_keys=True, ensure_ascii=True)
        return hashlib.sha256(text.encode()).hexdigest()

    def to_dict(self) -> dict[str, Any]:
        """The study as used, JSON-ready; without its path and the origins."""
        return {f.name: as_plain(getattr(self, f.name)) for f in fields(self) if f.name not in _NOT_SHOWN}


def as_plain(value: Any) -> Any:
    """Nested frozen records as dictionaries, ready for JSON."""
    if isinstance(value, Mapping):
        return {str(key): as_plain(item) for key, item in value.items()}
    if isinstance(value, (tuple, list)):
        return [as_plain(item) for item in value]
    if hasattr(value, "__dataclass_fields__"):
        return {f.name.rstrip("_"): as_plain(getattr(value, f.name)) for f in fields(value)}
    return plain(value) if not isinstance(value, np.ndarray) else value.tolist()
