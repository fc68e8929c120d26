"""The figures that come first, each with its band and what it rests on."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import replace
from functools import partial
from typing import Any

import pandas as pd

from cohortflow.projector.contribution import MEASURE
from cohortflow.report.content import Facts, Headline
from cohortflow.report.quarter import quarter_end
from cohortflow.report.rounding import count, decimal, duration, missing, money, percent, signed, span, unit
from cohortflow.report.tabulate import name, with_interval
from cohortflow.report.text import label, upper_first
from cohortflow.report.wording import JOINERS, MODELS, a_period, said
from cohortflow.states import ALL_LIVE

Tables = Mapping[str, pd.DataFrame]


def headlines(facts: Facts, tables: Tables) -> tuple[Headline, ...]:
    """Five: the base at the end of the next fiscal quarter and at the horizon, who leaves, who joins, what it brings.

    Where there is no quarter ahead the horizon stands alone; where no money is counted, how long a joiner stays.
    """
    found: list[Headline | None] = []
    if "projection" in tables:
        rows, quarter = tables["projection"], quarter_end(facts.calendar, facts.last, facts.horizon)
        if quarter is not None and quarter[0] < facts.horizon:
            found.append(_customers(facts, rows, quarter[0], quarter[1]))
        found += [_customers(facts, rows, facts.horizon, ""), _leaving(facts, tables, quarter)]
    if "rollforward" in tables:
        found.append(_joiners(facts, tables["rollforward"]))
    brought = _contribution(facts, tables["value"]) if "value" in tables else None
    if brought is not None or "exits" in tables:
        found.append(brought or _stay(facts, tables["exits"]))
    return tuple(_since(facts, h) for h in found if h is not None)


def _since(facts: Facts, headline: Headline) -> Headline:
    """With the change since the last run, where that is known."""
    before = facts.previous.get(headline.key)
    if before is None or missing(before) or missing(headline.amount):
        return headline
    off = headline.amount - before
    if headline.key == "churn":
        return replace(headline, change=f"{100 * off:+.1f} points")
    form = partial(money, currency=facts.currency) if headline.key == "contribution" else count
    return replace(headline, change=f"+{form(off)}" if off > 0.5 else form(off))


def summary(facts: Facts) -> str:
    """One paragraph: from what, with which model, how far."""
    counted = ""
    if facts.moves is not None and facts.customers is not None:
        counted = f"Counted: {count(facts.moves)} moves of {count(facts.customers)} customers"
        counted += f" from {facts.first} to {facts.last}. " if facts.first else ". "
    model = MODELS.get(facts.model, said(facts.model))
    parts = [said(p) for p in facts.parts]
    band = f" Bands are {percent(facts.level, 0)} bands" + (f" and hold {_list(parts)}." if parts else ".")
    return (
        f"{counted}Projected {facts.horizon} {unit(facts.kind, facts.horizon)} ahead with {model}; joiners: "
        f"{JOINERS.get(facts.joiners, said(facts.joiners))}.{band}"
    )


def _list(words: list[str]) -> str:
    return f"{', '.join(words[:-1])} and {words[-1]}" if len(words) > 1 else "".join(words)


def _customers(facts: Facts, rows: pd.DataFrame, ahead: int, quarter: str) -> Headline | None:
    """The first sum at the end of a period ahead."""
    what = facts.main
    own = {row["periods_ahead"]: row for row in rows[rows["state"] == what].to_dict("records")}
    if ahead not in own:
        return None
    now, then = own[0], own[ahead]
    who = upper_first(name(what)) if what == ALL_LIVE else f"Customers in {name(what)}"
    when = f"{quarter} ({then['period']})" if quarter else f"{then['period']}, the horizon"
    borne = facts.borne.get(what)
    far = "" if borne is None or ahead <= borne else " Farther ahead than past forecasts vouch for."
    return Headline(
        f"{who} at the end of {when}", count(then["customers"]), span(then["low"], then["high"]),
        f"{_compared(now, then)}{far}", "quarter" if quarter else "horizon", float(then["customers"]),
    )  # fmt: skip


def _compared(now: Mapping[Any, Any], then: Mapping[Any, Any]) -> str:
    """Change on today, said as far as the band allows."""
    if missing(then["customers"]) or not now["customers"]:
        return "Not projected: see what this rests on."
    change = f"{signed(then['customers'] - now['customers'])} on today's {count(now['customers'])}"
    if missing(then["low"]):
        return f"{change}."
    if then["low"] > now["customers"]:
        return f"{change}; the whole band lies above it."
    below = then["high"] < now["customers"]
    return f"{change}; {'the whole band lies below it' if below else 'the band leaves open which way it goes'}."


def _leaving(facts: Facts, tables: Tables, quarter: tuple[int, str] | None) -> Headline | None:
    """Who leaves in the next fiscal quarter, else in the next period, by exit."""
    if quarter is not None and quarter[0] > 1:
        return _leavers(facts, tables["projection"], *quarter)
    churn = _churn(facts, tables["rates"]) if "rates" in tables else None
    return churn or _leavers(facts, tables["projection"], 1, "")


def _churn(facts: Facts, rates: pd.DataFrame) -> Headline | None:
    """Next period's churn rate from the table `rates`, by exit and in all, with its denominator."""
    ahead = rates[(rates["kind"] == "forecast") & (rates["measure"] == "churn")]
    if not len(ahead):
        return None
    own = ahead[ahead["period"] == ahead["period"].iloc[0]]
    whole, exits = own[own["exit"] == ""], own[own["exit"] != ""]
    if not len(whole) or missing(whole["value"].iloc[0]):
        return None
    row = whole.iloc[0]
    each = [
        f"{label(r['exit'])} {with_interval(r['value'], r['low'], r['high'], percent)}"
        for _, r in exits.iterrows()
    ]
    basis = f"{count(row['numerator'])} of {count(row['denominator'])} live and away at the opening"
    return Headline(
        f"Leaving in {row['period']}", percent(row["value"]), span(row["low"], row["high"], percent),
        f"{basis}: {'; '.join(each)}." if len(exits) > 1 else f"{basis}.", "churn", float(row["value"]),
    )  # fmt: skip


