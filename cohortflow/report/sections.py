"""From the contract's tables to a Content: every section of the report in its final order."""

from __future__ import annotations

from collections.abc import Mapping, Sequence

import pandas as pd

from cohortflow.report import tabulate
from cohortflow.report.annex import annex_section, annex_sentences, parts_table
from cohortflow.report.beside import budget_beside, windows_table
from cohortflow.report.chart.band_parts import band_parts_chart, has_parts
from cohortflow.report.chart.base import base_chart
from cohortflow.report.chart.diagram import state_diagram
from cohortflow.report.chart.exits import exit_reason_chart, exit_time_chart
from cohortflow.report.chart.groups import groups_chart, groups_of
from cohortflow.report.chart.levers import levers_chart
from cohortflow.report.chart.moves import moves_chart
from cohortflow.report.chart.retention import retention_chart
from cohortflow.report.chart.rollforward import rollforward_chart
from cohortflow.report.chart.scenarios import scenarios_chart
from cohortflow.report.chart.settling import settled, settling_chart
from cohortflow.report.content import Content, Exhibit, Facts, Section, bound
from cohortflow.report.findings import findings
from cohortflow.report.headlines import headlines, summary
from cohortflow.report.methods import assumptions, methods_section, states_table
from cohortflow.report.past import Trust, parting, past_section, standing
from cohortflow.report.plans import LEVER_NOTE, levers_table, scenario_table
from cohortflow.report.rounding import count, missing, percent, span, unit
from cohortflow.report.table import Table
from cohortflow.report.text import listing
from cohortflow.report.wording import CAUTIONS, DEFINITIONS, EXPLAIN, JOINERS, said, verdict
from cohortflow.report.worth import cases_table, money_section
from cohortflow.states import ALL_LIVE

Tables = Mapping[str, pd.DataFrame]


def gather(
    facts: Facts, tables: Tables, *, approach: pd.DataFrame | None = None, panel: str = "", trust: Trust | None = None
) -> Content:
    """The report of one run.

    tables : the contract's frames by name; what is absent is left out of the report, and said
    trust : the backtest and the choice of the model
    panel : the what-if panel as a fragment of the page
    approach : shares by periods_ahead and state, farther than the horizon (default: the projection's own)
    """
    whole = dict(tables)
    own = {name: _of_segment(frame, facts.segment) for name, frame in whole.items()}
    if approach is None and "projection" in own:
        rows = own["projection"]
        approach = rows[rows["state"].isin(list(facts.states.remaining))]
    seen = trust or Trust()
    sections = (
        _counted(facts, own), _moves(facts, own), _heading(facts, own, whole, seen), *past_section(facts, seen),
        _settles(facts, own, approach), _stay(facts, own), *money_section(facts, own), *_plans(facts, own, panel),
        _rests(facts), _definitions(facts), methods_section(facts), *annex_section(facts, own),
    )  # fmt: skip
    said_first = (*standing(facts, seen), *annex_sentences(facts, own))
    return Content(facts, summary(facts), headlines(facts, own), findings(facts, own, approach), sections,
                   said_first, cases_table(facts, own))  # fmt: skip


def _of_segment(frame: pd.DataFrame, segment: str) -> pd.DataFrame:
    if "segment" not in frame.columns or segment not in set(frame["segment"]):
        return frame
    return frame[frame["segment"] == segment].reset_index(drop=True)


def _counted(facts: Facts, tables: Tables) -> Section:
    lead, exhibits = [], []
    if facts.customers is not None:
        until = f" Rows count up to {facts.as_of}." if facts.as_of else ""
        lead.append(
            f"{count(facts.customers)} customers were followed from {facts.first} to {facts.last}.{until}"
        )
    if "accounting" in tables:
        rows = tabulate.whole_accounting(tables["accounting"])
        read, used = (rows.loc[rows["outcome"] == o, "rows"].sum() for o in ("read", "used"))
        lead.append(f"{count(used)} of {count(read)} rows were used; every other row has a reason.")
        exhibits.append(Exhibit("accounting", table=tabulate.accounting_table(rows), open=True))
    exhibits.append(Exhibit("states", table=states_table(facts), open=True))
    return Section("counted", "What was counted", tuple(lead), tuple(exhibits))


