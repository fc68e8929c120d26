"""The lifecycle states: names, order, roles, and moves declared impossible."""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from cohortflow.errors import CallError, listed, nearest

ROLES = ("live", "entry", "away", "exit")
ALL_LIVE = "all_live"


@dataclass(frozen=True)
class States:
    """The states of a study, in the order kept everywhere.

    Parameters
    ----------
    names : the states, in order
    exits : states that mean "left"; each is absorbing (a return starts a new stay)
    entries : live states where joiners start
    away : not live now, but may come back (paused, in grace)
    impossible : (from, to) pairs declared impossible: structural zeros

    Every other state is live. Raises CallError for repeated, empty or unknown names.

    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> len(states), states.live, states.role("left")
    (3, ('fresh', 'steady'), 'exit')
    """

    names: tuple[str, ...]
    exits: tuple[str, ...] = ()
    entries: tuple[str, ...] = ()
    away: tuple[str, ...] = ()
    impossible: tuple[tuple[str, str], ...] = ()

    def __init__(
        self,
        names: Iterable[str],
        *,
        exits: Iterable[str] = (),
        entries: Iterable[str] = (),
        away: Iterable[str] = (),
        impossible: Iterable[Sequence[str]] = (),
    ) -> None:
        for field, value in (("names", names), ("exits", exits), ("entries", entries), ("away", away)):
            object.__setattr__(self, field, _name_tuple(value, field))
        object.__setattr__(self, "impossible", tuple((str(a), str(b)) for a, b in impossible))
        self._check()

    def _check(self) -> None:
        if not self.names:
            raise CallError("States needs at least one state name; got none.")
        repeated = sorted({n for n in self.names if self.names.count(n) > 1})
        if repeated:
            raise CallError(f"State names must differ; {listed(repeated)} came more than once.")
        if ALL_LIVE in self.names:
            raise CallError(f'"{ALL_LIVE}" is reserved for the sum of the live states; choose another name.')
        for role in ("exits", "entries", "away"):
            for name in getattr(self, role):
                self.index(name)
        taken = [*self.exits, *self.entries, *self.away]
        twice = sorted({n for n in taken if taken.count(n) > 1})
        if twice:
            raise CallError(f"A state has one role; {listed(twice)} came with more than one.")
        for origin, target in self.impossible:
            if self.index(origin) == self.index(target) and origin in self.exits:
                raise CallError(f'Staying in the exit "{origin}" cannot be declared impossible.')

    def index(self, name: str) -> int:
        """Position of a state; CallError with the nearest name if it is unknown."""
        try:
            return self.names.index(name)
        except ValueError:
            raise CallError(
                f'Unknown state "{name}"{nearest(name, self.names)}. The states are {listed(self.names)}.'
            ) from None

    def role(self, name: str) -> str:
        """"exit", "away", "entry" or "live"."""
        self.index(name)
        groups = (("exit", self.exits), ("away", self.away), ("entry", self.entries))
        return next((role for role, members in groups if name in members), "live")

    def __len__(self) -> int:
        return len(self.names)

    @cached_property
    def live(self) -> tuple[str, ...]:
        """Live and entry states: those that `all_live` adds up."""
        return tuple(n for n in self.names if n not in self.exits and n not in self.away)

    @cached_property
    def remaining(self) -> tuple[str, ...]:
        """All states but the exits: customers who can still leave."""
        return tuple(n for n in self.names if n not in self.exits)

    @cached_property
    def live_mask(self) -> np.ndarray:
        """(K,) bool."""
        return self.mask(self.live)

    @cached_property
    def exit_mask(self) -> np.ndarray:
        """(K,) bool."""
        return self.mask(self.exits)

    def mask(self, members: Iterable[str]) -> np.ndarray:
        """(K,) bool, true at the named states."""
        chosen = np.zeros(len(self), dtype=bool)
        chosen[[self.index(m) for m in members]] = True
        return chosen

    @cached_property
    def allowed(self) -> np.ndarray:
        """(K, K) bool: moves not declared impossible; out of an exit only staying is allowed."""
        allowed = np.ones((len(self), len(self)), dtype=bool)
        for origin, target in self.impossible:
            allowed[self.index(origin), self.index(target)] = False
        for name in self.exits:
            row = self.index(name)
            allowed[row] = False
            allowed[row, row] = True
        return allowed


def _name_tuple(values: Iterable[str], field: str) -> tuple[str, ...]:
    if isinstance(values, str):
        raise CallError(f'States {field} takes a list of names, not the text "{values}"; write ["{values}"].')
    names = tuple(values)
    for name in names:
        if not isinstance(name, str) or not name.strip():
            raise CallError(f"State names are non-empty text; {field} holds {name!r}.")
    return names
