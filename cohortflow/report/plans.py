"""What could be done about it, in words: scenarios, the ranking of levers, the change that a target needs."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.report.chart.frames import ALL, frame_of
from cohortflow.report.rounding import count, decimal, missing, money, percent, span, unit
from cohortflow.report.table import WIDTH, Table, plain_text
from cohortflow.report.tabulate import by_key, name
from cohortflow.report.text import label, wrap

Form = Callable[[float], str]
LEVERS_SHOWN = 12
SCENARIO_NOTE = (
    "Differences against the forecast as it stands, with their intervals: live customers at the end of the "
    "last "
    "period; money summed over all periods and discounted; long run: live customers once it has settled."
)
LEVER_NOTE = (
    "One point more of a move is paid for by the rest of its row, in proportion. Elasticity: percent that "
    "the "
    "figure changes for one percent more of the move. First in: share of draws in which it has the largest "
    "effect."
)
TARGETS = {
    "base": "customers in {of} at the horizon",
    "settled_base": "customers in {of} in the long run",
    "life": "{unit} until leaving, of {of}",
    "value": "contribution of {of}",
    "remaining_mix": "share of {of} among those who remain",
    "remaining_retention": "share of those remaining that is kept",
}
PEOPLE = {
    "all_live": "live states",
    "joiners": "a new customer",
    "base": "today's base",
    "total": "base and joiners",
}
COHORT = {"joiners": "one period's joiners"}


def target_words(code: str, kind: str) -> str:
    """ "base:weekly" in words.

    >>> target_words("base:weekly", "month"), target_words("life:joiners", "month")
    ('customers in weekly at the horizon', 'months until leaving, of a new customer')
    """
    measure, _, of = code.partition(":")
    whom = (COHORT.get(of) if measure == "value" else None) or PEOPLE.get(of) or label(of)
    return TARGETS.get(measure, code).format(of=whom, unit=unit(kind))


def target_form(code: str, currency: str) -> Form:
    """How a target's numbers are written.

    >>> target_form("value:total", "GBP")(-1234.4), target_form("life:joiners", "")(3.21)
    ('-£1,234', '3.21')
    """
    measure = code.partition(":")[0]
    if measure == "value":
        return partial(money, currency=currency)
    if measure.startswith("remaining"):
        return lambda share: percent(share, 2) if share >= 0 else f"-{percent(-share, 2)}"
    return partial(decimal, decimals=2) if measure == "life" else count


def gain(number: float, form: Form) -> str:
    """A change with its sign: "+£1,234", "-12".

    >>> gain(1234.4, partial(money, currency="GBP")), gain(-12.3, count)
    ('+£1,234', '-12')
    """
    text = form(number)
    return f"+{text}" if not missing(number) and number > 0 and not text.startswith("under") else text


def scenario_table(scenarios: Any, *, currency: str = "", kind: str = "month", segment: str = ALL) -> Table:
    """One row a scenario: live customers and money at the horizon, when it pays, the long run."""
    rows = frame_of(
        scenarios, ["scenario", "period", "quantity", "difference", "low", "high"], segment=segment
    )
    pounds = partial(money, currency=currency)
    has_money = (rows["quantity"] == "net").any()
    heads = [
        "scenario",
        "live customers",
        *(["value", "cost", "net", "pays after"] if has_money else []),
        "long run",
    ]
    out = []
    for scenario, own in rows.groupby("scenario", sort=False):
        cells = by_key(own, "period", "quantity")
        last = [p for p in own["period"] if p not in ("total", "settled")][-1]
        line = [name(str(scenario)), _ranged(cells.get((last, "all_live")), count)]
        if has_money:
            line += [_ranged(cells.get(("total", q)), pounds) for q in ("value", "cost", "net")]
            line.append(_pays(cells.get(("total", "payback_periods")), kind))
        out.append((*line, _ranged(cells.get(("settled", "all_live")), count)))
    return Table(
        "What the scenarios would change",
        tuple(heads),
        tuple(out),
        note=SCENARIO_NOTE,
    )


def _ranged(row: Mapping[str, Any] | None, form: Form) -> str:
    if row is None or missing(row["difference"]):
        return "not known"
    limits = "" if missing(row["low"]) else f" ({span(row['low'], row['high'], form)})"
    return f"{gain(row['difference'], form)}{limits}"


def _pays(row: Mapping[str, Any] | None, kind: str) -> str:
    if row is None:
        return "no cost"
    periods = row["with_change"]
    return "not within these" if np.isinf(periods) else f"{count(periods)} {unit(kind, periods)}"


def levers_table(
    levers: Any, *, target: str, currency: str = "", kind: str = "month", segment: str = ALL
) -> Table:
    """The first levers of one target: what one point more of each move would change."""
    rows = frame_of(levers, ["from", "to", "target", "per_point", "low", "high", "rank"], segment=segment)
    own = rows[(rows["target"] == target) & rows["rank"].notna()].sort_values("rank").head(LEVERS_SHOWN)
    form = target_form(target, currency)
    out = [
        (
            count(r["rank"]), name(r["from"]), name(r["to"]), gain(r["per_point"], form),
            span(r["low"], r["high"], form), decimal(r["elasticity"], 3),
            "" if missing(r["chance_best"]) else percent(r["chance_best"], 0),
        )
        for r in own.to_dict("records")
    ]  # fmt: skip
    return Table(
        f"Levers: {target_words(target, kind)}",
        ("rank", "from", "to", "one point more", "interval", "elasticity", "first in"),
        tuple(out),
        texts=(1, 2),
    )


def required_table(records: Any, *, currency: str = "", kind: str = "month") -> Table:
    """What each lever must do to bring a target to a mark, or how far it goes."""
    rows = pd.concat([r.to_frame() for r in records], ignore_index=True)
    code = str(rows["target"].iloc[0])
    money_form: Form = partial(money, currency=currency)
    form = money_form if code == "net" else target_form(code, currency)
    out = []
    for r in rows.to_dict("records"):
        need = f"{100 * r['add']:+.2f} points" if r["reached"] else "cannot be reached"
        limits = "" if missing(r["low"]) or not r["reached"] else _points(r["low"], r["high"])
        rate = "" if missing(r["probability"]) else percent(r["probability"])
        out.append((name(r["from"]), name(r["to"]), rate, need, limits, form(r["most"])))
    first = rows.iloc[0]
    what = "value less costs" if code == "net" else target_words(code, kind)
    return Table(
        f"Change needed: {what}, now {form(first['now'])}, to {form(first['reach'])}",
        ("from", "to", "rate", "change needed", "interval", "the most it can do"),
        tuple(out),
        texts=(0, 1),
    )


def _points(low: float, high: float) -> str:
    ends = [f"{100 * v:+.2f}" if np.isfinite(v) else "out of reach" for v in (low, high)]
    return f"{ends[0]} to {ends[1]}"


def whatif_text(
    tables: Mapping[str, pd.DataFrame], *, currency: str, kind: str, findings: str = "", required: Any = ()
) -> str:
    """What `cohortflow whatif` prints: the change needed if asked for, else scenarios and levers by
    segment.
    """
    from cohortflow.report.terminal import printout, segments

    if required:
        return printout(plain_text(required_table(required, currency=currency, kind=kind)))
    parts = [findings]
    for part in segments(tables["levers"]) if "levers" in tables else [ALL]:
        titled = "" if part == ALL else f"Segment {name(part)}"
        parts.append(titled)
        if "scenarios" in tables and part in set(tables["scenarios"]["segment"]):
            shown = scenario_table(tables["scenarios"], currency=currency, kind=kind, segment=part)
            parts.append(plain_text(shown))
        if "levers" in tables:
            own = tables["levers"][tables["levers"]["segment"] == part]
            for target in pd.unique(own["target"]):
                table = levers_table(own, target=target, currency=currency, kind=kind, segment=part)
                parts.append(plain_text(table))
    ending = "\n".join(wrap(LEVER_NOTE, WIDTH)) if "levers" in tables else ""
    return printout(*parts, ending)
