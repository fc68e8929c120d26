"""The content of a report: its order, and what is left out."""

from dataclasses import replace

from cohortflow.report.past import Trust
from cohortflow.report.sections import gather, sections_of
from tests import report_fixtures as made
from tests.backtest_cases import past_record

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
    horizon = next(h for h in content.headlines if h.key == "horizon")
    assert horizon.value == table.rows[2][2]


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


def test_past_money_and_annex_come_with_their_tables():
    tables = {**TABLES, "value": made.value(made.VEG_BOX), "band_parts": made.band_parts(made.VEG_BOX),
              "adequacy": made.adequacy()}  # fmt: skip
    content = gather(replace(FACTS, currency="GBP"), tables, trust=Trust(past_record()))
    assert [s.key for s in content.sections] == [
        "counted", "moves", "heading", "past", "settles", "stay", "money", "rests", "definitions", "methods", "annex",
    ]  # fmt: skip
    assert {"band_parts", "backtest", "value", "sums", "adequacy", "variances"} <= set(keys(content))
    assert keys(content).count("adequacy") == 1
    annex = content.sections[-1]
    assert content.standing[1:] == annex.lead and content.standing[0].startswith("Validated to ")


def test_what_was_asked_for_and_could_not_be_made_is_said():
    facts = replace(FACTS, absent={"backtest": "too few periods", "value": "nobody pays"})
    leads = {s.key: s.lead for s in gather(facts, TABLES).sections}
    assert leads["past"] == ("This part is absent: too few periods",)
    assert leads["money"] == ("This part is absent: nobody pays",)


def test_budget_and_windows_stand_where_they_belong():
    import pandas as pd

    budget = pd.DataFrame({"period": ["2026-11"], "quantity": ["all_live"], "amount": [4000.0], "forecast": [4100.0],
                           "difference": [100.0]})  # fmt: skip
    windows = pd.DataFrame({"exit": ["card_lapsed"], "window": [2], "share_later_returning": [0.1], "low": [0.08],
                            "high": [0.13], "reporting_delay": [2]})  # fmt: skip
    sections = {s.key: s for s in gather(FACTS, {**TABLES, "budget": budget, "windows": windows}).sections}
    shown = {e.key: e.table.rows for k in ("heading", "stay") for e in sections[k].exhibits if e.table}
    assert shown["budget"] == (("2026-11", "all live customers", "4,000", "4,100", "+100", "+2.5%"),)
    assert shown["windows"] == (("card_lapsed", "2", "10.0% (8.0 to 13.0%)", "2"),)


def test_the_plain_curve_is_told_where_another_model_was_chosen():
    import numpy as np

    live = TABLES["projection"][TABLES["projection"]["state"] == "all_live"]["customers"].to_numpy()
    content = gather(replace(FACTS, model="tenure"), TABLES, trust=Trust(plain=live * np.linspace(1, 1.5, len(live))))
    heading = next(s for s in content.sections if s.key == "heading")
    assert "the plain chain expects" in heading.lead[1] and "they part after" in heading.lead[1]
