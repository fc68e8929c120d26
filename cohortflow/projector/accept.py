"""What the projector takes at its door: a model in any form, opening counts, the place in the calendar.

Inside the room there is one form only: a Schedule, counts as (K,) arrays, steps counted from 0.
"""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError, NotIdentified, listed
from cohortflow.periods import Calendar
from cohortflow.states import States
from cohortflow.tally import Tally

Array = NDArray[Any]
Flags = NDArray[np.bool_]


def as_schedule(model: Any) -> Schedule:
    """A Schedule from a Schedule, a Chain, or anything that carries one as `.schedule` (a Fit).

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> as_schedule(Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]]))
    <schedule of 1 component(s) per month; all: 1 x 3 states (hold)>
    """
    found = model if isinstance(model, Schedule) else getattr(model, "schedule", None)
    if not isinstance(found, Schedule):
        raise CallError(
            f"A model is a Chain, a Schedule or a Fit; got {type(model).__name__}. "
            "Make a Chain of states and a matrix first."
        )
    return found


def tally_of(model: Any) -> Tally | None:
    """The counts that a Fit carries; None for a bare Chain or Schedule."""
    found = getattr(model, "tally", None)
    return found if isinstance(found, Tally) else None


def covariance_of(model: Any, covariance: Any = None) -> Any:
    """An object with `.matrix` (K*K, K*K) and `.df` for a model that is one chain; else None.

    `covariance`: None (the Fit's own choice), a kind's name, or such an object itself. A Fit whose chain is
    not made of its pooled rates (a shrunk one) has no such covariance: its draws tell.
    """
    if not as_schedule(model).is_plain:
        return None
    if covariance is not None and not isinstance(covariance, str):
        return covariance
    ask = getattr(model, "covariance", None)
    if ask is None:
        if covariance is not None:
            raise CallError(
                f'covariance="{covariance}" is asked of a Fit, which knows its counts; a bare '
                f"{type(model).__name__} has none. Pass the Fit, or a covariance object."
            )
        return None
    pooled = np.allclose(model.P, as_schedule(model).components[0].matrices[0], atol=1e-12, equal_nan=True)
    return (ask(covariance) if covariance else ask()) if pooled else None


def draws_of(
    model: Any, draws: Draws | int | None, rng: np.random.Generator, covariance: Any
) -> Draws | None:
    """Draws as given, or that many drawn from a Fit; None when the model has no counts behind it."""
    if isinstance(draws, Draws):
        return draws
    ask = getattr(model, "draws", None)
    if ask is None or draws is None:
        return None
    if isinstance(draws, bool) or not isinstance(draws, (int, np.integer)) or draws < 2:
        raise CallError(f"draws is {draws!r}; it takes Draws, or a whole number of draws, at least 2.")
    return ask(int(draws), rng=rng, **({"covariance": covariance} if isinstance(covariance, str) else {}))


def as_counts(values: Any, states: States, *, name: str = "start") -> Array:
    """(K,) counts from a Series or mapping by state name (states not named: 0) or one number a state.

    CallError for unknown states, wrong length, missing, infinite or negative numbers.

    >>> states = States(["fresh", "steady", "left"], exits=["left"])
    >>> as_counts({"steady": 40}, states)
    array([ 0., 40.,  0.])
    """
    if isinstance(values, (Mapping, pd.Series)):
        counts = np.zeros(len(states))
        for state, number in values.items():
            counts[states.index(str(state))] = float(number)
    else:
        counts = np.array(values, dtype=float)
    if counts.shape != (len(states),):
        raise CallError(
            f"{name} has shape {counts.shape}; it takes one number for each of the {len(states)} states "
            f"({listed(states.names)}), or a mapping from state to number."
        )
    for bad in np.flatnonzero(~np.isfinite(counts) | (counts < 0)):
        raise CallError(
            f'{name} of state "{states.names[bad]}" is {counts[bad]:g}; it must be a number not below 0.'
        )
    return counts


