"""How past forecasts did: their error beside simple rivals, and how often their bands held, by periods ahead."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from cohortflow.errors import CallError, listed
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
    apart,
    drawing,
    fit_lines,
    house_style,
    panel,
    quiet_axis,
    share_ticks,
)  # fmt: skip
from cohortflow.report.rounding import count, missing, percent, unit
from cohortflow.report.text import label
from cohortflow.report.wording import FORECASTERS
from cohortflow.states import ALL_LIVE

HIGH, FOOT, HEAD, LEFT, NAME_WIDE = 1.9, 0.42, 0.26, 0.5, 1.2
LEADER: dict[str, Any] = {"arrowstyle": "-", "linewidth": 0.5, "shrinkA": 1, "shrinkB": 1}
OFF_SCALE = 2.5  # times the largest error of the models and the last mix
DASHES = ((0, (4, 1.6)), (0, (1, 1.4)), (0, (6, 1.4, 1, 1.4)), (0, (2, 1)), (0, (8, 2)))


def errors_of(tested: Any, models: Sequence[str], quantity: str = ALL_LIVE) -> pd.DataFrame:
    """Mean absolute error in customers, rows = periods ahead, one column a forecaster that has a figure."""
    rows = tested.frame[(tested.frame["quantity"] == quantity) & tested.frame["model"].isin(list(models))]
    off = (rows["predicted"] - rows["actual"]).abs()
    wide = off.groupby([rows["horizon"], rows["model"]]).mean().unstack("model")
    return wide.reindex(columns=[m for m in models if m in wide and wide[m].notna().any()]).sort_index()


def backtest_chart(
    tested: Any, model: str, *, quantity: str = ALL_LIVE, kind: str = "month", width: float = WIDE
) -> Drawing:
    """Left: mean error of the model, the plain chain and the rivals by periods ahead. Right: how often its band held.

    tested : a Backtest;  model : the one to judge. CallError when it has not been tested.
    """
    if model not in tested.models:
        raise CallError(f'The backtest has not tried the model "{model}"; it has tried {listed(tested.models)}.')
    names = list(dict.fromkeys([model, *(["plain"] if "plain" in tested.models else []), *FORECASTERS]))
    errors = errors_of(tested, [n for n in names if n in set(tested.frame["model"])], quantity)
    scores = tested.scores
    seen = scores[(scores["model"] == model) & (scores["quantity"] == quantity)].sort_values("horizon")
    title, what = _title(errors, seen, model, tested.level, kind), _what(quantity)
    subtitle = (
        f"{len(tested.origins)} past forecasts of {what}, each made from what was known then. Errors: mean distance "
        f"from what was counted. Bands: share of the {percent(tested.level, 0)} bands that held what was counted, with "
        "the range that so few forecasts allow."
    )
    stacked = width < 6
    with house_style():
        body = (HEAD + HIGH + FOOT) * (2 if stacked else 1)
        figure = drawing(title, subtitle, width=width, body=body, alt=_alt(title, errors, seen, kind))
        inner = width - 2 * MARGIN
        half = inner if stacked else 0.56 * inner
        _errors(figure, errors, model, MARGIN, 0.0, half, kind)
        left, top = (MARGIN, HEAD + HIGH + FOOT) if stacked else (MARGIN + half + 0.1, 0.0)
        _coverage(figure, seen, tested.level, left, top, inner if stacked else inner - half - 0.1, kind)
    return figure


def _errors(
    figure: Drawing, errors: pd.DataFrame, model: str, left: float, top: float, wide: float, kind: str
) -> None:
    axes = panel(figure, left + LEFT, top + HEAD, wide - LEFT - NAME_WIDE, HIGH)
    most = _top(errors, model)
    lasts = []
    for k, name in enumerate(errors.columns):
        own = errors[name].dropna()
        style: dict[str, Any] = {"color": SOFT, "linestyle": DASHES[k % len(DASHES)], "linewidth": 1.2}
        if name == model:
            style = {"color": FUTURE, "linestyle": "solid", "linewidth": 2.2}
        elif name == "plain":
            style = {"color": MODEL, "linestyle": DASHES[k % len(DASHES)], "linewidth": 1.5}
        axes.plot(own.index, own.to_numpy(), **style)
        lasts.append((forecaster(str(name)), float(own.iloc[-1]), float(own.index[-1]), style["color"], name == model))
    axes.set_ylim(0, most)
    _frame(axes, errors.index, kind)
    axes.yaxis.set_major_formatter(lambda v, _: f"{v:,.0f}")
    _heading(axes, "Mean error, customers")
    _names(axes, lasts, most, wide)


def _top(errors: pd.DataFrame, model: str) -> float:
    """Top of the scale: a rival far worse than the others runs out of the picture instead of flattening it."""
    kept = errors[[n for n in errors if n in (model, "plain", "last_mix")]].to_numpy(dtype=float)
    whole = float(np.nanmax(errors.to_numpy(dtype=float), initial=1.0))
    return 1.06 * min(whole, OFF_SCALE * float(np.nanmax(kept, initial=1.0)))


def _names(axes: Axes, lasts: list[tuple[str, float, float, str, bool]], most: float, wide: float) -> None:
    """Names at the right ends of the lines, pushed apart."""
    said = [f"{name} {count(value)}{' (off the scale)' if value > most else ''}" for name, value, *_ in lasts]
    lines = [fit_lines(text, NAME_WIDE - 0.2, SMALL, bold=last[-1], lines=2)
             for text, last in zip(said, lasts, strict=True)]  # fmt: skip
    places = apart([min(value / most, 1.0) for _, value, *_ in lasts], [0.13 * len(words) / HIGH for words in lines])
    for (_, value, at, colour, own), place, words in zip(lasts, places, lines, strict=True):
        weight = "bold" if own else "normal"
        spot: dict[str, Any] = {"xytext": (1 + 0.14 / (wide - LEFT - NAME_WIDE), place), "textcoords": "axes fraction"}
        axes.annotate("", (at, min(value, most)), annotation_clip=False, arrowprops={**LEADER, "color": colour}, **spot)
        axes.annotate("\n".join(words), (at, min(value, most)), size=SMALL, color=colour, weight=weight, va="center",
                      annotation_clip=False, **spot)  # fmt: skip


def _coverage(
    figure: Drawing, seen: pd.DataFrame, level: float, left: float, top: float, wide: float, kind: str
) -> None:
    axes = panel(figure, left + LEFT, top + HEAD, wide - LEFT - 0.75, HIGH)
    axes.axhline(level, color=INK, linewidth=1.0)
    for row in seen.to_dict("records"):
        if missing(row["coverage"]):
            continue
        held = row["coverage_low"] <= level <= row["coverage_high"]
        colour = FUTURE if held else MODEL
        axes.plot([row["horizon"]] * 2, [row["coverage_low"], row["coverage_high"]], color=BAND if held else colour,
                  linewidth=5 if held else 1.5, solid_capstyle="butt")  # fmt: skip
        axes.plot([row["horizon"]], [row["coverage"]], "o" if held else "X", color=colour, markersize=5.5)
    axes.set_ylim(0, 1.04)
    _frame(axes, seen["horizon"], kind)
    share_ticks(axes)
    _heading(axes, "Bands that held")
    axes.annotate(f"meant: {percent(level, 0)}", (1, level), xycoords=("axes fraction", "data"), xytext=(4, 0),
                  textcoords="offset points", size=SMALL, va="center", annotation_clip=False)  # fmt: skip


def _frame(axes: Axes, horizons: Any, kind: str) -> None:
    last = int(max(horizons, default=1))
    axes.set_xlim(0.6, last + 0.4)
    every = max(1, -(-last // 6))
    axes.set_xticks(range(every, last + 1, every))
    quiet_axis(axes)
    axes.set_xlabel(f"{unit(kind)} ahead", size=SMALL)


def _heading(axes: Axes, text: str) -> None:
    axes.text(0, 1 + 0.05 / HIGH, text, transform=axes.transAxes, size=BODY, weight="bold", va="bottom")


def forecaster(name: str) -> str:
    """A model or rival as printed.

    >>> forecaster("last_mix"), forecaster("tenure")
    ('last mix', 'model tenure')
    """
    return FORECASTERS.get(name, f"model {label(name)}")


def _ends(errors: pd.DataFrame) -> tuple[int, dict[str, float]]:
    """The farthest distance, and the errors there."""
    row = errors.sort_index().tail(1).dropna(axis=1)
    return int(row.index[0]), {str(n): float(row[n].iloc[0]) for n in row}


def _what(quantity: str) -> str:
    return "live customers" if quantity == ALL_LIVE else f"customers in {label(quantity)}"


def _title(errors: pd.DataFrame, seen: pd.DataFrame, model: str, level: float, kind: str) -> str:
    last, ends = _ends(errors)
    others = {n: v for n, v in ends.items() if n not in (model, "plain")}
    missed = f"missed by {count(ends[model])} on average" if model in ends else "could not be scored"
    head = f"{last} {unit(kind, last)} ahead, past forecasts with the model {label(model)} {missed}"
    if others:
        best = min(others, key=lambda n: others[n])
        head += f", the best simple rival ({forecaster(best)}) by {count(others[best])}"
    known = seen.dropna(subset=["coverage"])
    held = ((known["coverage_low"] <= level) & (level <= known["coverage_high"])).sum()
    return f"{head}; the bands held as meant at {held} of {len(known)} distances" if len(known) else head


def _alt(title: str, errors: pd.DataFrame, seen: pd.DataFrame, kind: str) -> str:
    ends = [f"{forecaster(n)} {count(v)}" for n, v in _ends(errors)[1].items()]
    known = seen.dropna(subset=["coverage"]).to_dict("records")
    held = [f"{int(r['horizon'])}: {percent(r['coverage'], 0)}" for r in known]
    return (
        f"Two line charts by {unit(kind)} ahead. {title}. Mean errors at the end: {'; '.join(ends)}. Bands that held: "
        f"{'; '.join(held) or 'not known'}."
    )
