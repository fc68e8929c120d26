"""The expected mix, period by period: a closed cohort, and a base with joiners and returners.

    x_{h+1} = x_h M_h + j_{h+1}

x_h counts over the expanded states of a component, M_h the matrix of step h, j_{h+1} those who join (or
return) during that period and are still there at its end. Exits keep whoever enters, so that their entry is
"lost since the opening". Everything here is an exact mean; bands are in bands.py.
Source: Bartholomew (1982), Stochastic Models for Social Processes, ch. 3.
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np

from cohortflow.chain import Component, Schedule
from cohortflow.errors import CallError
from cohortflow.projector.accept import Array, Flags, as_counts, as_periods, as_schedule


@dataclass(frozen=True, eq=False)
class Walk:
    """Expected counts over the declared states.

    counts : (H+1, K); exits: lost since the opening; NaN where undefined
    flows : (H, K, K) expected moves of each period, row = from; the diagonal stays
    inflow : (H, K) who joined, returned or were added in each period
    undefined : (H+1, K) reachable from a state whose row has no data
    """

    counts: Array
    flows: Array
    inflow: Array
    undefined: Flags


def step_counts(model: Any, start: Any, periods: int, inflow: Any = None, *, first_step: int = 0) -> Array:
    """Expected customers by state after 0, 1, ..., `periods` periods, shape (periods + 1, K).

    start : counts by state; inflow : (periods, K) expected joiners, or (K,) the same each period
    first_step : which of the model's matrices acts first

    A state that can be reached from one without data is NaN.

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> step_counts(chain, [100, 0, 0], 2, inflow=[10, 0, 0])
    array([[100.,   0.,   0.],
           [ 10.,  80.,  20.],
           [ 10.,  80.,  30.]])
    """
    return walk(as_schedule(model), start, periods, inflow, first_step=first_step).counts


def walk(schedule: Schedule, start: Any, periods: int, inflow: Any = None, *, first_step: int = 0) -> Walk:
    """Expected counts, moves and inflow of each period (see Walk)."""
    counts = as_counts(start, schedule.states)
    return walk_on(schedule, schedule.expand(counts), as_periods(periods), inflow, first_step)


def walk_on(schedule: Schedule, opening: list[Array], periods: int, inflow: Any, first_step: int) -> Walk:
    """`walk` from counts over the expanded states, one (m,) array a component."""
    size = len(schedule.states)
    arriving = as_inflow(inflow, periods, size)
    at, flows = np.zeros((periods + 1, size)), np.zeros((periods, size, size))
    bad = np.zeros((periods + 1, size), dtype=bool)
    for component, x in zip(schedule.components, opening, strict=True):
        part = _Part(component, schedule.states.allowed)
        at[0] += x @ part.collapse
        for h in range(periods):
            matrix = component.matrix(first_step + h)
            flows[h] += part.flows(x, matrix)
            part.taint(x, matrix)
            x = x @ filled(matrix) + arriving[h] @ component.join
            at[h + 1] += x @ part.collapse
            bad[h + 1] |= part.declared_taint()
    return Walk(np.where(bad, np.nan, at), flows, arriving, bad)


def cohort_shares(
    schedule: Schedule, entry: Any, periods: int, *, joining: bool = True, first_step: int = 0
) -> Array:
    """Share of a closed cohort in each state after 0 .. `periods` periods, shape (periods + 1, K).

    entry : the law (K,) of the state they start in; joining : they are new (the component laws of joiners)

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> cohort_shares(chain.schedule, [1, 0, 0], 2).round(4).tolist()
    [[1.0, 0.0, 0.0], [0.0, 0.8, 0.2], [0.0, 0.72, 0.28]]
    """
    steps = as_periods(periods)
    law = as_counts(entry, schedule.states, name="entry")
    if abs(law.sum() - 1.0) > 1e-9:
        raise CallError(
            f"entry is a law over the states and must add up to 1; it adds up to {law.sum():.12g}."
        )
    opening = schedule.expand(law, joining=joining)
    return walk_on(schedule, opening, steps, None, first_step).counts


def as_inflow(inflow: Any, periods: int, size: int) -> Array:
    """(H, K) expected inflow from None (nobody), (K,) (the same each period) or (H, K)."""
    if inflow is None:
        return np.zeros((periods, size))
    values = np.array(inflow, dtype=float)
    if values.shape == (size,):
        values = np.tile(values, (periods, 1))
    if values.shape != (periods, size) or not np.isfinite(values).all():
        raise CallError(
            f"inflow must be finite numbers of shape ({size},) or ({periods}, {size}), one row a period; got "
            f"shape {values.shape}."
        )
    return values


def filled(matrix: Array) -> Array:
    """The matrix with rows of NaN ("no data") replaced by staying; works on stacks (..., m, m)."""
    missing = np.isnan(matrix).any(axis=-1, keepdims=True)
    return np.where(missing, np.eye(matrix.shape[-1]), matrix) if missing.any() else matrix


class _Part:
    """One component's expanded states, and which of them have become undefined."""

    def __init__(self, component: Component, allowed: Flags) -> None:
        self.collapse = component.collapse(len(allowed))
        self.allowed = allowed[np.ix_(component.report, component.report)]
        self.bad = np.zeros(len(component.report), dtype=bool)

    def flows(self, x: Array, matrix: Array) -> Array:
        """(K, K) expected moves; NaN out of a state that is undefined or has no data."""
        moved = x[:, None] * np.nan_to_num(matrix)
        unknown = self.bad | (np.isnan(matrix).any(axis=1) & (x > 0))
        lost = self.collapse.T @ (self.allowed & unknown[:, None]) @ self.collapse
        return np.where(lost > 0, np.nan, self.collapse.T @ moved @ self.collapse)

    def taint(self, x: Array, matrix: Array) -> None:
        """Mark what can be reached, in this step, from somewhere without data."""
        missing = np.isnan(matrix).any(axis=1)
        if not (missing.any() or self.bad.any()):
            return
        origin = missing & ((x > 0) | self.bad)
        onward = (np.nan_to_num(matrix) > 0) & self.bad[:, None]
        self.bad = onward.any(axis=0) | self.allowed[origin].any(axis=0)

    def declared_taint(self) -> Flags:
        """(K,) declared states that hold an undefined expanded state."""
        return (self.collapse.T @ self.bad) > 0
