"""How the mix approaches where it settles: expected shares far enough ahead, without bands."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from cohortflow.projector import step_counts
from cohortflow.states import States

LONGEST, SHORTEST = 240, 12


def approach(
    model: Any,
    start: Any,
    states: States,
    *,
    joining: Any = None,
    first_step: int = 0,
    periods: int | None = None,
) -> pd.DataFrame:
    """Expected shares among those who have not left: periods_ahead, state, share.

    joining : (K,) customers who join or return every period (None: nobody);  first_step : which of the model's
    matrices acts first;  periods : how far (default: until the mix stands still, at most 240)
    """
    keep = ~states.exit_mask
    counts = step_counts(model, start, periods or LONGEST, joining, first_step=first_step)[:, keep]
    total = counts.sum(axis=1, keepdims=True)
    shares = np.divide(counts, total, out=np.full_like(counts, np.nan), where=total > 0)
    last = len(shares) - 1 if periods else _still(shares)
    names = [n for n in states.names if n not in states.exits]
    return pd.DataFrame(
        {
            "periods_ahead": np.repeat(np.arange(last + 1), len(names)),
            "state": names * (last + 1),
            "share": shares[: last + 1].ravel(),
        }
    )


def _still(shares: np.ndarray) -> int:
    """A little beyond the first period from which the mix stays within 0.01 of the last one drawn."""
    off = 0.5 * np.abs(shares - shares[-1]).sum(axis=1) > 0.01
    since = int(np.flatnonzero(off).max()) + 1 if off.any() else 0
    return min(len(shares) - 1, max(SHORTEST, round(1.5 * since)))
