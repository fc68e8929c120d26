"""Fingerprints of inputs, versions, and the one time stamp that may be written."""

import hashlib

import pytest

from cohortflow.errors import InputError
from cohortflow.runs.fingerprint import LIBRARIES, fingerprints, made_at, sha256, versions


def test_fingerprints_name_size_hash_and_rows_sorted_by_name(tmp_path):
    for name, content in (("b.csv", b"22"), ("a.csv", b"")):
        (tmp_path / name).write_bytes(content)
    found = fingerprints([tmp_path / "b.csv", tmp_path / "a.csv"], {"b.csv": 7})
    assert [item["name"] for item in found] == ["a.csv", "b.csv"]
    # SHA-256 of the empty message: FIPS 180 example value, e3b0c442...b855 (from memory, and hashlib agrees)
    assert found[0]["sha256"] == "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855"
    assert found[1] == {"name": "b.csv", "bytes": 2, "sha256": hashlib.sha256(b"22").hexdigest(), "rows": 7}


def test_a_file_that_went_away_is_said(tmp_path):
    with pytest.raises(InputError, match="gone.csv\" cannot be read: No such file"):
        sha256(tmp_path / "gone.csv")


def test_versions_name_python_and_every_library():
    assert set(versions()) == {"python", *LIBRARIES} and all(versions().values())


def test_no_time_is_written_but_that_of_source_date_epoch(monkeypatch):
    monkeypatch.delenv("SOURCE_DATE_EPOCH", raising=False)
    assert made_at() is None
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "86400")  # one day after 1970-01-01
    assert made_at() == "1970-01-02T00:00:00+00:00"
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "soon")
    assert made_at() is None
