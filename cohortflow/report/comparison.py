"""The tables of a comparison in words: for the terminal and for the page."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import Any

import pandas as pd

from cohortflow.report.chart.bridge import PARTS, bridge_steps
from cohortflow.report.rounding import count, foot, missing, percent, signed, span
from cohortflow.report.table import WIDTH, Table, plain_text
from cohortflow.report.tabulate import name
from cohortflow.report.text import clean, label, wrap
from cohortflow.states import ALL_LIVE

MOVES_SHOWN = 12
TAKING = ("lost", "moved_out", "unobserved_out")
NOTES = {
    "segment_mix_in_rates": "The mix of segments could not be told apart from the rates: there is no segment that both "
    "runs know, or a model with expanded states is in use. What it did stands under the rates.",
    "money_not_comparable": "The two runs do not both count money in one currency; the bridge tells customers only.",
    "total_not_comparable": "This total is not defined alike in both runs and is left out: ",
}
LINE_WORDS = {
    "opening": "opening base",
    "joined": "joined",
    "returned": "returned after leaving",
    "moved_in": "back from away",
    "moved_out": "went away",
    "unobserved_in": "appeared in the extract",
    "unobserved_out": "missing in the extract",
    "adjustment": "manual adjustment",
    "closing": "closing base",
}


def bridge_table(bridge: pd.DataFrame, *, period: str, quantities: Sequence[str]) -> Table:
    """From the last forecast to this one, one column a quantity; printed figures foot."""
    columns = [bridge_steps(bridge, quantity=q, period=period) for q in quantities]
    names = [part for part, _ in columns[0][1]]
    rows = [("last forecast", *(count(last) for last, _, _, _ in columns))]
    for k, part in enumerate(names):
        rows.append((PARTS[part], *(signed(parts[k][1]) for _, parts, _, _ in columns)))
    rows.append(("this forecast", *(count(this) for _, _, this, _ in columns)))
    return Table(
        f"Why the forecast for {clean(period)} changed", ("", *map(name, quantities)), tuple(rows),
        strong=(0, len(rows) - 1),
    )  # fmt: skip


def moves_bridge_table(details: pd.DataFrame, *, period: str, quantity: str = ALL_LIVE) -> Table:
    """The rates' part by move, largest first; small ones together."""
    own = details[
        (details["part"] == "rates") & (details["period"] == period) & (details["quantity"] == quantity)
    ]
    rows = [
        (_move(row), signed(row["amount"], _fine)) for row in own.head(MOVES_SHOWN).to_dict(orient="records")
    ]
    rest = own.iloc[MOVES_SHOWN:]
    if len(rest):
        rows.append((f"{len(rest)} other moves", signed(float(rest["amount"].sum()), _fine)))
    return Table(
        f"What changed rates do to {name(quantity)} in {clean(period)}", ("move", "customers"), tuple(rows)
    )


def _move(row: Mapping[Any, Any]) -> str:
    return f"{label(row['from'])} to {label(row['to'])}" if row["from"] else "all moves together"


def _fine(number: float) -> str:
    return count(number) if abs(number) >= 10 else f"{number:,.1f}"


def outcome_table(outcome: pd.DataFrame, *, quantities: Sequence[str]) -> Table:
    """Actual against forecast."""
    rows = []
    for quantity in quantities:
        for row in outcome[outcome["quantity"] == quantity].to_dict(orient="records"):
            held = "" if missing(row["inside"]) else "inside" if row["inside"] else "outside"
            rows.append(
                (name(quantity), clean(row["run"]), str(row["period"]), count(row["forecast"]),
                 span(row["low"], row["high"]), count(row["actual"]), signed(row["difference"]),
                 "" if missing(row["relative"]) else signed(row["relative"], percent), held)
            )  # fmt: skip
    heads = ("", "run", "period", "forecast", "band", "counted", "off", "off %", "band held")
    return Table("Counted against forecast", heads, tuple(rows), texts=(0, 1, 2, 8))


def lines_table(lines: pd.DataFrame) -> Table:
    """The lines of the live base since the last forecast; printed figures foot."""
    said, was = (_footed(lines, column) for column in ("forecast", "actual"))
    rows = [
        (f"left: {label(row['exit'])}" if row["line"] == "lost" else LINE_WORDS[row["line"]],
         count(a), count(b), signed(b - a), "" if missing(row["relative"]) else signed(row["relative"], percent))
        for row, a, b in zip(lines.to_dict(orient="records"), said, was, strict=True)
    ]  # fmt: skip
    when = f", {lines['first'].iloc[0]} to {lines['last'].iloc[0]}" if len(lines) else ""
    heads = ("line", "forecast", "counted", "off", "off %")
    return Table(f"Live base since the last forecast{when}", heads, tuple(rows))


