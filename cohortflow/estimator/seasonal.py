"""Rates by place in the season's cycle (month of the year, quarter, weekday), shrunk to the pooled rates.

A place seen in few years holds their luck as well as its season. What separates the two is the scatter of the
same place over years: for each state, the chi-square of periods within places, over its degrees of freedom,
is the noise, and the shrinkage (shrink.py) measures the scatter between places against it. With less than two
cycles there is nothing to compare; the noise is then the customers' own and the note "seasons_thin" says so.
"""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from cohortflow.errors import CallError, NotIdentified
from cohortflow.estimator.layout import Built, Part, build, with_exits
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.shrink import customer_noise, scatter, shrink_rows
from cohortflow.estimator.window import Window
from cohortflow.tally import Tally

Array = NDArray[np.float64]


def place_of(tally: Tally, cycle: int, ordinal: int) -> int:
    """Place of a period in a cycle: the calendar's own, or the remainder for any other length."""
    own = tally.calendar
    return own.position(ordinal) if cycle == own.cycle else int(ordinal) % cycle


def seasonal(tally: Tally, window: Window, rates: RowCounts, *, cycle: int | None = None) -> Built:
    """One matrix a place in the cycle, repeated for ever; `cycle` defaults to the calendar's.

    NotIdentified for a calendar without a cycle; CallError for a cycle below 2.
    """
    length = tally.calendar.cycle if cycle is None else cycle
    if cycle is not None and (isinstance(cycle, bool) or cycle < 2):
        raise CallError(f"cycle is a number of periods from 2 on; got {cycle!r}.")
    if length < 2:
        raise NotIdentified(
            f'Periods of kind "{tally.calendar.kind}" have no season; pass cycle=, the number of periods '
            "after which it repeats, or choose another model."
        )
    states, size = tally.states, len(tally.states)
    place = np.array([place_of(tally, length, p) for p in rates.period], dtype=np.int64)
    counts = RowCounts(
        np.tile(states.allowed, (length, 1)),
        place * size + rates.row,
        *(getattr(rates, name) for name in ("column", "bucket", "period", "n", "weight", "case")),
    )
    noise, thin = _yearly_noise(tally, rates, length)
    shrink = shrink_rows(counts, np.tile(np.arange(size), length), noise)
    turn = (np.arange(length) + place_of(tally, length, tally.meta.last)) % length
    exits = states.exit_mask

    def matrices(rows: Array) -> Array:
        cube = rows.reshape(*rows.shape[:-2], length, size, size)
        return with_exits(cube, exits)[..., turn, :, :]

    eye = np.eye(size)
    season = shrink.w.reshape(length, size)
    missing = sorted(set(range(length)) - set(place.tolist()))
    notes = ("seasons_thin",) * thin + tuple(f"place_not_seen:{c}" for c in missing)
    return build(
        tally,
        counts,
        (Part(matrices, np.arange(size), eye, eye, tail="cycle"),),
        shrink=shrink,
        rates=rates,
        notes=notes,
        settings={"cycle": length, "kept": _kept(season, states.names, exits)},
        season=season,
    )


def _kept(season: Array, names: tuple[str, ...], exits: NDArray[np.bool_]) -> dict[str, float]:
    """Mean share of its own rates that a state keeps at a place."""
    return {n: float(w) for n, w, e in zip(names, season.mean(axis=0), exits, strict=True) if not e}


def _yearly_noise(tally: Tally, rates: RowCounts, cycle: int) -> tuple[Array, bool]:
    """(K,) noise of a place's rates over years relative to the multinomial one; and whether it is a guess."""
    periods, cube = rates.by_period()
    place = np.array([place_of(tally, cycle, int(p)) for p in periods])
    guess = customer_noise(rates)
    if len(periods) < 2 * len(np.unique(place)):
        return guess, True
    out = guess.copy()
    for i in range(cube.shape[1]):
        parts = [_scatter_of(cube[place == c, i]) for c in np.unique(place)]
        freedom = sum(part[1] for part in parts)
        if freedom > 0:
            out[i] = max(1.0, sum(part[0] for part in parts) / freedom)
    return out, False


def _scatter_of(counts: Array) -> tuple[float, int]:
    counts = counts[counts.sum(axis=1) > 0]
    if len(counts) < 2:
        return 0.0, 0
    n = counts.sum(axis=1)
    statistic, freedom, _ = scatter(counts / n[:, None], n)
    return statistic, freedom
