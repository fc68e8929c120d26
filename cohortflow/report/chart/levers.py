"""What to do first: the gain from one point of each move, in the direction that helps, with its interval."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from cohortflow.errors import CallError, listed
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
from cohortflow.report.plans import gain, target_form, target_words
from cohortflow.report.rounding import missing, percent, span
from cohortflow.report.tabulate import by_key
from cohortflow.report.text import label, upper_first

COLUMNS = ["from", "to", "target", "per_point", "low", "high", "rank"]
SHOWN, ROW_HIGH, FOOT_HIGH, NAME_WIDE, NOTE_WIDE = 10, 0.36, 0.32, 2.6, 1.5


def levers_chart(
    levers: Any, *, target: str | None = None, currency: str = "", kind: str = "month", segment: str = ALL,
    width: float = WIDE,
) -> Drawing:  # fmt: skip
    """The ten levers with the largest effect on a target.

    levers : Levers or the contract's frame;  target : one of its targets, default the first
    """
    rows = frame_of(levers, COLUMNS, segment=segment)
    known = list(pd.unique(rows["target"]))
    chosen = known[0] if target is None and known else target
    if chosen not in known:
        raise CallError(f'There are no levers of "{target}"; there are {listed(known)}.')
    own = rows[(rows["target"] == chosen) & rows["rank"].notna()].sort_values("rank").head(SHOWN)
    return _drawn(_helping(own), str(chosen), currency, kind, width)


def _helping(rows: pd.DataFrame) -> pd.DataFrame:
    """Each lever turned so that it helps: less of a harmful move."""
    flip = rows["per_point"].to_numpy() < 0
    low, high = np.where(flip, -rows["high"], rows["low"]), np.where(flip, -rows["low"], rows["high"])
    words = [
        f"{'1 point fewer' if less else '1 point more'} {_move(a, b)}"
        for less, a, b in zip(flip, rows["from"], rows["to"], strict=True)
    ]
    return rows.assign(gain=rows["per_point"].abs(), low=low, high=high, words=words)


def _move(origin: str, to: str) -> str:
    return f"staying {label(origin)}" if origin == to else f"from {label(origin)} to {label(to)}"


def _drawn(rows: pd.DataFrame, target: str, currency: str, kind: str, width: float) -> Drawing:
    form, what = target_form(target, currency), target_words(target, kind)
    title = _title(rows, what, form)
    subtitle = (
        f"Gain in {what} for one point of probability a {kind}, paid for by the rest of the row in "
        f"proportion. Dot: "
        "estimate, with its interval. A point is not equally cheap to win everywhere: compare with what it "
        "costs."
    )
    said = "; ".join(f"{r['words']} {gain(r['gain'], form)}" for r in rows.to_dict("records"))
    alt = f"One line a lever, the largest gain first. {title}. {said}."
    with house_style():
        figure = drawing(title, subtitle, width=width, body=len(rows) * ROW_HIGH + FOOT_HIGH, alt=alt)
        names = min(NAME_WIDE, 0.42 * width)
        notes = min(NOTE_WIDE, 0.28 * width)
        axes = panel(figure, MARGIN + names, 0.05, width - names - notes - 2 * MARGIN, len(rows) * ROW_HIGH)
        axes.set_ylim(len(rows) - 0.5, -0.5)
        axes.set_xlim(0, float(np.nanmax(rows[["gain", "high"]].to_numpy(dtype=float))) * 1.04)
        axes.set_yticks([])
        axes.xaxis.set_major_formatter(lambda v, _: form(v))
        axes.locator_params(axis="x", nbins=3 if width < WIDE / 2 else 5)
        quiet_axis(axes, grid="x")
        for y, row in enumerate(by_key(rows, "rank").values()):
            _row(axes, y, row, form, names)
    return figure


def _row(axes: Axes, y: int, row: dict[str, Any], form: Any, names: float) -> None:
    axes.plot([0, row["gain"]], [y, y], color=BAND, linewidth=1.2)
    if not missing(row["low"]):
        axes.plot([row["low"], row["high"]], [y, y], color=BAND, linewidth=6, solid_capstyle="butt")
    axes.plot([row["gain"]], [y], "o", color=FUTURE, markersize=5)
    lines = fit_lines(row["words"], names - 0.1, BODY, lines=2)
    axes.annotate("\n".join(lines), (0, y), xytext=(-7, 0), textcoords="offset points", ha="right", va="center",
                  size=BODY, color=INK)  # fmt: skip
    limits = "" if missing(row["low"]) else f"({span(row['low'], row['high'], form)})"
    spot: dict[str, Any] = {
        "xycoords": ("axes fraction", "data"),
        "textcoords": "offset points",
        "va": "center",
        "color": FUTURE,
    }
    axes.annotate(
        gain(row["gain"], form),
        (1, y),
        xytext=(6, 4 if limits else 0),
        size=BODY - 0.3,
        weight="bold",
        **spot,
    )
    axes.annotate(limits, (1, y), xytext=(6, -5.5), size=SMALL - 1, **spot)


def _title(rows: pd.DataFrame, what: str, form: Any) -> str:
    if not len(rows):
        return f"No move changes {what}"
    first = rows.iloc[0]
    said = f"{upper_first(first['words'])}: {gain(first['gain'], form)} {what}"
    if "chance_best" in rows and not missing(first["chance_best"]) and first["chance_best"] < 0.9:
        return f"{said}; it comes first in {percent(first['chance_best'], 0)} of draws"
    return said
