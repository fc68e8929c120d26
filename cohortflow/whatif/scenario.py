"""A scenario: changes of moves, of joiners, of prices, and what they cost, between two periods."""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohortflow.errors import CallError, listed
from cohortflow.periods import Calendar
from cohortflow.projector import accept
from cohortflow.record import frozen_mapping
from cohortflow.states import States
from cohortflow.whatif.change import Change

Array = NDArray[np.float64]

CASES = ("low", "high")


@dataclass(frozen=True)
class Scenario:
    """What is done, when, and what it costs.

    changes : in the order in which they apply
    starts, ends : first and last period (labels or ordinals) of everything here that has no dates of its own
    joiners_multiply : factor on the number who join (returners stay as they are)
    joiners_mix : state -> share of those who join, replacing the mix they have
    per_period : state -> contribution a customer a period, replacing those states' amounts (a price)
    cost_per_customer : a period, for each customer who stands in any `from` state of the changes in force as
        the period starts, each counted once;  fixed_cost : a period
    case : "low" or "high", for the reader;  segment : only customers of this segment

    >>> Scenario("call", [Change("quiet", "weekly", add=0.05)], cost_per_customer=1.2).treated
    ('quiet',)
    """

    name: str = "change"
    changes: tuple[Change, ...] = ()
    starts: str | int | None = None
    ends: str | int | None = None
    joiners_multiply: float = 1.0
    joiners_mix: Mapping[str, float] | None = None
    per_period: Mapping[str, float] | None = None
    cost_per_customer: float = 0.0
    fixed_cost: float = 0.0
    case: str | None = None
    segment: str | None = None

    def __post_init__(self) -> None:
        changes = (self.changes,) if isinstance(self.changes, Change) else tuple(self.changes)
        dated = tuple(c.within(self.starts, self.ends, self.segment) for c in _checked(changes))
        object.__setattr__(self, "changes", dated)
        for name in ("joiners_mix", "per_period"):
            if getattr(self, name) is not None:
                object.__setattr__(self, name, frozen_mapping(getattr(self, name)))
        self._check()

    def _check(self) -> None:
        if self.case is not None and self.case not in CASES:
            raise CallError(f'case is "{self.case}"; it is one of {listed(CASES)}, or left out.')
        for name in ("joiners_multiply", "cost_per_customer", "fixed_cost"):
            number = getattr(self, name)
            if not np.isfinite(number) or (name == "joiners_multiply" and number < 0):
                raise CallError(f"{name} is {number!r}; it is a finite number{_floor(name)}.")
        if self.cost_per_customer and not self.changes:
            raise CallError(
                f'Scenario "{self.name}" has a cost per customer but changes no move, so nobody is treated; '
                "give the cost as fixed_cost, or a change whose `from` states are treated."
            )
        if self.joiners_mix is not None:
            shares = np.array(list(self.joiners_mix.values()), dtype=float)
            if not (np.isfinite(shares).all() and (shares >= 0).all() and abs(shares.sum() - 1) <= 1e-9):
                raise CallError(
                    f"joiners_mix holds shares from 0 that add up to 1; got {dict(self.joiners_mix)}."
                )
        if len(self.segments) > 1:
            raise CallError(
                f'The changes of scenario "{self.name}" are for different segments, {listed(self.segments)}; '
                "make one scenario for each."
            )

    @property
    def treated(self) -> tuple[str, ...]:
        """The `from` names of the changes, each once ("all_live" as such)."""
        return tuple(dict.fromkeys(c.from_ for c in self.changes))

    @property
    def segments(self) -> tuple[str, ...]:
        """The segments that the changes are for: none or one."""
        found = [c.segment for c in self.changes] + [self.segment]
        return tuple(dict.fromkeys(s for s in found if s is not None))

    @property
    def costs(self) -> bool:
        """Whether it costs anything."""
        return bool(self.cost_per_customer or self.fixed_cost)


