r"""Retention: the share still there by periods since joining, as the model has it and as it was observed.

    model      S_a = sum_k e_k P(not in an exit after a periods | joined in k)
    observed   S_a = prod_{s <= a} (1 - d_s / n_s)      n_s at risk of period s, d_s of them left (product limit)
    interval   Wilson's with the effective number S(1-S) / Var S, Var S = S^2 sum d / (n (n - d)); where nobody has
               left yet, with the number at risk

The observed curve needs no model and stays right when customers differ, as long as leaving the view has nothing
to do with leaving. An age is immature when fewer than half of all who joined are old enough to be seen at it.
Sources: Kaplan & Meier (1958) JASA 53, 457; Greenwood (1926); Rothman (1978) J. Chronic Dis. 31, 557.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd
from scipy import special

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov.derivative import mix_derivative
from cohortflow.projector import accept
from cohortflow.projector.accept import Array, Flags
from cohortflow.projector.bands import drawn_means
from cohortflow.projector.delta import Spread, interval, quantiles
from cohortflow.projector.mix import filled, walk_on
from cohortflow.record import Record, frozen_mapping
from cohortflow.tally import KINDS, Tally

DRAWS = 400


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


@dataclass(frozen=True, repr=False, eq=False)
class Retention(Record):
    """Retention by periods since joining.

    model : (A+1,) for the entry mix;  low, high : its interval;  by_entry : entry state -> (A+1,)
    entry : (K,) the entry mix;  observed : None for a model without counts
    """

    schedule: Schedule
    entry: Array
    model: Array
    low: Array
    high: Array
    by_entry: Mapping[str, Array]
    observed: Observed | None
    level: float
    segment: str = "all"
    kind: ClassVar[str] = "retention"

    def to_frame(self) -> pd.DataFrame:
        """segment, periods_since_joining, at_risk, observed, observed_low, observed_high, model, model_low,
        model_high, immature."""
        ages = len(self.model)
        seen = self.observed

        def column(values: Array | None) -> Array:
            out = np.full(ages, np.nan)
            if values is not None:
                out[: min(ages, len(values))] = values[:ages]
            return out

        immature = np.ones(ages, dtype=bool)
        if seen is not None:
            immature[: min(ages, len(seen.share))] = seen.immature[:ages]
        return pd.DataFrame(
            {
                "segment": self.segment,
                "periods_since_joining": np.arange(ages),
                "at_risk": column(None if seen is None else seen.at_risk),
                "observed": column(None if seen is None else seen.share),
                "observed_low": column(None if seen is None else seen.low),
                "observed_high": column(None if seen is None else seen.high),
                "model": self.model,
                "model_low": self.low,
                "model_high": self.high,
                "immature": immature,
            }
        )

    def headline(self) -> str:
        ages, kind = len(self.model) - 1, self.schedule.calendar.kind
        return f"retention over {ages} periods ({kind}): {self.model[-1]:.1%} by the model at the end"

    def about(self) -> Mapping[str, Any]:
        names = self.schedule.states.names
        return {"level": self.level, "entry": dict(zip(names, self.entry.tolist(), strict=True))}


def retention(
    model: Any,
    *,
    periods: int,
    start: Any = None,
    level: float = 0.90,
    covariance: Any = None,
    draws: Draws | int = DRAWS,
    rng: int | np.random.Generator = 1,
    first_step: int = 0,
    segment: str = "all",
) -> Retention:
    """Retention curve of those who join, by the model, beside the observed one where there are counts.

    start : the entry mix, customers by state (default: where a Fit's joiners started; else the entry states alike)

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> kept = retention(Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]]), periods=3)
    >>> kept.model.round(4)
    array([1.   , 0.8  , 0.72 , 0.648])
    """
    schedule = accept.as_schedule(model)
    states = schedule.states
    if not states.exits:
        raise NotIdentified(
            "Retention needs an exit, and no state of this model is one: name it, States(..., exits=[...])."
        )
    tally, steps = accept.tally_of(model), accept.as_periods(periods)
    entry = entry_mix(tally, start, schedule)
    curve = kept_share(schedule, entry, steps, first_step)
    low, high = _limits(model, schedule, entry, steps, level, covariance, draws, rng, first_step)
    bad = np.isnan(curve)
    alone = {
        name: kept_share(schedule, np.eye(len(states))[states.index(name)], steps, first_step)
        for name in _entry_names(schedule, entry)
    }
    seen = (
        None if tally is None or "ages" not in tally.meta.tables else observed_retention(tally, level=level)
    )
    return Retention(
        schedule, entry, curve, np.where(bad, np.nan, low), np.where(bad, np.nan, high),
        frozen_mapping(alone), seen, level, segment,
    )  # fmt: skip


def entry_mix(tally: Tally | None, start: Any, schedule: Schedule) -> Array:
    """(K,) law of the state that joiners start in."""
    states = schedule.states
    if start is not None:
        counts = accept.opening(None, start, states)
    elif tally is not None and "starts" in tally.meta.tables and tally.joiners()[1].any():
        counts = tally.joiners()[1].sum(axis=0) * ~states.exit_mask
    else:
        counts = states.mask(states.entries or states.live).astype(float)
    if counts.sum() <= 0:
        raise CallError("The entry mix adds up to 0: give start=, customers by the state they join in.")
    return counts / counts.sum()


def kept_share(schedule: Schedule, entry: Array, periods: int, first_step: int = 0) -> Array:
    """(periods + 1,) share not in an exit; NaN from where a row without data comes in."""
    found = walk_on(schedule, schedule.expand(entry, joining=True), periods, None, first_step)
    gone = schedule.states.exit_mask
    lost = found.undefined[:, gone].any(axis=1)
    return np.where(lost, np.nan, 1.0 - np.nan_to_num(found.counts[:, gone]).sum(axis=1))


def observed_retention(tally: Tally, *, level: float = 0.90) -> Observed:
    """The product-limit curve of those who joined within the window (kind joined), with intervals.

    NotIdentified when the counts have no ages, or nobody joined within the window.
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


