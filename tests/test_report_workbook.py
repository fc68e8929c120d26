"""The workbook: the same numbers, nothing that runs, the same bytes."""

import csv
import io
import math
import re
import shutil
import subprocess
import zipfile
from pathlib import Path

import openpyxl
import pandas as pd
import pytest

from cohortflow.errors import OutputError
from cohortflow.report import workbook
from cohortflow.report.workbook import check_available, workbook_bytes

HOSTILE = '=HYPERLINK("http://x","y")'
LINES = [("opening", "", 100.5), ("joined", "", 12.25), ("returned", "", 1.0), ("lost", "gone", 9.75),
         ("moved_in", "", 3.0), ("moved_out", "", 4.0), ("closing", "", 103.0)]  # fmt: skip


def tables() -> dict[str, pd.DataFrame]:
    rolled = pd.DataFrame(
        [("all", "2026-10", "forecast", "all_live", *line) for line in LINES],
        columns=["segment", "period", "kind", "state", "line", "exit", "customers"],
    )
    shares = pd.DataFrame({"state": [HOSTILE, "+1", "@x", "weekly\x07"], "n": [1, 2, 3, 4000]})
    shares["share"] = [0.1234567890123456, 0.5, math.nan, 1]
    shares["value"] = [math.inf, -1234.5, 0.0, 2.0]
    shares["held"] = pd.array([True, False, None, True], dtype="boolean")
    return {"rollforward": rolled, "shares": shares, "empty": shares.iloc[:0]}


def book(**more) -> openpyxl.Workbook:
    return openpyxl.load_workbook(
        io.BytesIO(workbook_bytes("A = b", {"level": 0.9, "model": "plain"}, tables(), **more))
    )


def test_a_sheet_a_table_with_every_figure_in_full():
    made = book()
    assert made.sheetnames == ["summary", "rollforward", "shares", "empty"]
    rows = list(made["shares"].values)
    assert rows[0] == ("state", "n", "share", "value", "held")
    assert rows[1] == (HOSTILE, 1, 0.1234567890123456, "inf", True)
    assert rows[2] == ("+1", 2, 0.5, -1234.5, False) and rows[3] == ("@x", 3, None, 0, None)
    assert rows[4][0] == "weekly"  # control characters cannot be stored
    assert list(made["empty"].values) == [rows[0]]


def test_nothing_but_our_own_check_is_a_formula():
    made = book()
    formulas = {
        (s.title, c.coordinate): c.value
        for s in made
        for row in s.iter_rows()
        for c in row
        if c.data_type == "f"
    }
    assert set(formulas.values()) == {"=ROUND(SUM(B6:B11)-B12,6)"} and {s for s, _ in formulas} == {"summary"}
    assert made["shares"]["A2"].data_type == "s" and made["shares"]["A2"].quotePrefix


def test_the_summary_foots():
    rows = [[c for c in row if c is not None] for row in book()["summary"].values]
    assert rows[0] == ["A = b"] and rows[1] == ["level", 0.9] and rows[4] == ["Live base ahead", "2026-10"]
    figures = {row[0]: row[1] for row in rows[5:12]}
    assert figures["lost: gone"] == -9.75 and figures["moved_out"] == -4.0
    # 100.5 + 12.25 + 1 - 9.75 + 3 - 4 = 103
    assert sum(v for k, v in figures.items() if k != "closing") == figures["closing"] == 103.0


def test_headers_are_frozen_and_numbers_have_formats():
    sheet = book()["shares"]
    assert sheet.freeze_panes == "A2" and sheet.auto_filter.ref == "A1:E5"
    assert (sheet["B2"].number_format, sheet["C2"].number_format, sheet["D3"].number_format) == (
        "#,##0",
        "0.0%",
        "#,##0.00",
    )
    assert sheet["A1"].font.bold


def test_the_same_bytes_whatever_the_clock(monkeypatch):
    import time

    first = workbook_bytes("t", {}, tables())
    time.sleep(2.1)  # an archive's dates count in steps of two seconds
    assert workbook_bytes("t", {}, tables()) == first
    with zipfile.ZipFile(io.BytesIO(first)) as archive:
        assert {e.date_time for e in archive.infolist()} == {(1980, 1, 1, 0, 0, 0)}
        assert set(re.findall(rb">(\d{4}-[^<]*)<", archive.read("docProps/core.xml"))) == {
            b"1980-01-01T00:00:00Z"
        }


def test_source_date_epoch_is_its_date():
    # 1790000000 = 2026-09-21 14:13:20 UTC (date -u -d @1790000000)
    with zipfile.ZipFile(io.BytesIO(workbook_bytes("t", {}, tables(), epoch=1_790_000_000))) as archive:
        assert {e.date_time for e in archive.infolist()} == {(2026, 9, 21, 14, 13, 20)}
        assert b"2026-09-21T14:13:20Z" in archive.read("docProps/core.xml")


def test_a_table_too_long_for_a_sheet_is_refused(monkeypatch):
    monkeypatch.setattr(workbook, "LONGEST", 4)
    with pytest.raises(OutputError, match='The table "rollforward" has 7 rows, more than a sheet can hold'):
        workbook_bytes("t", {}, tables())


def test_without_the_writer_it_says_what_to_install(monkeypatch):
    monkeypatch.setattr(workbook.importlib.util, "find_spec", lambda name: None)
    with pytest.raises(OutputError, match=r'needs openpyxl.*pip install "cohortflow\[excel\]"'):
        check_available()


@pytest.mark.engine
def test_libreoffice_opens_it_with_the_same_totals(tmp_path: Path):
    office = shutil.which("soffice")
    assert office, "install libreoffice-calc-nogui to run this test, or leave the mark `engine` out"
    (tmp_path / "book.xlsx").write_bytes(workbook_bytes("A = b", {"level": 0.9}, tables()))
    sheets = "csv:Text - txt - csv (StarCalc):44,34,76,1,,0,false,false,false,false,false,-1"
    profile = f"-env:UserInstallation=file://{tmp_path}/profile"
    call = [
        office,
        profile,
        "--headless",
        "--convert-to",
        sheets,
        "--outdir",
        str(tmp_path),
        str(tmp_path / "book.xlsx"),
    ]
    subprocess.run(call, check=True, capture_output=True, timeout=240)
    rolled = list(csv.DictReader((tmp_path / "book-rollforward.csv").open(encoding="utf-8")))
    assert [float(row["customers"]) for row in rolled] == [n for _, _, n in LINES]
    shares = list(csv.DictReader((tmp_path / "book-shares.csv").open(encoding="utf-8")))
    assert shares[0]["state"] == HOSTILE and shares[0]["share"] == "12.3456789012346%"
    summary = list(csv.reader((tmp_path / "book-summary.csv").open(encoding="utf-8")))
    assert summary[-1][0].startswith("check") and float(summary[-1][1]) == 0.0
    assert float(summary[-2][1]) == 103.0
