"""The figure that levers are judged by: what is asked for, as a name, and everything it depends on.

    base            customers of a quantity (state, total, all_live) at the end of the horizon
    settled_base    the same in the long run, with constant joiners (the average over a season)
    life            mean number of periods until an exit, of those who join ("joiners") or of a state
    value           discounted contribution of "base" (those there now), "joiners" (one joining cohort), a
                    state; or "total": base and all who join up to the horizon. Without a horizon: for ever
    remaining_mix   share of a quantity among those who have not left, in the long run (at the first place of
                    a season)
    remaining_retention   share of those kept a period, in the end

Written "measure" or "measure:of", for instance "base:weekly".
"""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
from numpy.typing import NDArray

from cohortflow.chain import Schedule
from cohortflow.errors import CallError, listed, nearest
from cohortflow.projector import accept
from cohortflow.projector.joiners import Joiners
from cohortflow.projector.project import as_joiners
from cohortflow.states import ALL_LIVE, States
from cohortflow.whatif.money import Money, as_money

Array = NDArray[np.float64]

MEASURES = ("base", "settled_base", "life", "value", "remaining_mix", "remaining_retention")
PEOPLE = ("base", "joiners", "total")


@dataclass(frozen=True, eq=False)
class Target:
    """A figure of a model, resolved.

    measure : see the module text;  of : what it is of;  weight : (K,) of the quantity, for counts and mixes
    start : (K,) those there now;  inflow : (H, K) or (0, K) those who join;  constant : (K,) a period, for
        ever
    horizon : periods, None = for ever;  first_step : step out of the base period
    """

    measure: str
    of: str
    weight: Array
    start: Array
    inflow: Array
    constant: Array
    horizon: int | None
    first_step: int
    money: Money

    @property
    def code(self) -> str:
        """The target as tables name it, for instance "base:all_live"."""
        return f"{self.measure}:{self.of}" if self.of else self.measure


def resolve(
    model: Any,
    target: str,
    *,
    horizon: int | None = None,
    start: Any = None,
    joiners: Any = None,
    value: Any = None,
    totals: Mapping[str, Sequence[str]] | None = None,
    base_period: str | int | None = None,
) -> Target:
    """A Target from its name and the keywords of `sensitivity`; CallError says what is missing."""
    measure, of = named(target)
    schedule = accept.as_schedule(model)
    accept.refuse_unknown(schedule, "A target")
    base = accept.base_period(model, start, base_period, schedule.calendar)
    needs = _needs(measure, of, horizon)
    states, none = schedule.states, np.zeros(len(schedule.states))
    counts = accept.opening(model, start, states) if needs["start"] else none
    inflow, constant = _inflow(joiners, schedule, base, horizon, needs["joiners"], target)
    money = as_money(value, schedule)
    if needs["value"] and money.terms is None:
        raise CallError(
            f'The target "{target}" is about money; say how money is counted: value= a Value, or a mapping '
            "with the keywords of cf.value."
        )
    weight = _weight(measure, of, states, totals)
    if measure in ("life", "value") and of in states.names:
        counts = np.eye(len(states))[states.index(of)]
    elif of == "joiners":
        counts = constant / constant.sum() if measure == "life" else constant
    steps = None if horizon is None else accept.as_periods(horizon)
    first = accept.first_step(schedule, base)
    return Target(measure, of, weight, counts, inflow, constant, steps, first, money)


def named(target: str) -> tuple[str, str]:
    """(measure, of) of a target's name, with what it is of by default.

    >>> named("base"), named("life:fresh"), named("remaining_retention")
    (('base', 'all_live'), ('life', 'fresh'), ('remaining_retention', ''))
    """
    measure, _, of = str(target).partition(":")
    if measure not in MEASURES:
        raise CallError(
            f'Unknown target "{target}"{nearest(measure, MEASURES)}. Targets: {listed(MEASURES)}, each with '
            'what it is of, for instance "base:all_live".'
        )
    usual = {"base": "all_live", "settled_base": "all_live", "life": "joiners", "value": "base"}
    if measure == "remaining_mix" and not of:
        raise CallError(
            'The target "remaining_mix" needs a state or total, for instance "remaining_mix:weekly".'
        )
    if measure == "remaining_retention" and of:
        raise CallError(f'The target "remaining_retention" is of everybody who remains; it takes no "{of}".')
    return measure, of or usual.get(measure, "")


def _needs(measure: str, of: str, horizon: int | None) -> dict[str, bool]:
    """Which arguments the target cannot do without."""
    if measure == "base" and horizon is None or of == "total" and horizon is None:
        raise CallError(
            f'The target "{measure}:{of}" is a figure at a horizon: pass horizon=, periods ahead.'
        )
    return {
        "start": measure == "base" or measure == "value" and of in ("base", "total"),
        "joiners": measure == "settled_base" or of == "joiners",
        "value": measure == "value",
    }


def _inflow(
    joiners: Any, schedule: Schedule, base: int | None, horizon: int | None, needed: bool, target: str
) -> tuple[Array, Array]:
    """(H, K) joiners up to the horizon and (K,) a period for ever."""
    if joiners is None and needed:
        raise CallError(f'The target "{target}" needs joiners=: Joiners, or numbers a period by state.')
    size = len(schedule.states)
    if joiners is None:
        inflow, constant = np.zeros((horizon or 0, size)), np.zeros(size)
    elif isinstance(joiners, Joiners) or horizon is not None:
        coming = as_joiners(joiners, schedule, base, horizon or joiners.periods)
        inflow = coming.expected()
        constant = joiners.a_period() if isinstance(joiners, Joiners) else coming.a_period()
    else:
        constant = accept.as_counts(joiners, schedule.states, name="joiners")
        inflow = constant[None]
    if needed and not constant.any():
        raise CallError(f'The target "{target}" needs somebody to join, and the joiners are 0.')
    return inflow, constant


def _weight(measure: str, of: str, states: States, totals: Mapping[str, Sequence[str]] | None) -> Array:
    """(K,) of a quantity; the other targets are of people, and have none."""
    if measure in ("base", "settled_base", "remaining_mix"):
        if of in states.remaining:
            return states.mask((of,)).astype(float)
        if of == ALL_LIVE:
            return states.live_mask.astype(float)
        weights = accept.weights_of(states, totals)
        if of not in weights:
            raise CallError(f'Unknown quantity "{of}"{nearest(of, weights)}. Quantities: {listed(weights)}.')
        return weights[of]
    allowed = (*states.remaining, *(PEOPLE if measure == "value" else ("joiners",)))
    if of and of not in allowed:
        raise CallError(f'"{measure}" is not of "{of}"{nearest(of, allowed)}. It is of {listed(allowed)}.')
    return np.zeros(len(states))