def opening(model: Any, start: Any, states: States) -> Array:
    """(K,) opening counts: given, or the last mix of the Fit's tally. Nobody may stand in an exit."""
    if start is None:
        tally = tally_of(model)
        if tally is None:
            raise CallError(
                "A projection needs opening counts: pass start=, customers by state at the end of the base "
                "period (a Fit brings its own)."
            )
        start = tally.mix()
    counts = as_counts(start, states)
    for gone in np.flatnonzero(states.exit_mask & (counts > 0)):
        raise CallError(
            f'start holds {counts[gone]:g} customers in the exit "{states.names[gone]}": a base is those who '
            "have not left. Leave the exits out; what is lost is counted from the opening on."
        )
    return counts


def as_period(period: str | int | None, calendar: Calendar) -> int | None:
    """Ordinal of a period given as a label or an ordinal."""
    return calendar.parse(period) if isinstance(period, str) else period


def base_period(model: Any, start: Any, period: str | int | None, calendar: Calendar) -> int | None:
    """Ordinal of the period at whose end the opening is counted; None for a model outside any calendar.

    Taken from `period`; else from the name of the start Series when it is a period's label; else the last
    period of the Fit's tally.
    """
    if period is not None:
        return as_period(period, calendar)
    named = getattr(start, "name", None) if isinstance(start, pd.Series) else None
    if isinstance(named, str):
        return calendar.parse(named)
    tally = tally_of(model)
    return None if tally is None else tally.meta.last


def first_step(schedule: Schedule, base: int | None) -> int:
    """Which step of the Schedule leads out of the base period: 0 when either has no place in the calendar."""
    if base is None or schedule.first is None:
        return 0
    step = base - schedule.first
    varying = any(len(c.matrices) > 1 and c.tail == "hold" for c in schedule.components)
    if step < 0 and varying:
        raise CallError(
            f"The model's matrices begin in {schedule.calendar.label(schedule.first)}, after the base period "
            f"{schedule.calendar.label(base)}: there is no matrix for the periods between. Start later."
        )
    return step if varying or any(c.tail == "cycle" for c in schedule.components) else 0


def as_rng(rng: int | np.random.Generator) -> np.random.Generator:
    """A Generator from a seed or a Generator; anything else is refused, so that no randomness is hidden."""
    if isinstance(rng, np.random.Generator):
        return rng
    if isinstance(rng, bool) or not isinstance(rng, (int, np.integer)) or rng < 0:
        raise CallError(f"rng is {rng!r}; it takes a whole number not below 0 (a seed) or a numpy Generator.")
    return np.random.default_rng(int(rng))


def as_level(level: float) -> float:
    """A level strictly between 0 and 1."""
    if isinstance(level, bool) or not isinstance(level, (int, float, np.floating)) or not 0 < level < 1:
        raise CallError(f"level is {level!r}; it must lie strictly between 0 and 1, for instance 0.9.")
    return float(level)


def as_periods(periods: int) -> int:
    """A whole number of periods, at least 1."""
    if isinstance(periods, bool) or not isinstance(periods, (int, np.integer)) or periods < 1:
        raise CallError(f"periods is {periods!r}; it must be a whole number, at least 1.")
    return int(periods)


def weights_of(states: States, totals: Mapping[str, Any] | None) -> dict[str, Array]:
    """Quantity -> (K,) 0/1 weights: each state that is not an exit, `all_live`, the named totals."""
    named = {"all_live": states.live, **(totals or {})}
    out = {name: np.eye(len(states))[states.index(name)] for name in states.remaining}
    for name, members in named.items():
        if isinstance(members, str):
            raise CallError(f'The total "{name}" takes a list of states, not the text "{members}".')
        if name in states.names or (name == "all_live" and members is not states.live):
            raise CallError(f'The total "{name}" has the name of a state or of a fixed total; rename it.')
        exits = [m for m in members if m in states.exits]
        if exits:
            raise CallError(
                f'The total "{name}" adds up customers who are there; {listed(exits)} is an exit.'
            )
        out[name] = states.mask(members).astype(float)
    return out


def refuse_unknown(schedule: Schedule, what: str) -> None:
    """NotIdentified when nothing at all can be said because every row is without data."""
    remaining = schedule.states.remaining
    if remaining and set(remaining) <= set(schedule.unknown):
        raise NotIdentified(
            f"{what} needs rates, and no state has a single observed departure: {listed(remaining)}. "
            "Read a longer history, or give the rows by hand in a Chain."
        )
