"""From opening to closing: what came and went in the last counted period and in the next one."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from typing import Any

import numpy as np
import pandas as pd
from matplotlib.axes import Axes

from cohortflow.errors import CallError, listed
from cohortflow.report.chart.frames import ALL, frame_of
from cohortflow.report.chart.style import (
    BAND,
    BODY,
    FAINT,
    FUTURE,
    INK,
    MARGIN,
    SMALL,
    SOFT,
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

ROW_HIGH, NAME_WIDE = 0.27, 1.62
COLUMNS = ["period", "kind", "state", "line", "exit", "customers"]
LINES = {
    "joined": "joined",
    "returned": "returned after leaving",
    "moved": "away and back, net",
    "unobserved": "missing in the extract, net",
    "adjustment": "manual adjustment",
}


@dataclass(frozen=True)
class Step:
    """One period's way from opening to closing; `parts` add up to closing - opening, in whole customers."""

    period: str
    kind: str
    opening: int
    parts: tuple[tuple[str, int], ...]

    @property
    def closing(self) -> int:
        return self.opening + sum(n for _, n in self.parts)


def rollforward_chart(
    rollforward: Any, *, quantity: str = ALL_LIVE, segment: str = ALL, width: float = WIDE
) -> Drawing:
    """Last counted period and first projected one, side by side: bars start at the opening base (0) and each
    begins where the one above ended, so the lowest end is the closing base.

    rollforward : frame of the contract;  quantity : a state, or the live base
    Raises CallError when the frame has no period of that quantity.
    """
    steps = steps_of(rollforward, quantity=quantity, segment=segment)
    side_by_side = width >= 6 and len(steps) > 1
    rows = max(len(s.parts) for s in steps) + 2
    one = rows * ROW_HIGH + 0.42
    title, subtitle = _title(steps), _subtitle(quantity)
    alt = f"Bars from opening to closing. {title}. {' '.join(_said(s) for s in steps)}"
    with house_style():
        body = one if side_by_side else one * len(steps)
        figure = drawing(title, subtitle, width=width, body=body, alt=alt)
        inner = (width - 2 * MARGIN) / (len(steps) if side_by_side else 1)
        limits = _limits(steps)
        for k, step in enumerate(steps):
            left, top = (MARGIN + k * inner, 0.0) if side_by_side else (MARGIN, k * one)
            _draw(figure, step, left, top, inner - (0.2 if side_by_side else 0), limits)
    return figure


def steps_of(rollforward: Any, *, quantity: str = ALL_LIVE, segment: str = ALL) -> list[Step]:
    """The last actual and the first forecast period as whole numbers that foot."""
    frame = frame_of(rollforward, COLUMNS, segment=segment)
    own = frame[(frame["state"] == quantity) & (frame["line"] != "joined_and_left")]
    out = []
    for kind, place in (("actual", -1), ("forecast", 0)):
        periods = pd.unique(own.loc[own["kind"] == kind, "period"])
        chosen = (
            own[(own["kind"] == kind) & (own["period"] == periods[place])] if len(periods) else own.iloc[:0]
        )
        if len(chosen) and chosen["customers"].notna().all():
            out.append(_step(chosen))
    if not out:
        known = listed(pd.unique(frame["state"]))
        raise CallError(f'The roll-forward has no known period of "{quantity}"; it has {known}.')
    return out


def _step(rows: pd.DataFrame) -> Step:
    lines = rows.assign(customers=rows["customers"].astype(float))
    total = lines.groupby("line")["customers"].sum()
    parts = {LINES["joined"]: total.get("joined", 0.0), LINES["returned"]: total.get("returned", 0.0)}
    lost = lines[lines["line"] == "lost"]
    for name in pd.unique(lost["exit"]):
        parts[f"left: {label(name, 30)}"] = -float(lost.loc[lost["exit"] == name, "customers"].sum())
    parts[LINES["moved"]] = total.get("moved_in", 0.0) - total.get("moved_out", 0.0)
    parts[LINES["unobserved"]] = total.get("unobserved_in", 0.0) - total.get("unobserved_out", 0.0)
    parts[LINES["adjustment"]] = total.get("adjustment", 0.0)
    kept = {k: v for k, v in parts.items() if abs(v) > 1e-9 or k == LINES["joined"]}
    opening, closing = round(total.get("opening", 0.0)), round(total.get("closing", 0.0))
    whole = foot(list(kept.values()), closing - opening)
    first = rows.iloc[0]
    return Step(str(first["period"]), str(first["kind"]), opening, tuple(zip(kept, whole, strict=True)))


