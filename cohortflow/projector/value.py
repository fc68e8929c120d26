r"""What customers are worth: by state, for a cohort that joins, for the base; and how customers differ.

Period p (p = 1, 2, ...) runs from the end of period p-1 to its own end and pays

    y_ij = w r_i + (1 - w) r_j + g_ij          i at its start, j at its end; r per period, g on the move
    timing  start w = 1,  middle w = 1/2,  end w = 0

discounted by b^(p - 1 + lag), b = (1 + rate)^(-1 / periods a year); lag 0, 1/2 or 1 as the timing says, or 1 / 0
when the first period is said to be discounted by a whole period or not at all. With rho_i = sum_j p_ij y_ij:

    V = rho + b P V_next                       finite horizon: V_H = 0;  for ever: (I - b P) V = rho
    S = sum_j p_ij (y^2 + 2 b y V_j) + b^2 P S    second moment of one customer's total
    dV_a / dP_ij = M_ai (y_ij + b V_j)         M expected discounted visits

Without a discount the value for ever exists only where whoever never leaves costs and brings nothing.
Sources: Howard (1960), Dynamic Programming and Markov Processes; Pfeifer & Carraway (2000) J. Interactive
Marketing 14(2); Sobel (1982) J. Appl. Prob. 19 (spread of the discounted total).
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError, listed, nearest
from cohortflow.markov.gradient import Derivative
from cohortflow.markov.structure import analyse, leads_to
from cohortflow.projector import accept
from cohortflow.projector.accept import Array, Flags
from cohortflow.projector.delta import Spread, interval, quantiles
from cohortflow.projector.unroll import drawn_schedule, unroll
from cohortflow.record import Record, frozen_mapping
from cohortflow.states import States

TIMINGS = {"start": (1.0, 0.0), "middle": (0.5, 0.5), "end": (0.0, 1.0)}
DRAWS = 400


@dataclass(frozen=True, eq=False)
class Terms:
    """How money is counted.

    per_period : (K,) contribution a customer a period;  on_move : (K, K) amount paid on a move
    factor : discount factor a period, 1 = none;  weight : w, share of the state at the period's start
    lag : periods by which the first period's money is discounted
    """

    per_period: Array
    on_move: Array
    factor: float = 1.0
    weight: float = 0.5
    lag: float = 0.5

    def amounts(self) -> Array:
        """(K, K) y_ij."""
        return (
            self.weight * self.per_period[:, None] + (1 - self.weight) * self.per_period[None] + self.on_move
        )


def money_terms(
    states: States,
    per_period: Any,
    *,
    on_move: Iterable[Any] = (),
    discount_rate: float = 0.0,
    periods_a_year: float = 1.0,
    timing: str = "middle",
    first_period_discounted: bool | None = None,
) -> Terms:
    """Terms from amounts by state, (from, to, amount) moves, a yearly rate and the timing; see `value`.

    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> round(money_terms(states, {"steady": 20}, discount_rate=0.1, timing="end").factor, 6)
    0.909091
    """
    if timing not in TIMINGS:
        raise CallError(f'Unknown timing "{timing}"{nearest(timing, TIMINGS)}. Allowed: {listed(TIMINGS)}.')
    if not np.isfinite(discount_rate) or discount_rate <= -1:
        raise CallError(f"discount_rate is {discount_rate!r}; it is a yearly rate above -1, such as 0.08.")
    if discount_rate and not np.isfinite(periods_a_year):
        raise CallError(
            "These periods are plain steps without a length; a yearly discount_rate needs a calendar."
        )
    weight, lag = TIMINGS[timing]
    if first_period_discounted is not None:
        lag = 1.0 if first_period_discounted else 0.0
    factor = (1.0 + discount_rate) ** (-1.0 / periods_a_year) if discount_rate else 1.0
    return Terms(_by_state(per_period, states), _by_move(on_move, states), factor, weight, lag)


@dataclass(frozen=True, repr=False, eq=False)
class Value(Record):
    """Money per customer and in sum.

    customer, spread : (R,) value of a customer now in each state that is not an exit, and its standard deviation
        from customer to customer; NaN with a reason where undefined
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

        Measures: customer_value and customer_sd by state; joining_cohort, joining_cohort_sd, base, base_sd.
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
    per_period : contribution a customer a period by state (states not named: 0)
    on_move : (from, to, amount) rows, or objects with from_, to, amount
    discount_rate : a year;  timing : "start", "middle" or "end" of the period
    first_period_discounted : True: its money is discounted by one whole period, False: not at all; default by timing
    horizon : periods, None = for ever
    start, joiners : customers by state; give the sums over the base and over one joining cohort

    Intervals: log scale where all amounts are 0 or more, else plain; delta method for one chain, else quantiles
    over draws. NaN where the chain never lets go and nothing is discounted ("no_exit_no_discount").

    >>> from cohortflow import Chain, States
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> value(chain, per_period={"fresh": 5, "steady": 20}, timing="start").customer  # 5 + .8 x 200; 20 / .1
    array([165., 200.])
    """
    schedule = accept.as_schedule(model)
    accept.refuse_unknown(schedule, "Value")
    accept.as_level(level)
    base = accept.base_period(model, start, base_period, schedule.calendar)
    first = accept.first_step(schedule, base)
    terms = money_terms(
        schedule.states,
        per_period,
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
    limits, method = _limits(model, schedule, terms, steps, people, covariance, draws, rng, level, first)
    inside = ~schedule.states.exit_mask
    return Value(
        schedule, terms, steps, found.now[inside], found.sd_now[inside],
        {m: (figures[m, ""], figures[f"{m}_sd", ""]) for m in people},
        frozen_mapping({k: limits[k] for k in figures if k in limits and np.isfinite(figures[k])}),
        level, method, currency, found.reasons, segment,
    )  # fmt: skip


@dataclass(frozen=True, eq=False)
class Worth:
    """(K,) value and standard deviation of a customer now in, or newly in, each declared state."""

    now: Array
    sd_now: Array
    new: Array
    sd_new: Array
    reasons: tuple[str, ...]


def worth(schedule: Schedule, terms: Terms, *, horizon: int | None, first_step: int = 0) -> Worth:
    """Values by declared state for any Schedule, from its unrolled chain (see the module text)."""
    chain = unroll(schedule, first_step=first_step)
    y = terms.amounts()[np.ix_(chain.report, chain.report)]
    if horizon is None:
        mean, second, endless = _for_ever(chain.P, y, terms.factor)
    else:
        mean, second = _until(chain.P, y, terms.factor, horizon)
        endless = np.zeros(len(mean), dtype=bool)
    scale = terms.factor**terms.lag
    out = []
    for laws in (chain.start, chain.join):
        lost = ((laws > 0) @ chain.clouded) | ((laws > 0) @ endless)
        v = laws @ np.where(endless, 0.0, mean)
        s = laws @ np.where(endless, 0.0, second)
        out += [np.where(lost, np.nan, x) for x in (scale * v, scale * np.sqrt(np.maximum(s - v**2, 0.0)))]
    names = schedule.states.names
    unclear = chain.undefined()
    stuck = [n for k, n in enumerate(names) if chain.start[k][endless].any() and not unclear[k]]
    reasons = [f"no_exit_no_discount:{n}" for n in stuck if n not in schedule.states.exits]
    return Worth(*out, (*reasons, *(f"rows_without_data:{s}" for s in schedule.unknown)))


def value_derivative(P: Array, terms: Terms, *, horizon: int | None) -> Derivative:
    """Of the value from each of the K states of one chain with respect to P; NaN targets where undefined."""
    y, b, scale = terms.amounts(), terms.factor, terms.factor**terms.lag
    if horizon is None:
        mean, _, endless = _for_ever(P, y, b)
        kept = ~endless & ~_settled(P, y, b)
        visits = np.zeros_like(P)
        visits[np.ix_(kept, kept)] = np.linalg.inv(np.eye(int(kept.sum())) - b * P[np.ix_(kept, kept)])
        visits[endless] = np.nan
        ahead = np.where(endless, 0.0, mean)
        return Derivative(scale * mean, scale * visits[None], b * ahead[None, None], scale * visits, y)
    values, powers = [np.zeros(len(P))], [np.eye(len(P))]
    for _ in range(horizon):
        values.append((P * y).sum(axis=1) + b * P @ values[-1])
        powers.append(b * powers[-1] @ P)
    left = scale * np.stack(powers[:horizon])
    right = b * np.stack(values[horizon - 1 :: -1])[:, None, :]
    return Derivative(scale * values[-1], left, right, left.sum(axis=0), y)


# ---- mean and second moment ----
def _until(P: Array, y: Array, b: float, horizon: int) -> tuple[Array, Array]:
    mean, second = np.zeros(len(P)), np.zeros(len(P))
    for _ in range(horizon):
        second = (P * (y**2 + 2 * b * y * mean[None])).sum(axis=1) + b**2 * P @ second
        mean = (P * y).sum(axis=1) + b * P @ mean
    return mean, second


def _for_ever(P: Array, y: Array, b: float) -> tuple[Array, Array, Flags]:
    """(mean, second moment, flags of states without a value)."""
    done = _settled(P, y, b)
    moves = P > 0
    stuck = [g for g in analyse(P).closed if not done[list(g)].all()] if b >= 1 else []
    endless = leads_to(moves, [s for g in stuck for s in g]) if stuck else np.zeros(len(P), dtype=bool)
    kept = ~endless & ~done
    rows = np.ix_(kept, kept)
    mean, second = np.zeros(len(P)), np.zeros(len(P))
    one = np.eye(int(kept.sum()))
    mean[kept] = np.linalg.solve(one - b * P[rows], (P * y).sum(axis=1)[kept])
    money = (P * (y**2 + 2 * b * y * mean[None])).sum(axis=1)
    second[kept] = np.linalg.solve(one - b**2 * P[rows], money[kept])
    mean[endless] = second[endless] = np.nan
    return mean, second, endless


def _settled(P: Array, y: Array, b: float) -> Flags:
    """Closed groups in which no money flows: their value is 0, with or without a discount."""
    flows = (P > 0) & (y != 0)
    out = np.zeros(len(P), dtype=bool)
    if b < 1:
        return out
    for group in analyse(P).closed:
        out[list(group)] = not flows[np.ix_(group, group)].any()
    return out


# ---- figures and their limits ----
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
    model: Any,
    schedule: Schedule,
    terms: Terms,
    horizon: int | None,
    people: Mapping[str, Array],
    covariance: Any,
    draws: Draws | int,
    rng: int | np.random.Generator,
    level: float,
    first: int,
) -> tuple[dict[tuple[str, str], tuple[float, float]], str]:
    states = schedule.states
    cov = accept.covariance_of(model, covariance)
    if cov is not None:
        spread = Spread.of(cov, len(states), level)
        return _by_delta(schedule, terms, horizon, people, spread, first), "delta"
    drawn = accept.draws_of(model, draws, accept.as_rng(rng), covariance)
    if drawn is None:
        return {}, "none"
    samples = []
    for d in range(drawn.size):
        found = worth(drawn_schedule(drawn, d), terms, horizon=horizon, first_step=first)
        samples.append(_figures(found, people, states))
    keys = list(samples[0])
    low, high = quantiles(np.array([[s[k] for k in keys] for s in samples]), level)
    return {k: (float(a), float(b)) for k, a, b in zip(keys, low, high, strict=True)}, "draws"


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
    out = {}
    for key, w in weights.items():
        there = w > 0
        mean = w[there] @ slope.value[there]
        if not np.isfinite(mean):
            continue
        low, high = interval(
            np.array([mean]), np.array([spread.variance(slope.along(w))]), spread.quantile, scale
        )
        out[key] = (float(low[0]), float(high[0]))
    return out


# ---- the amounts as given ----
def _by_state(per_period: Any, states: States) -> Array:
    out = np.zeros(len(states))
    if isinstance(per_period, (Mapping, pd.Series)):
        for name, amount in per_period.items():
            out[states.index(str(name))] = float(amount)
    else:
        out = np.array(per_period, dtype=float)
    if out.shape != (len(states),) or not np.isfinite(out).all():
        raise CallError(
            f"per_period takes an amount by state name, or one finite number for each of the {len(states)} "
            f"states; got shape {out.shape}."
        )
    return out


def _by_move(on_move: Iterable[Any], states: States) -> Array:
    table = np.array(on_move, dtype=float) if isinstance(on_move, np.ndarray) else None
    if table is not None and table.shape == (len(states), len(states)):
        return table
    out = np.zeros((len(states), len(states)))
    for row in on_move:
        origin, target, amount = (row.from_, row.to, row.amount) if hasattr(row, "from_") else tuple(row)
        out[states.index(str(origin)), states.index(str(target))] += float(amount)
    return out
