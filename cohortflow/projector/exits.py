"""How long customers stay and how they leave, by the state they are in now.

    mean     E T = (N 1)_k               T = periods until the exit, the first one counted
    sd       of T from customer to customer, not the error of the mean
    median   first whole period by which half have left
    which    (N R)_ke

For a model of several matrices or kinds of customers these are those of its unrolled chain, weighted by the
law of a customer who is in the state now. Source: Kemeny & Snell (1960), Finite Markov Chains, ch. 3.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import NotIdentified
from cohortflow.markov.absorption import Absorption, absorb
from cohortflow.markov.derivative import mix_derivative
from cohortflow.markov.exit_derivative import (
    exit_probability_derivative,
    exit_time_derivative,
    exit_variance_derivative,
)
from cohortflow.markov.gradient import Derivative
from cohortflow.markov.powers import first_time
from cohortflow.projector import accept
from cohortflow.projector.accept import Array, Flags
from cohortflow.projector.delta import Doubt, Spread, doubt_of, interval, quantiles
from cohortflow.projector.unroll import Unrolled, drawn_schedule, unroll
from cohortflow.record import Record, frozen_mapping

DRAWS = 400
MEASURES = ("probability", "mean_time", "sd_time", "median_time")
Pair = tuple[Array, Array]


@dataclass(frozen=True, repr=False, eq=False)
class ExitTimes(Record):
    """Time to exit and which exit, from each of the R states that are not exits.

    values : measure -> (R,) periods, or (R, E) for "probability"; NaN where a row without data can be reached
    low, high : the same shapes, NaN where not known;  method : delta | draws | none
    reasons : codes with the state, "never_exits:x", "may_not_exit:x", "rows_without_data:x"
    """

    schedule: Schedule
    values: Mapping[str, Array]
    low: Mapping[str, Array]
    high: Mapping[str, Array]
    level: float
    method: str
    reasons: tuple[str, ...] = ()
    segment: str = "all"
    kind: ClassVar[str] = "exit_times"

    def to_frame(self) -> pd.DataFrame:
        """segment, from, measure, exit, value, low, high; times in periods, exit empty for any exit."""
        states = self.schedule.states
        rows = []
        for r, origin in enumerate(states.remaining):
            for measure in MEASURES:
                exits = states.exits if measure == "probability" else ("",)
                for e, name in enumerate(exits):
                    at = (r, e) if measure == "probability" else (r,)
                    found = (self.values[measure][at], self.low[measure][at], self.high[measure][at])
                    rows.append((self.segment, origin, measure, name, *map(float, found)))
        return pd.DataFrame(rows, columns=["segment", "from", "measure", "exit", "value", "low", "high"])

    def headline(self) -> str:
        size, kind = len(self.schedule.states.remaining), self.schedule.calendar.kind
        return f"time to exit from {size} states, in periods ({kind}), level {self.level:g} ({self.method})"

    def about(self) -> Mapping[str, Any]:
        return {"level": self.level, "method": self.method, "reasons": list(self.reasons)}


def time_to_exit(
    model: Any,
    *,
    level: float = 0.90,
    covariance: Any = None,
    draws: Draws | int = DRAWS,
    rng: int | np.random.Generator = 1,
    base_period: str | int | None = None,
    segment: str = "all",
) -> ExitTimes:
    """Mean, spread and median of the time to exit, and the probability of each exit, by state.

    Intervals: for one chain by the delta method (log scale for times, logit for probabilities) from the Fit's
    covariance or the one given; for other models quantiles over draws. A bare Chain has none (NaN).
    Raises NotIdentified when no state is an exit.

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> stay = time_to_exit(Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]]))
    >>> stay.values["mean_time"], stay.values["median_time"]
    (array([ 9., 10.]), array([6., 7.]))
    """
    schedule = accept.as_schedule(model)
    if not schedule.states.exits:
        raise NotIdentified(
            "Time to exit needs an exit, and no state of this model is one: name it, "
            "States(..., exits=[...])."
        )
    accept.refuse_unknown(schedule, "Time to exit")
    base = accept.base_period(model, None, base_period, schedule.calendar)
    first = accept.first_step(schedule, base)
    chain = unroll(schedule, first_step=first)
    found = absorb(chain.P, chain.exits)
    values = _values(schedule, chain, found)
    doubt = doubt_of(model, covariance, draws, rng, level)
    low, high = _limits(schedule, found, values, doubt, first)
    clouded = chain.undefined()[~schedule.states.exit_mask]
    for table in (values, low, high):
        for numbers in table.values():
            numbers[clouded] = np.nan
    return ExitTimes(
        schedule, frozen_mapping(values), frozen_mapping(low), frozen_mapping(high), level, doubt.method,
        (*_reasons(schedule, chain, found), *(f"rows_without_data:{s}" for s in schedule.unknown)), segment,
    )  # fmt: skip


def _values(schedule: Schedule, chain: Unrolled, found: Absorption) -> dict[str, Array]:
    """Measures by declared state, from those of the unrolled chain."""
    laws = chain.start[~schedule.states.exit_mask][:, list(found.inside)]
    fold = np.eye(len(schedule.states))[chain.report[list(found.exits)]][:, schedule.states.exit_mask]
    mean = weighed(laws, found.mean_time)
    finite = np.where(found.certain, found.mean_time, 0.0)
    second = laws @ (np.where(found.certain, found.variance_time, 0.0) + finite**2)
    spread = np.sqrt(np.maximum(second - (laws @ finite) ** 2, 0.0))
    return {
        "probability": laws @ found.exit_probability @ fold,
        "mean_time": mean,
        "sd_time": np.where(np.isfinite(mean), spread, np.nan),
        "median_time": _medians(chain, chain.start[~schedule.states.exit_mask], found),
    }


def weighed(laws: Array, times: Array) -> Array:
    """laws @ times in which an infinite time counts only where the law is positive."""
    endless = np.isinf(times)
    return np.where((laws[:, endless] > 0).any(axis=1), np.inf, laws @ np.where(endless, 0.0, times))


def _medians(chain: Unrolled, laws: Array, found: Absorption) -> Array:
    inside = list(found.inside)
    ever = laws[:, inside] @ found.exit_probability.sum(axis=1)
    reached = ever > 0.5 + 1e-12
    out = np.full(len(laws), np.inf)
    if reached.any():
        still = 0.5 * (1 + 1e-12)
        out[reached] = first_time(chain.P, laws[reached], lambda mix: mix[:, inside].sum(axis=1) <= still)
    return out


def _limits(
    schedule: Schedule, found: Absorption, values: Mapping[str, Array], doubt: Doubt, first: int
) -> tuple[dict[str, Array], dict[str, Array]]:
    low = {m: np.full_like(v, np.nan) for m, v in values.items()}
    high = {m: v.copy() for m, v in low.items()}
    if doubt.spread is not None:
        _by_delta(found, values, doubt.spread, low, high)
    elif doubt.draws is not None:
        for measure, sample in _drawn(doubt.draws, first).items():
            low[measure], high[measure] = quantiles(sample, doubt.level)
    return low, high


# ---- delta method, for one chain ----
def _by_delta(
    found: Absorption,
    values: Mapping[str, Array],
    spread: Spread,
    low: dict[str, Array],
    high: dict[str, Array],
) -> None:
    exits = list(found.exits)
    low["mean_time"], high["mean_time"] = spread.intervals(exit_time_derivative(found.matrix, exits), "log")
    variance = exit_variance_derivative(found.matrix, exits)
    squared = spread.intervals(variance, "log")
    low["sd_time"], high["sd_time"] = np.sqrt(squared[0]), np.sqrt(squared[1])
    for e, state in enumerate(exits):
        slope = exit_probability_derivative(found.matrix, exits, exit=state)
        low["probability"][:, e], high["probability"][:, e] = _share_limits(slope, spread, len(exits))
    for r, state in enumerate(found.inside):
        times = _median_limits(found, state, values["median_time"][r], spread)
        low["median_time"][r], high["median_time"][r] = times


def _share_limits(slope: Derivative, spread: Spread, exits: int) -> Pair:
    """Logit limits; a single exit that is certain stays certain."""
    low, high = spread.intervals(slope, "logit")
    sure = (slope.value >= 1.0) & (exits == 1)
    return np.where(sure, 1.0, low), np.where(sure, 1.0, high)


def _median_limits(found: Absorption, state: int, median: float, spread: Spread) -> tuple[float, float]:
    """First periods at which the band of the retention curve falls to one half (search by halving)."""
    if not np.isfinite(median):
        return np.nan, np.nan
    inside = np.zeros(len(found.matrix))
    inside[list(found.inside)] = 1.0

    def edge(side: int) -> float:
        def fallen(period: int) -> bool:
            slope = mix_derivative(found.matrix, state, steps=period, weights=inside[:, None])
            value = interval(
                slope.value, np.array([spread.variance(slope.gradient())]), spread.quantile, "logit"
            )
            reached = value[side][0]
            return bool((slope.value[0] if np.isnan(reached) else reached) <= 0.5)

        return _first(fallen, int(median))

    return edge(0), edge(1)


def _first(true_from: Any, guess: int) -> float:
    """The first whole number >= 1 from which a monotone condition holds; inf beyond 64 times the guess."""
    high = max(guess, 1)
    while not true_from(high):
        if high > 64 * max(guess, 1):
            return np.inf
        high *= 2
    low = 0
    while high - low > 1:
        middle = (low + high) // 2
        low, high = (low, middle) if true_from(middle) else (middle, high)
    return float(high)


# ---- draws, for every other model ----
def _drawn(draws: Draws, first: int) -> dict[str, Array]:
    """measure -> (D, R[, E]) values, one a draw."""
    out: dict[str, list[Array]] = {m: [] for m in MEASURES}
    for d in range(draws.size):
        schedule = drawn_schedule(draws, d)
        chain = unroll(schedule, first_step=first)
        for measure, numbers in _values(schedule, chain, absorb(chain.P, chain.exits)).items():
            out[measure].append(numbers)
    return {measure: np.array(numbers) for measure, numbers in out.items()}


def _reasons(schedule: Schedule, chain: Unrolled, found: Absorption) -> list[str]:
    certain = np.ones(len(chain.report), dtype=bool)
    certain[list(found.inside)] = found.certain
    ever = np.ones(len(chain.report))
    ever[list(found.inside)] = found.exit_probability.sum(axis=1)
    out = []
    for name in schedule.states.remaining:
        law = chain.start[schedule.states.index(name)]
        if not _all_certain(law, certain) and not chain.undefined()[schedule.states.index(name)]:
            out.append(f"{'never_exits' if law @ ever == 0 else 'may_not_exit'}:{name}")
    return out


def _all_certain(law: Array, certain: Flags) -> bool:
    return bool(certain[law > 0].all())
