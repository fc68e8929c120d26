"""Churn, retention and return, period by period, with formula and denominator: as counted and as forecast.

    churn      left in the period / at risk: there (live or away) at the end of the one before, and seen again
    retention  1 - churn
    return     came back in the period / had left by the end of the period before and not come back
    churn_year, retention_year   the rate kept up for a year, compounded: 1 - (1 - churn)^(periods a year)

Renewal (renewed / due) needs to know who is due; counts do not, so it is not here.
Interval: Wilson (1927) for what was counted, the projection's draws for what is forecast.
"""

from __future__ import annotations

from collections.abc import Sequence

import numpy as np
import pandas as pd
from scipy import special

from cohortflow.projector.accept import Array, as_level
from cohortflow.projector.bands import quantile_band
from cohortflow.projector.projection import Projection
from cohortflow.projector.rollforward import counted_lines
from cohortflow.tally import ENDS, Tally

COLUMNS = [
    "segment", "period", "kind", "measure", "exit", "numerator", "denominator", "value", "low", "high"
]  # fmt: skip


def rates_actual(tally: Tally, *, level: float = 0.90, segment: str = "all") -> pd.DataFrame:
    """The table `rates`, kind actual: one row a period, measure and exit (exit empty: all together).

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [("a", 1, "fresh"), ("a", 2, "steady"), ("a", 3, "steady")]
    >>> rows += [("b", 2, "fresh"), ("b", 3, "left")]
    >>> frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    >>> tally = cf.count(cf.read_history(frame, states))
    >>> third = rates_actual(tally).query("period == '3' and measure == 'churn' and exit == ''")
    >>> third[["numerator", "denominator", "value"]].values.tolist()
    [[1.0, 2.0, 0.5]]
    """
    states, first, last = tally.states, tally.meta.first, tally.meta.last
    labels = tally.calendar.labels(np.arange(first + 1, last + 1))
    lines = counted_lines(tally)
    remaining = ~states.exit_mask
    risk = lines.flows[:, remaining].sum(axis=(1, 2))
    gone = {name: lines.flows[:, remaining, states.index(name)].sum(axis=1) for name in states.exits}
    left = sum(gone.values(), np.zeros(len(risk), dtype=np.int64))
    table = [("churn", "", left, risk), ("retention", "", risk - left, risk)]
    table += [("churn", name, count, risk) for name, count in gone.items()]
    if "starts" in tally.meta.tables:
        table.append(("return", "", lines.inflow["returned"].sum(axis=1), _away_for_good(tally)))
    frames = [_rows(m, e, n, d, labels, level, segment) for m, e, n, d in table]
    return _ordered(frames, tally.calendar.per_year)


def rates_forecast(projection: Projection) -> pd.DataFrame:
    """The table `rates`, kind forecast: expected numerator over expected denominator, band from the draws.

    >>> from cohortflow import Chain, States
    >>> from cohortflow.projector import project
    >>> states = States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> chain = Chain(states, [[0, 0.8, 0.2], [0, 0.9, 0.1], [0, 0, 1]])
    >>> rates = rates_forecast(project(chain, start={"fresh": 10, "steady": 30}, periods=1))
    >>> churn = rates.query("measure == 'churn' and exit == ''")
    >>> churn[["numerator", "denominator"]].round(6).values.tolist()
    [[5.0, 40.0]]
    """
    states = projection.schedule.states
    labels = projection.labels[1:]
    base = (~states.exit_mask).astype(float)
    risk = _product(projection.mean[:-1], base)
    at_risk = _product(projection.simulated[:, :-1], base)
    frames = []
    for exits, name in [(states.exits, ""), *(((e,), e) for e in states.exits)]:
        mask = states.mask(exits).astype(float)
        lost = np.diff(_product(projection.mean, mask))
        drawn = np.diff(_product(projection.simulated, mask), axis=1)
        share = np.divide(drawn, at_risk, out=np.full_like(drawn, np.nan), where=at_risk > 0)
        low, high = quantile_band(share, projection.level)
        found = _frame("churn", name, lost, risk, lost / np.where(risk > 0, risk, np.nan), low, high, labels)
        frames.append(found.assign(segment=projection.segment, kind="forecast"))
    return _ordered([*frames, _complement(frames[0])], projection.schedule.calendar.per_year)


