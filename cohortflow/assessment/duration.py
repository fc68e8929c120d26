"""Duration: does the next state depend on how long ago the customer joined, or on the time in the state?

Tables as in order.py, rows = bands of periods since joining (tenure) or already spent in the state; unknown
durations (histories that began before the log) are left out, and each period is its own stratum.
"""

from __future__ import annotations

from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from cohortflow.assessment.finding import Finding
from cohortflow.assessment.order import compare
from cohortflow.tally import Tally

EDGES = (1, 2, 3, 6, 12, 24)  # bands 0, 1, 2, 3-5, 6-11, 12-23, 24 and more
CHECKS = {"tenure": ("tenure", "tenure"), "time_in_state": ("spell", "time_in_state")}


def duration(tally: Tally, check: str, *, replications: int, rng: np.random.Generator) -> Finding:
    """check : "tenure" or "time_in_state" (code "bands")."""
    column, repair = CHECKS[check]
    blank = Finding(check, "bands", repair)
    if "contexts" not in tally.meta.tables:
        return replace(blank, reason="customer_rows")
    rows = tally.table("contexts")
    rows = rows[rows[column] >= 0]
    banded = rows.assign(band=bands(rows[column].to_numpy()))
    return compare(banded, "band", len(tally.states), blank, replications, rng)


def bands(periods: NDArray[np.int64]) -> NDArray[np.int64]:
    """Band of each duration.

    >>> bands(np.array([0, 1, 2, 5, 6, 30])).tolist()
    [0, 1, 2, 3, 4, 6]
    """
    return np.searchsorted(EDGES, periods, side="right").astype(np.int64)
