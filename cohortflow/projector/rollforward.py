"""Opening to closing by cause, state by state, for forecasts and for what has been counted.

closing = opening + joined + returned - lost + moved_in - moved_out [+ unobserved_in - unobserved_out]
"""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np
import pandas as pd

from cohortflow.projector.accept import Array
from cohortflow.projector.joiners import Joiners
from cohortflow.projector.mix import Walk
from cohortflow.states import ALL_LIVE, States
from cohortflow.tally import ENDS, KINDS, Tally

COLUMNS = ["segment", "period", "kind", "state", "line", "exit", "customers"]


LATE = ("unobserved_in", "adjustment")  # lines that stand after the moves


@dataclass(frozen=True, eq=False)
class Lines:
    """The causes of T periods: opening, closing (T, K); flows (T, K, K); further lines, each (T, K)."""

    opening: Array
    closing: Array
    flows: Array
    inflow: dict[str, Array] = field(default_factory=dict)
    outflow: dict[str, Array] = field(default_factory=dict)


def forecast_lines(
    states: States,
    walk: Walk,
    joiners: Joiners,
    labels: Sequence[str | None],
    *,
    adjusted: Array | None = None,
    segment: str = "all",
) -> pd.DataFrame:
    """The table `rollforward` of a projection (kind forecast); NaN where the walk is undefined."""
    lines = forecast_causes(walk, joiners, adjusted)
    return table(states, lines, labels, kind="forecast", segment=segment)


def forecast_causes(walk: Walk, joiners: Joiners, adjusted: Array | None = None) -> Lines:
    """The causes of the periods ahead; a line for adjustments only where there are any."""
    inflow = {kind: joiners.expected(kind) for kind in ("joined", "returned")}
    if adjusted is not None and adjusted.any():
        inflow["adjustment"] = adjusted
    return Lines(walk.counts[:-1], walk.counts[1:], walk.flows, inflow)


def rollforward_actual(tally: Tally, *, segment: str = "all") -> pd.DataFrame:
    """The table `rollforward` of what was counted, whole customers, from the second period of the window on.

    unobserved_in : rows after a gap, and histories that began before the log
    unobserved_out : customers with a row in the period before, none in this one, and no exit
    Memo, not part of the sum: joined_and_left, whose stay began and ended within the period, by exit.

    >>> import cohortflow as cf
    >>> states = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
    >>> rows = [("a", 1, "fresh"), ("a", 2, "steady"), ("a", 3, "left")]
    >>> frame = pd.DataFrame(rows, columns=["customer", "period", "state"])
    >>> lines = rollforward_actual(cf.count(cf.read_history(frame, states)))
    >>> third = lines.query("state == 'steady' and period == '3'")
    >>> list(zip(third["line"], third["exit"], third["customers"]))  # doctest: +NORMALIZE_WHITESPACE
    [('opening', '', 1), ('joined', '', 0), ('returned', '', 0), ('lost', 'left', 1), ('moved_in', '', 0),
     ('moved_out', '', 0), ('unobserved_in', '', 0), ('unobserved_out', '', 0), ('closing', '', 0)]
    """
    states, first, last = tally.states, tally.meta.first, tally.meta.last
    periods = np.arange(first + 1, last + 1)
    lines = counted_lines(tally)
    frame = table(states, lines, tally.calendar.labels(periods), kind="actual", segment=segment)
    return pd.concat([frame, _memos(tally, segment)], ignore_index=True)


