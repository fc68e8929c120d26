"""What was forecast, with its band, and what has been counted since."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from cohortflow.errors import CallError, listed
from cohortflow.report.chart.style import (
    BAND,
    FUTURE,
    INK,
    MARGIN,
    MODEL,
    SMALL,
    SOFT,
    WIDE,
    Drawing,
    drawing,
    house_style,
    panel,
    quiet_axis,
)  # fmt: skip
from cohortflow.report.rounding import count, percent, span
from cohortflow.report.text import label
from cohortflow.states import ALL_LIVE

HIGH, LEFT, FOOT = 2.1, 0.55, 0.3


def actual_chart(
    outcome: pd.DataFrame, *, quantity: str = ALL_LIVE, run: str | None = None, width: float = WIDE
) -> Drawing:
    """One forecast's band period by period, and the counts that came: filled within it, crossed outside.

    outcome : the table of that name of a Comparison;  run : which forecast, default the last in the table
    Raises CallError when the table has no such quantity or run.
    """
    own, of = _rows(outcome, quantity, run)
    inside = [bool(v) for v in own["inside"].fillna(False)]
    held = sum(inside)
    what = "Live customers" if quantity == ALL_LIVE else f"Customers in {label(quantity)}"
    title = f"{what}: {held} of {len(own)} counts lie inside the band of the forecast"
    level = percent(float(own["level"].iloc[0]), 0)
    subtitle = (
        f"Dashed: as forecast in {label(of)}, with its {level} band. Points: counted since; a cross lies outside "
        "the band. The scale does not start at zero."
    )
    with house_style():
        figure = drawing(title, subtitle, width=width, body=HIGH + FOOT, alt=_alt(title, own))
        axes = panel(figure, MARGIN + LEFT, 0.05, width - 2 * MARGIN - LEFT - 0.75, HIGH - 0.05)
        _draw(axes, own, inside, width)
    return figure


def _rows(outcome: pd.DataFrame, quantity: str, run: str | None) -> tuple[pd.DataFrame, str]:
    own = outcome[outcome["quantity"] == quantity]
    if not len(own):
        raise CallError(
            f'No forecast of "{quantity}" has been caught up with; the table has '
            f"{listed(pd.unique(outcome['quantity']))}."
        )
    known = [str(name) for name in pd.unique(own["run"])]
    chosen = known[-1] if run is None else run
    if chosen not in known:
        raise CallError(f'The table has no run "{chosen}"; it has {listed(known)}.')
    return own[own["run"] == chosen].sort_values("periods_ahead"), chosen


def _draw(axes: Axes, own: pd.DataFrame, inside: list[bool], width: float) -> None:
    x = np.arange(len(own))
    said, low, high, was = (own[c].to_numpy(dtype=float) for c in ("forecast", "low", "high", "actual"))
    axes.fill_between(x, low, high, color=BAND, linewidth=0)
    axes.vlines(x, low, high, color=FUTURE, linewidth=0.8)
    axes.plot(x, said, color=FUTURE, linestyle=(0, (4, 1.6)))
    for k, held in enumerate(inside):
        axes.plot([x[k]], [was[k]], "o" if held else "x", color=INK if held else MODEL, markersize=6, mew=1.8)
    axes.text(
        x[-1] + 0.06 * max(len(x) - 1, 1),
        was[-1],
        count(was[-1]),
        va="center",
        size=SMALL + 0.5,
        weight="bold",
    )
    values = np.concatenate([low, high, was])
    room = 0.08 * max(float(np.nanmax(values) - np.nanmin(values)), 1.0)
    axes.set_ylim(float(np.nanmin(values)) - room, float(np.nanmax(values)) + room)
    axes.set_xlim(-0.35, len(x) - 0.65)
    quiet_axis(axes)
    axes.yaxis.set_major_formatter(lambda v, _: f"{v:,.0f}")
    step = max(1, -(-len(x) // max(int((width - 1.5) / 0.8), 1)))
    axes.set_xticks(x[::step], [str(p) for p in own["period"]][::step])
    axes.tick_params(colors=SOFT)


def _alt(title: str, own: pd.DataFrame) -> str:
    said = [
        f"{row['period']} forecast {count(row['forecast'])} ({span(row['low'], row['high'])}), counted "
        f"{count(row['actual'])}"
        for row in own.to_dict(orient="records")
    ]
    return f"A band with points. {title}. {'; '.join(said)}."


def has_outcome(outcome: Any, quantity: str = ALL_LIVE) -> bool:
    """Whether the table has a row of the quantity to draw."""
    return bool((outcome["quantity"] == quantity).any())
