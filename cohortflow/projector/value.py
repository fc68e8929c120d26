"""What customers are worth: by state, for a cohort that joins, for the base; and how customers differ.

How a customer's money is counted stands in money.py.
"""

from __future__ import annotations

from collections.abc import Iterable, Iterator, Mapping
from dataclasses import dataclass, replace
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError
from cohortflow.projector import accept
from cohortflow.projector.accept import Array
from cohortflow.projector.amounts import Amounts, observed_amounts
from cohortflow.projector.delta import Doubt, Spread, doubt_of, interval, quantiles
from cohortflow.projector.money import Terms, Worth, money_terms, value_derivative, worth
from cohortflow.projector.unroll import drawn_schedule, unroll
from cohortflow.record import Record, frozen_mapping
from cohortflow.states import States

DRAWS = 400


@dataclass(frozen=True, repr=False, eq=False)
class Value(Record):
    """Money per customer and in sum.

    customer, spread : (R,) value of a customer now in each state that is not an exit, and its standard
        deviation from customer to customer; NaN with a reason where undefined
    sums : "joining_cohort" and "base" to (value, sd over customers)
    limits : (measure, state) -> (low, high);  horizon : periods, None = for ever
    reasons : "no_exit_no_discount:x", "rows_without_data:x"
    """

    schedule: Schedule
    terms: Terms
    horizon: int | None
    customer: Array
    spread: Array
    sums: Mapping[str, tuple[float, float]]
    limits: Mapping[tuple[str, str], tuple[float, float]]
    level: float
    method: str
    currency: str = ""
    reasons: tuple[str, ...] = ()
    segment: str = "all"
    kind: ClassVar[str] = "value"

    def to_frame(self) -> pd.DataFrame:
        """segment, measure, state, value, low, high, currency.

        Measures: customer_value and customer_sd by state (from moves alone);
        joining_cohort, joining_cohort_sd, base, base_sd.
        """
        names = self.schedule.states.remaining
        cells = [("customer_value", n, v) for n, v in zip(names, self.customer, strict=True)]
        cells += [("customer_sd", n, v) for n, v in zip(names, self.spread, strict=True)]
        for measure, (total, sd) in self.sums.items():
            cells += [(measure, "", total), (f"{measure}_sd", "", sd)]
        nothing = (float("nan"), float("nan"))
        rows = [
            (
                self.segment,
                measure,
                state,
                float(v),
                *self.limits.get((measure, state), nothing),
                self.currency,
            )
            for measure, state, v in cells
        ]
        return pd.DataFrame(rows, columns=["segment", "measure", "state", "value", "low", "high", "currency"])

    def headline(self) -> str:
        until = "for ever" if self.horizon is None else f"over {self.horizon} periods"
        return f"value of a customer {until}, {len(self.customer)} states, in {self.currency or 'money'}"

    def about(self) -> Mapping[str, Any]:
        return {
            "horizon": self.horizon,
            "factor_a_period": self.terms.factor,
            "weight_of_start": self.terms.weight,
            "lag": self.terms.lag,
            "level": self.level,
            "method": self.method,
            "reasons": list(self.reasons),
        }


def value(
    model: Any,
    *,
    per_period: Any,
    margin: float = 1.0,
    on_move: Iterable[Any] = (),
    discount_rate: float = 0.0,
    timing: str = "middle",
    first_period_discounted: bool | None = None,
    horizon: int | None = None,
    start: Any = None,
    joiners: Any = None,
    level: float = 0.90,
    covariance: Any = None,
    draws: Draws | int = DRAWS,
    rng: int | np.random.Generator = 1,
    currency: str = "",
    base_period: str | int | None = None,
    segment: str = "all",
) -> Value:
    """Expected discounted contribution of a customer by state, of a joining cohort, of the base.

    Parameters
    ----------
    per_period : contribution a customer a period by state (states not named: 0); or "observed": the amounts
        of the Fit's tally times `margin`; or Amounts: their error is part of the intervals
    on_move : (from, to, amount) rows, or objects with from_, to, amount
    discount_rate : a year;  timing : "start", "middle" or "end" of the period
    first_period_discounted : True: by one whole period, False: not at all; default: as the timing says
    horizon : periods, None = for ever
    start, joiners : customers by state; give the sums over the base and over one joining cohort

    Intervals: log scale where all amounts are 0 or more, else plain; delta method for one chain, else
    quantiles over draws. NaN where the chain never lets go and nothing is discounted ("no_exit_no_discount").

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> value(chain, per_period={"fresh": 5, "steady": 20}, timing="start").customer  # 5 + .8 x 200; 20 / .1
    array([165., 200.])
    """
    schedule = accept.as_schedule(model)
    accept.refuse_unknown(schedule, "Value")
    base = accept.base_period(model, start, base_period, schedule.calendar)
    first = accept.first_step(schedule, base)
    terms = money_terms(
        schedule.states,
        _observed(model, margin) if isinstance(per_period, str) else per_period,
        on_move=on_move,
        discount_rate=discount_rate,
        periods_a_year=schedule.calendar.per_year,
        timing=timing,
        first_period_discounted=first_period_discounted,
    )
    steps = None if horizon is None else accept.as_periods(horizon)
    people = _people(model, start, joiners, schedule.states)
    found = worth(schedule, terms, horizon=steps, first_step=first)
    figures = _figures(found, people, schedule.states)
    generator = accept.as_rng(rng)
    doubt = doubt_of(model, covariance, draws, generator, level)
    limits = _limits(schedule, terms, steps, people, doubt, first, generator)
    inside = ~schedule.states.exit_mask
    return Value(
        schedule, terms, steps, found.now[inside], found.sd_now[inside],
        {m: (figures[m, ""], figures[f"{m}_sd", ""]) for m in people},
        frozen_mapping({k: limits[k] for k in figures if k in limits and np.isfinite(figures[k])}),
        level, doubt.method, currency, found.reasons, segment,
    )  # fmt: skip


