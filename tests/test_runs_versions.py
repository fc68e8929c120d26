"""Versions, and the one time stamp that may be written."""

from cohortflow.runs.versions import LIBRARIES, made_at, versions


def test_versions_name_python_and_every_library():
    assert set(versions()) == {"python", *LIBRARIES} and all(versions().values())


def test_no_time_is_written_but_that_of_source_date_epoch(monkeypatch):
    monkeypatch.delenv("SOURCE_DATE_EPOCH", raising=False)
    assert made_at() is None
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "86400")  # one day after 1970-01-01
    assert made_at() == "1970-01-02T00:00:00+00:00"
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "soon")
    assert made_at() is None