def counted_lines(tally: Tally) -> Lines:
    """The causes of the periods first+1 .. last as counted; integers throughout."""
    K, first, last = len(tally.states), tally.meta.first, tally.meta.last
    moves = tally.table("moves")
    rows = _sum(moves[moves["end"] != ENDS.index("exit")], ["period"], ["state"], first, last, K)
    one = tally.one_step
    flows = _sum(one.assign(period=one["period"] + 1), ["period"], ["state", "next_state"], first, last, K)
    jumped = moves[(moves["gap"] > 1) & (moves["next_state"] >= 0)]
    arrived = jumped.assign(period=jumped["period"] + jumped["gap"], state=jumped["next_state"])
    unseen = moves[moves["end"] == ENDS.index("unseen")]
    vanished = pd.concat([jumped, unseen])
    inflow = {kind: tally.joiners(kind)[1] for kind in KINDS}
    back = _sum(arrived, ["period"], ["state"], first, last, K) * ~tally.states.exit_mask
    gone = _sum(vanished.assign(period=vanished["period"] + 1), ["period"], ["state"], first, last, K)
    live = ~tally.states.exit_mask
    return Lines(
        rows[:-1], rows[1:], flows[1:],
        {"joined": inflow["joined"][1:] * live, "returned": inflow["returned"][1:] * live,
         "unobserved_in": back[1:] + inflow["unknown"][1:] * live},
        {"unobserved_out": gone[1:]},
    )  # fmt: skip


def table(
    states: States, lines: Lines, labels: Sequence[str | None], *, kind: str, segment: str
) -> pd.DataFrame:
    """Rows for each state that is not an exit, and for `all_live`, in the order of the sum."""
    groups = {name: [states.index(name)] for name in states.remaining}
    groups[ALL_LIVE] = [states.index(name) for name in states.live]
    blocks = []
    for name, members in groups.items():
        for line, leaving, values in _causes(states, lines, members):
            blocks.append(
                pd.DataFrame(
                    {
                        "segment": segment,
                        "period": list(labels),
                        "kind": kind,
                        "state": name,
                        "line": line,
                        "exit": leaving,
                        "customers": values,
                        "order": np.arange(len(values)),
                    }
                )  # fmt: skip
            )
    frame = pd.concat(blocks, ignore_index=True)
    return frame.sort_values("order", kind="stable", ignore_index=True)[COLUMNS]


def _causes(states: States, lines: Lines, members: list[int]) -> list[tuple[str, str, Array]]:
    """(line, exit, (T,) values) of one group of states, opening first, closing last."""
    inside = states.mask([states.names[m] for m in members])
    others = ~inside & ~states.exit_mask
    out = [("opening", "", lines.opening[:, members].sum(axis=1))]
    out += [(line, "", v[:, members].sum(axis=1)) for line, v in lines.inflow.items() if line not in LATE]
    for name in states.exits:
        out.append(("lost", name, lines.flows[:, members, states.index(name)].sum(axis=1)))
    out.append(("moved_in", "", lines.flows[:, others][:, :, members].sum(axis=(1, 2))))
    out.append(("moved_out", "", lines.flows[:, members][:, :, others].sum(axis=(1, 2))))
    out += [(line, "", v[:, members].sum(axis=1)) for line, v in lines.inflow.items() if line in LATE]
    out += [(line, "", v[:, members].sum(axis=1)) for line, v in lines.outflow.items()]
    out.append(("closing", "", lines.closing[:, members].sum(axis=1)))
    return out


def _memos(tally: Tally, segment: str) -> pd.DataFrame:
    memos = tally.tables["memos"]
    memos = memos[memos["period"].between(tally.meta.first + 1, tally.meta.last)]
    found = memos.groupby(["period", "state"], as_index=False)["n"].sum()
    names = np.array(tally.states.names, dtype=object)[found["state"].to_numpy(dtype=int)]
    return pd.DataFrame(
        {"segment": segment, "period": tally.calendar.labels(found["period"].to_numpy()), "kind": "actual",
         "state": ALL_LIVE, "line": "joined_and_left", "exit": names, "customers": found["n"].to_numpy()}
    )  # fmt: skip


def _sum(rows: pd.DataFrame, period: list[str], cells: list[str], first: int, last: int, K: int) -> Array:
    """(last - first + 1, K[, K]) sums of n by period and state; rows outside the window are left out."""
    kept = rows[rows[period[0]].between(first, last)]
    out = np.zeros((last - first + 1, *[K] * len(cells)), dtype=np.int64)
    where = (kept[period[0]].to_numpy() - first, *[kept[c].to_numpy() for c in cells])
    np.add.at(out, where, kept["n"].to_numpy())
    return out
