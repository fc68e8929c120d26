"""Groups of states that nobody leaves once inside: how many of today's customers end in each, and in what mix."""

from __future__ import annotations

from dataclasses import dataclass
from typing import Any

from matplotlib.axes import Axes

from cohortflow.errors import CallError
from cohortflow.report.chart.frames import ALL, frame_of
from cohortflow.report.chart.style import (
    BODY,
    INK,
    MARGIN,
    MODEL,
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
    text_width,
)  # fmt: skip
from cohortflow.report.rounding import missing, percent
from cohortflow.report.text import label, listing

ROW_HIGH, BAR_HIGH = 0.62, 0.2


@dataclass(frozen=True)
class Group:
    """A closed group: its members with their settled shares inside it, and the share of the start ending there."""

    members: tuple[tuple[str, float], ...]
    ends: float
    period: int = 1
    exit: bool = False

    @property
    def name(self) -> str:
        return listing([label(m, 24) for m, _ in self.members], limit=4)


def groups_of(long_run: Any, *, start: str = "start", segment: str = ALL) -> list[Group]:
    """Closed groups, then exits, with the share of today's customers (or of those starting in a state) that end "
    "there."""
    rows = frame_of(long_run, ["measure", "state", "from", "value"], segment=segment)
    ends = rows[(rows["measure"] == "limit_from_start") & (rows["from"] == start)]
    share = ends.groupby("state")["value"].mean()
    inside = (
        rows[rows["measure"] == "stationary_share"].groupby(["from", "state"], sort=False)["value"].mean()
    )
    periods = rows[rows["measure"] == "group_period"].set_index("from")["value"]
    out, grouped = [], set()
    for origin, members in rows[rows["measure"] == "closed_group"].groupby("from", sort=False)["state"]:
        names = [str(m) for m in members]
        grouped |= set(names)
        laws = tuple((m, float(inside.get((origin, m), float("nan")))) for m in names)
        out.append(Group(laws, float(share.reindex(names).sum(min_count=1)), int(periods.get(origin, 1))))
    left = [(str(s), float(v)) for s, v in share.items() if s not in grouped and v > 1e-9]
    return out + [Group(((s, 1.0),), v, exit=True) for s, v in left]


def groups_chart(long_run: Any, *, start: str = "start", segment: str = ALL, width: float = WIDE) -> Drawing:
    """One bar a closed group: its length is the share of today's customers who end there, its parts the mix inside.

    long_run : LongRun or the contract's frame. CallError when there are fewer than two groups.
    """
    groups = groups_of(long_run, start=start, segment=segment)
    if len(groups) < 2:
        raise CallError(f"A drawing of closed groups needs at least two; this long run has {len(groups)}.")
    title = _title(groups)
    who = "today's customers" if start == "start" else f"those who start in {label(start)}"
    subtitle = (
        f"Share of {who} who end in each group of states that nobody leaves. Shaded parts: the mix inside the group in "
        "the long run. Dashed: an exit."
    )
    said = "; ".join(f"{g.name} {percent(g.ends)} ({_inside(g)})" for g in groups)
    with house_style():
        body = len(groups) * ROW_HIGH + 0.1
        figure = drawing(title, subtitle, width=width, body=body, alt=f"One bar a group. {title}. {said}.")
        axes = panel(figure, MARGIN, 0, width - 2 * MARGIN, body)
        axes.set_xlim(0, width - 2 * MARGIN)
        axes.set_ylim(body, 0)
        axes.axis("off")
        for k, group in enumerate(groups):
            _bar(axes, group, k * ROW_HIGH, width - 2 * MARGIN)
    return figure


def _bar(axes: Axes, group: Group, top: float, wide: float) -> None:
    full = wide - 0.8
    ends = 0.0 if missing(group.ends) else group.ends
    axes.text(0, top + 0.14, fit_lines(group.name, wide, BODY, bold=True, lines=1)[0], weight="bold", size=BODY,
              va="center")  # fmt: skip
    left, middle = 0.0, top + 0.36
    for k, (member, share) in enumerate(group.members):
        piece = full * ends * (0 if missing(share) else share)
        face = PAPER if group.exit else SHADES[(2, 4)[k % 2]]
        edge, line = (MODEL, (0, (3, 2))) if group.exit else (INK, "solid")
        axes.barh(
            middle,
            piece,
            left=left,
            height=BAR_HIGH,
            color=face,
            edgecolor=edge,
            linewidth=0.8,
            linestyle=line,
        )
        text = f"{label(member, 24)} {percent(share, 0)}"
        if len(group.members) > 1 and text_width(text, SMALL - 0.6) < piece - 0.06:
            axes.text(left + piece / 2, middle, text, ha="center", va="center", size=SMALL - 0.6)
        left += piece
    axes.text(left + 0.07, middle, percent(group.ends), va="center", weight="bold", size=BODY)
    if group.period > 1:
        axes.text(left + 0.6, middle, f"cycles every {group.period}", va="center", size=SMALL, color=SOFT)


def _inside(group: Group) -> str:
    if group.exit:
        return "an exit"
    mix = ", ".join(f"{label(m, 24)} {percent(v)}" for m, v in group.members)
    return f"inside it {mix}" + (f"; it repeats every {group.period} periods" if group.period > 1 else "")


def _title(groups: list[Group]) -> str:
    kept = [g for g in groups if not g.exit]
    known = [g for g in groups if not missing(g.ends)]
    if not known:
        return f"{len(groups)} groups of states are never left"
    most = max(known, key=lambda g: g.ends)
    kind = "groups of states that nobody leaves" if len(kept) > 1 else "ways to end"
    number = len(kept) if len(kept) > 1 else len(groups)
    return f"{number} {kind}: {percent(most.ends)} of today's customers end in {most.name}"