def wilson(numerator: Array, denominator: Array, level: float) -> tuple[Array, Array]:
    """Wilson's limits of numerator / denominator; NaN where nobody was at risk.

    >>> low, high = wilson(np.array([81]), np.array([263]), 0.95)
    >>> low.round(4), high.round(4)  # Newcombe (1998), Table I
    (array([0.2553]), array([0.3662]))
    """
    z2 = special.ndtri((1 + as_level(level)) / 2) ** 2
    n = np.where(denominator > 0, denominator, np.nan)
    p = numerator / n
    centre, half = p + z2 / (2 * n), np.sqrt(z2 * (p * (1 - p) / n + z2 / (4 * n**2)))
    return np.maximum((centre - half) / (1 + z2 / n), 0.0), np.minimum((centre + half) / (1 + z2 / n), 1.0)


def _away_for_good(tally: Tally) -> Array:
    """Who had left by the end of each period before and had not come back, over first+1 .. last."""
    moves = tally.table("moves")
    exits = moves[moves["end"] == ENDS.index("exit")]
    first, last = tally.meta.first, tally.meta.last
    left = np.array([exits.loc[exits["period"] <= p, "n"].sum() for p in range(first, last)], dtype=np.int64)
    starts = tally.table("starts")
    back = starts[starts["kind"] == 1]
    returned = np.array(
        [back.loc[back["period"] <= p, "n"].sum() for p in range(first, last)], dtype=np.int64
    )
    return left - returned


def _rows(
    measure: str,
    exit_name: str,
    numerator: Array,
    denominator: Array,
    labels: Sequence[str | None],
    level: float,
    segment: str,
) -> pd.DataFrame:
    low, high = wilson(numerator, denominator, level)
    value = numerator / np.where(denominator > 0, denominator, np.nan)
    return _frame(measure, exit_name, numerator, denominator, value, low, high, labels).assign(
        segment=segment, kind="actual"
    )


def _frame(
    measure: str, exit_name: str, numerator: Array, denominator: Array, value: Array, low: Array, high: Array,
    labels: Sequence[str | None],
) -> pd.DataFrame:  # fmt: skip
    return pd.DataFrame(
        {
            "period": labels,
            "measure": measure,
            "exit": exit_name,
            "numerator": numerator,
            "denominator": denominator,
            "value": value,
            "low": low,
            "high": high,
        }
    )


def _complement(churn: pd.DataFrame) -> pd.DataFrame:
    """Retention rows out of churn rows."""
    return churn.assign(
        measure="retention",
        numerator=churn["denominator"] - churn["numerator"],
        value=1 - churn["value"],
        low=1 - churn["high"],
        high=1 - churn["low"],
    )


def _ordered(frames: list[pd.DataFrame], per_year: float) -> pd.DataFrame:
    whole = pd.concat(frames, ignore_index=True)
    if np.isfinite(per_year) and per_year != 1:
        yearly = whole[whole["measure"].isin(["churn", "retention"]) & (whole["exit"] == "")].copy()
        lost = yearly["measure"] == "churn"
        for column in ("value", "low", "high"):
            kept = np.where(lost, 1 - yearly[column], yearly[column]) ** per_year
            yearly[column] = np.where(lost, 1 - kept, kept)
        whole = pd.concat([whole, yearly.assign(measure=yearly["measure"] + "_year")], ignore_index=True)
    return whole[COLUMNS]


def _product(values: Array, weight: Array) -> Array:
    return values[..., weight != 0].sum(axis=-1)
