"""Money that comes in a period: its roll-forward by cause, and how much of it is kept.

    opening + joined + returned + moved_up - moved_down - lost + price_change = closing       (of each period)
    net revenue retention    sum_ij x_i (P^w)_ij r_j / sum_i x_i r_i          exits pay nothing
    gross revenue retention  sum_ij x_i (P^w)_ij min(r_i, r_j) / sum_i x_i r_i   never more than was paid

x is the cohort (who was there at the opening), w the window in periods, r the money of a customer in a state
for one period. Both compare two points in time; the denominator is the cohort's money at the opening.
"""

from __future__ import annotations

from collections.abc import Iterable
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.chain import Draws, Schedule
from cohortflow.errors import CallError, NotIdentified
from cohortflow.markov.derivative import mix_derivative
from cohortflow.projector import accept
from cohortflow.projector.accept import Array
from cohortflow.projector.bands import drawn_means
from cohortflow.projector.delta import Doubt, doubt_of, interval, quantiles
from cohortflow.projector.mix import filled, walk
from cohortflow.projector.money import amounts_by_state
from cohortflow.projector.projection import Projection
from cohortflow.projector.rollforward import Lines, counted_lines, forecast_causes
from cohortflow.states import States
from cohortflow.tally import Tally

DRAWS = 400
COLUMNS = ["segment", "period", "kind", "line", "exit", "amount", "currency"]


def revenue_forecast(projection: Projection, per_period: Any, *, currency: str = "") -> pd.DataFrame:
    """Expected money of each period ahead by cause: segment, period, kind, line, exit, amount, currency.

    >>> from cohortflow import Chain, States
    >>> from cohortflow.projector import project
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> ahead = project(chain, start={"fresh": 10, "steady": 10}, periods=1)
    >>> lines = revenue_forecast(ahead, {"fresh": 5, "steady": 20})
    >>> dict(zip(lines["line"], lines["amount"]))  # 50 + 200; 8 x 15 up; 2 x 5 + 1 x 20 lost; 17 x 20
    ... # doctest: +NORMALIZE_WHITESPACE
    {'opening': 250.0, 'joined': 0.0, 'returned': 0.0, 'moved_up': 120.0, 'moved_down': 0.0, 'lost': 30.0,
     'price_change': 0.0, 'closing': 340.0}
    """
    states, steps = projection.schedule.states, projection.periods
    prices = np.tile(amounts_by_state(per_period, states), (steps + 1, 1))
    counted = forecast_causes(projection.walk, projection.joiners, projection.adjusted)
    frame = _lines(states, counted, prices, projection.labels[1:])
    return frame.assign(segment=projection.segment, kind="forecast", currency=currency)[COLUMNS]


def revenue_actual(
    tally: Tally, per_period: Any = None, *, margin: float = 1.0, currency: str = "", segment: str = "all"
) -> pd.DataFrame:
    """Money of each counted period by cause; `per_period` None: the average amounts of each period and state.

    With observed amounts a change of what a state pays stands as price_change (closing customers, new less
    old amount); where a state had nobody, its last known amount holds.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [("a", 1, "fresh"), ("a", 2, "steady"), ("a", 3, "steady")]
    >>> rows += [("b", 2, "fresh"), ("b", 3, "left")]
    >>> frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    >>> tally = cf.count(cf.read_history(frame, states))
    >>> lines = revenue_actual(tally, {"fresh": 5, "steady": 20}).query("period == '3' and amount > 0")
    >>> dict(zip(lines["line"], lines["amount"]))
    {'opening': 25.0, 'lost': 5.0, 'closing': 20.0}
    """
    states, length = tally.states, tally.meta.last - tally.meta.first + 1
    if per_period is None:
        prices = _observed_prices(tally, margin)
    else:
        prices = np.tile(amounts_by_state(per_period, states), (length, 1))
    labels = tally.calendar.labels(np.arange(tally.meta.first + 1, tally.meta.last + 1))
    frame = _lines(states, counted_lines(tally), prices, labels)
    return frame.assign(segment=segment, kind="actual", currency=currency)[COLUMNS]


