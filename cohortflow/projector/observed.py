r"""Retention as it was observed: the product-limit curve of those who joined, and the cohort triangle.

    S_a = prod_{s <= a} (1 - d_s / n_s)      n_s at risk of period s since joining, d_s of them left
    interval   Wilson's with the effective number S(1-S) / Var S, Var S = S^2 sum d / (n (n - d)); where
               nobody has left yet, with the number at risk

It needs no model and stays right when customers differ, as long as leaving the view has nothing to do with
leaving. An age is immature when fewer than half of all who joined are old enough to be seen at it.
Sources: Kaplan & Meier (1958) JASA 53, 457; Greenwood (1926); Rothman (1978) J. Chronic Dis. 31, 557.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd
from scipy import special

from cohortflow.errors import NotIdentified
from cohortflow.projector.accept import Array, Flags
from cohortflow.tally import KINDS, Tally


@dataclass(frozen=True, eq=False)
class Observed:
    """The product-limit curve of those who joined within the window; arrays over ages 0 .. A.

    at_risk : of the period that leads to this age (age 0: all who joined);  left : of them, in that period
    exposure : share of all who joined that is old enough to be seen at this age
    """

    at_risk: Array
    left: Array
    share: Array
    low: Array
    high: Array
    exposure: Array

    @property
    def immature(self) -> Flags:
        """Ages at which fewer than half of those who joined could be seen."""
        return self.exposure < 0.5


def observed_retention(tally: Tally, *, level: float = 0.90) -> Observed:
    """The product-limit curve of those who joined within the window (kind joined), with intervals.

    NotIdentified when the counts have no ages, or nobody joined within the window.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [("a", 1, "fresh"), ("a", 2, "steady"), ("a", 3, "steady")]
    >>> rows += [("b", 2, "fresh"), ("b", 3, "left")]
    >>> frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    >>> tally = cf.count(cf.read_history(frame, states))
    >>> seen = observed_retention(tally)  # one customer joined within the window, and left in the next period
    >>> seen.at_risk.tolist(), seen.share.tolist()
    ([1.0, 1.0, 0.0], [1.0, 0.0, nan])
    """
    present, left, joined = _by_age(tally)
    sizes = joined.sum()
    if sizes == 0:
        raise NotIdentified(
            "Nobody is known to have joined within the window, so there is no observed retention. Name the "
            "events that mark a true join ([input] joins), or give a longer history."
        )
    risk = present + left
    risk[0] = present[0]
    hazard = np.divide(left, risk, out=np.zeros(len(risk)), where=risk > 0)
    hazard[0] = 0.0
    share = np.where(np.cumsum(risk == 0) > 0, np.nan, np.cumprod(1 - hazard))
    low, high = _product_limits(risk, left, share, level)
    seen = joined[::-1].cumsum()[::-1] / sizes
    return Observed(risk, left, share, low, high, seen)


def cohort_table(tally: Tally, *, segment: str = "all") -> pd.DataFrame:
    """The table `cohorts`: segment, joined, periods_since_joining, size, live, lost, complete.

    live : there (not in an exit);  lost : in an exit by then;  complete : the age has been reached within the
    window; beyond it the cell is immature and its numbers are missing.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [("a", 1, "fresh"), ("a", 2, "steady"), ("a", 3, "steady")]
    >>> rows += [("b", 2, "fresh"), ("b", 3, "left")]
    >>> frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    >>> tally = cf.count(cf.read_history(frame, states))
    >>> cohort_table(tally)[["joined", "periods_since_joining", "live", "lost", "complete"]].values.tolist()
    [['2', 0, 1, 0, True], ['2', 1, 0, 1, True], ['2', 2, <NA>, <NA>, False]]
    """
    ages = tally.table("ages")
    first, last = tally.meta.first, tally.meta.last
    rows = ages[(ages["kind"] == KINDS.index("joined")) & ages["joined"].between(first, last)]
    span = last - first + 1
    live, gone = np.zeros((span, span)), np.zeros((span, span))
    out = tally.states.exit_mask[rows["state"].to_numpy(dtype=int)]
    cell = (rows["joined"].to_numpy() - first, rows["age"].to_numpy())
    np.add.at(live, cell, np.where(out, 0, rows["n"]))
    np.add.at(gone, cell, np.where(out, rows["n"], 0))
    joined, age = np.indices((span, span))
    complete = joined + age < span
    kept = (live[:, 0] > 0)[joined]
    frame = pd.DataFrame(
        {
            "segment": segment,
            "joined": tally.calendar.labels(joined.ravel() + first),
            "periods_since_joining": age.ravel(),
            "size": live[:, 0].astype(np.int64)[joined].ravel(),
            "live": np.where(complete, live, np.nan).ravel(),
            "lost": np.where(complete, gone.cumsum(axis=1), np.nan).ravel(),
            "complete": complete.ravel(),
        }
    )
    frame = frame.astype({"live": "Int64", "lost": "Int64"})
    return frame[kept.ravel()].reset_index(drop=True)


def _by_age(tally: Tally) -> tuple[Array, Array, Array]:
    """By age 0 .. A: present, left in the period that leads to it, and who joined A - age before the end."""
    ages = tally.table("ages")
    first, last = tally.meta.first, tally.meta.last
    rows = ages[(ages["kind"] == KINDS.index("joined")) & ages["joined"].between(first, last)]
    length = last - first + 1
    gone = tally.states.exit_mask[rows["state"].to_numpy(dtype=int)]
    count = [
        np.bincount(rows["age"][where], weights=rows["n"][where], minlength=length)[:length]
        for where in (~gone, gone)
    ]
    new = rows[(rows["age"] == 0) & ~gone]
    oldest = np.bincount(last - new["joined"], weights=new["n"], minlength=length)[:length]
    return count[0], count[1], oldest


def _product_limits(risk: Array, left: Array, share: Array, level: float) -> tuple[Array, Array]:
    terms = np.divide(left, risk * (risk - left), out=np.zeros(len(risk)), where=(risk > left) & (risk > 0))
    terms[0] = 0.0
    variance = share**2 * np.cumsum(terms)
    spread = share * (1 - share)
    number = np.divide(spread, variance, out=risk.astype(float), where=variance > 0)
    z = special.ndtri((1 + level) / 2)
    with np.errstate(invalid="ignore", divide="ignore"):
        centre = (share + z**2 / (2 * number)) / (1 + z**2 / number)
        half = z / (1 + z**2 / number) * np.sqrt(spread / number + z**2 / (4 * number**2))
    low, high = np.clip(centre - half, 0, 1), np.clip(centre + half, 0, 1)
    low[0] = high[0] = 1.0
    return low, high
