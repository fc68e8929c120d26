"""Drift: are the rates the same in every period, in every era of the history, in every month of the year?

Three questions with three answers for the user:

periods   any two periods may differ: one table for each origin, rows = periods. If they do, future
          months will differ too, which the band's part "common_shocks" covers; the mean forecast need not move.
eras      consecutive stretches of the history differ: the rates are moving, and old ones mislead.
seasons   places in the calendar differ.

The last two compare groups of whole periods. Their reference deals the periods out to the groups at random
(for eras in blocks of neighbouring periods), so that luck shared by everybody in a month counts as chance.

Source: Anderson & Goodman (1957) Ann. Math. Statist. 28, 89, for the statistic.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from cohortflow.assessment.finding import Finding
from cohortflow.assessment.tables import (
    Array,
    Counts,
    Stratified,
    identified_df,
    likelihood_ratio,
    tail_share,
)
from cohortflow.tally import Tally

FEWEST_PERIODS = 8  # below, too few ways to deal the periods out
BLOCKS = 12  # an era's neighbouring periods are dealt out in blocks; about so many over the history


def periods_alike(tally: Tally, *, replications: int, rng: np.random.Generator) -> Finding:
    """All periods against each other (check "drift", code "periods")."""
    blank = Finding("drift", "periods", "common_shocks")
    _, cube = tally.counts_by_period()
    if len(cube) < 2:
        return replace(blank, reason="longer_history")
    period, state, target = np.nonzero(cube)
    n, none = cube[period, state, target], np.zeros(len(period), dtype=np.int64)
    size = len(tally.states)
    counts = Stratified(state, none, period, target, n, (size, len(cube), size))
    pooled = counts.pooled()
    if identified_df(pooled) == 0:
        return replace(blank, reason="too_few_moves")
    statistic = float(likelihood_ratio(pooled))
    p = tail_share(statistic, counts.drawn(replications, rng))
    return replace(
        blank, statistic=statistic, df=identified_df(pooled), p_value=p, floor=_floor(replications)
    )


def eras_alike(tally: Tally, *, replications: int, rng: np.random.Generator) -> Finding:
    """Stretches of the history against each other (check "drift", code "eras")."""
    blank = Finding("drift", "eras", "recent")
    periods, cube = tally.counts_by_period()
    if len(periods) < FEWEST_PERIODS:
        return replace(blank, reason="longer_history")
    return _groups(cube, *eras(len(periods), tally.calendar.cycle), blank, replications, rng)


def seasons_alike(tally: Tally, *, replications: int, rng: np.random.Generator) -> Finding:
    """Places in the calendar against each other (check "seasons", code "calendar_positions")."""
    blank = Finding("seasons", "calendar_positions", "seasonal")
    periods, cube = tally.counts_by_period()
    cycle = tally.calendar.cycle
    if cycle == 1:
        return replace(blank, reason="no_calendar")
    if len(periods) < 2 * cycle:
        return replace(blank, reason="two_cycles")
    place = np.array([tally.calendar.position(int(p) + 1) for p in periods])
    return _groups(cube, np.arange(len(periods)), place, blank, replications, rng)


def eras(periods: int, cycle: int) -> tuple[Counts, Counts]:
    """(T,) block of each period and (blocks,) era of each block.

    An era is about one cycle of seasons (or a third of a history without seasons, a half of a short one).

    >>> [x.tolist() for x in eras(8, 1)]
    [[0, 1, 2, 3, 4, 5, 6, 7], [0, 0, 0, 0, 1, 1, 1, 1]]
    """
    number = max(2, round(periods / cycle)) if cycle > 1 else (3 if periods >= BLOCKS else 2)
    width = max(1, round(periods / BLOCKS))
    era = np.arange(periods) * number // periods
    block = np.zeros(periods, dtype=np.int64)
    for t in range(1, periods):
        run = t - np.flatnonzero(block[:t] == block[t - 1])[0]
        block[t] = block[t - 1] + (era[t] != era[t - 1] or run >= width)
    return block, era[np.unique(block, return_index=True)[1]]


def _groups(
    cube: Counts, block: Counts, group: Counts, blank: Finding, replications: int, rng: np.random.Generator
) -> Finding:
    """Groups of blocks of periods against each other; cube (T, K, K), block (T,), group (blocks,)."""
    blocks = np.zeros((len(group), *cube.shape[1:]), dtype=np.int64)
    np.add.at(blocks, block, cube)
    observed = _by_group(blocks, group)
    if identified_df(observed) == 0:
        return replace(blank, reason="too_few_moves")
    statistic = float(likelihood_ratio(observed))
    drawn = np.array([_per_df(_by_group(blocks, rng.permutation(group))) for _ in range(replications)])
    p = tail_share(_per_df(observed), drawn)
    return replace(
        blank, statistic=statistic, df=identified_df(observed), p_value=p, floor=_floor(replications)
    )


def _per_df(tables: Array) -> float:
    """LR per degree of freedom: other groupings of the same periods may identify more or fewer."""
    return float(likelihood_ratio(tables)) / max(identified_df(tables), 1)


def _by_group(blocks: Counts, group: NDArray[np.int64]) -> Array:
    """(K, G, K) tables: one an origin, rows = groups."""
    member = np.eye(int(group.max()) + 1)[group]
    return np.einsum("bg,bij->igj", member, blocks.astype(float))


def _floor(replications: int) -> float:
    return 1 / (replications + 1)
