"""What the uncertainty of a projection is made of: the share of each named part, period by period."""

from __future__ import annotations

from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from cohortflow.errors import CallError, listed
from cohortflow.report.chart.frames import ALL, frame_of
from cohortflow.report.chart.style import (
    INK,
    MARGIN,
    SHADES,
    SMALL,
    SOFT,
    WIDE,
    Drawing,
    apart,
    drawing,
    fit_lines,
    house_style,
    panel,
)  # fmt: skip
from cohortflow.report.rounding import percent, unit
from cohortflow.report.text import label
from cohortflow.report.wording import PART_NAMES
from cohortflow.states import ALL_LIVE

PARTS = ("common_shocks", "joiners", "rates", "chance")
FILLS = {"common_shocks": SHADES[6], "joiners": SHADES[4], "rates": SHADES[2], "chance": SHADES[0]}
HIGH, LEFT, NAME_WIDE, FOOT = 2.2, 0.42, 1.75, 0.32


def shares_of(band_parts: Any, *, quantity: str = ALL_LIVE, segment: str = ALL) -> pd.DataFrame:
    """period, periods_ahead, the share of each part in the variance (0 to 1), std_error in customers.

    Periods without any uncertainty (the base period) are left out; NaN variances too. CallError when the table has no
    such quantity.

    >>> frame = pd.DataFrame({"period": ["1"], "periods_ahead": [1], "quantity": ["all_live"], "rates": [1.0],
    ...                       "chance": [3.0], "common_shocks": [0.0], "joiners": [0.0], "total": [4.0]})
    >>> shares_of(frame)[["rates", "chance", "std_error"]].values.tolist()
    [[0.25, 0.75, 2.0]]
    """
    rows = frame_of(band_parts, ["period", "periods_ahead", "quantity", *PARTS, "total"], segment=segment)
    own = rows[rows["quantity"] == quantity].sort_values("periods_ahead")
    if not len(own):
        raise CallError(f'The bands have no "{quantity}"; there are {listed(pd.unique(rows["quantity"]))}.')
    own = own[own["total"] > 0].reset_index(drop=True)
    out = own[["period", "periods_ahead"]].copy()
    for part in PARTS:
        out[part] = own[part].astype(float) / own["total"].astype(float)
    return out.assign(std_error=np.sqrt(own["total"].astype(float)))


def has_parts(band_parts: Any, *, quantity: str = ALL_LIVE, segment: str = ALL) -> bool:
    """Whether there is any uncertainty to divide."""
    rows = frame_of(band_parts, ["quantity", "total"], segment=segment)
    return bool((rows.loc[rows["quantity"] == quantity, "total"] > 0).any())


def band_parts_chart(
    band_parts: Any, *, quantity: str = ALL_LIVE, kind: str = "month", segment: str = ALL, width: float = WIDE
) -> Drawing:
    """One bar a period ahead, divided into the parts of the variance.

    band_parts : the contract's frame. CallError when there is no uncertainty to divide.
    """
    shares = shares_of(band_parts, quantity=quantity, segment=segment)
    if not len(shares):
        raise CallError(f'The band of "{quantity}" has no width, so there is nothing to divide.')
    shown = [p for p in PARTS if shares[p].max() > 0]
    title, what = _title(shares, shown, quantity), _what(quantity)
    subtitle = (
        f"Share of each part in the variance of {what} at the end of each {unit(kind, 1)} ahead. A band's width goes "
        "with the root of the variance."
    )
    said = [f"{PART_NAMES[p]} {percent(shares[p].iloc[0], 0)} at first and {percent(shares[p].iloc[-1], 0)} at the end"
            for p in shown]  # fmt: skip
    with house_style():
        alt = f"Divided bars. {title}. {'; '.join(said)}."
        figure = drawing(title, subtitle, width=width, body=HIGH + FOOT, alt=alt)
        name_wide = min(NAME_WIDE, 0.36 * width)
        wide = width - 2 * MARGIN - LEFT - name_wide
        axes = panel(figure, MARGIN + LEFT, 0.04, wide, HIGH - 0.04)
        _bars(axes, shares, shown, wide)
        _names(figure, shares, shown, MARGIN + LEFT + wide, name_wide)
    return figure


def _what(quantity: str) -> str:
    return "the number of live customers" if quantity == ALL_LIVE else f"the number in {label(quantity)}"


def _title(shares: pd.DataFrame, shown: list[str], quantity: str) -> str:
    last = shares.iloc[-1]
    most = max(shown, key=lambda p: float(last[p]))
    return (
        f"{percent(last[most], 0)} of the uncertainty about {_what(quantity)} at the end of {last['period']} is "
        f"{PART_NAMES[most]}"
    )


def _bars(axes: Axes, shares: pd.DataFrame, shown: list[str], wide: float) -> None:
    x, bottom = np.arange(len(shares)), np.zeros(len(shares))
    for part in shown:
        heights = shares[part].to_numpy(dtype=float)
        axes.bar(x, heights, 0.8, bottom=bottom, color=FILLS[part], edgecolor=INK, linewidth=0.5)
        bottom += heights
    axes.set_xlim(-0.5, len(shares) - 0.5)
    axes.set_ylim(0, 1)
    axes.set_yticks([0, 0.5, 1], [percent(v, 0) for v in (0, 0.5, 1)])
    axes.spines["left"].set_visible(False)
    every = max(1, -(-len(shares) // max(2, int(wide / 0.75))))
    at = list(range(len(shares) - 1, -1, -every))[::-1]
    axes.set_xticks(at, [str(shares["period"].iloc[k]) for k in at])


def _names(figure: Drawing, shares: pd.DataFrame, shown: list[str], left: float, room: float) -> None:
    """Each part's fill, name and share beside the last bar; pushed apart where parts are thin."""
    axes = panel(figure, left, 0.04, room, HIGH - 0.04)
    axes.axis("off")
    axes.set_xlim(0, room)
    axes.set_ylim(0, 1)
    last = shares[shown].iloc[-1].to_numpy(dtype=float)
    middles = np.cumsum(last) - last / 2
    lines = [fit_lines(f"{PART_NAMES[p]} {percent(v, 0)}", room - 0.3, SMALL + 0.4, lines=2)
             for p, v in zip(shown, last, strict=True)]  # fmt: skip
    places = apart(middles.tolist(), [0.14 * len(words) / HIGH for words in lines])
    for part, middle, place, words in zip(shown, middles, places, lines, strict=True):
        axes.plot([-0.05, 0.06], [middle, place], color=SOFT, linewidth=0.6, clip_on=False)
        axes.barh([place], [0.13], 0.13 / HIGH, left=0.08, color=FILLS[part], edgecolor=INK, linewidth=0.5)
        axes.text(0.27, place, "\n".join(words), va="center", size=SMALL + 0.4)
