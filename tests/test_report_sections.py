"""The content of a report: its order, and what is left out."""

from dataclasses import replace

from cohortflow.report.sections import gather, sections_of
from tests import report_fixtures as made

FACTS = made.facts(made.VEG_BOX)
TABLES = made.tables(made.VEG_BOX)
ORDER = ["counted", "moves", "heading", "settles", "stay", "rests", "definitions", "methods"]


def keys(content):
    return [e.key for e in content.exhibits()]


def test_the_final_order():
    assert [s.key for s in gather(FACTS, TABLES).sections] == ORDER


def test_every_chart_has_a_table_beside_it_or_shares_one_in_its_section():
    for section in gather(FACTS, TABLES).sections:
        if any(e.draw for e in section.exhibits):
            assert any(e.table for e in section.exhibits), section.key


def test_what_is_absent_says_why():
    facts = replace(FACTS, absent={"exits": "no state is an exit"})
    content = gather(facts, {k: v for k, v in TABLES.items() if k not in ("exits", "retention")})
    stay = next(s for s in content.sections if s.key == "stay")
    assert stay.lead == ("This part is absent: no state is an exit",) and not stay.exhibits


def test_only_the_accounting_makes_a_report_too():
    content = gather(FACTS, {"accounting": TABLES["accounting"]})
    assert keys(content) == ["accounting", "states"] and content.headlines == ()


def test_one_exit_needs_no_chart_of_ways():
    small = gather(made.facts(made.SMALL), made.tables(made.SMALL))
    assert "exit_reason" not in keys(small) and "exit_reason" in keys(gather(FACTS, TABLES))


def test_groups_are_drawn_only_where_there_are_several():
    import cohortflow as cf
    from tests.test_report_chart_groups import STATES, P

    run = cf.long_run(cf.Chain(STATES, P), start={"trial": 10, "club": 5})
    content = gather(made.facts(STATES, verdict=run.verdict), {"long_run": run.to_frame()})
    assert "groups" in keys(content) and "groups" not in keys(gather(FACTS, TABLES))


def test_segments_are_listed_and_the_chosen_one_is_shown():
    import pandas as pd

    rows = TABLES["projection"]
    several = pd.concat(
        [rows, rows.assign(segment="web"), rows.assign(segment="shop", customers=rows["customers"] / 2)]
    )
    content = gather(replace(FACTS, segment="shop"), {"projection": several})
    table = next(e.table for e in content.exhibits() if e.key == "segments")
    assert [r[0] for r in table.rows] == ["all", "web", "shop"]
    assert content.headlines[0].value == table.rows[2][2]


def test_sections_without_anything_are_left_out():
    content = gather(FACTS, TABLES)
    empty = replace(
        content,
        sections=tuple(replace(s, lead=(), exhibits=(), points=(), terms=()) for s in content.sections),
    )
    assert sections_of(empty) == []


def test_the_long_run_is_put_into_words():
    settles = next(s for s in gather(FACTS, TABLES).sections if s.key == "settles")
    assert "Without joiners everybody leaves in the end." in settles.lead[0]
    assert any("still here after a long time" in words for words in settles.lead)
