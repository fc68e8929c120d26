"""What the commands print."""

import pandas as pd
import pytest

from cohortflow.history import Finding
from cohortflow.report.terminal import check_text, findings_text, fit_text, project_text, run_text
from cohortflow.report.text import width
from tests import report_fixtures as made

FOUND = (
    Finding("few_at_risk", serious=False, detail={"state": "quiet"}),
    Finding("joined_without_join_event", customers=38),
)


def texts(states):
    tables = made.tables(states)
    names = ("all_live", *states.remaining)
    yield check_text(tables, FOUND)
    yield fit_text(tables, FOUND, states)
    yield project_text(tables, FOUND, states, kind="month", totals=(), verdict="exits_only")
    yield run_text(tables, FOUND, names)


@pytest.mark.parametrize("states", [made.VEG_BOX, made.HOSTILE, made.FIFTEEN], ids=["veg box", "hostile", "fifteen"])
def test_everything_fits_eighty_columns_and_says_its_findings_first(states):
    for text in texts(states):
        assert all(width(line) <= 80 for line in text.split("\n"))
        assert text.startswith("Findings\n- 38 customers") and text.endswith("\n")
        assert "\x1b" not in text and "\u202e" not in text


def test_no_findings_is_said_too():
    assert findings_text(()) == "Nothing was found that spoils a number."


def test_serious_findings_lead():
    lines = findings_text(FOUND).split("\n")
    assert lines[1].startswith("- 38 customers") and any("quiet" in line for line in lines[3:])


def test_segments_are_named_in_their_tables():
    tables = made.tables(made.SMALL)
    both = pd.concat([tables["transitions"], tables["transitions"].assign(segment="web shop")])
    text = fit_text({"transitions": both}, (), made.SMALL)
    assert "Rates, row = from: web shop" in text and text.count("Rates, row = from") == 2


def test_the_verdict_is_put_into_words():
    text = list(texts(made.VEG_BOX))[2]
    assert "Without joiners everybody leaves in the end." in " ".join(text.split())
