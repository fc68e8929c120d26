"""The contract's tables as tables to read: rounded, worded, with intervals beside their figures."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.report.chart.frames import ALL, frame_of
from cohortflow.report.chart.retention import immature
from cohortflow.report.rounding import count, decimal, foot, missing, percent, signed, span, unit
from cohortflow.report.table import Table
from cohortflow.report.text import clean, shorten
from cohortflow.report.wording import OUTCOMES, said
from cohortflow.states import ALL_LIVE, States

NOTE_WORDS = {
    "sampling_zero": "possible, not seen",
    "no_data": "no data",
    "undeclared_absorbing": "never left",
    "structural_zero": "declared impossible",
}
ROLL_LINES = (
    "joined",
    "returned",
    "lost",
    "moved_in",
    "moved_out",
    "unobserved_in",
    "unobserved_out",
    "adjustment",
)
MINUS = ("lost", "moved_out", "unobserved_out")
LINE_WORDS = {
    "joined": "joined",
    "returned": "returned after leaving",
    "moved_in": "came in from other states",
    "moved_out": "went out to other states",
    "unobserved_in": "seen again, or history unknown",
    "unobserved_out": "no longer seen",
    "adjustment": "manual adjustment",
}


def name(quantity: Any) -> str:
    """A state or total as printed in tables."""
    return "all live customers" if quantity == ALL_LIVE else shorten(clean(quantity), 60)


def with_interval(value: float, low: float, high: float, form: Any) -> str:
    """ "12.3% (11.2 to 13.5%)"; without an interval the figure alone."""
    return (
        form(value)
        if missing(low) or missing(value) or low == high
        else f"{form(value)} ({span(low, high, form)})"
    )


def by_key(rows: pd.DataFrame, *columns: str) -> dict[tuple[Any, ...], dict[str, Any]]:
    """The rows as dictionaries by the values of some columns; the first of equal ones counts.

    >>> by_key(pd.DataFrame({"state": ["a", "b"], "n": [1, 2]}), "state")[("b",)]["n"]
    2
    """
    found: dict[tuple[Any, ...], dict[str, Any]] = {}
    for row in rows.to_dict("records"):
        found.setdefault(tuple(row[c] for c in columns), {str(k): v for k, v in row.items()})
    return found


def whole_accounting(accounting: Any) -> pd.DataFrame:
    """The accounting over all files: its total lines (file "all") when it has them."""
    rows = frame_of(accounting, ["outcome", "reason", "file", "rows", "customers"])
    return rows[rows["file"] == ALL] if (rows["file"] == ALL).any() else rows


def accounting_table(accounting: Any) -> Table:
    """What became of the rows: read = used + rejected + duplicates + set aside."""
    rows = whole_accounting(accounting)
    rows = rows.assign(reason=rows["reason"].fillna("").astype(str))
    out = []
    for outcome in OUTCOMES:
        own = rows[rows["outcome"] == outcome]
        sums = own.groupby("reason", sort=True)[["rows", "customers"]].sum()
        for reason, total in sums.iterrows():
            if total["rows"] or outcome in ("read", "used"):
                out.append((OUTCOMES[outcome], said(str(reason)) if reason else "", count(total["rows"]),
                            count(total["customers"])))  # fmt: skip
    return Table(
        "What became of the rows", ("outcome", "reason", "rows", "customers"), tuple(out), texts=(0, 1)
    )


def moves_table(transitions: Any, *, segment: str = ALL) -> Table:
    """Every move that was possible: counts, rate, interval."""
    rows = frame_of(
        transitions, ["from", "to", "count", "at_risk", "probability", "low", "high"], segment=segment
    )
    notes = rows["note"].fillna("").astype(str) if "note" in rows else ""
    shown = rows.assign(note=notes)
    shown = shown[~shown["note"].isin(["exit", "structural_zero"])]
    out = [
        (name(r["from"]), name(r["to"]), count(r["at_risk"]), count(r["count"]), percent(r["probability"]),
         span(r["low"], r["high"], percent), NOTE_WORDS.get(r["note"], said(r["note"])))
        for r in by_key(shown, "from", "to").values()
    ]  # fmt: skip
    heads = ("from", "to", "at risk", "moves", "rate", "interval", "note")
    return Table("Moves and their rates", heads, tuple(out), texts=(0, 1, 6))


def matrix_table(transitions: Any, states: States, *, segment: str = ALL) -> Table:
    """Rates as a square, row = from; the shape that fits a terminal."""
    rows = frame_of(transitions, ["from", "to", "probability", "at_risk", "high"], segment=segment)
    cell = by_key(rows, "from", "to")
    at_risk = {origin: row["at_risk"] for (origin,), row in by_key(rows, "from").items()}
    impossible = ~states.allowed
    out = []
    for i, origin in enumerate(states.names):
        if origin in states.exits:
            continue
        cells = ["-" if impossible[i, j] else _rate(cell[origin, to]) for j, to in enumerate(states.names)]
        out.append((name(origin), count(at_risk.get(origin, 0)), *cells))
    note = "In brackets: no such move was seen; the upper limit of its rate. -: declared impossible."
    return Table("Rates, row = from", ("from", "at risk", *map(name, states.names)), tuple(out), note=note)


def _rate(row: Mapping[str, Any]) -> str:
    if missing(row["probability"]):
        return "no data"
    if row["probability"] > 0:
        return percent(row["probability"])
    limit = percent(row["high"])
    return f"({limit if limit[0] == '<' else '<' + limit})"


def base_table(projection: Any, *, quantities: Sequence[str], segment: str = ALL) -> Table:
    """Customers at the end of each period with their bands, one column a quantity."""
    rows = frame_of(
        projection, ["period", "periods_ahead", "state", "customers", "low", "high"], segment=segment
    )
    columns = [q for q in quantities if (rows["state"] == q).any()]
    indexed = by_key(rows, "periods_ahead", "state")
    out = []
    for ahead in sorted(rows["periods_ahead"].unique()):
        cells = [indexed[ahead, q] for q in columns]
        texts = [count(c["customers"]) if ahead == 0 else with_interval(c["customers"], c["low"], c["high"], count)
                 for c in cells]  # fmt: skip
        out.append((str(cells[0]["period"]), *texts))
    return Table(
        "Customers at the end of each period, with bands", ("period", *map(name, columns)), tuple(out)
    )


def outlook_table(projection: Any, *, quantities: Sequence[str], segment: str = ALL) -> Table:
    """Each quantity today, next period and at the horizon: the shape that fits a terminal."""
    rows = frame_of(
        projection, ["period", "periods_ahead", "state", "customers", "low", "high"], segment=segment
    )
    last = int(rows["periods_ahead"].max())
    indexed = by_key(rows, "periods_ahead", "state")
    steps = [h for h in dict.fromkeys((0, 1, last)) if h in set(rows["periods_ahead"])]
    heads = ["state"]
    for h in steps:
        period = str(rows.loc[rows["periods_ahead"] == h, "period"].iloc[0])
        heads += [period] if h == 0 else [period, "band"]
    out = []
    for quantity in quantities:
        if (rows["state"] == quantity).any():
            cells = [name(quantity)]
            for h in steps:
                row = indexed[h, quantity]
                cells += [count(row["customers"])] + ([span(row["low"], row["high"])] if h else [])
            out.append(tuple(cells))
    return Table("Customers by state", tuple(heads), tuple(out))


def rollforward_table(
    rollforward: Any, *, quantity: str = ALL_LIVE, past: int = 3, ahead: int | None = None, segment: str = ALL
) -> Table:
    """Opening to closing by cause, one column a period; printed figures foot in every column."""
    rows = frame_of(rollforward, ["period", "kind", "state", "line", "exit", "customers"], segment=segment)
    own = rows[(rows["state"] == quantity) & (rows["line"] != "joined_and_left")]
    actual = list(pd.unique(own.loc[own["kind"] == "actual", "period"]))[-past:]
    forecast = list(pd.unique(own.loc[own["kind"] == "forecast", "period"]))[:ahead]
    periods = [("actual", p) for p in actual] + [("forecast", p) for p in forecast]
    columns = [_roll_column(own[(own["kind"] == k) & (own["period"] == p)]) for k, p in periods]
    keys = list(dict.fromkeys(key for column in columns for key in column))
    order = {line: i for i, line in enumerate(("opening", *ROLL_LINES, "closing"))}
    keys.sort(key=lambda key: order[key[0]])
    out = []
    for line, leaving in keys:
        form = count if line in ("opening", "closing") else signed
        words = f"left: {clean(leaving)}" if line == "lost" else LINE_WORDS.get(line, line)
        out.append((words, *(form(c.get((line, leaving), 0)) for c in columns)))
    heads = ["line", *(f"{p}{' projected' if k == 'forecast' else ''}" for k, p in periods)]
    strong = (0, len(out) - 1)
    return Table(f"From opening to closing: {name(quantity)}", tuple(heads), tuple(out), strong=strong)


def _roll_column(rows: pd.DataFrame) -> dict[tuple[str, str], int]:
    """(line, exit) -> whole customers of one period, signed and footing; lines of zeros are left out."""
    grouped = rows.groupby(["line", "exit"], sort=False)["customers"].sum(min_count=1).reset_index()
    sums = {key: float(row["customers"]) for key, row in by_key(grouped, "line", "exit").items()}
    opening, closing = sums.get(("opening", ""), 0.0), sums.get(("closing", ""), 0.0)
    parts = {
        (str(line), str(leaving)): value * (-1 if line in MINUS else 1)
        for (line, leaving), value in sums.items()
        if line in ROLL_LINES and not abs(value) <= 1e-9
    }
    if np.isnan([opening, closing, *parts.values()]).any():
        return {("opening", ""): opening, **parts, ("closing", ""): closing}  # type: ignore[dict-item]
    whole = foot(list(parts.values()), round(closing) - round(opening))
    return {
        ("opening", ""): round(opening),
        **dict(zip(parts, whole, strict=True)),
        ("closing", ""): round(closing),
    }


def long_run_table(long_run: Any, projection: Any = None, *, segment: str = ALL) -> Table:
    """Where each state settles: share today, settled share and base, mix of those remaining."""
    rows = frame_of(long_run, ["measure", "state", "value", "low", "high"], segment=segment)
    rows = rows[rows["from"].isin(["", "start"])] if "from" in rows else rows
    measures = [
        ("settled_mix", "settled share", percent), ("settled_base", "settled customers", count),
        ("remaining_mix", "share of those remaining", percent), ("limit_from_start", "long-run share", percent),
        ("time_average", "average over time", percent),
    ]  # fmt: skip
    if not (rows["measure"] == "closed_group").any():
        measures = measures[:3]
    measures = [m for m in measures if rows.loc[rows["measure"] == m[0], "value"].notna().any()]
    names = list(dict.fromkeys(rows.loc[rows["measure"].isin([m[0] for m in measures]), "state"]))
    today = _today(projection, segment)
    indexed = by_key(rows, "measure", "state")
    out = []
    for state in names:
        cells = [name(state)] + ([percent(today.get(state, float("nan")))] if today else [])
        for measure, _, form in measures:
            row = indexed.get((measure, state))
            cells.append("" if row is None else with_interval(row["value"], row["low"], row["high"], form))
        out.append(tuple(cells))
    heads = ("state", *(["share today"] if today else []), *(head for _, head, _ in measures))
    return Table("Where it settles", heads, tuple(out))


def _today(projection: Any, segment: str) -> dict[str, float]:
    if projection is None:
        return {}
    rows = frame_of(projection, ["periods_ahead", "state", "share"], segment=segment)
    now = rows[rows["periods_ahead"] == rows["periods_ahead"].min()]
    return {str(s): float(v) for s, v in zip(now["state"], now["share"], strict=True)}


def exits_table(exits: Any, *, kind: str, segment: str = ALL) -> Table:
    """Time until leaving and by which exit, from each state."""
    rows = frame_of(exits, ["from", "measure", "exit", "value", "low", "high"], segment=segment)
    indexed = by_key(rows, "from", "measure", "exit")
    ways = list(dict.fromkeys(rows.loc[rows["measure"] == "probability", "exit"]))
    out = []
    for state in dict.fromkeys(rows["from"]):
        cells = [name(state)]
        for measure in ("mean_time", "sd_time", "median_time"):
            row = indexed.get((state, measure, ""))
            cells.append("" if row is None else _time(row["value"], row["low"], row["high"]))
        for way in ways:
            one = indexed[state, "probability", way]
            cells.append(with_interval(one["value"], one["low"], one["high"], percent))
        out.append(tuple(cells))
    heads = ("state", f"mean {unit(kind)}", "spread (sd)", "median", *(f"leaves by {clean(w)}" for w in ways))
    return Table("Time until leaving, and by which exit", heads, tuple(out))


def _time(value: float, low: float, high: float) -> str:
    if not missing(value) and np.isinf(value):
        return "never"
    return with_interval(value, low, high, decimal)


def retention_table(retention: Any, *, kind: str, segment: str = ALL) -> Table:
    """Share still here by age, observed and as the model has it."""
    columns = ["periods_since_joining", "at_risk", "observed", "observed_low", "observed_high", "model"]
    rows = frame_of(retention, columns, segment=segment)
    young = immature(rows)
    out = []
    for flag, (_, r) in zip(young, rows.iterrows(), strict=True):
        seen = not missing(r["observed"])
        observed = (
            with_interval(r["observed"], r["observed_low"], r["observed_high"], percent) if seen else ""
        )
        out.append((count(r["periods_since_joining"]), count(r["at_risk"]) if seen else "", observed,
                    percent(r["model"]), "immature" if flag and seen else ""))  # fmt: skip
    heads = (f"{unit(kind)} since joining", "followed", "observed", "model", "note")
    return Table("Share of joiners still here", heads, tuple(out), texts=(4,))
