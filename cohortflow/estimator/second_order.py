"""Rates by the state before this one: expanded states are (previous state, state)."""

from __future__ import annotations

import numpy as np
import pandas as pd

from cohortflow.estimator.contexts import ContextModel, build_contexts
from cohortflow.estimator.layout import Built
from cohortflow.estimator.rows import RowCounts
from cohortflow.estimator.window import Window
from cohortflow.tally import Tally


def second_order(tally: Tally, window: Window, rates: RowCounts) -> Built:
    """Context 0 = nothing before (a joiner, or not known), 1 + i = came from state i."""
    size = len(tally.states)
    origin = np.arange(1, size + 1)[None, :, None]
    model = ContextModel(
        contexts=size + 1,
        code=_code,
        follow=np.broadcast_to(origin, (size + 1, size, size)).copy(),
        joined=np.zeros(size, dtype=np.int64),
        rows=np.arange(size + 1)[:, None] * size + np.arange(size)[None, :],
    )
    return build_contexts(tally, window, rates, model)


def _code(rows: pd.DataFrame) -> np.ndarray:
    return rows["previous"].to_numpy() + 1
