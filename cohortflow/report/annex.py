"""The annex: the tests of the assumptions and the parts of the uncertainty, each with one sentence up front."""

from __future__ import annotations

from collections.abc import Mapping

import pandas as pd

from cohortflow.report.chart.band_parts import PARTS, has_parts, shares_of
from cohortflow.report.content import Exhibit, Facts, Section
from cohortflow.report.rounding import count, missing, percent
from cohortflow.report.table import Table
from cohortflow.report.tabulate import name
from cohortflow.report.trust import adequacy_sentence, adequacy_table
from cohortflow.report.wording import PART_NAMES

Tables = Mapping[str, pd.DataFrame]


def annex_section(facts: Facts, tables: Tables) -> tuple[Section, ...]:
    """Tests and variances; none where neither was made."""
    lead, exhibits = annex_sentences(facts, tables), []
    if "adequacy" in tables:
        segment = str(tables["adequacy"]["segment"].iloc[0])
        exhibits.append(Exhibit("adequacy", table=adequacy_table(tables["adequacy"], segment=segment), open=True))
    if "band_parts" in tables:
        exhibits.append(Exhibit("variances", table=variances_table(facts, tables["band_parts"]), open=True))
    if not exhibits:
        return ()
    return (Section("annex", "Annex: tests and parts of the uncertainty", lead, tuple(exhibits)),)


def annex_sentences(facts: Facts, tables: Tables) -> tuple[str, ...]:
    """One sentence on the tests, one on the parts of the uncertainty."""
    out = [adequacy_sentence(tables["adequacy"])] if "adequacy" in tables else []
    if "band_parts" in tables and has_parts(tables["band_parts"]):
        last = shares_of(tables["band_parts"]).iloc[-1]
        parts = sorted((p for p in PARTS if last[p] > 0), key=lambda p: -last[p])
        said = ", ".join(f"{PART_NAMES[p]} {percent(last[p], 0)}" for p in parts)
        out.append(f"The uncertainty about live customers at the end of {last['period']} is made of: {said}.")
    return tuple(out)


def parts_table(rows: pd.DataFrame, *, quantity: str = "all_live") -> Table:
    """The share of each part of the variance, period by period."""
    shares = shares_of(rows, quantity=quantity)
    out = [
        (str(r["period"]), *(percent(r[p]) for p in PARTS), count(r["std_error"])) for r in shares.to_dict("records")
    ]
    heads = ("end of", *(PART_NAMES[p] for p in PARTS), "standard error, customers")
    return Table(f"What the uncertainty about {name(quantity)} is made of", heads, tuple(out))


def variances_table(facts: Facts, rows: pd.DataFrame) -> Table:
    """The parts for every sum and state at the horizon."""
    out = []
    for quantity in facts.quantities:
        if not (rows["quantity"] == quantity).any() or not has_parts(rows, quantity=quantity):
            continue
        last = shares_of(rows, quantity=quantity).iloc[-1]
        cells = ["" if missing(last[p]) else percent(last[p]) for p in PARTS]
        out.append((name(quantity), *cells, count(last["std_error"])))
    heads = ("customers in", *(PART_NAMES[p] for p in PARTS), "standard error")
    return Table("Parts of the variance at the horizon", heads, tuple(out))
