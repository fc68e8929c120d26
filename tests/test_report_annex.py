"""The annex."""

from cohortflow.report.annex import annex_section, annex_sentences, parts_table, variances_table
from tests import report_fixtures as made

FACTS = made.facts(made.VEG_BOX)
TABLES = {"adequacy": made.adequacy(), "band_parts": made.band_parts(made.VEG_BOX)}


def test_one_sentence_each_up_front():
    tests, parts = annex_sentences(FACTS, TABLES)
    assert tests.startswith("Of 3 assumptions")
    # at 8: joiners 1,600, shocks 1,357.6, chance 320, rates 24 of 3,301.6
    assert parts.endswith(
        "joiners not known 48%, luck shared by everybody 41%, individual chance 10%, rates not known exactly 1%."
    )
    assert annex_section(FACTS, TABLES)[0].lead == (tests, parts)


def test_without_tests_and_bands_there_is_none():
    assert annex_section(FACTS, {}) == () and annex_sentences(FACTS, {}) == ()


def test_parts_by_period_and_by_state():
    assert parts_table(TABLES["band_parts"]).rows[0] == ("2026-11", "46.9%", "19.5%", "2.3%", "31.2%", "11")
    rows = variances_table(FACTS, TABLES["band_parts"]).rows
    assert [r[0] for r in rows] == ["all live customers", *made.VEG_BOX.remaining] and rows[1][2] == "0%"
