"""The approach to the settled mix: each state's share period by period against where it settles."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.ticker import MaxNLocator

from cohortflow.errors import CallError
from cohortflow.report.chart.frames import ALL, frame_of
from cohortflow.report.chart.style import (
    BODY,
    FUTURE,
    INK,
    MARGIN,
    MODEL,
    MODEL_BAND,
    SMALL,
    SOFT,
    WIDE,
    Drawing,
    drawing,
    fit_lines,
    house_style,
    panel,
    quiet_axis,
    share_ticks,
)  # fmt: skip
from cohortflow.report.rounding import count, duration, missing, percent, span, unit
from cohortflow.report.text import label

TARGETS = {
    "settled_mix": "the settled mix, if as many keep joining as now",
    "limit_from_start": "the long-run mix from today's start",
    "time_average": "the average over the cycle, because the mix never stops moving",
    "remaining_mix": "the mix of those remaining",
}
SETTLED = 0.01
PANEL_HIGH, HEAD_HIGH, FOOT_HIGH, PANEL_WIDE, LABEL_WIDE = 1.0, 0.36, 0.34, 2.75, 0.78


@dataclass(frozen=True)
class Settled:
    """Where the shares go: which measure of the long run, its rows, and the periods it takes (NaN: unknown)."""

    measure: str
    rows: pd.DataFrame
    periods: float


def settling_chart(
    approach: Any, long_run: Any, *, kind: str = "month", segment: str = ALL, width: float = WIDE
) -> Drawing:
    """Share of each state among those who have not left, period by period, and the share it settles at.

    approach : Projection or a frame with periods_ahead, state, share;  long_run : LongRun or its frame.
    The upright line marks the periods to settle when the approach is drawn that far. Raises CallError when the
    long run has no mix to settle at.
    """
    rows = frame_of(approach, ["periods_ahead", "state", "share"], segment=segment)
    goal = settled(frame_of(long_run, ["measure", "state", "value", "low", "high"], segment=segment), rows)
    if not len(goal.rows):
        raise CallError("There is no settled mix to draw: the long run says why (its notes and reasons).")
    names = [str(n) for n in goal.rows["state"] if (rows["state"] == n).any()]
    columns = max(1, min(3, int((width - 2 * MARGIN) // PANEL_WIDE), len(names)))
    one = PANEL_HIGH + HEAD_HIGH + FOOT_HIGH
    title = _title(rows, goal, names, kind)
    subtitle = (
        f"Share of those who have not left. Solid: projected, by {unit(kind)} from now. Dashed, with its interval: "
        f"{TARGETS[goal.measure]}. Each panel has its own scale, from zero."
    )
    with house_style():
        body = one * -(-len(names) // columns)
        figure = drawing(title, subtitle, width=width, body=body, alt=_alt(title, rows, goal, names))
        step = (width - 2 * MARGIN) / columns
        for k, name in enumerate(names):
            left, top = MARGIN + (k % columns) * step, (k // columns) * one
            axes = panel(figure, left + 0.42, top + HEAD_HIGH, step - 0.42 - LABEL_WIDE, PANEL_HIGH)
            _panel(axes, rows[rows["state"] == name], goal, name, step)
    return figure


def settled(long_run: pd.DataFrame, approach: pd.DataFrame | None = None) -> Settled:
    """Which of the long-run mixes the shares approach, the first of TARGETS that says something.

    With seasons each state has one figure a place in the year: their mean is taken, without an interval. The
    periods to settle are those of the approach: the first after which the mix stays within one percentage point
    (half the sum of absolute differences) of the goal; NaN when it is not drawn that far.
    """
    rows = long_run[long_run["from"].isin(["", "start"])] if "from" in long_run else long_run
    exits_only = not (long_run["measure"] == "closed_group").any()
    measures = [m for m in TARGETS if not (exits_only and m in ("limit_from_start", "time_average"))]
    known = rows[rows["value"].notna()]
    measure = next((m for m in measures if (known["measure"] == m).any()), "")
    own = known[known["measure"] == measure]
    goal = own.groupby("state", sort=False, as_index=False).agg(
        value=("value", "mean"), low=("low", "first"), high=("high", "first"), places=("value", "size")
    )
    goal.loc[goal["places"] > 1, ["low", "high"]] = np.nan
    return Settled(measure, goal, float("nan") if approach is None else _settles(approach, goal))


def _settles(approach: pd.DataFrame, goal: pd.DataFrame) -> float:
    shares = approach[approach["state"].isin(goal["state"])]
    wide = shares.pivot_table(index="periods_ahead", columns="state", values="share")
    target = goal.set_index("state")["value"].reindex(wide.columns)
    off = 0.5 * (wide - target).abs().sum(axis=1) > SETTLED
    late = wide.index[off.to_numpy()]
    if not len(late):
        return 0.0
    return float(late.max()) + 1 if late.max() < wide.index.max() else float("nan")


def _panel(axes: Axes, own: pd.DataFrame, goal: Settled, name: str, step: float) -> None:
    own = own.sort_values("periods_ahead")
    ahead, share = own["periods_ahead"].to_numpy(dtype=float), own["share"].to_numpy(dtype=float)
    target = goal.rows[goal.rows["state"] == name].iloc[0]
    value, low, high = (float(target[c]) for c in ("value", "low", "high"))
    if not missing(low):
        axes.axhspan(low, high, color=MODEL_BAND, linewidth=0)
    axes.axhline(value, color=MODEL, linestyle=(0, (4, 1.6)), linewidth=1.3)
    axes.plot(ahead, share, color=FUTURE)
    axes.plot(ahead[:1], share[:1], "o", color=INK, markersize=3)
    if goal.periods <= ahead[-1]:
        axes.axvline(goal.periods, color=SOFT, linewidth=0.8, linestyle=(0, (1, 2)))
    axes.set_xlim(0, ahead[-1])
    axes.set_ylim(0, np.nanmax([*share, value, high if not missing(high) else 0]) * 1.12)
    axes.xaxis.set_major_locator(MaxNLocator(4, integer=True))
    share_ticks(axes)
    quiet_axis(axes)
    axes.annotate(percent(value), (1, value), xycoords=("axes fraction", "data"), xytext=(5, 4 if low == low else 0),
                  textcoords="offset points", color=MODEL, size=BODY, weight="bold", va="center")  # fmt: skip
    if not missing(low):
        axes.annotate(span(low, high, percent), (1, value), xycoords=("axes fraction", "data"), xytext=(5, -5.5),
                      textcoords="offset points", color=MODEL, size=SMALL - 1.2, va="center")  # fmt: skip
    lines = fit_lines(name, step - 0.5, BODY, bold=True, lines=2)
    axes.text(0, 1 + 0.06 / PANEL_HIGH, "\n".join(lines), transform=axes.transAxes, size=BODY, weight="bold",
              va="bottom")  # fmt: skip


def _farthest(rows: pd.DataFrame, goal: Settled, names: list[str]) -> tuple[str, float, float] | None:
    """State whose share has farthest to go from today, today's share and the settled one; None if undecided."""
    best: tuple[float, str, float, float] = (0.0, "", 0.0, 0.0)
    now = rows[rows["periods_ahead"] == rows["periods_ahead"].min()].set_index("state")["share"]
    for name in names:
        target = goal.rows[goal.rows["state"] == name].iloc[0]
        outside = missing(target["low"]) or not target["low"] <= now[name] <= target["high"]
        gap = abs(float(target["value"]) - float(now[name]))
        if outside and gap > best[0]:
            best = (gap, name, float(now[name]), float(target["value"]))
    return best[1:] if best[1] else None


def _title(rows: pd.DataFrame, goal: Settled, names: list[str], kind: str) -> str:
    far = _farthest(rows, goal, names)
    if missing(goal.periods):
        last = int(rows["periods_ahead"].max())
        time = f"; settling takes more than {duration(last, kind, 0)}"
    elif goal.periods == 0:
        time = "; the mix has settled already"
    else:
        time = f"; settling takes {duration(goal.periods, kind, 0)}"
    if far is None:
        return f"Every share is already within the interval of where it settles{time}"
    name, now, then = far
    return f"{label(name)} has farthest to go: from {percent(now)} today to {percent(then)}{time}"


def _alt(title: str, rows: pd.DataFrame, goal: Settled, names: list[str]) -> str:
    said = []
    for name in names:
        target = goal.rows[goal.rows["state"] == name].iloc[0]
        interval = "" if missing(target["low"]) else f" ({span(target['low'], target['high'], percent)})"
        said.append(f"{label(name)} {percent(target['value'])}{interval}")
    last = count(rows["periods_ahead"].max())
    return f"Line charts over {last} periods ahead. {title}. Settled shares: {', '.join(said)}."
