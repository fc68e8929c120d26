"""Rates of each segment, shrunk to the pooled rates by an estimated amount; the segments add up to the total.

One component a segment. Who is in which state now, segment by segment, is counted; joiners fall into segments
as the latest ones did.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.errors import CallError
from cohortflow.estimator.layout import Built, Part, build, with_exits
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.shrink import customer_noise, shrink_rows
from cohortflow.estimator.window import Window
from cohortflow.tally import ENDS, Tally

Array = NDArray[np.float64]

RECENT_JOINERS = 12


def segment(tally: Tally, window: Window, rates: RowCounts, *, by: str | None = None) -> Built:
    """One component a value of the segment column `by`. CallError without `by`, or when it is no segment."""
    if by is None:
        known = [name for name, _ in tally.meta.segment_columns]
        raise CallError(f"The segment model needs by=, one of the segments: {known}.")
    values = tally.segment_values(by)
    column = [name for name, _ in tally.meta.segment_columns].index(by)
    code = np.array([values.index(v[column]) for v in tally.meta.segments], dtype=np.int64)
    states, size = tally.states, len(tally.states)
    moves = tally.one_step[window.keeps(tally.one_step["period"])]
    table = moves.rename(columns={"next_state": "column"})
    table = table.assign(row=code[table["segment"]] * size + table["state"])
    counts = RowCounts.of_table(
        table, np.tile(states.allowed, (len(values), 1)), window.weight(moves["period"].to_numpy())
    )
    shrink = shrink_rows(counts, np.tile(np.arange(size), len(values)), customer_noise(rates))
    start, join = _now(tally, code, len(values)), _joining(tally, code, len(values))
    parts = tuple(
        Part(
            _matrices(slice(g * size, (g + 1) * size), states.exit_mask),
            np.arange(size),
            np.diag(start[g]),
            np.diag(join[g]),
            name=value,
        )
        for g, value in enumerate(values)
    )
    kept = {
        f"{v}/{s}": float(shrink.w[g * size + i])
        for g, v in enumerate(values)
        for i, s in enumerate(states.names)
        if s in states.remaining
    }
    return build(tally, counts, parts, shrink=shrink, rates=rates, settings={"kept": kept, "by": by})


def _matrices(rows: slice, exits: NDArray[np.bool_]) -> Callable[[Array], Array]:
    return lambda rates: with_exits(rates[..., rows, :], exits)[..., None, :, :]


def _now(tally: Tally, code: NDArray[np.int64], groups: int) -> Array:
    """(G, K) share of each segment among those in a state now; where nobody is, among all moves from it."""
    moves = tally.table("moves")
    here = moves[(moves["period"] == tally.meta.last) & (moves["end"] != ENDS.index("exit"))]
    everything = _table(moves, code, groups, len(tally.states))
    return _shares(_table(here, code, groups, len(tally.states)), everything)


def _joining(tally: Tally, code: NDArray[np.int64], groups: int) -> Array:
    """(G, K) share of each segment among the latest joiners in a state; else of all starts, of all moves."""
    size = len(tally.states)
    starts = tally.table("starts")
    recent = starts[starts["period"] > tally.meta.last - RECENT_JOINERS]
    moves = _table(tally.table("moves"), code, groups, size)
    return _shares(_table(recent, code, groups, size), _shares(_table(starts, code, groups, size), moves))


def _table(rows: pd.DataFrame, code: NDArray[np.int64], groups: int, size: int) -> Array:
    flat = code[rows["segment"].to_numpy()] * size + rows["state"].to_numpy()
    return np.bincount(flat, rows["n"], minlength=groups * size).reshape(groups, size).astype(float)


def _shares(counts: Array, otherwise: Array) -> Array:
    """Columns divided by their sums; empty ones from `otherwise`, and evenly when that is empty too."""
    total = np.where(counts.sum(axis=0) > 0, counts, np.where(otherwise.sum(axis=0) > 0, otherwise, 1.0))
    return total / total.sum(axis=0)
