"""Silences: how long customers stay without the events that an exit by silence asks for, and how that ends.

A silence follows a period with an `of` event and lasts as long as whole periods pass without one, to the last
complete period. It counts for an exit from the period on in which the rule's other conditions hold (`entered`), and
until they cease to, or another exit takes the customer (`ended` = otherwise). The study's own window plays no part:
a silence goes on through the exit itself, and any later `of` event ends it, also one that is set aside there.
"""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass

import numpy as np

from cohortflow.history.cells import CellPlan, Columns
from cohortflow.history.rules import Memory, Rules, word
from cohortflow.study import Condition, Study
from cohortflow.tally import SILENCE_ENDS

OPEN, RETURNED, OTHERWISE = (SILENCE_ENDS.index(e) for e in ("as_of", "event", "otherwise"))


@dataclass(frozen=True)
class Watched:
    """One rule of an exit by silence: the exit, its `of` set, and the conditions that must hold beside."""

    exit: int
    events: frozenset[int]
    beside: tuple[Condition, ...]


def watched(study: Study, place: Mapping[str, int]) -> tuple[Watched, ...]:
    """The rules of exits that ask for silence, each alternative on its own."""
    out = []
    for number, rule in enumerate(study.rules):
        for alternative in rule.when if rule.role == "exit" else ():
            silent = next((c for c in alternative if c.kind == "silent_for"), None)
            if silent is not None:
                events = frozenset(place[n] for n in silent.events)
                out.append(Watched(number, events, tuple(c for c in alternative if c is not silent)))
    return tuple(out)


def by_silence(study: Study) -> bool:
    """Whether an exit of an event log asks for silence."""
    exits = [rule for rule in study.rules if rule.role == "exit"]
    return study.input.layout == "events" and any(c.kind == "silent_for" for r in exits for c in r.conditions)


class Watch:
    """Looks on while a block of B customers is followed through T periods; `table` lists their silences."""

    def __init__(self, rules: Rules, dense: Columns, what: tuple[Watched, ...]) -> None:
        self.rules, self.what = rules, what
        self.active = [_seen(dense, w.events, rules.plan) for w in what]
        self.fits = [np.ones(a.shape, dtype=bool) for a in self.active]

    def take_in(self, t: int, memory: Memory, where: np.ndarray) -> None:
        """The end of period t; `where`: the exit each customer is in, negative = none."""
        for w, fits in zip(self.what, self.fits, strict=True):
            fits[t] = (where < 0) | (where == w.exit)
            for condition in w.beside:
                fits[t] &= self.rules.holds(condition, t, memory)

    def table(self) -> Columns:
        """Columns c (customer of the block), state, entered, length, ended: one row a silence."""
        every = zip(self.what, self.active, self.fits, strict=True)
        parts = [part for w, active, fits in every for part in _spells(w, active, fits)]
        return {k: np.concatenate([p[k] for p in parts]) for k in parts[0]} if parts else {}


def _seen(dense: Columns, events: frozenset[int], plan: CellPlan) -> np.ndarray:
    """(T, B) whether any of the events was seen."""
    hit = np.zeros(dense["seen_0"].shape, dtype=bool)
    for w in range(plan.words):
        if bits := word(events, w):
            hit |= (dense[f"seen_{w}"] & bits) != 0
    return hit


def _spells(what: Watched, active: np.ndarray, fits: np.ndarray) -> Iterator[Columns]:
    """The silences of one rule, as they end."""
    periods, size = active.shape
    length = np.full(size, -1, dtype=np.int64)  # -1: no `of` event yet
    entered = np.zeros(size, dtype=np.int64)

    def closed(who: np.ndarray, ended: int) -> Columns:
        at = np.flatnonzero(who & (entered > 0))
        keys = {"c": at, "state": what.exit, "entered": entered[at], "length": length[at], "ended": ended}
        entered[at] = 0
        return {k: np.broadcast_to(np.asarray(v), at.shape) for k, v in keys.items()}

    for t in range(periods):
        yield closed(active[t], RETURNED)
        yield closed(~active[t] & ~fits[t], OTHERWISE)
        length = np.where(active[t], 0, np.where(length >= 0, length + 1, -1))
        begins = (length > 0) & fits[t] & (entered == 0)
        entered[begins] = length[begins]
    yield closed(np.ones(size, dtype=bool), OPEN)