def revenue_retention(
    model: Any,
    per_period: Any,
    *,
    window: int = 12,
    start: Any = None,
    level: float = 0.90,
    covariance: Any = None,
    draws: Draws | int = DRAWS,
    rng: int | np.random.Generator = 1,
    base_period: str | int | None = None,
    segment: str = "all",
) -> pd.DataFrame:
    """Expected gross and net revenue retention of the base over `window` periods, with intervals.

    Columns: segment, cohort (base period), window, kind, measure (gross, net), numerator, denominator, value,
    low, high. Raises NotIdentified when the base pays nothing.

    >>> from cohortflow import Chain, States
    >>> states = States(["small", "large", "left"], exits=["left"])
    >>> chain = Chain(states, [[0.7, 0.2, 0.1], [0.1, 0.8, 0.1], [0, 0, 1]])
    >>> base = {"small": 30, "large": 10}
    >>> kept = revenue_retention(chain, {"small": 10, "large": 30}, window=1, start=base)
    >>> kept["value"].round(4).tolist()  # gross 270 + 10 + 240 of 600; net 390 + 250
    [0.8667, 1.0667]
    """
    schedule = accept.as_schedule(model)
    states = schedule.states
    counts = accept.opening(model, start, states)
    money = amounts_by_state(per_period, states)
    base = accept.base_period(model, start, base_period, schedule.calendar)
    first = accept.first_step(schedule, base)
    steps = accept.as_periods(window)
    if not counts @ money > 0:
        raise NotIdentified("The base pays nothing at the opening, so nothing of it can be kept.")
    weights = {"gross": np.minimum.outer(money, money), "net": np.tile(money, (len(money), 1))}
    weights = {m: counts[:, None] * w / (counts @ money) for m, w in weights.items()}
    law = later(schedule, counts, steps, first)
    doubt = doubt_of(model, covariance, draws, rng, level)
    rows = []
    for measure, w in weights.items():
        value = float(np.where(w != 0, law * w, 0.0).sum())
        low, high = _kept_limits(schedule, w, value, steps, doubt, first)
        rows.append((measure, value * (counts @ money), counts @ money, value, low, high))
    frame = pd.DataFrame(rows, columns=["measure", "numerator", "denominator", "value", "low", "high"])
    cohort = None if base is None else schedule.calendar.label(base)
    frame = frame.assign(segment=segment, cohort=cohort, window=steps, kind="forecast")
    return frame[["segment", "cohort", "window", "kind", *frame.columns[:6]]]


def revenue_retention_actual(
    tally: Tally, per_period: Any, *, window: int = 12, segment: str = "all"
) -> pd.DataFrame:
    """Gross and net revenue retention of every counted cohort that was followed for `window` periods.

    Cohort: customers there at the end of the period and followed to its end (their stay's exit included); a
    return counts as a new customer. CallError when the counts hold no moves over so many periods.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [("a", 1, "fresh"), ("a", 2, "steady"), ("a", 3, "steady")]
    >>> rows += [("b", 2, "fresh"), ("b", 3, "left")]
    >>> frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    >>> tally = cf.count(cf.read_history(frame, states))
    >>> kept = revenue_retention_actual(tally, {"fresh": 5, "steady": 20}, window=1)
    >>> kept.query("cohort == '2'")[["measure", "value"]].values.tolist()  # 20 of 25
    [['gross', 0.8], ['net', 0.8]]
    """
    steps = tally.table("steps")
    found = steps[steps["k"] == window]
    if not len(found):
        known = sorted(steps["k"].unique())
        raise CallError(f"These counts hold no states {window} periods apart; they hold {known}.")
    money = amounts_by_state(per_period, tally.states)
    before, after = money[found["state"].to_numpy()], money[found["later"].to_numpy()]
    parts = {"gross": np.minimum(before, after), "net": after}
    frames = []
    for measure, kept in parts.items():
        sums = found.assign(numerator=kept * found["n"], denominator=before * found["n"])
        frames.append(
            sums.groupby("period")[["numerator", "denominator"]].sum().assign(measure=measure).reset_index()
        )
    frame = pd.concat(frames, ignore_index=True)
    paid = frame["denominator"].where(frame["denominator"] > 0)
    frame = frame.assign(
        segment=segment,
        cohort=tally.calendar.labels(frame["period"].to_numpy()),
        window=window,
        kind="actual",
        value=frame["numerator"] / paid,
    )
    return frame[["segment", "cohort", "window", "kind", "measure", "numerator", "denominator", "value"]]