def _limits(steps: Sequence[Step]) -> tuple[float, float]:
    ends = [0.0]
    for step in steps:
        ends += list(np.cumsum([n for _, n in step.parts]))
    low, high = min(ends), max(ends)
    return low, max(high, low + 1)


def _draw(
    figure: Drawing, step: Step, left: float, top: float, wide: float, limits: tuple[float, float]
) -> None:
    rows = len(step.parts) + 2
    axes = panel(figure, left, top, wide, rows * ROW_HIGH + 0.36)
    axes.set_xlim(0, wide)
    axes.set_ylim(rows * ROW_HIGH + 0.36, 0)
    axes.axis("off")
    actual = step.kind == "actual"
    heading = f"{step.period}, {'counted' if actual else 'projected'}"
    axes.text(0, 0.1, heading, weight="bold", size=BODY, color=INK if actual else FUTURE, va="center")
    room = wide - NAME_WIDE - 1.3
    low, high = limits

    def place(value: float) -> float:
        return NAME_WIDE + 0.65 + (value - low) / (high - low) * room

    y = 0.36
    _total(axes, "opening base", step.opening, y, wide, place(0))
    now = 0.0
    for name, change in step.parts:
        y += ROW_HIGH
        _part(axes, name, change, y, place(now), place(now + change), actual)
        now += change
    y += ROW_HIGH
    _total(axes, "closing base", step.closing, y, wide, place(now), change=now)


def _total(
    axes: Axes, name: str, value: int, y: float, wide: float, x: float, change: float | None = None
) -> None:
    axes.plot([0, wide], [y - ROW_HIGH / 2] * 2, color=FAINT, linewidth=0.7)
    axes.text(0, y, name, weight="bold", va="center")
    axes.plot([x, x], [y - 0.09, y + 0.09], color=INK, linewidth=2.4, solid_capstyle="butt")
    note = count(value) if change is None else f"{count(value)} ({signed(change)})"
    fits = x + 0.07 + text_width(note, BODY, bold=True) <= wide
    axes.text(
        x + (0.07 if fits else -0.07), y, note, weight="bold", va="center", ha="left" if fits else "right"
    )


def _part(axes: Axes, name: str, change: int, y: float, start: float, end: float, actual: bool) -> None:
    axes.text(
        0, y, "\n".join(fit_lines(name, NAME_WIDE, SMALL + 0.5, lines=2)), va="center", size=SMALL + 0.5
    )
    colour, edge = (SOFT, SOFT) if actual else (BAND, FUTURE)
    hatch = "" if change >= 0 else "//////"
    face = colour if change >= 0 else "none"
    axes.barh(y, end - start, left=start, height=0.15, color=face, edgecolor=edge, linewidth=0.9, hatch=hatch)
    axes.plot([end, end], [y, y + ROW_HIGH], color=FAINT, linewidth=0.7, zorder=0)
    right = change >= 0
    axes.text(max(start, end) + 0.06 if right else min(start, end) - 0.06, y, signed(change), va="center",
              ha="left" if right else "right", size=SMALL + 0.5)  # fmt: skip


def _title(steps: Sequence[Step]) -> str:
    said = []
    for step in steps:
        change = step.closing - step.opening
        word = {"actual": "ended", "forecast": "is projected to end"}[step.kind]
        said.append(f"{step.period} {word} at {count(step.closing)} ({signed(change)})")
    return "; ".join(said)


def _subtitle(quantity: str) -> str:
    who = "Live customers" if quantity == ALL_LIVE else f"Customers in {label(quantity)}"
    return (
        f"{who}, opening to closing. Filled bars add, hatched bars take away; each starts where the one above ends. "
        "Printed figures foot; the projected ones are expected values, their bands are in the table."
    )


def _said(step: Step) -> str:
    parts = ", ".join(f"{name} {signed(n)}" for name, n in step.parts)
    return f"{step.period}: opening {count(step.opening)}, {parts}, closing {count(step.closing)}."
