"""The figures that come first, each with its band and what it rests on."""

from __future__ import annotations

from collections.abc import Mapping

import pandas as pd

from cohortflow.report.content import Facts, Headline
from cohortflow.report.rounding import count, decimal, duration, missing, percent, signed, span, unit
from cohortflow.report.tabulate import name, with_interval
from cohortflow.report.text import label, upper_first
from cohortflow.report.wording import JOINERS, MODELS, a_period, said

Tables = Mapping[str, pd.DataFrame]


def headlines(facts: Facts, tables: Tables) -> tuple[Headline, ...]:
    """At most five: the base and the first total at the horizon, next period's leavers, joiners, a joiner's stay."""
    found: list[Headline | None] = []
    if "projection" in tables:
        rows = tables["projection"]
        found += [_at_horizon(facts, rows, q) for q in ("all_live", *list(facts.totals)[:1])]
        churn = _churn(facts, tables["rates"]) if "rates" in tables else None
        found.append(churn or _leavers(facts, rows))
    if "rollforward" in tables:
        found.append(_joiners(facts, tables["rollforward"]))
    if "exits" in tables:
        found.append(_stay(facts, tables["exits"]))
    return tuple(h for h in found if h is not None)


def summary(facts: Facts) -> str:
    """One paragraph: from what, with which model, how far."""
    counted = ""
    if facts.moves is not None and facts.customers is not None:
        counted = f"Counted: {count(facts.moves)} moves of {count(facts.customers)} customers"
        counted += f" from {facts.first} to {facts.last}. " if facts.first else ". "
    model = MODELS.get(facts.model, said(facts.model))
    parts = [said(p) for p in facts.parts]
    band = f" Bands are {percent(facts.level, 0)} bands" + (f" and hold {_list(parts)}." if parts else ".")
    tested = (
        f" Back-tests bear out {facts.validated} {unit(facts.kind, facts.validated)}."
        if facts.validated
        else " The forecast has not been tested against past forecasts."
        if facts.validated is None
        else " Back-tests bear out no horizon."
    )
    return (
        f"{counted}Projected {facts.horizon} {unit(facts.kind, facts.horizon)} ahead with {model}; joiners: "
        f"{JOINERS.get(facts.joiners, said(facts.joiners))}.{band}{tested}"
    )


def _list(words: list[str]) -> str:
    return f"{', '.join(words[:-1])} and {words[-1]}" if len(words) > 1 else "".join(words)


def _at_horizon(facts: Facts, rows: pd.DataFrame, quantity: str) -> Headline | None:
    own = rows[rows["state"] == quantity].sort_values("periods_ahead")
    if not len(own):
        return None
    now, then = own.iloc[0], own.iloc[-1]
    change = "" if missing(then["customers"]) or not now["customers"] else (
        f"{signed(then['customers'] - now['customers'])} on today's {count(now['customers'])}"
    )  # fmt: skip
    what = upper_first(name(quantity)) if quantity == "all_live" else f"Customers in {name(quantity)}"
    return Headline(
        f"{what} at the end of {then['period']}", count(then["customers"]), span(then["low"], then["high"]),
        change or "not projected: see what this rests on",
    )  # fmt: skip


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
        f"{basis}: {'; '.join(each)}" if len(exits) > 1 else basis,
    )  # fmt: skip


def _leavers(facts: Facts, rows: pd.DataFrame) -> Headline | None:
    next_period = rows[rows["periods_ahead"] == 1]
    now = rows[rows["periods_ahead"] == 0]
    opening = now.loc[now["state"].isin(list(facts.states.remaining)), "customers"].sum()
    gone = next_period[next_period["state"].isin(list(facts.states.exits))]
    if not len(gone) or not opening > 0:
        return None
    each = [
        f"{label(r['state'])} {percent(r['customers'] / opening)} "
        f"({span(r['low'] / opening, r['high'] / opening, percent)})"
        for _, r in gone.iterrows()
    ]
    total = gone["customers"].sum()
    return Headline(
        f"Leaving in {gone['period'].iloc[0]}", percent(total / opening), "; ".join(each),
        f"{count(total)} of {count(opening)} live and away at the opening",
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
    value = f"{count(by_line.get('joined', 0.0))} {a_period(facts.kind)}"
    back = by_line.get("returned", 0.0)
    basis = JOINERS.get(facts.joiners, said(facts.joiners))
    return Headline(
        "Joiners assumed", value, "", f"{basis}; and {count(back)} returning {a_period(facts.kind)}"
    )


def _stay(facts: Facts, rows: pd.DataFrame) -> Headline | None:
    entry = facts.states.entries[0] if facts.states.entries else facts.states.remaining[0]
    own = rows[(rows["from"] == entry) & (rows["measure"] == "mean_time")]
    if not len(own) or missing(own["value"].iloc[0]):
        return None
    row = own.iloc[0]
    median = rows[(rows["from"] == entry) & (rows["measure"] == "median_time")]["value"]
    basis = f"half have left after {duration(median.iloc[0], facts.kind, 0)}" if len(median) else ""
    band = "" if missing(row["low"]) else f"{span(row['low'], row['high'], decimal)} {unit(facts.kind)}"
    return Headline(
        f"A customer in {label(entry)} stays, on average", duration(row["value"], facts.kind), band, basis
    )
