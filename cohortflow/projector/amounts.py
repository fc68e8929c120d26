"""What customers pay, by state, as the extract's amounts show it, with its error.

    r_k = margin x sum of amounts of customers in state k / their number, over the periods used
    Cov(r_k, r_l) = G/(G-1) sum_g (A_gk - r_k n_gk)(A_gl - r_l n_gl) / (n_k n_l),   g buckets of customers

A customer who paid nothing in a period counts with 0. Buckets keep whole customers together, so that
customers who always pay more are no surprise to the error. Source: Liang & Zeger (1986) Biometrika 73, 13.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.errors import CallError
from cohortflow.projector.accept import Array
from cohortflow.record import Record, frozen_array
from cohortflow.states import States
from cohortflow.tally import Tally


@dataclass(frozen=True, repr=False, eq=False)
class Amounts(Record):
    """Contribution a customer a period by state, estimated.

    mean : (K,), NaN where nobody was seen;  covariance : (K, K)
    number : (K,) customers times periods that it rests on;  margin : what was taken of the amounts
    """

    states: States
    mean: Array
    covariance: Array
    number: Array
    margin: float = 1.0
    kind: ClassVar[str] = "amounts"

    def __post_init__(self) -> None:
        for name in ("mean", "covariance", "number"):
            object.__setattr__(self, name, frozen_array(getattr(self, name)))

    def to_frame(self) -> pd.DataFrame:
        """state, number, mean, std_error."""
        return pd.DataFrame(
            {
                "state": list(self.states.names),
                "number": self.number.astype(np.int64),
                "mean": self.mean,
                "std_error": np.sqrt(np.diag(self.covariance)),
            }
        )

    def headline(self) -> str:
        return f"contribution a customer a period, {len(self.mean)} states, margin {self.margin:g}"

    def about(self) -> Mapping[str, Any]:
        return {"margin": self.margin}


def observed_amounts(tally: Tally, *, margin: float = 1.0, window: int | None = None) -> Amounts:
    """Mean amount of a customer in each state in a period, times `margin`, over the last `window` periods.

    NotIdentified when the extract had no amounts. An exit has what was paid in the period of leaving.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [("a", 1, "fresh", 4), ("a", 2, "steady", 30), ("b", 1, "fresh", 6), ("b", 2, "steady", 10)]
    >>> rows += [("a", 3, "left", 0), ("b", 3, "steady", 20)]
    >>> frame = pd.DataFrame(rows, columns=["customer", "period", "state", "pounds"])
    >>> tally = cf.count(cf.read_history(frame, states, amount="pounds"))
    >>> observed_amounts(tally, margin=0.5).mean
    array([ 2.5, 10. ,  0. ])
    """
    if not np.isfinite(margin) or margin <= 0:
        raise CallError(f"margin is {margin!r}; it is the share of the amounts that counts, above 0.")
    rows = tally.table("amounts")
    if window is not None:
        rows = rows[rows["period"] > tally.meta.last - window]
    size = len(tally.states)
    bucket, group = np.unique(rows["bucket"].to_numpy(), return_inverse=True)
    number, total = np.zeros((len(bucket), size)), np.zeros((len(bucket), size))
    where = (group.reshape(-1), rows["state"].to_numpy())
    np.add.at(number, where, rows["n"])
    np.add.at(total, where, rows["total"] * margin / tally.meta.amount_scale)
    n = number.sum(axis=0)
    safe = np.where(n > 0, n, np.nan)
    mean = total.sum(axis=0) / safe
    off = (total - np.where(n > 0, mean, 0.0) * number) / safe
    groups = len(bucket)
    scale = groups / (groups - 1) if groups > 1 else np.nan
    return Amounts(tally.states, mean, scale * off.T @ off, n, margin)
