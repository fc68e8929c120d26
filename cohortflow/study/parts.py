"""The tables of a study file as frozen records: rules, extract, model, joiners, value, plans."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from datetime import date
from types import MappingProxyType

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
    that holds decides. An exit holds until an event of `Study.returns_of`, which starts a new stay and
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
    """[value]: contribution a customer and period by state; None = estimated from amounts times `margin`.
    `first_period_discounted`: None = as the timing says."""

    currency: str
    per_period: Mapping[str, float] | None
    margin: float | None = None
    discount_rate: float = 0.0
    timing: str = "middle"
    first_period_discounted: bool | None = None
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
