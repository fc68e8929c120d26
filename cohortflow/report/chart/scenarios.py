"""What each scenario would change: live customers at the horizon and money over it, as paired differences."""

from __future__ import annotations

from collections.abc import Callable
from functools import partial
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from cohortflow.errors import CallError
from cohortflow.report.chart.frames import ALL, frame_of
from cohortflow.report.chart.style import (
    BAND,
    BODY,
    FUTURE,
    INK,
    MARGIN,
    SMALL,
    WIDE,
    Drawing,
    drawing,
    fit_lines,
    house_style,
    panel,
    quiet_axis,
)  # fmt: skip
from cohortflow.report.plans import gain
from cohortflow.report.rounding import count, missing, money, span
from cohortflow.report.text import label
from cohortflow.states import ALL_LIVE

COLUMNS = ["scenario", "period", "quantity", "difference", "low", "high"]
ROW_HIGH, HEAD, FOOT, NAME_WIDE, NOTE_WIDE = 0.4, 0.3, 0.3, 1.35, 1.25
Form = Callable[[float], str]


def scenarios_chart(scenarios: Any, *, currency: str = "", segment: str = ALL, width: float = WIDE) -> Drawing:
    """One row a scenario, with intervals: customers won or lost at the horizon; money net of cost, if counted.

    scenarios : WhatIf or the contract's frame. CallError when there is no scenario.
    """
    rows = frame_of(scenarios, COLUMNS, segment=segment)
    names = [str(n) for n in pd.unique(rows["scenario"])]
    if not names:
        raise CallError("There is no scenario to draw.")
    last = str(rows.loc[~rows["period"].isin(["total", "settled"]), "period"].iloc[-1])
    parts: list[tuple[str, pd.DataFrame, Form]] = [
        (f"Live customers, end of {last}", _cells(rows, names, last, ALL_LIVE), count)
    ]
    net = _cells(rows, names, "total", "net")
    if net["difference"].notna().any():
        parts.append(("Value less cost, all periods", net, partial(money, currency=currency)))
    title = _title(parts)
    subtitle = (
        "Difference to the forecast as it stands, with its interval: both share their draws, so that what hits both "
        "cancels. An interval across the upright line: the sign is not certain."
    )
    said = "; ".join(f"{label(n)} {_words(cells.loc[n], form)}" for _, cells, form in parts for n in names)
    stacked = width < 6 or len(parts) == 1
    high = HEAD + len(names) * ROW_HIGH + FOOT
    with house_style():
        body = high * (len(parts) if stacked else 1)
        figure = drawing(title, subtitle, width=width, body=body, alt=f"One row a scenario. {title}. {said}.")
        wide = (width - 2 * MARGIN) / (1 if stacked else len(parts))
        for k, (heading, cells, form) in enumerate(parts):
            left, top = (MARGIN, k * high) if stacked else (MARGIN + k * wide, 0.0)
            _part(figure, cells, form, heading, left, top, wide)
    return figure


def _cells(rows: pd.DataFrame, names: list[str], period: str, quantity: str) -> pd.DataFrame:
    own = rows[(rows["period"] == period) & (rows["quantity"] == quantity)]
    return own.set_index("scenario")[["difference", "low", "high"]].astype(float).reindex(names)


def _part(
    figure: Drawing, cells: pd.DataFrame, form: Form, heading: str, left: float, top: float, wide: float
) -> None:
    axes = panel(figure, left + NAME_WIDE, top + HEAD, wide - NAME_WIDE - NOTE_WIDE, len(cells) * ROW_HIGH)
    values = cells.to_numpy(dtype=float)
    low, high = float(np.nanmin(values, initial=0.0)), float(np.nanmax(values, initial=0.0))
    room = 0.06 * max(high - low, 1e-9)
    axes.set_xlim(low - room, high + room)
    axes.set_ylim(len(cells) - 0.5, -0.5)
    axes.set_yticks([])
    axes.axvline(0, color=INK, linewidth=1.0)
    quiet_axis(axes, grid="x")
    axes.xaxis.set_major_formatter(lambda v, _: _short(v))
    axes.locator_params(axis="x", nbins=3)
    axes.text(-NAME_WIDE / (wide - NAME_WIDE - NOTE_WIDE), 1 + 0.08 / (len(cells) * ROW_HIGH), heading,
              transform=axes.transAxes, size=BODY, weight="bold", va="bottom")  # fmt: skip
    for y, name in enumerate(cells.index):
        _row(axes, y, str(name), cells.loc[name], form)


def _short(number: float) -> str:
    """A tick: thousands and millions shortened."""
    for size, mark in ((1e6, "m"), (1e3, "k")):
        if abs(number) >= size:
            return f"{number / size:+,.4g}{mark}"
    return f"{number:+,.3g}" if number else "0"


def _row(axes: Axes, y: int, name: str, row: Any, form: Form) -> None:
    beside: dict[str, Any] = {"textcoords": "offset points", "va": "center", "annotation_clip": False}
    lines = fit_lines(name, NAME_WIDE - 0.12, SMALL + 0.6, lines=2)
    axes.annotate("\n".join(lines), (0, y),
                  xycoords=("axes fraction", "data"), xytext=(-6, 0), ha="right", size=SMALL + 0.6,
                  **beside)  # fmt: skip
    if missing(row["difference"]):
        return
    if not missing(row["low"]):
        axes.plot([row["low"], row["high"]], [y, y], color=BAND, linewidth=6, solid_capstyle="butt")
    axes.plot([row["difference"]], [y], "o", color=FUTURE, markersize=5, zorder=3)
    limits = "" if missing(row["low"]) else f"({span(row['low'], row['high'], form)})"
    for text, size, lift, weight in ((gain(row["difference"], form), BODY - 0.3, 4 if limits else 0, "bold"),
                                     (limits, SMALL - 1, -5.5, "normal")):  # fmt: skip
        axes.annotate(text, (1, y), xycoords=("axes fraction", "data"), xytext=(5, lift), size=size, weight=weight,
                      color=FUTURE, **beside)  # fmt: skip


def _words(row: Any, form: Form) -> str:
    if missing(row["difference"]):
        return "not known"
    limits = "" if missing(row["low"]) else f" ({span(row['low'], row['high'], form)})"
    return f"{gain(row['difference'], form)}{limits}"


def _title(parts: list[tuple[str, pd.DataFrame, Form]]) -> str:
    """The scenario with the largest gain (in money where it is counted), and what it does to the customers."""
    what, cells, form = parts[-1]
    known = cells.dropna(subset=["difference"])
    if not len(known):
        return "What the scenarios would change is not known"
    best = str(known["difference"].idxmax())
    row = known.loc[best]
    doubt = "" if missing(row["low"]) or row["low"] > 0 or row["high"] < 0 else "; its sign is not certain"
    lead = "the most" if len(known) > 1 else "a change"
    beside = f"; live customers {_words(parts[0][1].loc[best], count)}" if len(parts) > 1 else ""
    return f"{label(best)} brings {lead}: {_words(row, form)}, {what[0].lower()}{what[1:]}{doubt}{beside}"
