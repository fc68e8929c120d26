"""What a study file says, as frozen records: states and rules, the extract, the settings of one forecast."""

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

LAYOUTS = ("events", "history", "wide", "spells", "counts")
OTHERS = ("refuse", "reject", "ignore")
ON_GAP = ("break", "carry")
MODELS = (
    "plain",
    "recent",
    "seasonal",
    "tenure",
    "time_in_state",
    "segment",
    "second_order",
    "mover_stayer",
    "mixture",
)
JOINER_METHODS = ("none", "constant", "last_year", "smoothing", "planned")
JOINER_KINDS = ("joined", "returned")
TIMINGS = ("start", "middle", "end")
CONDITIONS = (
    "last_event",
    "silent_for",
    "at_least",
    "at_most",
    "spent_at_least",
    "tenure_below",
    "expired_for",
    "due_within",
)


@dataclass(frozen=True)
class Condition:
    """One condition of a rule, asked at the end of period t. Windows are whole periods that end with t.

    last_event      the latest event among `among` is one of `events`. Without `among` in the file: among
                    every event that any rule uses
    silent_for      no event of `events` in t-k+1 .. t, and the stay began, or one occurred, by the end of t-k
    at_least        `n` or more rows of `events` in t-k+1 .. t
    at_most         at most `n` of them, and the stay began by the end of t-k
    spent_at_least  amounts of t-k+1 .. t add up to `amount` or more
    tenure_below    t minus the period in which the stay began is below `k`; false for unknown history
    expired_for     at least `k` whole periods since the latest known valid-until day (0: it has passed)
    due_within      that day falls in t+1 .. t+k
    """

    kind: str
    events: tuple[str, ...] = ()
    among: tuple[str, ...] = ()
    k: int = 0
    n: int = 0
    amount: float = 0.0


@dataclass(frozen=True)
class StateRule:
    """A state and when a customer is in it: alternatives joined by "or", each of conditions joined by "and".

    `when = ()` is everybody whom no earlier rule took. Rules are read in the order of the file; the first
    that holds decides. An exit holds until an event of `Study.returns_of`; that event starts a new stay, which
    clears the memory of `last_event` (only rows from the return on count for it) but not the windows.
    """

    name: str
    role: str = "live"
    when: tuple[tuple[Condition, ...], ...] = ()

    @property
    def conditions(self) -> tuple[Condition, ...]:
        """Every condition of every alternative."""
        return tuple(condition for alternative in self.when for condition in alternative)


@dataclass(frozen=True)
class InputSpec:
    """The extract: its layout, files, columns and reading rules ([input]). None = not there.

    `time` is the instant (events), the period (history, counts) or the first day (spells); `from_` is the
    key `from`. `on_gap` is "break", "carry" or a state; `on_absent` an exit or None.
    """

    layout: str = "events"
    files: tuple[str, ...] = ()
    customer: str | None = "customer"
    time: str | None = "time"
    event: str | None = None
    state: str | None = None
    end: str | None = None
    from_: str | None = None
    to: str | None = None
    n: str | None = None
    event_id: str | None = None
    loaded_at: str | None = None
    amount: str | None = None
    currency: str | None = None
    valid_until: str | None = None
    segments: tuple[str, ...] = ()
    attributes: tuple[str, ...] = ()
    arm: str | None = None
    weight: str | None = None
    date_format: str | None = None
    delimiter: str | None = None
    decimal: str | None = None
    encoding: str | None = None
    timezone: str | None = None
    log_start: date | None = None
    joins: tuple[str, ...] = ()
    returns: tuple[str, ...] | None = None
    tie_order: tuple[str, ...] = ()
    on_gap: str = "break"
    on_absent: str | None = None
    end_reason: str | None = None
    end_is: str = "last_day"


@dataclass(frozen=True)
class EventSpec:
    """[events]: `map` = name used here -> spellings in the extract; `others` = what to do with events that
    nothing names: refuse, reject, ignore."""

    map: Mapping[str, tuple[str, ...]] = field(default_factory=lambda: MappingProxyType({}))
    ignore: tuple[str, ...] = ()
    others: str = "refuse"


