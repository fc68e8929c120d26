"""Runs read back from their folders alone."""

import json
from dataclasses import replace
from pathlib import Path

import pandas as pd
import pytest

import cohortflow as cf
from cohortflow.errors import InputError
from cohortflow.runs.opened import open_run, read_table
from tests.comparison_cases import STUDY, folder, rows

PATHS = {"hhg": 6, "hhhh": 9, "hahh@north": 4, "1.hhg": 3}
WHOLE = (
    STUDY
    + """
[[adjustment]]
period = "5"
state = "away"
customers = 3
reason = "flood"
[budget]
file = "budget.csv"
"""
)


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> tuple[cf.runs.folder.Run, Path]:
    home = tmp_path_factory.mktemp("opened")
    (home / "in").mkdir()
    (home / "in" / "budget.csv").write_text("period,total,amount\n4,all_live,20\n")
    rows(PATHS, last=3).to_csv(home / "in" / "panel.csv", index=False)
    (home / "in" / "small.toml").write_text(WHOLE)
    done = cf.run(home / "in" / "small.toml", upto="project", out=home / "q1", by="town")
    return done, home / "q1"


def test_a_folder_tells_what_the_run_in_memory_tells(made):
    done, path = made
    read, known = open_run(path), open_run(done)
    assert (read.name, read.label, read.base, read.by) == (known.name, known.label, known.base, known.by)
    assert read.name == "q1" and read.label == "3" and read.definitions == known.definitions
    for field in ("title", "horizon", "level", "seed", "totals", "model", "joiners", "adjustments", "budget"):
        assert getattr(read.study, field) == getattr(known.study, field), field
    assert read.study.value == replace(known.study.value, per_period=read.study.value.per_period)
    assert dict(read.study.value.per_period) == dict(known.study.value.per_period)
    assert read.projection.equals(known.projection.astype({"periods_ahead": float}))
    assert set(read.projection["segment"]) == set(read.rollforward["segment"]) == {"all"}
    pd.testing.assert_frame_equal(read.rollforward, known.rollforward, check_dtype=False)
    assert open_run(read) is read


def test_names_that_were_kept_from_spreadsheets_come_back(tmp_path):
    (tmp_path / "tables").mkdir()
    (tmp_path / "tables" / "projection.csv").write_text(
        "state,customers,low\n'=b,1.5,\nNA,2,inf\n", encoding="utf-8"
    )
    frame = read_table(tmp_path, "projection", ["=b", "NA"])
    assert frame["state"].tolist() == ["=b", "NA"] and frame["customers"].tolist() == [1.5, 2.0]
    assert frame["low"].isna().tolist() == [True, False]


def test_a_table_that_was_changed_is_refused(tmp_path):
    (tmp_path / "tables").mkdir()
    (tmp_path / "tables" / "projection.csv").write_text("state,customers\nhere,about 7\n", encoding="utf-8")
    with pytest.raises(InputError, match="the column customers holds something else than numbers"):
        read_table(tmp_path, "projection")


def test_what_is_no_run_is_refused(tmp_path):
    with pytest.raises(InputError, match="is not a run folder: run.json cannot be read"):
        open_run(tmp_path / "nowhere")
    (tmp_path / "run.json").write_text("{")
    with pytest.raises(InputError, match='run.json" is damaged'):
        open_run(tmp_path)
    (tmp_path / "run.json").write_text('{"kind": "shopping"}')
    with pytest.raises(InputError, match="is not the record of a run"):
        open_run(tmp_path)


def test_another_format_is_refused(made, tmp_path):
    record = json.loads((made[1] / "run.json").read_text())
    (tmp_path / "run.json").write_text(json.dumps({**record, "format_version": 99}))
    with pytest.raises(InputError, match="has format version 99, this program reads 1"):
        open_run(tmp_path)


def test_a_run_without_a_projection_is_refused(tmp_path):
    path = folder(tmp_path, "q1", PATHS, last=3)
    checked = cf.run(tmp_path / "in" / "small.toml", upto="fit", out=tmp_path / "fit")
    with pytest.raises(InputError, match='The run of "small" holds no projection'):
        open_run(checked)
    with pytest.raises(InputError, match='has no table "projection"; a comparison needs it'):
        open_run(tmp_path / "fit")
    assert open_run(path).by is None
