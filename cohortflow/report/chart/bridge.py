"""From the last forecast of a period to this one, cause by cause."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from cohortflow.errors import CallError, listed
from cohortflow.report.chart.style import (
    BAND,
    BODY,
    FAINT,
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
    text_width,
)  # fmt: skip
from cohortflow.report.rounding import count, foot, signed
from cohortflow.report.text import label
from cohortflow.states import ALL_LIVE

ROW_HIGH, NAME_WIDE = 0.3, 1.75
ENDS = ("last_forecast", "this_forecast")
PARTS = {
    "data_restated": "data restated",
    "opening_mix": "who is there now",
    "segment_mix": "mix of segments",
    "joiners": "joiners and returners ahead",
    "rates": "rates of moves",
    "model": "change of model",
    "value": "prices and values",
    "adjustments": "manual adjustments",
}


def bridge_chart(
    bridge: Any, *, quantity: str = ALL_LIVE, period: str | None = None, width: float = WIDE
) -> Drawing:
    """Bars from the last forecast (0) to this one; each starts where the one above ended.

    bridge : Comparison or its frame;  period : default the last one that both forecasts cover
    Raises CallError when the frame has no such quantity or period.
    """
    last, parts, this, period = bridge_steps(bridge, quantity=quantity, period=period)
    title = f"{_subject(quantity, period)}: {count(this)}, {_versus(this - last)} the last forecast"
    subtitle = (
        "Why the forecast changed. Filled bars add, hatched bars take away; each starts where the one above ends. "
        "Printed figures foot."
    )
    said = ", ".join(f"{PARTS[name]} {signed(n)}" for name, n in parts)
    ends = f"Last forecast {count(last)}; {said}; this one {count(this)}."
    alt = f"Bars from the last forecast to this one. {title}. {ends}"
    with house_style():
        body = (len(parts) + 2) * ROW_HIGH + 0.1
        figure = drawing(title, subtitle, width=width, body=body, alt=alt)
        _draw(
            panel(figure, MARGIN, 0.0, width - 2 * MARGIN, body), width - 2 * MARGIN, body, last, parts, this
        )
    return figure


def bridge_steps(
    bridge: Any, *, quantity: str = ALL_LIVE, period: str | None = None
) -> tuple[int, list[tuple[str, int]], int, str]:
    """The last forecast, the parts and this forecast in whole numbers that foot; and the period."""
    frame = bridge if isinstance(bridge, pd.DataFrame) else bridge.to_frame()
    own = frame[frame["quantity"] == quantity]
    if not len(own):
        raise CallError(f'The bridge has no "{quantity}"; it has {listed(pd.unique(frame["quantity"]))}.')
    period = str(own["period"].iloc[-1]) if period is None else period
    rows = own[own["period"] == period].set_index("part")["amount"]
    if not len(rows):
        raise CallError(f'The bridge has no period "{period}"; it has {listed(pd.unique(own["period"]))}.')
    last, this = (round(float(rows[end])) for end in ENDS)
    names = [name for name in PARTS if name in rows.index]
    whole = foot([float(rows[name]) for name in names], this - last)
    return last, list(zip(names, whole, strict=True)), this, period


def _draw(axes: Axes, wide: float, high: float, last: int, parts: list[tuple[str, int]], this: int) -> None:
    axes.set_xlim(0, wide)
    axes.set_ylim(high, 0)
    axes.axis("off")
    ways = np.cumsum([0, *(n for _, n in parts)])
    low, top = float(ways.min()), float(ways.max())
    room = wide - NAME_WIDE - 1.5

    def place(value: float) -> float:
        return NAME_WIDE + 0.7 + (value - low) / max(top - low, 1.0) * room

    y = ROW_HIGH / 2 + 0.05
    _end(axes, "last forecast", count(last), y, wide, place(0))
    now = 0
    for name, change in parts:
        y += ROW_HIGH
        _bar(axes, PARTS[name], change, y, place(now), place(now + change))
        now += change
    _end(axes, "this forecast", f"{count(this)} ({signed(this - last)})", y + ROW_HIGH, wide, place(now))


def _end(axes: Axes, name: str, note: str, y: float, wide: float, x: float) -> None:
    axes.text(0, y, name, weight="bold", va="center")
    axes.plot([x, x], [y - 0.1, y + 0.1], color=INK, linewidth=2.4, solid_capstyle="butt")
    fits = x + 0.07 + text_width(note, BODY, bold=True) <= wide
    axes.text(
        x + (0.07 if fits else -0.07), y, note, weight="bold", va="center", ha="left" if fits else "right"
    )


def _bar(axes: Axes, name: str, change: int, y: float, start: float, end: float) -> None:
    lines = fit_lines(name, NAME_WIDE, SMALL + 0.5, lines=2)
    axes.text(0, y, "\n".join(lines), va="center", size=SMALL + 0.5)
    gain = change >= 0
    axes.barh(y, end - start, left=start, height=0.16, color=BAND if gain else "none", edgecolor=FUTURE,
              linewidth=0.9, hatch="" if gain else "//////")  # fmt: skip
    axes.plot([end, end], [y, y + ROW_HIGH], color=FAINT, linewidth=0.7, zorder=0)
    axes.text(max(start, end) + 0.06 if gain else min(start, end) - 0.06, y, signed(change), va="center",
              ha="left" if gain else "right", size=SMALL + 0.5)  # fmt: skip


def _subject(quantity: str, period: str) -> str:
    if quantity == "contribution":
        return f"Contribution of {period}"
    who = "Live customers" if quantity == ALL_LIVE else f"Customers in {label(quantity)}"
    return f"{who} at the end of {period}"


def _versus(change: int) -> str:
    if change == 0:
        return "as in"
    return f"{count(abs(change))} {'more' if change > 0 else 'less'} than"