@dataclass(frozen=True)
class ModelSpec:
    """[model]: `exclude` = ordinals of origin periods left out; `bands` = first period of each later band."""

    name: str = "plain"
    window: int | None = None
    half_life: float | None = None
    bands: tuple[int, ...] = ()
    types: int | None = None
    exclude: tuple[int, ...] = ()


@dataclass(frozen=True)
class PlannedJoiners:
    """One row of the planned joiners' file."""

    period: int
    kind: str
    state: str
    customers: float
    segment: str | None = None


@dataclass(frozen=True)
class JoinerSpec:
    """[joiners]: `rows` are those of `file` when the method is "planned". Without the table: "constant"."""

    method: str = "constant"
    file: str | None = None
    rows: tuple[PlannedJoiners, ...] = ()


@dataclass(frozen=True)
class MoveValue:
    """Money that one move earns or costs."""

    from_: str
    to: str
    amount: float


@dataclass(frozen=True)
class ValueSpec:
    """[value]: contribution a customer and period by state; None = estimated from amounts times `margin`."""

    currency: str
    per_period: Mapping[str, float] | None
    margin: float | None = None
    discount_rate: float = 0.0
    timing: str = "middle"
    first_period_discounted: bool = True
    on_move: tuple[MoveValue, ...] = ()


@dataclass(frozen=True)
class ChangeSpec:
    """A change to one move. `how`: add, multiply or set; `balance`: "proportional" or states of the row."""

    from_: str
    to: str
    how: str
    size: float
    balance: str | tuple[str, ...] = "proportional"


@dataclass(frozen=True)
class ScenarioSpec:
    """[[scenario]]; `starts` and `ends` are ordinals, None = from the first period ahead, to the horizon."""

    name: str
    change: tuple[ChangeSpec, ...] = ()
    case: str | None = None
    starts: int | None = None
    ends: int | None = None
    segment: str | None = None
    cost_per_customer: float = 0.0
    fixed_cost: float = 0.0
    joiners_multiply: float = 1.0
    per_period: Mapping[str, float] | None = None


@dataclass(frozen=True)
class Adjustment:
    """[[adjustment]]: a manual overlay, always its own line."""

    period: int
    state: str
    customers: float
    reason: str
    approved_by: str = ""


@dataclass(frozen=True)
class BudgetRow:
    """One row of the budget file."""

    period: int
    total: str
    amount: float


@dataclass(frozen=True)
class People:
    """[people]: sign-off lines of the report."""

    prepared_by: str = ""
    checked_by: str = ""
    approved_by: str = ""


def _empty() -> Mapping[str, Any]:
    return MappingProxyType({})


@dataclass(frozen=True)
class Study:
    """Everything that one forecast is made from. Made by `read_study`, `default_study`, or by hand.

    `path` is the study file (None when made by hand); relative names of files start from its folder.
    `as_of` is the last day the extract can be trusted (None: for steps, the extract's last one).
    `origin_of["study.level"]`: where a setting came from: "study file", "option", "environment", "default".

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
        """Events that mean something here: those of rules, joins, returns and the tie order."""
        spec = self.input
        return tuple(dict.fromkeys((*spec.joins, *self.used_events, *(spec.returns or ()), *spec.tie_order)))

    @cached_property
    def event_order(self) -> tuple[str, ...]:
        """Order of events at one instant, earliest first: `tie_order`, then the rest as the rules name them."""
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


_NOT_SHOWN = ("path", "origin_of")


def as_plain(value: Any) -> Any:
    """Nested frozen records as dictionaries, ready for JSON."""
    if isinstance(value, Mapping):
        return {str(key): as_plain(item) for key, item in value.items()}
    if isinstance(value, (tuple, list)):
        return [as_plain(item) for item in value]
    if hasattr(value, "__dataclass_fields__"):
        return {f.name.rstrip("_"): as_plain(getattr(value, f.name)) for f in fields(value)}
    return plain(value) if not isinstance(value, np.ndarray) else value.tolist()
