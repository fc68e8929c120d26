"""Manual overlays: customers put into (or taken out of) a state in a period ahead, a line of their own.

They are there from the end of that period on and move on like everybody else in their state. What an overlay
does to the expected counts is added to the projection and to every drawn path; it has no error of its own.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np

from cohortflow.chain import Schedule
from cohortflow.errors import CallError
from cohortflow.projector.accept import Array
from cohortflow.projector.mix import Walk, walk_on


def as_adjustments(rows: Iterable[Any], schedule: Schedule, base: int | None, periods: int) -> Array:
    """(H, K) customers added in each period, from (period, state, customers) rows or objects so named.

    A period is a label or ordinal; outside a calendar, periods ahead. Beyond the horizon it has no effect.
    """
    states, out = schedule.states, np.zeros((periods, len(schedule.states)))
    for row in rows:
        period, state, customers = (
            (row.period, row.state, row.customers) if hasattr(row, "customers") else tuple(row)
        )
        ordinal = schedule.calendar.parse(period) if isinstance(period, str) else int(period)
        ahead = ordinal - (base or 0)
        if ahead < 1:
            raise CallError(
                f'The adjustment of "{state}" in {period} lies before the first period ahead; adjust what '
                "is forecast."
            )
        if state in states.exits:
            raise CallError(
                f'An adjustment changes who is there; "{state}" is an exit. Name the state they are in.'
            )
        if ahead <= periods:
            out[ahead - 1, states.index(state)] += float(customers)
    return out


def overlaid(walk: Walk, schedule: Schedule, added: Array, first_step: int) -> tuple[Walk, Array]:
    """The walk with the overlay in it, and what the overlay adds to the counts (H+1, K).

    CallError when more are taken out of a state than it is expected to hold.
    """
    counts, flows, undefined = np.zeros_like(walk.counts), np.zeros_like(walk.flows), walk.undefined.copy()
    steps = len(added)
    for h in np.flatnonzero(added.any(axis=1)).tolist():
        counts[h + 1] += added[h]
        if h + 1 < steps:
            later = walk_on(schedule, schedule.expand(added[h]), steps - h - 1, None, first_step + h + 1)
            counts[h + 2 :] += np.nan_to_num(later.counts[1:])
            flows[h + 1 :] += np.nan_to_num(later.flows)
            undefined[h + 1 :] |= later.undefined
    total = walk.counts + counts
    short = np.argwhere(total < -1e-9)
    if len(short):
        h, state = short[0]
        raise CallError(
            f'The adjustments take more customers out of "{schedule.states.names[state]}" than it holds {h} '
            f"periods ahead ({walk.counts[h, state]:,.1f}); at most so many can be taken out."
        )
    return Walk(np.where(undefined, np.nan, total), walk.flows + flows, walk.inflow, undefined), counts
