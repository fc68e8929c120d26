"""Chains for longer or shorter periods: up by powers, down by a generator, never element by element.

1 - (1 - p)^3 for each cell is wrong with more than two states: rows no longer sum to one, and what moves on
within the quarter is forgotten. Up is exact. Down needs a matrix whose power is the old one: through a
generator (markov/embedding.py), repaired only when asked, with the distance stated; else recount.
"""

from __future__ import annotations

from dataclasses import dataclass, replace
from typing import ClassVar

import numpy as np
import pandas as pd

from cohortflow.chain import Chain
from cohortflow.errors import CallError, NotIdentified, listed
from cohortflow.markov.embedding import root
from cohortflow.record import Record
from cohortflow.states import States

WHOLE = {
    ("month", "quarter"): 3, ("month", "year"): 12, ("quarter", "year"): 4, ("day", "week"): 7,
}  # fmt: skip


@dataclass(frozen=True, repr=False, eq=False)
class ChangedPeriod(Record):
    """The chain of the new period and how it was reached.

    how : power | generator | principal_root | repaired;  unique : no other generator (None: not known)
    distance : of a repaired generator from the logarithm;  residual : largest |matrix^n - old|
    """

    chain: Chain
    how: str
    steps: int
    unique: bool | None
    distance: float
    residual: float
    kind: ClassVar[str] = "changed_period"

    def to_frame(self) -> pd.DataFrame:
        """The chain's from, to, probability."""
        return self.chain.to_frame()

    def headline(self) -> str:
        return f"{self.chain.headline()} by {self.how}, residual {self.residual:.3g}"

    def about(self) -> dict[str, object]:
        return {"how": self.how, "unique": self.unique, "distance": self.distance, "residual": self.residual}


def change_period(chain: Chain, to: str, *, repair_by: str | None = None) -> ChangedPeriod:
    """The chain of another period.

    to : "week", "month", "quarter" or "year", a whole multiple or part of the chain's own
    repair_by : "diagonal", "weighted" or "quasi_optimal", to accept the nearest generator on the way down

    CallError when the periods are not whole multiples (days in months); NotIdentified when there is no such
    chain, or rows without data.

    >>> from cohortflow import States
    >>> chain = Chain(States(["on", "off"], exits=["off"]), [[0.9, 0.1], [0, 1]], period="month")
    >>> change_period(chain, "quarter").chain.matrix.round(3).tolist()
    [[0.729, 0.271], [0.0, 1.0]]
    """
    own = chain.period.kind
    up, down = WHOLE.get((own, to)), WHOLE.get((to, own))
    if up is None and down is None:
        pairs = [f"{a} and {b}" for a, b in WHOLE]
        raise CallError(
            f'A chain per {own} has no whole number of steps in a "{to}"; between {listed(pairs)} it can be '
            "changed. Count the moves again at the period you need."
        )
    if chain.unknown:
        raise NotIdentified(
            f"Nothing is known about moves out of {listed(chain.unknown)}, so neither about longer or shorter "
            "periods; give the rows, or leave the states out."
        )
    period = replace(chain.period, kind=to)
    if up is not None:
        matrix = np.linalg.matrix_power(chain.matrix, up)
        return ChangedPeriod(Chain(_free(chain, matrix), matrix, period=period), "power", up, None, 0.0, 0.0)
    assert down is not None
    found = root(chain.matrix, down, repair_by=repair_by)
    new = Chain(_free(chain, found.matrix), found.matrix, period=period)
    return ChangedPeriod(new, found.how, down, found.unique, found.distance, found.residual)


def _free(chain: Chain, matrix: np.ndarray) -> States:
    """The states without the moves declared impossible that more than one step makes possible."""
    states = chain.states
    kept = tuple(
        pair for pair in states.impossible if matrix[states.index(pair[0]), states.index(pair[1])] == 0
    )
    return States(states.names, exits=states.exits, entries=states.entries, away=states.away, impossible=kept)
