"""How forecasts did: what was forecast against what has been counted since, against the budget, and how often
the bands held.

    difference = actual - forecast        relative = difference / forecast        inside: low <= actual <= high

Exits: customers lost since the forecast's opening. A 90 % band that is honest holds in about 90 % of many
forecasts; those made from one origin share their luck, so that the interval of the share, made as if they were
independent, is too narrow.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.errors import NotIdentified
from cohortflow.estimator.interval import clopper_pearson
from cohortflow.projector import rollforward_actual
from cohortflow.runs.opened import OpenRun
from cohortflow.states import ALL_LIVE
from cohortflow.tally import Tally

OUTCOME = [
    "run", "period", "periods_ahead", "quantity", "forecast", "low", "high", "level", "actual", "difference",
    "relative", "inside",
]  # fmt: skip
BUDGET = ["period", "quantity", "budget", "kind", "value", "low", "high", "difference", "relative", "inside"]
LINES = (
    "opening", "joined", "returned", "lost", "moved_in", "moved_out", "unobserved_in", "unobserved_out",
    "adjustment", "closing",
)  # fmt: skip
OUTCOME_LINES = ["run", "first", "last", "line", "exit", "forecast", "actual", "difference", "relative"]
CALIBRATION = ["quantity", "periods_ahead", "level", "forecasts", "inside", "share", "low", "high"]


def counted(tally: Tally, totals: Any, opening: int, period: int) -> dict[str, float]:
    """What was counted at the end of a period: states, `all_live`, totals; exits since `opening`."""
    states, mix = tally.states, tally.mix(period)
    out = {name: float(mix[name]) for name in states.remaining}
    groups = {ALL_LIVE: states.live, **totals}
    out |= {name: float(sum(mix[m] for m in members)) for name, members in groups.items()}
    moves = tally.one_step
    since = moves[(moves["period"] >= opening) & (moves["period"] < period)]
    for name in states.exits:
        out[name] = float(since.loc[since["next_state"] == states.index(name), "n"].sum())
    return out


def outcome(earlier: OpenRun, tally: Tally) -> pd.DataFrame:
    """run, period, periods_ahead, quantity, forecast, low, high, level, actual, difference, relative, inside:
    one row for each figure of a forecast that the counts have caught up with; empty when there is none."""
    rows = []
    for row in earlier.projection.to_dict(orient="records"):
        ahead = int(row["periods_ahead"])
        period = earlier.base + ahead
        if ahead < 1 or period > tally.meta.last:
            continue
        actual = counted(tally, earlier.study.totals, earlier.base, period)[row["state"]]
        held = _inside(actual, row["low"], row["high"])
        rows.append(
            (earlier.name, row["period"], ahead, row["state"], row["customers"], row["low"], row["high"],
             row["level"], actual, *_off(actual, row["customers"]), held)
        )  # fmt: skip
    return pd.DataFrame(rows, columns=OUTCOME).astype({"inside": "boolean"})


def outcome_lines(earlier: OpenRun, tally: Tally) -> pd.DataFrame:
    """The roll-forward's lines of the live base, forecast against counted, summed over the periods since.

    Columns: run, first, last, line, exit, forecast, actual, difference, relative. Empty where the counts do
    not tell who joined.
    """
    try:
        seen = rollforward_actual(tally)
    except NotIdentified:
        return pd.DataFrame(columns=OUTCOME_LINES)
    label = tally.calendar.label
    last = min(tally.meta.last, earlier.base + earlier.study.horizon)
    periods = [label(p) for p in range(earlier.base + 1, last + 1)]
    if not periods:
        return pd.DataFrame(columns=OUTCOME_LINES)
    said, was = (
        _summed(frame, kind, periods) for frame, kind in ((earlier.rollforward, "forecast"), (seen, "actual"))
    )
    keys = sorted({*said, *was}, key=lambda key: (LINES.index(key[0]), key))
    rows = []
    for key in keys:
        a, b = said.get(key, 0.0), was.get(key, 0.0)
        rows.append((earlier.name, periods[0], periods[-1], *key, a, b, *_off(b, a)))
    return pd.DataFrame(rows, columns=OUTCOME_LINES)


def _summed(frame: pd.DataFrame, kind: str, periods: Sequence[str]) -> dict[tuple[str, str], float]:
    """(line, exit) -> customers of the live base: flows added up, the first opening, the last closing."""
    own = frame[(frame["kind"] == kind) & (frame["state"] == ALL_LIVE) & frame["line"].isin(LINES)]
    if "segment" in own:
        own = own[own["segment"] == "all"]
    own = own[own["period"].isin(periods)]
    own = own[(own["line"] != "opening") | (own["period"] == periods[0])]
    own = own[(own["line"] != "closing") | (own["period"] == periods[-1])]
    out: dict[tuple[str, str], float] = {}
    for line, leaving, n in zip(own["line"], own["exit"], own["customers"], strict=True):
        out[line, leaving] = out.get((line, leaving), 0.0) + float(n)
    return out


def against_budget(run: OpenRun) -> pd.DataFrame:
    """The run's budget beside what was counted or is forecast: period, quantity, budget, kind, value, low,
    high, difference (value - budget), relative, inside (the budget lies within the band)."""
    tally = run.tally
    forecast = {(int(r["periods_ahead"]), r["state"]): r for r in run.projection.to_dict(orient="records")}
    rows = []
    for row in run.study.budget:
        ahead, period = row.period - run.base, tally.calendar.label(row.period)
        low = high = float("nan")
        if tally.meta.first <= row.period <= run.base:
            kind, value = "actual", counted(tally, run.study.totals, tally.meta.first, row.period)[row.total]
        elif 1 <= ahead <= run.study.horizon:
            found = forecast[ahead, row.total]
            kind, value, low, high = "forecast", *(float(found[c]) for c in ("customers", "low", "high"))
        else:
            continue
        held = _inside(row.amount, low, high) if kind == "forecast" else pd.NA
        rows.append((period, row.total, row.amount, kind, value, low, high, *_off(value, row.amount), held))
    return pd.DataFrame(rows, columns=BUDGET).astype({"inside": "boolean"})


def calibration(outcomes: Iterable[pd.DataFrame], *, level: float = 0.95) -> pd.DataFrame:
    """How often the bands held: quantity, periods_ahead (missing: all of them), level of the bands, forecasts,
    inside, share, and the share's interval (Clopper-Pearson at `level`, as if forecasts were independent).

    >>> frame = pd.DataFrame({"quantity": ["all_live"] * 4, "periods_ahead": [1, 1, 2, 2], "level": 0.9,
    ...                       "inside": [True, True, True, False]})
    >>> calibration([frame])[["periods_ahead", "forecasts", "inside", "share"]].values.tolist()
    [[<NA>, 4, 3, 0.75], [1, 2, 2, 1.0], [2, 2, 1, 0.5]]
    """
    rows = pd.concat(list(outcomes), ignore_index=True)
    rows = rows[rows["inside"].notna()]
    blocks: list[tuple[str, Any, float, pd.DataFrame]] = []
    for quantity in pd.unique(rows["quantity"]):
        own = rows[rows["quantity"] == quantity]
        for band in sorted(own["level"].unique()):
            of = own[own["level"] == band]
            blocks.append((quantity, pd.NA, band, of))
            for ahead in sorted(of["periods_ahead"].unique()):
                blocks.append((quantity, int(ahead), band, of[of["periods_ahead"] == ahead]))
    out = []
    for quantity, ahead, band, of in blocks:
        n, held = len(of), int(of["inside"].sum())
        low, high = clopper_pearson(np.array([held]), np.array([n]), level=level)
        out.append((quantity, ahead, band, n, held, held / n, float(low[0]), float(high[0])))
    return pd.DataFrame(out, columns=CALIBRATION).astype({"periods_ahead": "Int64"})


def _off(value: float, against: float) -> tuple[float, float]:
    """(amount, share of what it is held against; NaN where that is 0)."""
    difference = value - against
    return difference, difference / against if against else float("nan")


def _inside(value: float, low: float, high: float) -> Any:
    return pd.NA if np.isnan(low) or np.isnan(high) else bool(low <= value <= high)