def _moves(facts: Facts, tables: Tables) -> Section:
    if "transitions" not in tables:
        return Section("moves", "How customers move", (_lacking(facts, "transitions"),))
    rows, states = tables["transitions"], facts.states
    one = unit(facts.kind, 1)
    window = f" from {facts.first} to {facts.last}" if facts.first else ""
    lead = (
        f"Rates are shares of counted moves{window}: of the customers in a state at the end of a {one}, the share in "
        f"each state at the end of the next.",
    )
    exhibits = (
        Exhibit("moves", bound(moves_chart, rows, states=states, period=facts.kind), tabulate.moves_table(rows),
                (EXPLAIN["interval"],), narrow=False),
        Exhibit("diagram", bound(state_diagram, rows, states=states, period=facts.kind),
                tabulate.matrix_table(rows, states), narrow=len(states) <= 6),
    )  # fmt: skip
    return Section("moves", "How customers move", lead, exhibits)


def _heading(facts: Facts, tables: Tables, whole: Tables, trust: Trust) -> Section:
    title = "Where the base is heading"
    if "projection" not in tables:
        return Section("heading", title, (_lacking(facts, "projection"),))
    rows, past = tables["projection"], tables.get("rollforward")
    quantities = facts.quantities
    horizon = f"{facts.horizon} {unit(facts.kind, facts.horizon)}"
    bands = (
        f" The {percent(facts.level, 0)} bands hold {listing([said(p) for p in facts.parts])}."
        if facts.parts
        else ""
    )
    lead = [
        f"The base is projected {horizon} ahead. Joiners: {JOINERS.get(facts.joiners, said(facts.joiners))}.{bands}"
    ]
    if trust.plain is not None:
        live = rows[rows["state"] == ALL_LIVE].sort_values("periods_ahead")
        half = ((live["high"] - live["low"]) / 2).to_numpy()
        lead.append(parting(facts, trust.plain, live["customers"].to_numpy(), half))
    chart = bound(base_chart, rows, past, totals=facts.totals, states=facts.states, kind=facts.kind, borne=facts.borne,
                  plain=trust.plain)  # fmt: skip
    exhibits = [Exhibit("base", chart, tabulate.base_table(rows, quantities=quantities), (EXPLAIN["band"],))]
    if past is not None and (past["state"] == ALL_LIVE).any():
        exhibits.append(Exhibit("rollforward", bound(rollforward_chart, past), tabulate.rollforward_table(past),
                                (EXPLAIN["rollforward"],)))  # fmt: skip
    if "band_parts" in tables and has_parts(tables["band_parts"]):
        parts = tables["band_parts"]
        exhibits.append(Exhibit("band_parts", bound(band_parts_chart, parts, kind=facts.kind), parts_table(parts),
                                (EXPLAIN["band_parts"],)))  # fmt: skip
    if "budget" in tables:
        exhibits.append(Exhibit("budget", table=budget_beside(tables["budget"]), open=True))
    by_segment = _segments(whole["projection"])
    if by_segment is not None:
        exhibits.append(Exhibit("segments", table=by_segment, open=True))
    return Section("heading", title, tuple(lead), tuple(exhibits))


def _segments(rows: pd.DataFrame) -> Table | None:
    """Live customers of each segment today and at the horizon, when there are segments."""
    live = rows[rows["state"] == ALL_LIVE] if "segment" in rows else rows.iloc[:0]
    names = [s for s in dict.fromkeys(live["segment"])] if len(live) else []
    if len(names) < 2:
        return None
    out = []
    for segment in names:
        own = live[live["segment"] == segment].sort_values("periods_ahead")
        now, then = own.iloc[0], own.iloc[-1]
        out.append((tabulate.name(segment), count(now["customers"]), count(then["customers"]),
                    span(then["low"], then["high"])))  # fmt: skip
    last = str(live.sort_values("periods_ahead")["period"].iloc[-1])
    return Table("Live customers by segment", ("segment", "today", last, "band"), tuple(out))


def _settles(facts: Facts, tables: Tables, approach: pd.DataFrame | None) -> Section:
    title = "Where it settles"
    if "long_run" not in tables:
        return Section("settles", title, (_lacking(facts, "long_run"),))
    rows, exhibits = tables["long_run"], []
    headline, why = verdict(facts.verdict) if facts.verdict else ("", "")
    lead = [
        w for w in (f"{headline} {why}".strip(), _base_words(facts, rows), _remaining_words(facts, rows)) if w
    ]
    goal = settled(rows)
    table = tabulate.long_run_table(rows, tables.get("projection"))
    words = [EXPLAIN["periods_to_settle"]]
    words += [EXPLAIN[m] for m in ("settled_base", "remaining_mix") if _has(rows, m)]
    if approach is not None and len(goal.rows):
        exhibits.append(Exhibit("settling", bound(settling_chart, approach, rows, kind=facts.kind), table,
                                tuple(words)))  # fmt: skip
    elif table.rows:
        exhibits.append(Exhibit("settling", table=table, plain_words=tuple(words), open=True))
    groups = groups_of(rows)
    if len(groups) > 1 and not all(g.exit for g in groups):
        exhibits.append(Exhibit("groups", bound(groups_chart, rows)))
    return Section("settles", title, tuple(lead), tuple(exhibits))


