"""Workbook and Parquet beside the CSV files: the same numbers, the same bytes, refused in time."""

import hashlib
import os
import subprocess
import sys
from pathlib import Path

import openpyxl
import pandas as pd
import pytest

import cohortflow as cf
from cohortflow.errors import CallError
from tests.comparison_cases import STUDY, rows

ROOT = Path(__file__).parents[1]
PATHS = {"hhg": 6, "hhhhh": 9, "hahhh@north": 4, "1.hhgh": 3, "2.hhh@north": 2, "haahg": 2, "3.hh": 2}


def written(home: Path) -> Path:
    home.mkdir(parents=True, exist_ok=True)
    rows(PATHS, last=4).to_csv(home / "panel.csv", index=False)
    (home / "small.toml").write_text(STUDY)
    return home / "small.toml"


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> cf.runs.folder.Run:
    home = tmp_path_factory.mktemp("whole")
    return cf.run(written(home), out=home / "out", also=["workbook", "parquet"])


def hashes(folder: Path) -> dict[str, str]:
    files = sorted(p for p in folder.rglob("*") if p.is_file())
    return {str(p.relative_to(folder)): hashlib.sha256(p.read_bytes()).hexdigest() for p in files}


def test_each_table_is_a_csv_file_a_parquet_file_and_a_sheet(made):
    book = openpyxl.load_workbook(made.path / "workbook.xlsx")
    assert book.sheetnames == ["summary", *made.tables]
    for name, frame in made.tables.items():
        parquet = pd.read_parquet(made.path / "tables" / f"{name}.parquet")
        assert list(parquet.columns) == list(frame.columns) and len(parquet) == len(frame), name
        sheet = list(book[name].values)
        assert list(sheet[0]) == list(frame.columns) and len(sheet) == len(frame) + 1, name
        for column in frame.select_dtypes("number").columns:
            where = list(frame.columns).index(column)
            total = sum(row[where] for row in sheet[1:] if isinstance(row[where], (int, float)))
            known = pd.to_numeric(frame[column]).astype(float)
            known = known[known.abs() < float("inf")]
            assert total == pytest.approx(float(known.sum()), rel=1e-12, abs=1e-9), (name, column)


def test_every_byte_again_in_another_process_and_folder(made, tmp_path):
    study = written(tmp_path / "elsewhere" / "deep")
    call = "import sys, cohortflow as cf; cf.run(sys.argv[1], out=sys.argv[2], also=['workbook', 'parquet'])"
    env = {**os.environ, "PYTHONHASHSEED": "7", "TZ": "Pacific/Auckland", "PYTHONPATH": str(ROOT)}
    target = tmp_path / "other name"
    subprocess.run([sys.executable, "-c", call, str(study), str(target)], check=True, cwd=tmp_path, env=env)
    assert hashes(target) == hashes(made.path)
    assert {"workbook.xlsx", "report.html", "run.json", "tables/rates.parquet"} <= set(hashes(target))


def test_what_could_not_be_written_is_refused_first(tmp_path):
    with pytest.raises(CallError, match='Nothing is called "workbok" \\(did you mean "workbook"\\?\\)'):
        cf.run(tmp_path / "none.toml", also=["workbok"])
    with pytest.raises(CallError, match='"parquet" needs a folder to be written into'):
        cf.run(tmp_path / "none.toml", also=["parquet"])


def test_the_command_takes_both(tmp_path):
    study = written(tmp_path)
    call = [
        sys.executable,
        "-m",
        "cohortflow.cli",
        "run",
        str(study),
        "--workbook",
        "--parquet",
        "--out",
        "o",
        "--quiet",
    ]
    done = subprocess.run(
        call, capture_output=True, text=True, cwd=tmp_path, env={**os.environ, "PYTHONPATH": str(ROOT)}
    )
    assert done.returncode == 0, done.stderr
    assert (tmp_path / "o" / "workbook.xlsx").exists() and (
        tmp_path / "o" / "tables" / "rates.parquet"
    ).exists()
