"""Fiscal quarters and years of a roll-forward: opening of the first period, flows added up, closing of the last.

    closing = opening + joined + returned - lost + moved_in - moved_out + unobserved_in - unobserved_out + adjustment

Moves count each time they are made: who goes away in April and comes back in May is once in `moved_out` and
once in `moved_in` of the quarter. A period belongs to the quarter that it ends in.
"""

from __future__ import annotations

import pandas as pd

from cohortflow.periods import Calendar

SPANS = ("quarter", "year")
COLUMNS = [
    "segment",
    "span",
    "period",
    "kind",
    "first",
    "last",
    "complete",
    "state",
    "line",
    "exit",
    "customers",
]
_TOO_LONG = {"quarter": ("step", "quarter", "year"), "year": ("step", "year")}


def subtotals(rollforward: pd.DataFrame, calendar: Calendar) -> pd.DataFrame:
    """The table `rollforward_subtotals`: segment, span (quarter, year), period ("2026/27 Q2", "2026/27"), kind
    (actual, forecast, or both: some periods counted, the others forecast), first, last, complete (all its
    periods are there), state, line, exit, customers. Empty for plain steps, which have no year.

    >>> rows = [("all", f"2026-0{m}", "actual", "here", line, "", n) for m, sizes in
    ...         ((4, (10, 2, 12)), (5, (12, 1, 13)), (6, (13, 4, 17)))
    ...         for line, n in zip(("opening", "joined", "closing"), sizes)]
    >>> frame = pd.DataFrame(rows, columns=["segment", "period", "kind", "state", "line", "exit", "customers"])
    >>> quarter = subtotals(frame, Calendar("month", fiscal_year_start=4)).query("span == 'quarter'")
    >>> quarter[["period", "complete", "line", "customers"]].values.tolist()  # doctest: +NORMALIZE_WHITESPACE
    [['2026/27 Q1', True, 'opening', 10], ['2026/27 Q1', True, 'joined', 7], ['2026/27 Q1', True, 'closing', 17]]
    """
    spans = [span for span in SPANS if calendar.kind not in _TOO_LONG[span]]
    if not spans or not len(rollforward):
        return pd.DataFrame(columns=COLUMNS)
    ordinals = {label: calendar.parse(label) for label in pd.unique(rollforward["period"])}
    rows = rollforward.assign(ordinal=rollforward["period"].map(ordinals))
    parts = [_of_span(rows, span, calendar) for span in spans]
    return pd.concat(parts, ignore_index=True)


def _of_span(rows: pd.DataFrame, span: str, calendar: Calendar) -> pd.DataFrame:
    name = calendar.fiscal_quarter if span == "quarter" else calendar.fiscal_year
    names = {int(o): name(int(o)) for o in pd.unique(rows["ordinal"])}
    rows = rows.assign(whole=rows["ordinal"].map(names))
    about = rows.groupby(["segment", "whole"], sort=False).agg(
        first=("ordinal", "min"), last=("ordinal", "max"), kinds=("kind", "nunique"), kind=("kind", "first")
    )
    keys = ["segment", "whole", "state", "line", "exit"]
    flows = rows[~rows["line"].isin(["opening", "closing"])]
    edges = rows.merge(about[["first", "last"]].reset_index(), on=["segment", "whole"])
    at_edge = ((edges["line"] == "opening") & (edges["ordinal"] == edges["first"])) | (
        (edges["line"] == "closing") & (edges["ordinal"] == edges["last"])
    )
    kept = pd.concat([edges[at_edge], flows], ignore_index=True)
    sums = kept.groupby(keys, sort=False)["customers"].sum(min_count=1)
    unknown = kept["customers"].isna().groupby([kept[k] for k in keys], sort=False).any()
    sums = sums.mask(unknown)
    order = pd.MultiIndex.from_frame(rows[keys].drop_duplicates())
    out = (
        sums.reindex(order[order.isin(sums.index)])
        .reset_index()
        .merge(about.reset_index(), on=["segment", "whole"])
    )
    return pd.DataFrame(
        {
            "segment": out["segment"],
            "span": span,
            "period": out["whole"],
            "kind": out["kind"].where(out["kinds"] == 1, "both"),
            "first": [calendar.label(int(o)) for o in out["first"]],
            "last": [calendar.label(int(o)) for o in out["last"]],
            "complete": [
                _complete(calendar, span, int(a), int(b))
                for a, b in zip(out["first"], out["last"], strict=True)
            ],
            "state": out["state"],
            "line": out["line"],
            "exit": out["exit"],
            "customers": out["customers"],
        }
    )


def _complete(calendar: Calendar, span: str, first: int, last: int) -> bool:
    """Whether the periods next to both ends belong to another span, so that those of this one are all there.

    At the ends of an own calendar the neighbours are not known, and nothing is claimed.
    """
    name = calendar.fiscal_quarter if span == "quarter" else calendar.fiscal_year
    if calendar.kind == "own" and (first == 0 or last == len(calendar.own) - 1):
        return False
    return name(first - 1) != name(first) and name(last + 1) != name(last)
