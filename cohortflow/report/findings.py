"""What spoils or limits a number, found in the tables and the records' notes, and said where the number stands."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from typing import Any

import pandas as pd

from cohortflow.report.chart.retention import departure
from cohortflow.report.chart.settling import settled
from cohortflow.report.content import Facts, Finding
from cohortflow.report.rounding import count, duration, missing, percent, signed, unit
from cohortflow.report.tabulate import whole_accounting
from cohortflow.report.text import listing, upper_first
from cohortflow.report.trust import ADVICE, assumption
from cohortflow.report.wording import note, said

Tables = Mapping[str, pd.DataFrame]
SECTIONS = (
    "counted", "moves", "heading", "past", "settles", "stay", "money", "plans", "rests", "definitions", "methods",
    "annex",
)  # fmt: skip
PLACES = {
    "no_data": "moves", "few_at_risk": "moves", "undeclared_absorbing": "moves", "no_buckets": "moves",
    "one_period_only": "moves", "impossible_move": "moves", "rows_without_data": "heading",
    "never_exits": "stay", "may_not_exit": "stay", "no_exit_no_discount": "money",
}  # fmt: skip
SHARE_REJECTED = 0.01


def findings(facts: Facts, tables: Tables, approach: pd.DataFrame | None = None) -> tuple[Finding, ...]:
    """All findings, in the order of the page."""
    found = [
        *_rows(tables),
        *_notes(facts),
        *_settings(facts),
        *_adequacy(tables),
        *_retention(facts, tables),
    ]
    found += _settling(facts, tables, approach)
    found += [Finding(f"{upper_first(said(k))}: {why}", "rests") for k, why in facts.absent.items()]
    unique = list(dict.fromkeys(found))
    return tuple(sorted(unique, key=lambda f: SECTIONS.index(f.section)))


def _rows(tables: Tables) -> Iterator[Finding]:
    if "accounting" not in tables:
        return
    rows = whole_accounting(tables["accounting"])
    read = rows.loc[rows["outcome"] == "read", "rows"].sum()
    rejected = rows[(rows["outcome"] == "rejected") & (rows["rows"] > 0)]
    if not len(rejected) or not read:
        return
    lost = rejected["rows"].sum()
    by_reason = (
        rejected.groupby("reason", sort=True)["rows"].sum().sort_values(ascending=False, kind="stable")
    )
    reasons = listing([f"{said(str(r))} ({count(n)})" for r, n in by_reason.items()], limit=4)
    weight = "More than one row in a hundred" if lost / read > SHARE_REJECTED else "A few rows"
    yield Finding(f"{weight} could not be used: {count(lost)} of {count(read)} ({percent(lost / read)}): {reasons}.",
                  "counted")  # fmt: skip


def _notes(facts: Facts) -> Iterator[Finding]:
    for code in facts.notes:
        kind = str(getattr(code, "code", code)).partition(":")[0].partition("@")[0]
        yield Finding(note(code), PLACES.get(kind, "rests" if isinstance(code, str) else "counted"))


def _settings(facts: Facts) -> Iterator[Finding]:
    if facts.excluded:
        periods = listing(list(facts.excluded), limit=8)
        yield Finding(f"The rates leave out the moves of {periods}, as the study says.", "moves")
    if facts.parts and "common_shocks" not in facts.parts:
        yield Finding("The bands do not hold shocks that hit everybody in one period, so they are too narrow for a "
                      "large base.", "heading")  # fmt: skip
    if facts.parts and "joiners" not in facts.parts and facts.joiners != "none":
        yield Finding("The bands take the number of joiners as given; joiners who differ move the base beyond them.",
                      "heading")  # fmt: skip
    if facts.joiners == "none":
        yield Finding("Nobody is assumed to join: this is how today's base runs down, not a forecast of the base.",
                      "heading")  # fmt: skip
    if facts.validated is not None and facts.validated < facts.horizon:
        borne = duration(facts.validated, facts.kind, 0) if facts.validated else "no horizon"
        yield Finding(f"Back-tests bear out {borne}; what is projected beyond is arithmetic.", "heading")


def _adequacy(tables: Tables) -> Iterator[Finding]:
    """Each assumption that fails; those that are doubtful together."""
    if "adequacy" not in tables:
        return
    rows: list[dict[Any, Any]] = tables["adequacy"].to_dict("records")
    for row in rows:
        if row["verdict"] == "fails":
            moves = "" if missing(row.get("effect")) else (
                f"; {ADVICE.get(str(row['advice']), 'its remedy')} would move live customers at the horizon by "
                f"{signed(row['effect'])}"
            )  # fmt: skip
            yield Finding(f'The assumption "{assumption(row)}" fails{moves}.', "annex")
    doubtful = [row for row in rows if row["verdict"] == "doubtful"]
    if doubtful:
        most = max((abs(r["effect"]) for r in doubtful if not missing(r.get("effect"))), default=None)
        size = "" if most is None else f"; what repairs one of them moves live customers by {count(most)} at most"
        names = listing([assumption(r) for r in doubtful], limit=4)
        yield Finding(f"Doubtful, but with little effect at the horizon{size}: {names}.", "annex")


def _retention(facts: Facts, tables: Tables) -> Iterator[Finding]:
    if "retention" not in tables:
        return
    rows = tables["retention"].sort_values("periods_since_joining")
    age = departure(rows)
    if age is None:
        return
    row = rows[(rows["periods_since_joining"] >= age) & rows["observed"].notna()].iloc[0]
    side = "more" if row["model"] > row["observed"] else "fewer"
    yield Finding(
        f"From {count(age)} {unit(facts.kind, age)} after joining on, the model keeps {side} joiners than were "
        f"observed: "
        f"customers are not all alike, or rates change with age. Long horizons suffer first; try a model by tenure or "
        f"with several kinds of customers.", "stay",
    )  # fmt: skip


def _settling(facts: Facts, tables: Tables, approach: pd.DataFrame | None) -> Iterator[Finding]:
    if "long_run" not in tables or approach is None:
        return
    goal = settled(tables["long_run"], approach)
    if not len(goal.rows):
        return
    if missing(goal.periods):
        last = int(approach["periods_ahead"].max())
        yield Finding(f"The mix is still on its way after {duration(last, facts.kind, 0)}: where it settles is a "
                      "direction, not a forecast.", "settles")  # fmt: skip
    elif goal.periods > facts.horizon:
        yield Finding(
            f"The mix takes {duration(goal.periods, facts.kind, 0)} to settle; the forecast reaches "
            f"{duration(facts.horizon, facts.kind, 0)}. Do not quote the settled mix as a forecast.", "settles",
        )  # fmt: skip