def _entry_names(schedule: Schedule, entry: Array) -> list[str]:
    names = schedule.states.names
    return [names[k] for k in np.flatnonzero(entry > 0)]


def _limits(
    model: Any,
    schedule: Schedule,
    entry: Array,
    periods: int,
    level: float,
    covariance: Any,
    draws: Draws | int,
    rng: int | np.random.Generator,
    first_step: int,
) -> tuple[Array, Array]:
    states = schedule.states
    nothing = np.full(periods + 1, np.nan)
    accept.as_level(level)
    cov = accept.covariance_of(model, covariance)
    if cov is None:
        drawn = accept.draws_of(model, draws, accept.as_rng(rng), covariance)
        if drawn is None:
            return nothing, nothing
        paths = drawn_means(_joining(drawn), entry, periods, first_step=first_step)
        return quantiles(1.0 - paths[:, :, states.exit_mask].sum(axis=2), level)
    spread = Spread.of(cov, len(states), level)
    inside = (~states.exit_mask).astype(float)[:, None]
    matrix = filled(schedule.components[0].matrices[0])
    low, high = nothing.copy(), nothing.copy()
    low[0] = high[0] = 1.0
    for age in range(1, periods + 1):
        slope = mix_derivative(matrix, entry, steps=age, weights=inside)
        pair = interval(slope.value, np.array([spread.variance(slope.gradient())]), spread.quantile, "logit")
        low[age], high[age] = pair[0][0], pair[1][0]
    return low, high


def _joining(draws: Draws) -> Draws:
    """The same draws for customers who are new: their start law is the law of joiners."""
    return Draws(draws.schedule, draws.matrices, draws.join, draws.join, draws.part)
