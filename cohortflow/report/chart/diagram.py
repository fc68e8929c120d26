"""The states and the moves between them as a drawing: one column of boxes, arcs to the right and to the left.

Every arc bulges in proportion to how many boxes it spans, so that each pair of states has its own place for
its rate and labels cannot fall on one another.
"""

from __future__ import annotations

from typing import Any

import numpy as np
from matplotlib.axes import Axes
from matplotlib.patches import FancyArrowPatch, FancyBboxPatch
from matplotlib.path import Path

from cohortflow.report.chart.frames import ALL, square, states_of, transitions_of
from cohortflow.report.chart.style import (
    FAINT,
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
)  # fmt: skip
from cohortflow.report.rounding import percent, span, unit
from cohortflow.report.text import label
from cohortflow.states import States

BOX_WIDE, BOX_HIGH, PITCH = 1.35, 0.44, 0.78
RARE = 0.02
LABELLED = 0.01
LABELS_AT_MOST = 40
REACH, REACH_STEP = 0.42, 0.26


def state_diagram(
    fit: Any, *, states: States | None = None, period: str = "month", segment: str = ALL, width: float = WIDE
) -> Drawing:
    """States as boxes in their declared order, exits last; moves down the list arc to the right, moves up to the
    left; the stronger the move the thicker, moves under 2 % faint, under 1 % without a figure.

    fit : Fit, Intervals or a `transitions` frame. Wider than `width` when there are many states.
    """
    rows = transitions_of(fit, segment=segment)
    known = states_of(fit, states, rows)
    names = [*known.remaining, *known.exits]
    rate, low, high = (square(rows, c, names) for c in ("probability", "low", "high"))
    shown = _shown(rate)
    floor = _label_floor(rate)
    left, right = _reach(shown, down=False), _reach(shown, down=True)
    full = max(width, left + right + BOX_WIDE + 2 * MARGIN + 0.2)
    body = (len(names) - 1) * PITCH + BOX_HIGH + 0.2
    title = _title(names, rate, low, high, len(known.remaining), period)
    subtitle = (
        f"Moves in one {unit(period, 1)}: down the list at the right, up the list at the left. In the boxes: the share "
        f"that stays. Thin grey: under {percent(RARE, 0)}; moves under {percent(floor, 0)} carry no figure (they are "
        f"in "
        "the table). Dashed box: an exit."
    )
    alt = f"Boxes joined by arcs. {title}. {_strongest(names, rate)}"
    with house_style():
        figure = drawing(title, subtitle, width=full, body=body, alt=alt)
        axes = panel(figure, MARGIN, 0, full - 2 * MARGIN, body)
        axes.set_xlim(0, full - 2 * MARGIN)
        axes.set_ylim(body, 0)
        axes.axis("off")
        middle = left + BOX_WIDE / 2 + max(0.0, (full - 2 * MARGIN - left - right - BOX_WIDE) / 2)
        for i, j in sorted(np.argwhere(shown).tolist(), key=lambda ij: rate[ij[0], ij[1]]):
            _arc(axes, middle, i, j, rate[i, j], rate[i, j] >= floor)
        for i, name in enumerate(names):
            _box(axes, middle, i, name, rate[i, i], name in known.exits)
    return figure


def _shown(rate: np.ndarray) -> np.ndarray:
    """(K, K) bool: moves that were seen, without staying."""
    shown = np.nan_to_num(rate) > 0
    np.fill_diagonal(shown, False)
    return shown


def _label_floor(rate: np.ndarray) -> float:
    """Smallest rate that gets a figure: 1 %, or more when there would be too many figures."""
    values = np.sort(np.nan_to_num(rate)[_shown(rate)])[::-1]
    if len(values) <= LABELS_AT_MOST:
        return LABELLED
    return max(LABELLED, float(np.ceil(values[LABELS_AT_MOST] * 100) / 100))


def _bulge(spanned: int) -> float:
    """How far an arc over so many boxes stands out from the column."""
    return REACH + REACH_STEP * (spanned - 1)


def _reach(shown: np.ndarray, *, down: bool) -> float:
    spans = [abs(i - j) for i, j in np.argwhere(shown) if (j > i) == down]
    return _bulge(max(spans)) + 0.28 if spans else 0.1


