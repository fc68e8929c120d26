"""How customers leave: time until they do, and by which exit, from each state."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from cohortflow.report.chart.frames import ALL, clear_winner, frame_of
from cohortflow.report.chart.style import (
    BAND,
    BODY,
    FUTURE,
    INK,
    MARGIN,
    MODEL,
    PAPER,
    SMALL,
    SOFT,
    WIDE,
    Drawing,
    drawing,
    fit_lines,
    house_style,
    panel,
    quiet_axis,
)  # fmt: skip
from cohortflow.report.rounding import UNKNOWN, duration, missing, percent, span, unit
from cohortflow.report.text import label

COLUMNS = ["from", "measure", "exit", "value", "low", "high"]
ROW_HIGH, FOOT_HIGH, NAME_WIDE, NOTE_WIDE = 0.33, 0.5, 1.5, 1.5
MARKS = ("o", "s", "D", "^", "v", "P", "X", "*")


def exit_time_chart(exits: Any, *, kind: str = "month", segment: str = ALL, width: float = WIDE) -> Drawing:
    """Mean time until a customer leaves, with its interval, and the median, from each state.

    exits : ExitTimes or the contract's frame. A state from which some never leave has no mean: said in words.
    """
    rows = frame_of(exits, COLUMNS, segment=segment)
    table = _by_state(rows, "mean_time").join(_by_state(rows, "median_time").add_suffix("_median"))
    names = list(table.index)
    title = _time_title(table, kind)
    subtitle = (
        f"Expected {unit(kind)} until leaving, counted from the end of a period in that state. Dot: mean, with its "
        "interval; upright tick: median (half have left by then)."
    )
    alt = f"One line a state. {title}. " + "; ".join(_time_words(table.loc[n], n, kind) for n in names) + "."
    with house_style():
        figure = drawing(title, subtitle, width=width, body=len(names) * ROW_HIGH + FOOT_HIGH, alt=alt)
        axes = _rows_panel(figure, names, width, note=min(NOTE_WIDE, 0.32 * width))
        finite = table[["value", "high", "value_median"]].to_numpy(dtype=float)
        top = np.nanmax(np.where(np.isfinite(finite), finite, np.nan)) if np.isfinite(finite).any() else 1.0
        axes.set_xlim(0, top * 1.04)
        for y, name in enumerate(names):
            _time_row(axes, y, table.loc[name], kind, top)
        axes.set_xlabel(unit(kind), size=SMALL)
    return figure


def exit_reason_chart(exits: Any, *, segment: str = ALL, width: float = WIDE) -> Drawing:
    """By which exit customers leave in the end, from each state: one mark an exit, with its interval.

    exits : ExitTimes or the contract's frame (rows `probability`).
    """
    rows = frame_of(exits, COLUMNS, segment=segment)
    rows = rows[rows["measure"] == "probability"]
    names, ways = [str(n) for n in pd.unique(rows["from"])], [str(e) for e in pd.unique(rows["exit"])]
    title = _reason_title(rows, names, ways)
    subtitle = (
        "Share of the customers now in a state who will in the end leave by each exit, with its interval."
    )
    said = [f"{label(r['from'])} by {label(r['exit'])} {percent(r['value'])}" for _, r in rows.iterrows()]
    alt = f"One line a state, one mark an exit. {title}. {'; '.join(said)}."
    key_high = 0.24 * _key_lines(ways, width)
    row_high = max(ROW_HIGH, 0.17 * len(ways) + 0.1)
    with house_style():
        body = len(names) * row_high + 0.3 + key_high
        figure = drawing(title, subtitle, width=width, body=body, alt=alt)
        axes = _rows_panel(figure, names, width, top=key_high, row_high=row_high, note=0.55)
        axes.set_xlim(-0.01, 1.02)
        _key(figure, ways, width, key_high)
        for y, name in enumerate(names):
            for k, way in enumerate(ways):
                own = rows[(rows["from"] == name) & (rows["exit"] == way)]
                if len(own):
                    _reason_mark(axes, y + (k - (len(ways) - 1) / 2) * 0.17 / row_high, own.iloc[0], k)
        ticks = [0, 0.25, 0.5, 0.75, 1] if width >= 6 else [0, 0.5, 1]
        axes.set_xticks(ticks, [percent(t, 0) for t in ticks])
    return figure


def _by_state(rows: pd.DataFrame, measure: str) -> pd.DataFrame:
    own = rows[rows["measure"] == measure].drop_duplicates("from").set_index("from")
    return own[["value", "low", "high"]].astype(float)


def _rows_panel(
    figure: Drawing,
    names: list[str],
    width: float,
    *,
    top: float = 0.0,
    row_high: float = ROW_HIGH,
    note: float,
) -> Axes:
    """A panel with one row a state, names at the left, room for a note at the right."""
    name_wide = min(NAME_WIDE, 0.3 * width)
    wide = width - 2 * MARGIN - name_wide - note
    axes = panel(figure, MARGIN + name_wide, top, wide, len(names) * row_high)
    axes.set_ylim(len(names) - 0.5, -0.5)
    quiet_axis(axes, grid="x")
    lines = ["\n".join(fit_lines(n, name_wide - 0.1, SMALL + 0.6, lines=2)) for n in names]
    axes.set_yticks(range(len(names)), lines)
    axes.tick_params(axis="y", labelsize=SMALL + 0.6, labelcolor=INK)
    return axes


def _time_row(axes: Axes, y: int, row: pd.Series, kind: str, top: float) -> None:
    mean, median = row["value"], row["value_median"]
    if np.isfinite(mean):
        if not missing(row["low"]):
            high = row["high"] if np.isfinite(row["high"]) else top * 1.04
            axes.plot([row["low"], high], [y, y], color=BAND, linewidth=5, solid_capstyle="butt")
        axes.plot([mean], [y], "o", color=FUTURE, markersize=5)
    if np.isfinite(median):
        axes.plot([median, median], [y - 0.25, y + 0.25], color=INK, linewidth=1.4)
    note = duration(mean, kind) if not missing(mean) else UNKNOWN
    below = (
        f"({span(row['low'], row['high'], _bare)})" if np.isfinite(mean) and not missing(row["low"]) else ""
    )
    axes.annotate(note, (1, y), xycoords=("axes fraction", "data"), xytext=(6, 4 if below else 0),
                  textcoords="offset points", size=BODY - 0.3, weight="bold", color=FUTURE, va="center")  # fmt: skip
    axes.annotate(below, (1, y), xycoords=("axes fraction", "data"), xytext=(6, -5.5), textcoords="offset points",
                  size=SMALL - 1, color=FUTURE, va="center")  # fmt: skip


def _bare(number: float) -> str:
    return f"{number:.1f}"


def _time_words(row: pd.Series, name: str, kind: str) -> str:
    return f"from {label(name)} {duration(row['value'], kind)} on average"


def _time_title(table: pd.DataFrame, kind: str) -> str:
    values = table["value"].to_numpy(dtype=float)
    if not np.isfinite(values).any():
        return "The mean time until leaving is not finite: some customers would never leave"
    finite = table[np.isfinite(values)]
    value, low, high = (finite[c].to_numpy(dtype=float) for c in ("value", "low", "high"))
    shortest = clear_winner(-value, -high, -low)
    if shortest is None or len(finite) == 1:
        i = int(np.argmin(value))
        more = "" if len(finite) == 1 else "; the intervals do not single out one state"
        stay = _with_span(finite.iloc[i], kind)
        return f"Customers now in {label(finite.index[i])} stay another {stay} on average{more}"
    time = _with_span(finite.iloc[shortest], kind)
    return f"Customers in {label(finite.index[shortest])} leave soonest: after {time} on average"


def _with_span(row: pd.Series, kind: str) -> str:
    inner = "" if missing(row["low"]) else f" ({span(row['low'], row['high'], _bare)})"
    return f"{duration(row['value'], kind)}{inner}"


def _reason_title(rows: pd.DataFrame, names: list[str], ways: list[str]) -> str:
    if len(ways) == 1:
        return f"Every customer who leaves does so by {label(ways[0])}, the only exit there is"
    wins = {}
    for name in names:
        own = rows[rows["from"] == name]
        best = clear_winner(*(own[c].to_numpy(dtype=float) for c in ("value", "low", "high")))
        wins[name] = None if best is None else str(own["exit"].iloc[best])
    leaders = set(wins.values())
    if len(leaders) == 1 and None not in leaders:
        way = wins[names[0]]
        shares = rows.loc[rows["exit"] == way, "value"]
        return f"From every state most leave by {label(way)}: {span(shares.min(), shares.max(), percent)}"
    clear = [n for n in names if wins[n]]
    if not clear:
        return "The intervals do not say which exit is the likeliest, from any state"
    row = rows[(rows["from"] == clear[0]) & (rows["exit"] == wins[clear[0]])].iloc[0]
    return (
        f"From {label(clear[0])} {percent(row['value'])} ({span(row['low'], row['high'], percent)}) leave by "
        f"{label(row['exit'])} in the end; it differs by state"
    )


def _key_lines(ways: list[str], width: float) -> int:
    return max(1, -(-len(ways) // max(1, int((width - 2 * MARGIN) // 1.8))))


def _key(figure: Drawing, ways: list[str], width: float, high: float) -> None:
    """The marks and what they stand for, above the rows."""
    axes = panel(figure, MARGIN, 0, width - 2 * MARGIN, high)
    axes.axis("off")
    axes.set_xlim(0, width - 2 * MARGIN)
    axes.set_ylim(high, 0)
    columns = max(1, int((width - 2 * MARGIN) // 1.8))
    for k, way in enumerate(ways):
        x, y = (k % columns) * 1.8 + 0.08, (k // columns) * 0.24 + 0.1
        _mark(axes, x, y, k)
        axes.text(x + 0.12, y, fit_lines(way, 1.55, SMALL, lines=1)[0], size=SMALL, va="center")


def _mark(axes: Axes, x: float, y: float, k: int) -> None:
    colour = (INK, MODEL, FUTURE)[k % 3]
    axes.plot([x], [y], MARKS[k % len(MARKS)], color=colour, markersize=5,
              markerfacecolor=colour if k % 2 == 0 else PAPER, zorder=3)  # fmt: skip


def _reason_mark(axes: Axes, y: float, row: pd.Series, k: int) -> None:
    if missing(row["value"]):
        return
    if not missing(row["low"]):
        axes.plot([row["low"], row["high"]], [y, y], color=SOFT, linewidth=1.1, zorder=2)
    _mark(axes, row["value"], y, k)
    right = row["value"] if missing(row["high"]) else max(row["value"], row["high"])
    axes.annotate(percent(row["value"]), (right, y), xytext=(6, 0), textcoords="offset points", size=SMALL - 0.7,
                  va="center", annotation_clip=False)  # fmt: skip