def later(schedule: Schedule, counts: Array, periods: int, first_step: int) -> Array:
    """(K, K) law of the state `periods` later for a customer in each state that holds somebody; else 0."""
    out = np.zeros((len(counts), len(counts)))
    for state in np.flatnonzero(counts):
        unit = np.eye(len(counts))[state]
        out[state] = walk(schedule, unit, periods, first_step=first_step).counts[-1]
    return out


def _lines(states: States, counted: Lines, prices: Array, labels: Iterable[str | None]) -> pd.DataFrame:
    """period, line, exit, amount; prices (T+1, K) of the opening and of each period."""
    stay = ~states.exit_mask
    old, new = prices[:-1] * stay, prices[1:] * stay
    gain = old[:, None, :] - old[:, :, None]
    within = counted.flows * gain * (stay[:, None] & stay[None, :])
    # np.where keeps NaN (states without data) out of what is worth nothing
    table: list[tuple[str, str, Array]] = [("opening", "", _paid(counted.opening, old))]
    table += [(line, "", _paid(v, old)) for line, v in counted.inflow.items()]
    table.append(("moved_up", "", np.maximum(within, 0.0).sum(axis=(1, 2))))
    table.append(("moved_down", "", np.maximum(-within, 0.0).sum(axis=(1, 2))))
    for name in states.exits:
        table.append(("lost", name, _paid(counted.flows[:, :, states.index(name)], old)))
    table += [(line, "", _paid(v, old)) for line, v in counted.outflow.items()]
    table.append(("price_change", "", _paid(counted.closing, new - old)))
    table.append(("closing", "", _paid(counted.closing, new)))
    blocks = [
        pd.DataFrame(
            {"period": list(labels), "line": line, "exit": leaving, "amount": v, "order": range(len(v))}
        )
        for line, leaving, v in table
    ]
    whole = pd.concat(blocks, ignore_index=True).sort_values("order", kind="stable", ignore_index=True)
    return whole.drop(columns="order")


def _paid(customers: Array, money: Array) -> Array:
    """(T,) sums of customers times money, in which a missing number counts only where money flows."""
    return np.where(money != 0, customers * money, 0.0).sum(axis=1)


def _observed_prices(tally: Tally, margin: float) -> Array:
    rows = tally.table("amounts")
    length, size = tally.meta.last - tally.meta.first + 1, len(tally.states)
    number, total = np.zeros((length, size)), np.zeros((length, size))
    kept = rows[rows["period"].between(tally.meta.first, tally.meta.last)]
    where = (kept["period"].to_numpy() - tally.meta.first, kept["state"].to_numpy())
    np.add.at(number, where, kept["n"])
    np.add.at(total, where, kept["total"] * margin / tally.meta.amount_scale)
    mean = pd.DataFrame(np.divide(total, number, out=np.full_like(total, np.nan), where=number > 0))
    return mean.ffill().bfill().fillna(0.0).to_numpy()


def _kept_limits(
    schedule: Schedule, weights: Array, value: float, periods: int, doubt: Doubt, first_step: int
) -> tuple[float, float]:
    origins = np.flatnonzero((weights != 0).any(axis=1))
    if doubt.spread is not None:
        matrix = filled(schedule.components[0].matrices[0])
        gradient = np.zeros_like(matrix)
        for i in origins:
            gradient += mix_derivative(matrix, i, steps=periods, weights=weights[i][:, None]).gradient()
        variance = np.array([doubt.spread.variance(gradient)])
        low, high = interval(np.array([value]), variance, doubt.spread.quantile, "log")
        return float(low[0]), float(high[0])
    if doubt.draws is None:
        return np.nan, np.nan
    sample = np.zeros(doubt.draws.size)
    for i in origins:
        unit = np.eye(len(weights))[i]
        sample += drawn_means(doubt.draws, unit, periods, first_step=first_step)[:, -1] @ weights[i]
    low, high = quantiles(sample[:, None], doubt.level)
    return float(low[0]), float(high[0])
