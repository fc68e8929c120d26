"""Retention: the share still there by periods since joining, as the model has it, beside what was observed.

S_a = sum_k e_k P(not in an exit after a periods | joined in k),   e the entry mix
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov.derivative import mix_derivative
from cohortflow.projector import accept
from cohortflow.projector.accept import Array
from cohortflow.projector.bands import drawn_means
from cohortflow.projector.delta import Doubt, doubt_of, interval, quantiles
from cohortflow.projector.mix import filled, walk_on
from cohortflow.projector.observed import Observed, observed_retention
from cohortflow.record import Record, frozen_mapping
from cohortflow.tally import Tally

DRAWS = 400


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

    start : the entry mix, customers by state (default: where a Fit's joiners started, else the entry states)

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
    doubt = doubt_of(model, covariance, draws, rng, level)
    low, high = _limits(schedule, entry, steps, doubt, first_step)
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


def _entry_names(schedule: Schedule, entry: Array) -> list[str]:
    names = schedule.states.names
    return [names[k] for k in np.flatnonzero(entry > 0)]


def _limits(
    schedule: Schedule, entry: Array, periods: int, doubt: Doubt, first_step: int
) -> tuple[Array, Array]:
    gone = schedule.states.exit_mask
    low, high = np.full(periods + 1, np.nan), np.full(periods + 1, np.nan)
    if doubt.draws is not None:
        paths = drawn_means(_joining(doubt.draws), entry, periods, first_step=first_step)
        return quantiles(1.0 - paths[:, :, gone].sum(axis=2), doubt.level)
    if doubt.spread is None:
        return low, high
    inside = (~gone).astype(float)[:, None]
    matrix = filled(schedule.components[0].matrices[0])
    low[0] = high[0] = 1.0
    for age in range(1, periods + 1):
        slope = mix_derivative(matrix, entry, steps=age, weights=inside)
        variance = np.array([doubt.spread.variance(slope.gradient())])
        pair = interval(slope.value, variance, doubt.spread.quantile, "logit")
        low[age], high[age] = pair[0][0], pair[1][0]
    return low, high


def _joining(draws: Draws) -> Draws:
    """The same draws for customers who are new: their start law is the law of joiners."""
    return Draws(draws.schedule, draws.matrices, draws.join, draws.join, draws.part)