@dataclass(frozen=True)
class Window:
    """Steps first <= h < last in which something is in force; step h leads h periods ahead to h + 1."""

    first: int = 0
    last: float = float("inf")

    def holds(self, step: int) -> bool:
        return self.first <= step < self.last

    @classmethod
    def of(cls, starts: Any, ends: Any, base: int | None, calendar: Calendar) -> Window:
        """From period labels or ordinals; without a base period they count periods ahead, from 1."""
        first = _steps(starts, base, calendar, "starts")
        last = _steps(ends, base, calendar, "ends")
        if starts is not None and ends is not None and last < first:
            raise CallError(f"A change ends ({ends}) before it starts ({starts}).")
        return cls(0 if starts is None else first, float("inf") if ends is None else last + 1)


def as_scenario(what: Any) -> Scenario:
    """A Scenario from one, from a Change, from several Changes, or from a study's [[scenario]]."""
    if isinstance(what, Scenario):
        return what
    if isinstance(what, Change):
        return Scenario(changes=(what,))
    if hasattr(what, "change") and hasattr(what, "joiners_multiply"):
        return of_study(what)
    if isinstance(what, Iterable) and not isinstance(what, (str, Mapping)):
        return Scenario(changes=tuple(what))
    raise CallError(
        f"What is to be compared is a Scenario, a Change or a list of Changes; got {type(what).__name__}."
    )


def of_study(spec: Any) -> Scenario:
    """A Scenario from a study's ScenarioSpec."""
    changes = [Change(c.from_, c.to, balance=c.balance, **{c.how: c.size}) for c in spec.change]
    taken = (
        "name", "starts", "ends", "joiners_multiply", "per_period", "cost_per_customer", "fixed_cost",
        "case", "segment",
    )  # fmt: skip
    return Scenario(changes=tuple(changes), **{name: getattr(spec, name) for name in taken})


def joiners_under(scenario: Scenario, joined: Array, states: States, window: Window) -> Array:
    """(..., H, K) those who join under the scenario, in the periods of the window; elsewhere as they were.

    >>> states = States(["fresh", "steady", "left"], exits=["left"])
    >>> joined = np.array([[10.0, 0, 0], [10.0, 0, 0]])
    >>> joiners_under(Scenario(joiners_mix={"steady": 1.0}), joined, states, Window(1)).tolist()
    [[10.0, 0.0, 0.0], [0.0, 10.0, 0.0]]
    """
    new = joined * scenario.joiners_multiply
    if scenario.joiners_mix is not None:
        law = accept.as_counts(scenario.joiners_mix, states, name="joiners_mix")
        if law[states.exit_mask].any():
            raise CallError("joiners_mix names an exit; nobody joins into one.")
        new = new.sum(axis=-1, keepdims=True) * law
    on = np.array([window.holds(h) for h in range(joined.shape[-2])])
    return np.where(on[:, None], new, joined)


def _checked(changes: tuple[Any, ...]) -> tuple[Change, ...]:
    for change in changes:
        if not isinstance(change, Change):
            raise CallError(f"A scenario's changes are Change records; got {type(change).__name__}.")
    return changes


def _steps(period: Any, base: int | None, calendar: Calendar, name: str) -> int:
    if period is None:
        return 0
    if base is None:
        if isinstance(period, str) or period < 1:
            raise CallError(
                f"{name} is {period!r}; this model stands outside any calendar, so it counts periods "
                "ahead: 1, 2 ..."
            )
        return int(period) - 1
    ordinal = accept.as_period(period, calendar)
    assert ordinal is not None
    if ordinal <= base:
        raise CallError(
            f"{name} is {calendar.label(ordinal)}, which is not ahead: the base is counted at the end of "
            f"{calendar.label(base)}."
        )
    return ordinal - base - 1


def _floor(name: str) -> str:
    return " not below 0" if name == "joiners_multiply" else ""
