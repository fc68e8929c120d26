"""Rates by the periods already spent in the state: a ladder for each state, as long as the data ask for.

Repairs states defined by silence, which remember how long they last: from a rung only "one rung up" or
another
state can follow, so a customer cannot be silent for two months after one. Moves never seen from a rung on
which they would have been expected stay impossible there.
"""

from __future__ import annotations

import numpy as np
import pandas as pd

from cohortflow.errors import CallError
from cohortflow.estimator.contexts import ContextModel, build_contexts, moves_with_context
from cohortflow.estimator.layout import Built
from cohortflow.estimator.merge import gain
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.shrink import customer_noise
from cohortflow.estimator.window import Window
from cohortflow.tally import Tally

LONGEST = 12
LEAST_MOVES = 50


def time_in_state(tally: Tally, window: Window, rates: RowCounts, *, ladder: int | None = None) -> Built:
    """ladder : rungs of every state (1 = none); without it each state's number is chosen from the data.

    CallError for a ladder below 1.
    """
    if ladder is not None and (isinstance(ladder, bool) or ladder < 1):
        raise CallError(f"ladder is a number of rungs from 1 on; got {ladder!r}.")
    table, size = moves_with_context(tally, window), len(tally.states)
    tops = np.full(size, ladder - 1) if ladder else _chosen(table, rates)
    tops = np.where(tally.states.exit_mask, 0, tops)
    rungs = int(tops.max()) + 1  # and one more context: time in the state not known
    up = np.minimum(np.arange(rungs)[:, None] + 1, tops)
    up = np.vstack([up, np.full(size, rungs)])[:, :, None]
    follow = np.where(np.eye(size, dtype=bool)[None], up, 0)
    rows = np.vstack([np.minimum(np.arange(rungs)[:, None], tops), np.full(size, rungs)]) * size
    rows = rows + np.arange(size)

    def code(rows_in: pd.DataFrame) -> np.ndarray:
        at, top = rows_in["spell"].to_numpy(), tops[rows_in["state"].to_numpy(int)]
        return np.where(at < 0, rungs, np.minimum(at, top))

    model = ContextModel(rungs + 1, code, follow, np.zeros(size, dtype=np.int64), rows)
    lengths = {
        n: int(t) + 1 for n, t in zip(tally.states.names, tops, strict=True) if n in tally.states.remaining
    }
    notes = () if rungs > 1 else ("no_ladder",)
    return build_contexts(tally, window, rates, model, notes=notes, settings={"ladder": lengths})


def _chosen(table: pd.DataFrame, rates: RowCounts) -> np.ndarray:
    """(K,) top rung of each state: rungs are joined from the top while they do not differ."""
    size, noise = rates.shape[0], customer_noise(rates)
    known = table[table["spell"] >= 0]
    spell = np.minimum(known["spell"].to_numpy(), LONGEST)
    cell = (spell * size + known["state"].to_numpy()) * size + known["next_state"].to_numpy()
    cube = np.bincount(cell, known["n"], minlength=(LONGEST + 1) * size**2).reshape(-1, size, size)
    tops = np.zeros(size, dtype=np.int64)
    for i in range(size):
        only = np.arange(size)[:, None] == i
        top = LONGEST
        while top > 0:
            upper, lower = cube[top:].sum(axis=0) * only, cube[top - 1] * only
            if upper.sum() >= LEAST_MOVES and gain(lower, upper, noise, float(cube[:, i].sum())) > 0:
                break
            top -= 1
        tops[i] = top
    return tops