def _leavers(facts: Facts, rows: pd.DataFrame, ahead: int, quarter: str) -> Headline | None:
    """All lost up to a period ahead over the opening base; the bands are those of the exits."""
    then, now = rows[rows["periods_ahead"] == ahead], rows[rows["periods_ahead"] == 0]
    opening = now.loc[now["state"].isin(list(facts.states.remaining)), "customers"].sum()
    gone = then[then["state"].isin(list(facts.states.exits))]
    if not len(gone) or not opening > 0:
        return None
    each = [
        f"{label(r['state'])} {percent(r['customers'] / opening)} "
        f"({span(r['low'] / opening, r['high'] / opening, percent)})"
        for _, r in gone.iterrows()
    ]
    total = gone["customers"].sum()
    who = "joiners of the quarter among them" if ahead > 1 else "live and away"
    return Headline(
        f"Leaving in {quarter or gone['period'].iloc[0]}", percent(total / opening), "; ".join(each),
        f"{count(total)} leave, {who}, over {count(opening)} live and away at the opening.",
        "churn", float(total / opening),
    )  # fmt: skip


def _joiners(facts: Facts, rows: pd.DataFrame) -> Headline | None:
    ahead = rows[(rows["kind"] == "forecast") & (rows["state"].isin(list(facts.states.remaining)))]
    sums = (
        ahead[ahead["line"].isin(["joined", "returned"])]
        .groupby(["period", "line"], sort=False)["customers"]
        .sum()
    )
    if not len(sums):
        return None
    by_line = sums.groupby("line").mean()
    joined, back = by_line.get("joined", 0.0), by_line.get("returned", 0.0)
    periods = ahead["period"].nunique()
    basis = (
        f"{upper_first(JOINERS.get(facts.joiners, said(facts.joiners)))}: {count(joined)} {a_period(facts.kind)}, and "
        f"{count(back)} returning."
    )
    band = "" if facts.joining is None else span(facts.joining[1], facts.joining[2])
    if facts.joiners in ("planned", "none"):
        band = "taken as given"
    value = joined * periods
    return Headline("Joiners assumed up to the horizon", count(value), band, basis, "joiners", float(value))


def _contribution(facts: Facts, rows: pd.DataFrame) -> Headline | None:
    own = rows[rows["measure"] == MEASURE]
    if not len(own) or missing(own["value"].iloc[0]):
        return None
    row, form = own.iloc[0], partial(money, currency=str(own["currency"].iloc[0]))
    return Headline(
        "Contribution up to the horizon", form(row["value"]), span(row["low"], row["high"], form),
        "From today's base and those assumed to join, discounted; contribution, not revenue.",
        "contribution", float(row["value"]),
    )  # fmt: skip


def _stay(facts: Facts, rows: pd.DataFrame) -> Headline | None:
    entry = facts.states.entries[0] if facts.states.entries else facts.states.remaining[0]
    own = rows[(rows["from"] == entry) & (rows["measure"] == "mean_time")]
    if not len(own) or missing(own["value"].iloc[0]):
        return None
    row = own.iloc[0]
    median = rows[(rows["from"] == entry) & (rows["measure"] == "median_time")]["value"]
    basis = f"Half have left after {duration(median.iloc[0], facts.kind, 0)}." if len(median) else ""
    band = "" if missing(row["low"]) else f"{span(row['low'], row['high'], decimal)} {unit(facts.kind)}"
    return Headline(
        f"A customer in {label(entry)} stays, on average", duration(row["value"], facts.kind), band, basis, "stay"
    )
