"""Rates by periods since joining, in bands: newer customers leave faster.

Expanded states are (periods since joining, state) up to the last band, which is for ever; the rates of a band
are shared by its periods. Customers of unknown history joined before the log began, nobody knows when: they
have rates of their own.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd

from cohortflow.errors import CallError
from cohortflow.estimator.contexts import ContextModel, build_contexts, moves_with_context
from cohortflow.estimator.layout import Built
from cohortflow.estimator.merge import joined
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.shrink import customer_noise
from cohortflow.estimator.window import Window
from cohortflow.tally import Tally

CANDIDATES = (1, 2, 3, 6, 9, 12)
LEAST_MOVES = 50


def tenure(tally: Tally, window: Window, rates: RowCounts, *, bands: Sequence[int] | None = None) -> Built:
    """bands : the first periods since joining of the second, third ... band; [1, 6] makes 0, 1-5 and 6 on.
    Without it they are chosen from the data, out of 1, 2, 3, 6, 9, 12 (merge.py).

    CallError for bands that are not increasing whole numbers from 1 on.
    """
    table = moves_with_context(tally, window)
    cuts = _chosen(table, rates) if bands is None else _given(bands)
    top, size = (cuts[-1] if cuts else 0), len(tally.states)
    band = np.append(np.searchsorted(cuts, np.arange(top + 1), side="right"), len(cuts) + 1)

    def code(rows: pd.DataFrame) -> np.ndarray:
        at = rows["tenure"].to_numpy()
        return np.where(at < 0, top + 1, np.minimum(at, top))

    older = np.append(np.minimum(np.arange(top + 1) + 1, top), top + 1)
    model = ContextModel(
        contexts=top + 2,
        code=code,
        follow=np.broadcast_to(older[:, None, None], (top + 2, size, size)).copy(),
        joined=np.zeros(size, dtype=np.int64),
        rows=band[:, None] * size + np.arange(size)[None, :],
    )
    notes = () if cuts else ("no_tenure_bands",)
    return build_contexts(tally, window, rates, model, notes=notes, settings={"bands": list(cuts)})


def _given(bands: Sequence[int]) -> list[int]:
    cuts = list(bands)
    whole = all(isinstance(b, int | np.integer) and not isinstance(b, bool) and b >= 1 for b in cuts)
    if not cuts or not whole or cuts != sorted(set(cuts)):
        raise CallError(
            "bands are increasing whole numbers of periods from 1 on, such as [1, 3, 12]; "
            f"got {list(bands)!r}."
        )
    return [int(b) for b in cuts]


def _chosen(table: pd.DataFrame, rates: RowCounts) -> list[int]:
    """Cuts that tell bands apart; candidates without enough moves on both sides are not looked at.

    Only customers whose tenure is known are asked.
    """
    table = table[table["tenure"] >= 0]
    size, at, known = rates.shape[0], table["tenure"].to_numpy(), int(table["n"].sum())
    cuts = [
        c for c in CANDIDATES if LEAST_MOVES <= table["n"].to_numpy()[at >= c].sum() <= known - LEAST_MOVES
    ]
    if not cuts:
        return []
    group = np.searchsorted(cuts, at, side="right")
    cell = (group * size + table["state"].to_numpy()) * size + table["next_state"].to_numpy()
    cube = np.bincount(cell, table["n"], minlength=(len(cuts) + 1) * size**2).reshape(-1, size, size)
    return [cuts[first - 1] for first in joined(cube.astype(float), customer_noise(rates)) if first > 0]
