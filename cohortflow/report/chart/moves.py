"""How customers move: one cell a pair of states, with the rate, its interval and the number of moves."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes
from matplotlib.patches import Rectangle

from cohortflow.report.chart.frames import ALL, clear_winner, square, states_of, transitions_of
from cohortflow.report.chart.style import (
    FAINT,
    INK,
    MARGIN,
    PAPER,
    SHADES,
    SMALL,
    SOFT,
    WIDE,
    Drawing,
    drawing,
    fit_lines,
    house_style,
    panel,
    shade,
)  # fmt: skip
from cohortflow.report.rounding import count, percent, span, unit
from cohortflow.report.text import label
from cohortflow.states import States

STEPS = (0.005, 0.02, 0.05, 0.15, 0.4, 0.7)
CELL_HIGH, EXIT_GAP, LABEL_WIDE = 0.5, 0.12, 1.55
DARK_FROM = 5


def moves_chart(
    fit: Any,
    *,
    states: States | None = None,
    period: str = "month",
    level: float | None = None,
    segment: str = ALL,
    width: float = WIDE,
) -> Drawing:
    """Heat map of the one-period moves of a Fit, its Intervals, or a `transitions` frame.

    Rows are the states customers are in, columns those they are in one period later, exits set apart on the
    right. Each cell prints the rate, its interval and the number of moves. Wider than `width` when there are
    many states. Raises CallError when the frame lacks columns.
    """
    rows = transitions_of(fit, segment=segment, level=level)
    known = states_of(fit, states, rows)
    names = [n for n in known.names if n not in known.exits] + list(known.exits)
    cells = {c: square(rows, c, names) for c in ("count", "at_risk", "probability", "low", "high")}
    origins = len(known.remaining)
    cell = max((width - LABEL_WIDE - 2 * MARGIN - EXIT_GAP) / len(names), 0.68)
    full = LABEL_WIDE + 2 * MARGIN + EXIT_GAP + cell * len(names)
    heads = [fit_lines(n, cell - 0.06, SMALL, lines=5) for n in names]
    head_high = 0.13 * max(len(h) for h in heads) + 0.28
    title = _title(names, cells, origins, period)
    subtitle = (
        f"Share of those in the row's state who are in the column's state one {unit(period, 1)} later"
        f"{_level_words(rows)}; number of moves below. {EMPTY_WORDS}"
    )
    with house_style():
        figure = drawing(title, subtitle, width=full, body=head_high + origins * CELL_HIGH + 0.42, alt="")
        axes = panel(figure, MARGIN, 0, full - 2 * MARGIN, head_high + origins * CELL_HIGH + 0.42)
        axes.set_xlim(0, full - 2 * MARGIN)
        axes.set_ylim(head_high + origins * CELL_HIGH + 0.42, 0)
        axes.axis("off")
        lefts = [LABEL_WIDE + j * cell + (EXIT_GAP if j >= origins else 0) for j in range(len(names))]
        _heads(axes, heads, lefts, cell, head_high, origins, len(known.exits))
        for i in range(origins):
            _row(axes, names, cells, i, lefts, cell, head_high + i * CELL_HIGH)
        _scale(axes, head_high + origins * CELL_HIGH + 0.17, full - 2 * MARGIN)
    figure.alt = _alt(title, names, cells, origins)
    return figure


EMPTY_WORDS = "None: no such move was seen, with the upper limit of its rate. A dash: declared impossible."


def _title(names: list[str], cells: dict[str, np.ndarray], origins: int, period: str) -> str:
    rate, low, high = (cells[c][:origins].copy() for c in ("probability", "low", "high"))
    for array in (rate, low, high):
        array[np.arange(origins), np.arange(origins)] = np.nan
    flat = clear_winner(rate.ravel(), low.ravel(), high.ravel())
    if np.isnan(rate).all():
        return f"No move between states was seen in one {unit(period, 1)}"
    i, j = np.unravel_index(int(np.nanargmax(rate)) if flat is None else flat, rate.shape)
    figures = f"{percent(rate[i, j])} ({span(low[i, j], high[i, j], percent)})"
    where = f"from {label(names[i])} to {label(names[j])}, {figures} a {unit(period, 1)}"
    if flat is None:
        return f"No single move stands out; among the most likely: {where}"
    return f"The most likely move is {where}"


def _level_words(rows: pd.DataFrame) -> str:
    levels = list(pd.unique(rows["level"].dropna())) if "level" in rows else []
    return f", with its {percent(levels[0], 0)} interval" if len(levels) == 1 else ", with its interval"


def _heads(
    axes: Axes, heads: list[list[str]], lefts: list[float], cell: float, top: float, origins: int, exits: int
) -> None:
    for lines, left in zip(heads, lefts, strict=True):
        axes.text(
            left + cell / 2, top - 0.05, "\n".join(lines), ha="center", va="bottom", size=SMALL, color=INK
        )
    axes.text(0, top - 0.05, "in state (customers at risk)", size=SMALL, color=SOFT, va="bottom")
    axes.text(lefts[0], 0.02, "goes to", size=SMALL, color=SOFT, va="top")
    if exits:
        axes.text(lefts[origins], 0.02, "leaves by", size=SMALL, color=SOFT, va="top")


def _row(
    axes: Axes,
    names: list[str],
    cells: dict[str, np.ndarray],
    i: int,
    lefts: list[float],
    cell: float,
    top: float,
) -> None:
    middle = top + CELL_HIGH / 2
    at_risk = np.nanmax(cells["at_risk"][i]) if not np.isnan(cells["at_risk"][i]).all() else 0
    lines = fit_lines(names[i], LABEL_WIDE - 0.1, SMALL + 0.6, lines=2)
    axes.text(0, middle, "\n".join([*lines, f"({count(at_risk)})"]), va="center", size=SMALL + 0.4, color=INK)
    for j, left in enumerate(lefts):
        values = {c: cells[c][i, j] for c in cells}
        _cell(axes, values, left, top, cell, stays=i == j, no_data=not at_risk)


def _cell(
    axes: Axes, values: dict[str, float], left: float, top: float, cell: float, *, stays: bool, no_data: bool
) -> None:
    rate = values["probability"]
    step = shade(rate, STEPS) if rate == rate else 0
    box = Rectangle((left + 0.02, top + 0.02), cell - 0.04, CELL_HIGH - 0.04, linewidth=0)
    box.set_facecolor(SHADES[step])
    if stays:
        box.set(edgecolor=SOFT, linewidth=1.1)
    axes.add_patch(box)
    centre, middle = left + cell / 2, top + CELL_HIGH / 2
    colour = PAPER if step >= DARK_FROM else INK
    if no_data or rate != rate:
        axes.text(
            centre, middle, "no data" if no_data else "–", ha="center", va="center", size=SMALL, color=SOFT
        )
        return
    if values["count"] == 0 and values["high"] in (0.0,):
        axes.text(centre, middle, "–", ha="center", va="center", size=SMALL, color=SOFT)
        return
    if values["count"] == 0:
        axes.text(centre, middle - 0.07, "none", ha="center", va="center", size=SMALL, color=SOFT)
        axes.text(centre, middle + 0.09, f"up to {percent(values['high'])}", ha="center", va="center", size=5.6,
                  color=SOFT)  # fmt: skip
        return
    axes.text(centre, middle - 0.125, percent(rate), ha="center", va="center", size=SMALL + 1, color=colour,
              weight="bold")  # fmt: skip
    axes.text(centre, middle + 0.02, span(values["low"], values["high"], percent).replace(" to ", "–"), ha="center",
              va="center", size=5.6, color=colour)  # fmt: skip
    axes.text(
        centre, middle + 0.14, f"n {count(values['count'])}", ha="center", va="center", size=5.6, color=colour
    )


def _scale(axes: Axes, top: float, right: float) -> None:
    """What the shades stand for, at the lower left."""
    bounds = [0.0, *STEPS, 1.0]
    wide = min(0.62, right / 9)
    for k, colour in enumerate(SHADES):
        left = k * wide
        axes.add_patch(Rectangle((left, top), wide, 0.1, facecolor=colour, edgecolor=FAINT, linewidth=0.4))
        axes.text(left, top + 0.12, percent(bounds[k], 1 if 0 < bounds[k] < 0.01 else 0), size=5.8, va="top",
                  ha="left" if k == 0 else "center", color=SOFT)  # fmt: skip
    axes.text(len(SHADES) * wide, top + 0.12, "100%", size=5.8, va="top", ha="center", color=SOFT)


def _alt(title: str, names: list[str], cells: dict[str, np.ndarray], origins: int) -> str:
    stays = [f"{label(names[i])} {percent(cells['probability'][i, i])}" for i in range(origins)]
    return f"Table of shaded cells. {title}. Shares that stay where they are: {', '.join(stays)}."
