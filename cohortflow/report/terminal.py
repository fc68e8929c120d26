"""What `check`, `fit`, `project` and `run` print: the findings first, then tables of at most 80 columns.

Made from the contract's tables, so that the same text can be had from a run folder.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping, Sequence
from dataclasses import replace
from typing import Any

import pandas as pd

from cohortflow.history import Finding
from cohortflow.report import tabulate, trust
from cohortflow.report.rounding import percent
from cohortflow.report.table import WIDTH, Table, plain_text
from cohortflow.report.text import clean, listing, wrap
from cohortflow.report.wording import note, said
from cohortflow.report.wording import verdict as verdict_words
from cohortflow.states import ALL_LIVE, States

Frames = Mapping[str, pd.DataFrame]


def printout(*parts: str) -> str:
    """Parts of a printout, an empty line between them, one line end after the last.

    >>> printout("findings", "", "table")
    'findings\\n\\ntable\\n'
    """
    return "\n\n".join(part for part in parts if part) + "\n"


def findings_text(findings: Iterable[Finding]) -> str:
    """The findings as a list of sentences with their sizes, the serious ones first.

    >>> print(findings_text([Finding("few_at_risk", serious=False, detail={"state": "quiet"})]))
    Findings
    - Fewer than 30 departures from quiet were counted: its rates are little more
      than a hint.
    """
    lines = []
    for finding in sorted(findings, key=lambda f: not f.serious):
        first, *rest = wrap(clean(note(finding)), WIDTH - 2)
        lines += [f"- {first}", *(f"  {line}" for line in rest)]
    return "\n".join(["Findings", *lines]) if lines else "Nothing was found that spoils a number."


def check_text(tables: Frames, findings: Iterable[Finding]) -> str:
    """Findings and the accounting of the rows."""
    return printout(findings_text(findings), plain_text(tabulate.accounting_table(tables["accounting"])))


def fit_text(tables: Frames, findings: Iterable[Finding], states: States) -> str:
    """Findings, then the rates as a square and move by move, for each segment."""
    transitions = tables["transitions"]
    parts = [findings_text(findings)]
    for segment in segments(transitions):
        parts.append(_titled(tabulate.matrix_table(transitions, states, segment=segment), segment))
        parts.append(_titled(tabulate.moves_table(transitions, segment=segment), segment))
        if "adequacy" in tables:
            parts.append(_titled(trust.adequacy_table(tables["adequacy"], segment=segment), segment))
    methods = listing([said(str(m)) for m in pd.unique(transitions["method"].dropna()) if m])
    return printout(*parts, f"Intervals at {_level(transitions)}, {methods}, for each rate by itself.")


def project_text(
    tables: Frames,
    findings: Iterable[Finding],
    states: States,
    *,
    kind: str,
    totals: Sequence[str],
    verdict: str,
) -> str:
    """Findings, the base period by period, the states at the horizon, the long run, time to exit."""
    projection = tables["projection"]
    sums = [ALL_LIVE, *totals]
    parts = [findings_text(findings)]
    for segment in segments(projection):
        rows = [*sums, *states.remaining, *states.exits]
        shown = [
            tabulate.base_table(projection, quantities=sums, segment=segment),
            tabulate.outlook_table(projection, quantities=rows, segment=segment),
            tabulate.long_run_table(tables["long_run"], projection, segment=segment),
        ]
        if "exits" in tables:
            shown.append(tabulate.exits_table(tables["exits"], kind=kind, segment=segment))
        parts += [_titled(table, segment) for table in shown]
    ending = f"Bands and intervals at {_level(projection)}. {' '.join(verdict_words(verdict))}"
    return printout(*parts, "\n".join(wrap(ending, WIDTH)))


def backtest_text(findings: Iterable[Finding], tested: Any, choice: Any, *, model: str, kind: str) -> str:
    """Findings, how past forecasts of the live base did, how far the past vouches, the model chosen."""
    said_of = [trust.choice_sentence(choice)] if choice is not None else []
    said_of.append(trust.validated_sentence(tested, model, kind=kind))
    ending = "\n".join(line for text in said_of for line in wrap(text, WIDTH))
    return printout(findings_text(findings), plain_text(trust.scores_table(tested)), ending)


def run_text(tables: Frames, findings: Iterable[Finding], quantities: Sequence[str]) -> str:
    """Findings, then the base today, next period and at the horizon."""
    projection = tables["projection"]
    outlook = tabulate.outlook_table(projection, quantities=quantities)
    return printout(findings_text(findings), plain_text(outlook), f"Bands at {_level(projection)}.")


def _level(frame: pd.DataFrame) -> str:
    """The level of a table's intervals."""
    levels = frame["level"].dropna()
    return percent(float(levels.iloc[0]), 0) if len(levels) else "no level"


def segments(frame: pd.DataFrame) -> list[str]:
    """The segments of a table, in its order."""
    return [str(name) for name in pd.unique(frame["segment"])]


def _titled(table: Table, segment: str) -> str:
    if segment != "all":
        table = replace(table, caption=f"{table.caption}: {clean(segment)}")
    return plain_text(table)
