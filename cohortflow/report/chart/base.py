"""Where the base is heading: the past joined to the projection, one small panel a quantity."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from cohortflow.report.chart.frames import ALL, frame_of
from cohortflow.report.chart.style import (
    BAND,
    BODY,
    FUTURE,
    INK,
    MARGIN,
    MODEL,
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
from cohortflow.report.rounding import count, percent, signed, span, unit
from cohortflow.report.text import label
from cohortflow.states import ALL_LIVE, States

PANEL_HIGH, FIRST_HIGH, PANEL_WIDE = 1.15, 1.75, 2.75
LABEL_WIDE, HEAD_HIGH, FOOT_HIGH = 0.62, 0.36, 0.34
PALE = 0.45
UNSEEN = 0.1  # share of the base that turned up only in a period: what came before was not whole
COLUMNS = ["period", "periods_ahead", "state", "customers", "low", "high"]


@dataclass(frozen=True)
class Path:
    """Past and projected values of one quantity; `label` as printed; `borne`: periods ahead vouched for."""

    label: str
    past: np.ndarray
    ahead: np.ndarray
    low: np.ndarray
    high: np.ndarray
    borne: int | None = None


def base_chart(
    projection: Any,
    rollforward: Any = None,
    *,
    totals: Mapping[str, Sequence[str]] | None = None,
    names: Sequence[str] | None = None,
    states: States | None = None,
    borne: Mapping[str, int] | None = None,
    plain: Sequence[float] | None = None,
    kind: str = "month",
    segment: str = ALL,
    width: float = WIDE,
) -> Drawing:
    """The live base, the named totals and each state over time: past as a solid line, projection dashed with
    its band. Every panel has its own scale from zero.

    projection : Projection or its frame;  rollforward : frame whose `closing` lines of kind actual are the past
    totals : named sums of states;  names : which quantities to draw (default: all_live, totals, states)
    states : to leave the exits out when there is no past
    borne : quantity -> periods ahead that past forecasts vouch for; beyond, its band is drawn pale
    plain : what the plain chain expects of the first quantity, from the base period on, drawn beside it
    """
    rows = frame_of(projection, COLUMNS, segment=segment)
    past = _past(rollforward, segment, totals or {})
    known = states or getattr(getattr(projection, "schedule", None), "states", None)
    wanted = list(names) if names else _order(rows, totals or {}, known.exits if known else ())
    paths = [_path(rows, past, name, (borne or {}).get(name)) for name in wanted]
    periods = [*(past.index if past is not None else []), *_ahead_labels(rows)]
    title, subtitle = _title(paths[0], rows, kind), _subtitle(rows, paths, plain is not None)
    columns = max(1, min(3, int((width - 2 * MARGIN) // PANEL_WIDE), max(len(paths) - 1, 1)))
    lines = -(-(len(paths) - 1) // columns)
    body = FIRST_HIGH + HEAD_HIGH + FOOT_HIGH + lines * (PANEL_HIGH + HEAD_HIGH + FOOT_HIGH)
    with house_style():
        figure = drawing(title, subtitle, width=width, body=body, alt=_alt(title, paths, periods))
        inner = width - 2 * MARGIN
        first = _panel(figure, paths[0], periods, MARGIN, 0.0, inner, FIRST_HIGH, ticks=int(inner / 0.95))
        _vouched(first, paths[0], kind)
        if plain is not None:
            x = len(paths[0].past) - 1 + np.arange(len(plain))
            first.plot(x, plain, color=MODEL, linestyle=(0, (1, 1.2)), linewidth=1.8)
        step = inner / columns
        for k, path in enumerate(paths[1:]):
            top = FIRST_HIGH + HEAD_HIGH + FOOT_HIGH + (k // columns) * (PANEL_HIGH + HEAD_HIGH + FOOT_HIGH)
            _panel(figure, path, periods, MARGIN + (k % columns) * step, top, step - 0.15, PANEL_HIGH,
                   ticks=int(step / 1.0))  # fmt: skip
    return figure


def _past(rollforward: Any, segment: str, totals: Mapping[str, Sequence[str]]) -> pd.DataFrame | None:
    """Counted customers at the end of each period (index) by quantity; the first opening leads."""
    if rollforward is None:
        return None
    frame = frame_of(rollforward, ["period", "kind", "state", "line", "customers"], segment=segment)
    closing = frame[(frame["kind"] == "actual") & (frame["line"] == "closing")]
    if not len(closing):
        return None
    wide = closing.pivot_table(index="period", columns="state", values="customers", aggfunc="sum", sort=False)
    for name, members in totals.items():
        if name not in wide:
            wide[name] = wide[[s for s in members if s in wide]].sum(axis=1)
    return wide.astype(float).loc[_complete_from(frame, wide) :]


def _complete_from(frame: pd.DataFrame, wide: pd.DataFrame) -> str:
    """First period whose closing is whole: before it, many customers were there but not yet seen."""
    seen = frame[
        (frame["kind"] == "actual") & (frame["line"] == "unobserved_in") & (frame["state"] == ALL_LIVE)
    ]
    if ALL_LIVE not in wide or not len(seen):
        return str(wide.index[0])
    late = seen.set_index("period")["customers"].astype(float) > UNSEEN * wide[ALL_LIVE].astype(float)
    return str(late[late].index[-1]) if late.any() else str(wide.index[0])


def _ahead_labels(rows: pd.DataFrame) -> list[str]:
    ahead = rows[rows["periods_ahead"] > 0].drop_duplicates("periods_ahead").sort_values("periods_ahead")
    return [str(p) for p in ahead["period"]]


def _order(rows: pd.DataFrame, totals: Mapping[str, Sequence[str]], exits: Sequence[str]) -> list[str]:
    have = [str(s) for s in pd.unique(rows["state"]) if s not in exits]
    lead = [n for n in (ALL_LIVE, *totals) if n in have]
    return lead + [s for s in have if s not in lead]


def _path(rows: pd.DataFrame, past: pd.DataFrame | None, name: str, borne: int | None) -> Path:
    own = rows[rows["state"] == name].sort_values("periods_ahead")
    ahead, low, high = (own[c].to_numpy(dtype=float) for c in ("customers", "low", "high"))
    before = past[name].to_numpy(dtype=float) if past is not None and name in past else ahead[:1]
    return Path("all live customers" if name == ALL_LIVE else label(name), before, ahead, low, high, borne)


def _panel(
    figure: Drawing,
    path: Path,
    periods: list[str],
    left: float,
    top: float,
    wide: float,
    high: float,
    ticks: int,
) -> Axes:
    axes = panel(figure, left + 0.46, top + HEAD_HIGH, wide - 0.46 - LABEL_WIDE, high)
    now = len(path.past) - 1
    x_ahead = now + np.arange(len(path.ahead))
    _band(axes, path, x_ahead)
    axes.plot(np.arange(len(path.past)), path.past, color=INK)
    axes.plot(x_ahead, path.ahead, color=FUTURE, linestyle=(0, (4, 1.6)))
    axes.plot([now], path.past[-1:], "o", color=INK, markersize=3)
    top_value = np.nanmax([*path.past, *path.high, *path.ahead, 1.0])
    axes.set_xlim(0, max(x_ahead[-1], 1))
    axes.set_ylim(0, top_value * 1.08)
    quiet_axis(axes)
    axes.yaxis.set_major_locator(_few_ticks())
    axes.yaxis.set_major_formatter(lambda v, _: f"{v:,.0f}")
    _ticks(axes, periods, ticks, now)
    _labels(axes, path, x_ahead[-1], top_value)
    lines = fit_lines(path.label, wide - 0.5, BODY, bold=True, lines=2)
    axes.text(
        0,
        1 + (0.06 / high),
        "\n".join(lines),
        transform=axes.transAxes,
        size=BODY,
        weight="bold",
        va="bottom",
    )
    return axes


def _band(axes: Axes, path: Path, x: np.ndarray) -> None:
    """The band, pale beyond the distance that past forecasts vouch for."""
    to = len(x) - 1 if path.borne is None else min(path.borne, len(x) - 1)
    for part, alpha in ((slice(0, to + 1), 1.0), (slice(to, None), PALE)):
        axes.fill_between(x[part], path.low[part], path.high[part], color=BAND, linewidth=0, alpha=alpha)
    if 0 < to < len(x) - 1:
        axes.plot([x[to]] * 2, [path.low[to], path.high[to]], color=FUTURE, linewidth=1.4)


def _vouched(axes: Axes, path: Path, kind: str) -> None:
    """In words above the first panel: how far past forecasts vouch for it."""
    if path.borne is None:
        return
    far = f"{path.borne} {unit(kind, path.borne)}" if path.borne else "no distance"
    axes.text(1, 1 + 0.08 / FIRST_HIGH, f"validated to {far}", transform=axes.transAxes, size=SMALL, ha="right",
              va="bottom", color=FUTURE)  # fmt: skip


def _few_ticks() -> Any:
    from matplotlib.ticker import MaxNLocator

    return MaxNLocator(3, integer=True)


def _ticks(axes: Axes, periods: list[str], ticks: int, now: int) -> None:
    """Period labels: the last actual one and as many others as have room at both sides."""
    last = len(periods) - 1
    every = max(1, -(-(last + 1) // max(ticks, 2)))
    places = [p for p in range(now, -1, -every)][::-1] + [p for p in range(now + every, last + 1, every)]
    axes.set_xticks(places, [periods[p] for p in places])
    axes.axvline(now, color=SOFT, linewidth=0.7, linestyle=(0, (1, 2)))


def _labels(axes: Axes, path: Path, end: float, top: float) -> None:
    """The projected end value with its band, at the right of the line."""
    value = path.ahead[-1]
    y = min(max(value, 0.1 * top), 0.98 * top)
    texts = [(count(value), BODY, "bold"), (count(path.low[-1]), SMALL - 1, "normal"), ("to " + count(path.high[-1]),
              SMALL - 1, "normal")]  # fmt: skip
    if np.isnan(path.low[-1]):
        texts = texts[:1]
    for k, (text, size, weight) in enumerate(texts):
        axes.annotate(text, (end, y), xytext=(5, (1 - k) * 8.2 if len(texts) > 1 else 0), textcoords="offset points",
                      size=size, weight=weight, color=FUTURE, va="center", annotation_clip=False)  # fmt: skip


def _title(path: Path, rows: pd.DataFrame, kind: str) -> str:
    """The change of the first quantity over the horizon, said as far as the band allows."""
    h, end = int(rows["periods_ahead"].max()), _ahead_labels(rows)[-1:] or ["?"]
    start, value, low, high = path.ahead[0], path.ahead[-1], path.low[-1], path.high[-1]
    figures = f"{count(value)} ({span(low, high)}) at the end of {end[0]}"
    change = signed(value / start - 1, percent) if start else ""
    if low > start or high < start:
        verb = "grow" if low > start else "shrink"
        return (
            f"{_subject(path.label)} {verb} from {count(start)} to {figures}: {change} in {h} {unit(kind, h)}"
        )
    doubt = f"the band does not say whether that is more or less than today's {count(start)}"
    return f"{_subject(path.label)}: {figures}; {doubt}"


def _subject(label: str) -> str:
    return "Live customers" if label == "all live customers" else f"Customers in {label}"


def _subtitle(rows: pd.DataFrame, paths: list[Path], plain: bool) -> str:
    levels = list(pd.unique(rows["level"].dropna())) if "level" in rows else []
    band = f"{percent(levels[0], 0)} band" if len(levels) == 1 else "band"
    beyond = any(p.borne is not None and p.borne < len(p.ahead) - 1 for p in paths)
    pale = "Pale band: farther ahead than past forecasts vouch for. " if beyond else ""
    other = "Dots: what the plain chain expects. " if plain else ""
    return (
        f"Customers at the end of each period. Solid: counted. Dashed: projected, with its {band}. Dotted upright: the "
        f"last counted period. {pale}{other}Each panel has its own scale, from zero."
    )


def _alt(title: str, paths: list[Path], periods: list[str]) -> str:
    ends = [f"{p.label} {count(p.ahead[-1])} ({span(p.low[-1], p.high[-1])})" for p in paths]
    return f"Line charts from {periods[0]} to {periods[-1]}. {title}. At the end: {'; '.join(ends)}."
