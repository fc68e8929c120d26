"""From a run to its report."""

from pathlib import Path

import pytest

from cohortflow.errors import CallError, OutputError
from cohortflow.report import content_of, files_of, write_report
from cohortflow.runs.folder import run

STUDY = Path(__file__).parent / "hand" / "bread_round" / "study.toml"


@pytest.fixture(scope="module")
def done():
    return run(STUDY)


@pytest.fixture(scope="module")
def content(done):
    return content_of(done)


def test_facts_tell_what_the_tables_do_not(done, content):
    facts = content.facts
    assert (
        facts.title == done.study.title
        and facts.horizon == done.study.horizon
        and facts.seed == done.study.seed
    )
    assert facts.customers == done.tally.meta.customers and facts.model == "plain"
    assert facts.verdict == done.forecasts["all"].long_run.verdict
    assert set(facts.rules) == set(done.study.states.names) and facts.inputs[0][0].endswith(".csv")


def test_findings_of_the_run_are_in_the_report(done, content):
    from cohortflow.report.wording import note

    said = {f.text for f in content.findings}
    assert {note(f) for f in done.findings} <= said


def test_the_structure_of_the_chain_is_no_finding(content):
    assert not any("closed group" in f.text.lower() for f in content.findings)


def test_files_of_a_run(content):
    files = files_of(content)
    assert "report.html" in files and "charts/moves.svg" in files and "charts/base.svg" in files
    assert all(
        text.startswith("<?xml") and text.rstrip().endswith("</svg>")
        for n, text in files.items()
        if n.endswith("svg")
    )
    assert files == files_of(content)


def test_write_report_overwrites_only_when_told(done, tmp_path):
    path = write_report(done, tmp_path / "page.html")
    first = path.read_text(encoding="utf-8")
    assert first.startswith("<!DOCTYPE html>") or first.lstrip().startswith("<!DOCTYPE html>")
    with pytest.raises(OutputError, match="page.html is there already; nothing was written"):
        write_report(done, path)
    assert write_report(done, path, force=True).read_text(encoding="utf-8") == first


def test_a_place_that_cannot_be_written_is_said(done, tmp_path):
    with pytest.raises(OutputError, match="cannot be written: No such file or directory"):
        write_report(done, tmp_path / "nowhere" / "page.html")


def test_a_run_without_a_projection_has_no_report():
    with pytest.raises(
        CallError, match='There is no forecast of "all" in this run; forecasts: none. Make a whole run'
    ):
        content_of(run(STUDY, upto="check"))
