"""What customers are worth, and low, base and high side by side."""

from __future__ import annotations

from collections.abc import Callable, Mapping
from functools import partial
from typing import Any

import pandas as pd

from cohortflow.projector.contribution import MEASURE
from cohortflow.report.content import Exhibit, Facts, Section
from cohortflow.report.quarter import quarter_end
from cohortflow.report.rounding import count, missing, money, percent, unit
from cohortflow.report.table import Table
from cohortflow.report.tabulate import by_key, name, with_interval
from cohortflow.report.text import clean
from cohortflow.report.wording import MONEY_CAUTIONS

Tables = Mapping[str, pd.DataFrame]
Form = Callable[[Any], str]
SUMS = {
    "joining_cohort": "those who join in one {one}",
    "base": "today's base",
    MEASURE: "today's base and all who join, up to the horizon",
}


def money_section(facts: Facts, tables: Tables) -> tuple[Section, ...]:
    """What customers are worth; none when the study counts no money."""
    why = facts.absent.get("value")
    if "value" not in tables:
        return (Section("money", "What customers are worth", (f"This part is absent: {why}",)),) if why else ()
    rows = tables["value"]
    exhibits = (Exhibit("value", table=value_table(rows), open=True),
                Exhibit("sums", table=sums_table(rows, kind=facts.kind), open=True))  # fmt: skip
    return (Section("money", "What customers are worth", facts.terms, exhibits, cautions=MONEY_CAUTIONS),)


def value_table(rows: pd.DataFrame) -> Table:
    """Value of a customer by state: the mean with its interval, and how much single customers scatter around it."""
    form, found = _form(rows), by_key(rows, "measure", "state")
    states = rows.loc[rows["measure"] == "customer_value", "state"]
    out = []
    for state in states:
        mean, sd = found["customer_value", state], found.get(("customer_sd", state), {})
        figures = with_interval(mean["value"], mean["low"], mean["high"], form)
        out.append((name(state), figures, form(sd.get("value"))))
    return Table(
        "Value of one customer now in a state", ("state", "mean, with interval", "spread (sd)"), tuple(out),
        note="Contribution from now until leaving, discounted. The interval is that of the mean; the spread is how far "
        "single customers lie from it, which is far: most are worth much less or much more.",
    )  # fmt: skip


def sums_table(rows: pd.DataFrame, *, kind: str) -> Table:
    """Value of a cohort and of the base, and the contribution over the horizon."""
    form, found = _form(rows), by_key(rows, "measure")
    out = [
        (words.format(one=unit(kind, 1)), with_interval(r["value"], r["low"], r["high"], form),
         "until the horizon" if measure == MEASURE else "until they leave")
        for measure, words in SUMS.items() if (r := found.get((measure,)))
    ]  # fmt: skip
    return Table("Value in sum", ("of", "value, with interval", "counted"), tuple(out), texts=(0, 2))


def cases_table(facts: Facts, tables: Tables) -> Table | None:
    """Low, base and high: the base as projected beside the scenarios that the study calls its low and high case."""
    named = {case: label for label, case in facts.cases.items()}
    if not named or "scenarios" not in tables:
        return None
    rows = tables["scenarios"]
    found = by_key(rows, "scenario", "period", "quantity")
    shown = [(case, named[case]) for case in ("low", "high") if named.get(case) in set(rows["scenario"])]
    if not shown:
        return None
    out = []
    for words, period, quantity, form in _lines(facts, rows):
        cells = {case: found.get((label, period, quantity)) for case, label in shown}
        known = [cell for cell in cells.values() if cell is not None]
        if known:
            figures = {c: cell["with_change"] if cell else None for c, cell in cells.items()}
            figures["base"] = known[0]["base"]
            out.append((words, *(_said(figures[case], form) for case in _columns(shown))))
    heads = ("figure", *(case if case == "base" else f"{case}: {clean(named[case])}" for case in _columns(shown)))
    return Table(
        "Base, low and high", heads, tuple(out), texts=(0,),
        note=f"Low and high are scenarios: what follows if what they assume happens. They are not limits of chance; "
        f"that is the {percent(facts.level, 0)} band above.",
    )  # fmt: skip


def _columns(shown: list[tuple[str, str]]) -> list[str]:
    cases = [case for case, _ in shown]
    return [c for c in ("low", "base", "high") if c == "base" or c in cases]


def _said(value: Any, form: Form) -> str:
    return "not known" if missing(value) else form(value)


def _lines(facts: Facts, rows: pd.DataFrame) -> list[tuple[str, str, str, Form]]:
    """(words, period, quantity, form) of what is compared."""
    last = str(rows.loc[~rows["period"].isin(["total", "settled"]), "period"].iloc[-1])
    out: list[tuple[str, str, str, Form]] = []
    quarter, who = quarter_end(facts.calendar, facts.last, facts.horizon), name(facts.main)
    if quarter is not None and quarter[0] < facts.horizon:
        period = facts.calendar.label(facts.calendar.parse(facts.last) + quarter[0])
        out.append((f"{who}, end of {period}", period, facts.main, count))
    out.append((f"{who}, end of {last}", last, facts.main, count))
    out.append(("contribution less cost, up to the horizon", "total", "net", partial(money, currency=facts.currency)))
    return out


def _form(rows: pd.DataFrame) -> Form:
    return partial(money, currency=str(rows["currency"].iloc[0]))