def _has(rows: pd.DataFrame, measure: str) -> bool:
    return bool(rows.loc[rows["measure"] == measure, "value"].notna().any())


def _base_words(facts: Facts, rows: pd.DataFrame) -> str:
    own = rows[(rows["measure"] == "settled_base") & (rows["state"] == ALL_LIVE)]
    if not len(own):
        return ""
    row = own.iloc[0]
    if missing(row["value"]):
        return f"The base with constant joiners has no settled size: {said(str(row.get('note', '')))}."
    figures = tabulate.with_interval(row["value"], row["low"], row["high"], count)
    return f"With the assumed joiners every {unit(facts.kind, 1)} the live base would settle at {figures} customers."


def _remaining_words(facts: Facts, rows: pd.DataFrame) -> str:
    own = rows[(rows["measure"] == "remaining_retention") & rows["value"].notna()]
    if not len(own):
        return ""
    row = own.iloc[0]
    figures = tabulate.with_interval(row["value"], row["low"], row["high"], percent)
    one = unit(facts.kind, 1)
    return f"Of today's customers who are still here after a long time, {figures} stay each further {one}."


def _stay(facts: Facts, tables: Tables) -> Section:
    title, exhibits = "How long they stay and how they leave", []
    if "retention" in tables:
        rows = tables["retention"]
        exhibits.append(
            Exhibit("retention", bound(retention_chart, rows, kind=facts.kind, level=facts.level),
                    tabulate.retention_table(rows, kind=facts.kind), (EXPLAIN["retention"],))
        )  # fmt: skip
    if "exits" in tables:
        rows = tables["exits"]
        exhibits.append(
            Exhibit("exit_time", bound(exit_time_chart, rows, kind=facts.kind),
                    tabulate.exits_table(rows, kind=facts.kind), (EXPLAIN["exit_time"],))
        )  # fmt: skip
        if len(facts.states.exits) > 1:
            exhibits.append(Exhibit("exit_reason", bound(exit_reason_chart, rows)))
    if "windows" in tables:
        exhibits.append(Exhibit("windows", table=windows_table(tables["windows"], kind=facts.kind), open=True))
    lead = () if exhibits else (_lacking(facts, "exits"),)
    return Section("stay", title, lead, tuple(exhibits))


def _plans(facts: Facts, tables: Tables, panel: str) -> tuple[Section, ...]:
    """Scenarios, levers and the panel; no section where nothing was asked for."""
    exhibits = []
    if "scenarios" in tables:
        table = scenario_table(tables["scenarios"], currency=facts.currency, kind=facts.kind, segment=facts.segment)
        chart = bound(scenarios_chart, tables["scenarios"], currency=facts.currency, segment=facts.segment)
        exhibits.append(Exhibit("scenarios", chart, table))
    if "levers" in tables:
        rows = tables["levers"]
        for n, target in enumerate(pd.unique(rows["target"])):
            options = {"target": str(target), "currency": facts.currency, "kind": facts.kind}
            first = bound(levers_chart, rows, **options) if n == 0 else None
            table = levers_table(rows, **options)
            exhibits.append(Exhibit(f"levers_{n}", first, table, (LEVER_NOTE,) if n == 0 else ()))
    if not exhibits and not panel:
        return ()
    return (Section("plans", "What could be done about it", (), tuple(exhibits), panel=panel),)


def _rests(facts: Facts) -> Section:
    lead = ("The projection rests on these assumptions:",)
    return Section("rests", "What this rests on, and cautions", lead, points=assumptions(facts), cautions=CAUTIONS)


def _definitions(facts: Facts) -> Section:
    return Section("definitions", "Definitions", terms=DEFINITIONS)


def _lacking(facts: Facts, table: str) -> str:
    why = facts.absent.get(table)
    return f"This part is absent: {why}" if why else "This part was not asked for."


def sections_of(content: Content) -> Sequence[Section]:
    """The sections that have something to show."""
    return [s for s in content.sections if s.lead or s.exhibits or s.points or s.terms or s.panel]
