"""Findings, and where they are said."""

from dataclasses import replace

import pytest

from cohortflow.history import Finding as CheckFinding
from cohortflow.report.findings import SECTIONS, findings
from tests import report_fixtures as made

FACTS = made.facts(made.VEG_BOX)
TABLES = made.tables(made.VEG_BOX)


def texts(section=None, facts=FACTS, tables=TABLES, **options):
    return [f.text for f in findings(facts, tables, **options) if section in (None, f.section)]


def test_rejected_rows_are_said_with_their_reasons():
    assert any(
        "180 of 41,250 (0.4%): date or time not readable (120) and customer id" in t for t in texts("counted")
    )


def test_no_rejected_rows_no_finding():
    clean = made.accounting()
    clean = clean[clean["outcome"] != "rejected"]
    assert not texts("counted", tables={"accounting": clean})


def test_notes_stand_where_their_numbers_are():
    facts = replace(FACTS, notes=("few_at_risk:quiet", "never_exits:paused", "rows_without_data:x",
                                  CheckFinding("superseded_rows", rows=2)))  # fmt: skip
    assert any("quiet" in t for t in texts("moves", facts)) and any(
        "paused" in t for t in texts("stay", facts)
    )
    assert any("not projected" in t for t in texts("heading", facts))
    assert any("2 rows were replaced" in t for t in texts("counted", facts))


@pytest.mark.parametrize(
    "change, words",
    [
        ({"parts": ("rates", "chance", "joiners")}, "shocks that hit everybody"),
        ({"parts": ("rates", "common_shocks")}, "take the number of joiners as given"),
        ({"joiners": "none"}, "Nobody is assumed to join"),
        ({"validated": 3}, "Back-tests bear out 3 months"),
        ({"validated": 0}, "Back-tests bear out no horizon"),
    ],
)
def test_settings_that_limit_the_forecast(change, words):
    assert any(words in t for t in texts("heading", replace(FACTS, **change)))


def test_a_full_band_and_a_validated_horizon_need_no_warning():
    facts = replace(FACTS, parts=("rates", "chance", "common_shocks", "joiners"), validated=8)
    assert texts("heading", facts) == []


def test_excluded_periods_are_printed():
    assert "The rates leave out the moves of 2025-04, as the study says." in texts(
        "moves", replace(FACTS, excluded=("2025-04",))
    )


def test_failed_assumptions_are_said_one_by_one_and_doubtful_ones_together():
    found = texts("annex", tables={"adequacy": made.adequacy()})
    assert found == [
        'The assumption "no drift (early, late)" fails; model recent would move live customers at the horizon by +310.',
        "Doubtful, but with little effect at the horizon; what repairs one of them moves live customers by 12 at most: "
        "no memory.",
    ]


def test_a_model_that_leaves_the_observed_retention_is_said():
    assert any("the model keeps fewer joiners than were observed" in t for t in texts("stay"))
    inside = made.retention()
    inside["model"] = inside["observed"]
    assert texts("stay", tables={"retention": inside}) == []


def test_a_settled_mix_beyond_the_horizon_is_no_forecast():
    settled = texts("settles", approach=made.approach(made.VEG_BOX, ahead=120))
    assert len(settled) == 1 and ("Do not quote" in settled[0] or "still on its way" in settled[0])


def test_what_is_absent_is_said_with_its_reason():
    facts = replace(FACTS, absent={"exits": "no state is an exit"})
    assert "Exits: no state is an exit" in texts("rests", facts)


def test_findings_come_in_the_order_of_the_page_and_once():
    found = findings(replace(FACTS, notes=("no_buckets", "no_buckets")), TABLES)
    places = [SECTIONS.index(f.section) for f in found]
    assert places == sorted(places) and len(set(found)) == len(found)