def _place(i: int) -> float:
    return 0.1 + BOX_HIGH / 2 + i * PITCH


def _arc(axes: Axes, middle: float, i: int, j: int, rate: float, labelled: bool) -> None:
    side = 1 if j > i else -1
    edge = middle + side * BOX_WIDE / 2
    out = edge + side * _bulge(abs(i - j))
    start = _place(i) + side * BOX_HIGH * 0.24
    end = _place(j) - side * BOX_HIGH * 0.24
    reach = edge + (out - edge) * 4 / 3
    path = Path([(edge, start), (reach, start), (reach, end), (edge, end)],
                [Path.MOVETO, Path.CURVE4, Path.CURVE4, Path.CURVE4])  # fmt: skip
    rare = rate < RARE
    axes.add_patch(
        FancyArrowPatch(
            path=path,
            arrowstyle="-|>",
            mutation_scale=6 if rare else 9,
            color=FAINT if rare else SOFT,
            linewidth=0.6 if rare else 0.9 + 7 * np.sqrt(rate) * 0.6,
            shrinkA=0,
            shrinkB=0,
            zorder=1 if rare else 2,
        )  # fmt: skip
    )
    if labelled:
        axes.text(out, (start + end) / 2, percent(rate), ha="center", va="center", size=SMALL - 0.4,
                  color=SOFT if rare else INK, zorder=4,
                  bbox={"facecolor": PAPER, "edgecolor": "none", "pad": 0.8})  # fmt: skip


def _box(axes: Axes, middle: float, i: int, name: str, stays: float, leaves: bool) -> None:
    y = _place(i)
    axes.add_patch(
        FancyBboxPatch(
            (middle - BOX_WIDE / 2, y - BOX_HIGH / 2),
            BOX_WIDE,
            BOX_HIGH,
            boxstyle="round,pad=0,rounding_size=0.06",
            facecolor=PAPER,
            edgecolor=MODEL if leaves else INK,
            linewidth=1.1,
            zorder=3,
            linestyle=(0, (3, 2)) if leaves else "solid",
        )  # fmt: skip
    )
    lines = fit_lines(name, BOX_WIDE - 0.12, SMALL, bold=True, lines=2)
    second = "" if leaves else ("no data" if np.isnan(stays) else f"{percent(stays)} stay")
    high = 0.125 * len(lines) + (0.115 if second else 0)
    top = y - high / 2
    for k, line in enumerate(lines):
        axes.text(
            middle,
            top + 0.125 * k + 0.0625,
            line,
            ha="center",
            va="center",
            size=SMALL,
            weight="bold",
            zorder=4,
        )
    axes.text(middle, top + 0.125 * len(lines) + 0.055, second, ha="center", va="center", size=SMALL - 1, color=SOFT,
              zorder=4)  # fmt: skip


def _title(
    names: list[str], rate: np.ndarray, low: np.ndarray, high: np.ndarray, origins: int, period: str
) -> str:
    stays = np.diag(rate)[:origins]
    if np.isnan(stays).all():
        return "No departure was counted from any state"
    i = int(np.nanargmin(stays))
    figures = f"{percent(stays[i])} ({span(low[i, i], high[i, i], percent)})"
    others = [k for k in range(origins) if k != i and not np.isnan(stays[k])]
    sure = all(high[i, i] < low[k, k] for k in others)
    head = "is the state least stayed in" if sure and others else "keeps"
    if sure and others:
        return f"{label(names[i])} {head}: {figures} are still there a {unit(period, 1)} later"
    return f"{label(names[i])} {head} {figures} of its customers from one {unit(period, 1)} to the next"


def _strongest(names: list[str], rate: np.ndarray) -> str:
    moves = np.nan_to_num(rate)
    moves = np.where(_shown(rate), moves, 0)
    order = np.argsort(-moves.ravel(), kind="stable")[:5]
    said = [f"{label(names[k // len(names)])} to {label(names[k % len(names)])} {percent(moves.flat[k])}"
            for k in order if moves.flat[k] > 0]  # fmt: skip
    return f"Strongest moves: {'; '.join(said)}." if said else "No moves."