def _footed(lines: pd.DataFrame, column: str) -> list[Any]:
    """Whole numbers of a column that foot: opening + what came - what went = closing; as they are where some
    are not known."""
    if lines[column].isna().any():
        return list(lines[column])
    values = lines.set_index("line")[column].astype(float)
    inner = lines[~lines["line"].isin(["opening", "closing"])]
    signs = [-1 if line in TAKING else 1 for line in inner["line"]]
    opening, closing = round(float(values["opening"])), round(float(values["closing"]))
    whole = foot([s * v for s, v in zip(signs, inner[column], strict=True)], closing - opening)
    return [opening, *(s * n for s, n in zip(signs, whole, strict=True)), closing]


def budget_table(budget: pd.DataFrame) -> Table:
    """Counted or forecast against the budget."""
    rows = [
        (str(row["period"]), name(row["quantity"]), count(row["budget"]), count(row["value"]),
         "" if row["kind"] == "actual" else span(row["low"], row["high"]),
         {"actual": "counted", "forecast": "forecast"}[row["kind"]], signed(row["difference"]),
         "" if missing(row["relative"]) else signed(row["relative"], percent))
        for row in budget.to_dict(orient="records")
    ]  # fmt: skip
    heads = ("period", "", "budget", "amount", "band", "amount is", "off", "off %")
    return Table("Against the budget", heads, tuple(rows), texts=(0, 1, 5))


def calibration_table(calibration: pd.DataFrame, *, by_horizon: bool = False) -> Table:
    """How often the bands held."""
    own = calibration if by_horizon else calibration[calibration["periods_ahead"].isna()]
    rows = [
        (name(row["quantity"]), "all" if missing(row["periods_ahead"]) else str(int(row["periods_ahead"])),
         percent(row["level"], 0), count(row["forecasts"]), count(row["inside"]), percent(row["share"], 0),
         span(row["low"], row["high"], lambda v: percent(v, 0)))
        for row in own.to_dict(orient="records")
    ]  # fmt: skip
    heads = ("", "periods ahead", "band", "forecasts", "held", "share", "95% interval")
    note = "The interval takes forecasts as independent; those from one origin are not, so it is too narrow."
    return Table("How often the bands held", heads, tuple(rows), note=note)


def settings_table(settings: pd.DataFrame) -> Table:
    """What was set differently."""
    rows = tuple(
        (clean(r["setting"]), clean(r["kind"]), clean(r["last"]), clean(r["this"]))
        for r in settings.to_dict(orient="records")
    )
    return Table("Set differently", ("setting", "kind", "last", "this"), rows, texts=(0, 1, 2, 3))


def note_words(note: str) -> str:
    """A comparison's note as a sentence."""
    code, _, what = note.partition(":")
    return f"{NOTES[code]}{name(what)}." if what else NOTES[code]


def shown_quantities(comparison: Any) -> list[str]:
    """The live base, the totals, then the contribution: what the printed bridge has columns for."""
    known = [str(q) for q in pd.unique(comparison.tables["bridge"]["quantity"])]
    first = known.index(ALL_LIVE)
    here = comparison.tables["bridge"]
    here = set(here.loc[here["period"] == comparison.period, "quantity"])
    return [q for q in known[first:] if q in here]


def comparison_text(comparison: Any) -> str:
    """What `cohortflow compare` prints."""
    tables, quantities = comparison.tables, shown_quantities(comparison)
    customers = [q for q in quantities if q != "contribution"]
    parts = ["\n".join(wrap(note_words(note), WIDTH)) for note in comparison.notes]
    parts.append(plain_text(bridge_table(tables["bridge"], period=comparison.period, quantities=quantities)))
    if (tables["bridge_details"]["part"] == "rates").any():
        parts.append(plain_text(moves_bridge_table(tables["bridge_details"], period=comparison.period)))
    if len(tables["outcome_lines"]):
        parts.append(plain_text(lines_table(tables["outcome_lines"])))
    if len(tables["outcome"]):
        last = tables["outcome"][tables["outcome"]["run"] == comparison.earlier]
        if len(last):
            parts.append(plain_text(outcome_table(last, quantities=customers[:1])))
        parts.append(plain_text(calibration_table(tables["calibration"])))
    if len(tables["settings"]):
        parts.append(plain_text(settings_table(tables["settings"])))
    return "\n\n".join(parts) + "\n"