def _observed(model: Any, margin: float) -> Amounts:
    tally = accept.tally_of(model)
    if tally is None:
        raise CallError(
            'per_period="observed" reads the amounts that a Fit\'s tally holds; a bare '
            f"{type(model).__name__} has none. Give amounts by state."
        )
    return observed_amounts(tally, margin=margin)


def _people(model: Any, start: Any, joiners: Any, states: States) -> dict[str, Array]:
    out = {}
    if joiners is not None:
        found = joiners.a_period() if hasattr(joiners, "a_period") else joiners
        out["joining_cohort"] = accept.as_counts(found, states, name="joiners")
    if start is not None or accept.tally_of(model) is not None:
        out["base"] = accept.opening(model, start, states)
    return out


def _figures(found: Worth, people: Mapping[str, Array], states: States) -> dict[tuple[str, str], float]:
    out = {}
    for name in states.remaining:
        out["customer_value", name] = float(found.now[states.index(name)])
        out["customer_sd", name] = float(found.sd_now[states.index(name)])
    for measure, counts in people.items():
        mean, sd = (found.new, found.sd_new) if measure == "joining_cohort" else (found.now, found.sd_now)
        there = counts > 0
        out[measure, ""] = float(counts[there] @ mean[there])
        out[f"{measure}_sd", ""] = float(np.sqrt(counts[there] @ sd[there] ** 2))
    return out


def _limits(
    schedule: Schedule,
    terms: Terms,
    horizon: int | None,
    people: Mapping[str, Array],
    doubt: Doubt,
    first: int,
    rng: np.random.Generator,
) -> dict[tuple[str, str], tuple[float, float]]:
    if doubt.spread is not None:
        return _by_delta(schedule, terms, horizon, people, doubt.spread, first)
    if doubt.draws is None:
        return {}
    samples = []
    for d, money in enumerate(_drawn_terms(terms, doubt.draws.size, rng)):
        found = worth(drawn_schedule(doubt.draws, d), money, horizon=horizon, first_step=first)
        samples.append(_figures(found, people, schedule.states))
    keys = list(samples[0])
    low, high = quantiles(np.array([[s[k] for k in keys] for s in samples]), doubt.level)
    return {k: (float(a), float(b)) for k, a, b in zip(keys, low, high, strict=True)}


def _by_delta(
    schedule: Schedule,
    terms: Terms,
    horizon: int | None,
    people: Mapping[str, Array],
    spread: Spread,
    first: int,
) -> dict[tuple[str, str], tuple[float, float]]:
    states, P = schedule.states, unroll(schedule, first_step=first).P
    slope = value_derivative(P, terms, horizon=horizon)
    scale = "log" if (terms.amounts()[P > 0] >= 0).all() else "plain"
    weights = {("customer_value", n): np.eye(len(states))[states.index(n)] for n in states.remaining}
    weights |= {(measure, ""): counts for measure, counts in people.items()}
    per_unit = _per_unit(schedule, terms, horizon, first) if terms.error is not None else np.zeros(0)
    out = {}
    for key, w in weights.items():
        there = w > 0
        mean = w[there] @ slope.value[there]
        if not np.isfinite(mean):
            continue
        variance = spread.variance(slope.along(w))
        if terms.error is not None:
            by_price = w @ per_unit
            variance += by_price @ terms.error @ by_price
        low, high = interval(np.array([mean]), np.array([variance]), spread.quantile, scale)
        out[key] = (float(low[0]), float(high[0]))
    return out


def _per_unit(schedule: Schedule, terms: Terms, horizon: int | None, first: int) -> Array:
    """(K, K) value in row's state of one unit of money a period in column's; undefined ones count 0."""
    units = np.eye(len(schedule.states))
    nothing = np.zeros_like(terms.on_move)
    found = [
        worth(schedule, replace(terms, per_period=u, on_move=nothing), horizon=horizon, first_step=first).now
        for u in units
    ]
    return np.nan_to_num(np.column_stack(found))


def _drawn_terms(terms: Terms, size: int, rng: np.random.Generator) -> Iterator[Terms]:
    """The terms of each draw: amounts scatter by their error where they were estimated."""
    if terms.error is None:
        yield from (terms for _ in range(size))
        return
    for amounts in rng.multivariate_normal(terms.per_period, terms.error, size):
        yield replace(terms, per_period=amounts)
