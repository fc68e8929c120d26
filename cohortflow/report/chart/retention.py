"""How long customers stay: the observed share still here by age against the model's curve."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd

from cohortflow.report.chart.frames import ALL, frame_of
from cohortflow.report.chart.style import (
    BODY,
    FAINT,
    INK,
    MARGIN,
    MODEL,
    MODEL_BAND,
    PAPER,
    SMALL,
    SOFT,
    WIDE,
    Drawing,
    drawing,
    house_style,
    panel,
    quiet_axis,
)  # fmt: skip
from cohortflow.report.rounding import count, percent, span, unit

HIGH, FOOT_HIGH, FEW = 2.9, 0.5, 30
COLUMNS = ["periods_since_joining", "at_risk", "observed", "observed_low", "observed_high", "model"]


def retention_chart(
    retention: Any,
    *,
    kind: str = "month",
    level: float | None = None,
    segment: str = ALL,
    width: float = WIDE,
) -> Drawing:
    """Share of joiners still customers by periods since joining: observed points with intervals, the model's
    curve, and immature ages (which less than half of the joiners can have reached) marked by open points.

    retention : Retention or the contract's frame. Rows without observations show the model alone.
    """
    rows = frame_of(retention, COLUMNS, segment=segment).sort_values("periods_since_joining")
    title = _title(rows, kind)
    subtitle = (
        f"Share of joiners not yet gone, by {unit(kind)} since joining. Points: observed"
        f"{f', with {percent(level, 0)} intervals' if level else ', with intervals'}; open points: ages that fewer "
        f"than half of the joiners have had time to reach. Dashed: the model."
    )
    with house_style():
        figure = drawing(
            title, subtitle, width=width, body=HIGH + FOOT_HIGH + 0.1, alt=_alt(title, rows, kind)
        )
        axes = panel(figure, MARGIN + 0.42, 0.1, width - 2 * MARGIN - 0.42 - 0.85, HIGH)
        if "model_low" in rows:
            axes.fill_between(rows["periods_since_joining"], rows["model_low"], rows["model_high"], color=MODEL_BAND,
                              linewidth=0)  # fmt: skip
        _points(axes, rows)
        axes.plot(rows["periods_since_joining"], rows["model"], color=MODEL, linestyle=(0, (4, 1.6)))
        axes.set_ylim(0, 1.02)
        axes.set_xlim(-0.4, float(rows["periods_since_joining"].max()) + 0.4)
        axes.set_yticks([0, 0.25, 0.5, 0.75, 1], ["0%", "25%", "50%", "75%", "100%"])
        axes.set_xlabel(f"{unit(kind)} since joining", size=SMALL)
        from matplotlib.ticker import MaxNLocator

        axes.xaxis.set_major_locator(MaxNLocator(max(3, int(width * 1.6)), integer=True))
        quiet_axis(axes)
        _end_labels(axes, rows)
    return figure


def immature(rows: pd.DataFrame) -> np.ndarray:
    """(ages,) bool: ages that fewer than half of the joiners can have reached, or with under 30 customers."""
    at_risk = rows["at_risk"].to_numpy(dtype=float)
    few = at_risk < FEW
    if "immature" in rows:
        return rows["immature"].to_numpy(dtype=bool) | few
    return (at_risk < 0.5 * np.nanmax(at_risk)) | few if (at_risk > 0).any() else few


def departure(rows: pd.DataFrame) -> int | None:
    """First age from which the model's interval lies on one side of the observed one at every later mature age."""
    usable = rows[~immature(rows) & rows["observed"].notna().to_numpy()]
    low = usable["model_low"].fillna(usable["model"]) if "model_low" in usable else usable["model"]
    high = usable["model_high"].fillna(usable["model"]) if "model_high" in usable else usable["model"]
    side = np.where(high < usable["observed_low"], -1, np.where(low > usable["observed_high"], 1, 0))
    other = np.flatnonzero(side != side[-1]) if len(side) and side[-1] else np.arange(len(side))
    first = other[-1] + 1 if len(other) else 0
    return int(usable["periods_since_joining"].iloc[first]) if first < len(usable) else None


def _points(axes: Any, rows: pd.DataFrame) -> None:
    seen = rows["observed"].notna().to_numpy()
    young = immature(rows)
    ages = rows["periods_since_joining"].to_numpy(dtype=float)
    axes.vlines(
        ages[seen], rows["observed_low"][seen], rows["observed_high"][seen], color=SOFT, linewidth=1.0
    )
    for mask, face in ((seen & ~young, INK), (seen & young, PAPER)):
        axes.plot(ages[mask], rows["observed"][mask], "o", color=INK, markerfacecolor=face, markersize=3.6,
                  markeredgewidth=0.9)  # fmt: skip
    if (seen & young).any():
        start = ages[seen & young].min() - 0.5
        axes.axvline(start, color=FAINT, linewidth=0.8)


def _end_labels(axes: Any, rows: pd.DataFrame) -> None:
    """Names at the right ends of both curves, pushed apart when they would touch."""
    last = rows.iloc[-1]
    seen = rows[rows["observed"].notna()]
    ends = [("model", float(last["model"]), MODEL)]
    if len(seen):
        ends.append(("observed", float(seen["observed"].iloc[-1]), INK))
    ends.sort(key=lambda e: e[1])
    places = [min(max(e[1], 0.03), 0.97) for e in ends]
    if len(places) == 2 and places[1] - places[0] < 0.12:
        middle = min(max(sum(places) / 2, 0.1), 0.92)
        places = [middle - 0.06, middle + 0.06]
    for (name, value, colour), y in zip(ends, places, strict=True):
        axes.annotate(f"{name}\n{percent(value)}", (1, y), xycoords=("axes fraction", "data"), xytext=(6, 0),
                      textcoords="offset points", color=colour, size=BODY, va="center")  # fmt: skip


def _title(rows: pd.DataFrame, kind: str) -> str:
    usable = rows[~immature(rows) & rows["observed"].notna().to_numpy()]
    if not len(usable):
        last = rows.iloc[-1]
        age = int(last["periods_since_joining"])
        return f"The model keeps {percent(last['model'])} of joiners for {age} {unit(kind, age)}; none observed so long"
    last = usable.iloc[-1]
    age = int(last["periods_since_joining"])
    head = (
        f"{percent(last['observed'])} of joiners ({span(last['observed_low'], last['observed_high'], percent)}) are "
        f"still here after {age} {unit(kind, age)}"
    )
    apart = departure(rows)
    if apart is None:
        return f"{head}; the model says {percent(last['model'])}, within the interval"
    side = "too many" if last["model"] > last["observed"] else "too few"
    figure = f"{percent(last['model'])} at age {age}"
    return f"{head}; from age {apart} on the model lies outside and keeps {side} ({figure})"


def _alt(title: str, rows: pd.DataFrame, kind: str) -> str:
    last = rows.iloc[-1]
    at_risk = rows.loc[rows["observed"].notna(), "at_risk"]
    followed = f" {count(at_risk.iloc[0])} joiners were followed from the start." if len(at_risk) else ""
    return (
        f"Points and a falling curve. {title}. At {int(last['periods_since_joining'])} {unit(kind)} the model says "
        f"{percent(last['model'])}.{followed}"
    )
