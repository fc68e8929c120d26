"""The run folder: what is in it, that it can be repeated byte for byte, and what is refused."""

import csv
import json
import os
import shutil
import subprocess
import sys
from pathlib import Path

import pandas as pd
import pytest

import cohortflow as cf
from cohortflow.errors import CallError, InputError, NotIdentified, OutputError
from cohortflow.runs.folder import Run, run
from cohortflow.runs.steps import fit_study, joiners_study
from cohortflow.study import read_study

ROOT = Path(__file__).parents[1]
PATHS = ["aab", "abb", "aax", "bbx", "abx", "bab", "aaa", "bbb", "abab", "baax"]
STUDY = """\
[study]
title = "two states"
period = "step"
horizon = 3
[input]
layout = "history"
files = ["panel.csv"]
customer = "customer"
time = "period"
state = "state"
segments = ["town"]
[[state]]
name = "a"
role = "entry"
[[state]]
name = "=b"
[[state]]
name = "left"
role = "exit"
"""


def panel(paths: list[str]) -> str:
    names = {"a": "a", "b": "=b", "x": "left"}
    rows = [
        f"c{c},{t + c % 3},{names[s]},{'+north' if c % 2 else 'south'}"
        for c, path in enumerate(paths)
        for t, s in enumerate(path)
    ]
    return "customer,period,state,town\n" + "\n".join([*rows, ",1,a,south"]) + "\n"


def written(folder: Path, text: str = STUDY) -> Path:
    folder.mkdir(exist_ok=True)
    (folder / "panel.csv").write_text(panel(PATHS * 3))
    (folder / "panel.toml").write_text(text)
    return folder / "panel.toml"


@pytest.fixture(scope="module")
def made(tmp_path_factory: pytest.TempPathFactory) -> Run:
    home = tmp_path_factory.mktemp("made")
    return run(written(home / "in"), out=home / "out", by="town")


def contents(folder: Path) -> dict[str, bytes]:
    return {str(p.relative_to(folder)): p.read_bytes() for p in sorted(folder.rglob("*")) if p.is_file()}


def table(folder: Path, name: str) -> list[dict[str, str]]:
    with (folder / "tables" / f"{name}.csv").open(encoding="utf-8", newline="") as file:
        return list(csv.DictReader(file))


# ---- what is in it ----
def test_the_folder_holds_record_tables_counts_charts_and_page(made):
    names = contents(made.path)
    assert {"run.json", "report.html", "rejected.csv"} <= set(names)
    assert any(n.startswith("tally/") for n in names) and any(n.startswith("charts/") for n in names)
    assert {n for n in names if n.startswith("tables/")} == {f"tables/{name}.csv" for name in made.tables}
    expected = {
        "accounting",
        "rates",
        "transitions",
        "adequacy",
        "backtest",
        "projection",
        "rollforward",
        "band_parts",
        "long_run",
        "exits",
        "cohorts",
        "retention",
        "levers",
        "definitions",
    }
    assert set(made.tables) == expected


def test_the_record_tells_what_the_run_was_made_from(made):
    record = json.loads((made.path / "run.json").read_text(encoding="utf-8"))
    assert (record["kind"], record["format_version"], record["stage"], record["by"]) == (
        "run",
        1,
        "run",
        "town",
    )
    assert (
        record["program"] == {"name": "cohortflow", "version": cf.__version__} and record["made_at"] is None
    )
    assert record["study"]["horizon"] == 3 and record["set_by"]["study.level"] == "default"
    assert record["definitions"] == made.study.digest() and record["seed"] == 1
    (source,) = record["inputs"]
    assert (
        source["name"] == "panel.csv" and source["rows"] == 97
    )  # 3 x (8 paths of 3 + 2 of 4) and the blank id
    assert {row["outcome"] for row in record["accounting"]} >= {"read", "used", "rejected"}
    assert record["tables"]["transitions"]["columns"][:3] == ["segment", "from", "to"]
    assert str(made.path.parent) not in json.dumps(record)


def test_rows_are_accounted_for_and_the_rejected_row_is_listed_without_its_value(made):
    whole = {
        (r["outcome"], r["reason"]): int(r["rows"])
        for r in table(made.path, "accounting")
        if r["file"] == "all"
    }
    read = whole.pop(("read", ""))
    assert read == sum(whole.values()) and whole[("rejected", "id_missing")] == 1
    (row,) = csv.DictReader((made.path / "rejected.csv").open(encoding="utf-8"))
    assert (row["file"], row["column"], row["reason"]) == ("panel.csv", "customer", "id_missing")
    assert "value" not in row and int(row["line"]) == read + 1  # the header is line 1


def test_text_that_a_spreadsheet_would_run_is_neutralised_in_every_file(made):
    for name in made.tables:
        for row in table(made.path, name):
            assert not any(str(cell).startswith(("=", "+", "@")) for cell in row.values()), (name, row)
    assert any(r["from"] == "'=b" for r in table(made.path, "transitions"))


def test_each_table_is_that_of_the_library_call(made):
    study = read_study(made.study.path)
    tally = cf.count(cf.read(study))
    fit = cf.fit(tally, by="town")
    ahead = cf.project(fit, periods=3, joiners=joiners_study(study, tally), level=0.90, rng=1)
    mine = made.tables["projection"]
    pd.testing.assert_frame_equal(mine[mine["segment"] == "all"].reset_index(drop=True), ahead.to_frame())
    rates = fit.interval(0.90, "wilson", clustered=True).to_frame()
    pd.testing.assert_frame_equal(made.tables["transitions"], rates)
    exits = cf.time_to_exit(fit, level=0.90, rng=1).to_frame()
    mine = made.tables["exits"]
    pd.testing.assert_frame_equal(mine[mine["segment"] == "all"].reset_index(drop=True), exits)


def test_segments_have_rows_of_their_own(made):
    assert list(pd.unique(made.tables["projection"]["segment"])) == ["all", "+north", "south"]


def test_stages_do_less(tmp_path):
    study = written(tmp_path)
    assert list(run(study, upto="check").tables) == ["accounting"]
    assert list(run(study, upto="fit").tables) == ["accounting", "transitions", "adequacy"]
    assert list(run(study, upto="backtest").tables) == ["accounting", "transitions", "backtest"]
    done = run(study, upto="project", out=tmp_path / "ahead")
    assert not (done.path / "report.html").exists() and (done.path / "tables" / "projection.csv").exists()
    with pytest.raises(CallError, match=r'Unknown stage "fitt" \(did you mean "fit"\?\)'):
        run(study, upto="fitt")


def test_values_are_kept_only_when_asked(tmp_path):
    study = written(tmp_path)
    (tmp_path / "panel.csv").write_text(panel(PATHS))
    assert "value" not in run(study, upto="check").rejected
    kept = run(study, upto="check", keep_values=True).rejected
    assert list(kept.columns) == ["file", "line", "column", "reason", "value"]


# ---- repeated ----
def test_a_run_repeated_in_another_folder_has_the_same_bytes(made, tmp_path):
    shutil.copytree(made.study.path.parent, tmp_path / "elsewhere")
    again = run(tmp_path / "elsewhere" / "panel.toml", out=tmp_path / "again", by="town")
    assert contents(again.path) == contents(made.path)


def test_a_run_in_another_process_with_another_hash_seed_has_the_same_bytes(made, tmp_path):
    code = "import sys\nfrom cohortflow.runs.folder import run\nrun(sys.argv[1], out=sys.argv[2], by='town')"
    command = [sys.executable, "-c", code, str(made.study.path), str(tmp_path / "again")]
    subprocess.run(
        command, check=True, cwd=ROOT, env={**os.environ, "PYTHONHASHSEED": "7"}, capture_output=True
    )
    assert contents(tmp_path / "again") == contents(made.path)


def test_source_date_epoch_is_the_only_time_written(made, tmp_path, monkeypatch):
    monkeypatch.setenv("SOURCE_DATE_EPOCH", "1790000000")
    again = run(made.study.path, out=tmp_path / "again", by="town")
    record = json.loads((again.path / "run.json").read_text())
    assert record["made_at"] == "2026-09-21T14:13:20+00:00"  # date -u -d @1790000000
    old, new = contents(made.path), contents(again.path)
    assert {name for name in old if old[name] != new[name]} == {"run.json"}


# ---- refused ----
def test_nothing_is_overwritten_and_nothing_is_left_after_a_refusal(made, tmp_path):
    before = contents(made.path)
    with pytest.raises(OutputError, match="exists already"):
        run(made.study.path, out=made.path)
    assert contents(made.path) == before
    text = STUDY.replace(
        'name = "left"\nrole = "exit"', 'name = "left"\nrole = "exit"\n[model]\nname = "best"'
    )
    with pytest.raises(NotIdentified, match="There is no past origin from which every model could be fitted"):
        run(written(tmp_path / "in", text), out=tmp_path / "out")
    assert [p.name for p in tmp_path.iterdir()] == ["in"]


def test_what_cannot_be_made_is_absent_with_its_reason(tmp_path):
    text = STUDY.replace('name = "left"\nrole = "exit"', 'name = "left"')
    done = run(written(tmp_path, text), out=tmp_path / "out")
    assert "exits" not in done.tables and not (done.path / "tables" / "exits.csv").exists()
    record = json.loads((done.path / "run.json").read_text())
    assert record["absent"]["exits"].startswith("Time to exit needs an exit")


def test_parts_that_are_not_used_yet_say_so(tmp_path):
    plan = '[[scenario]]\nname = "s"\njoiners_multiply = 2\n'
    done = run(written(tmp_path, STUDY + plan), upto="project")
    assert done.warnings == ("[[scenario]] was read and checked, but this version does not use it yet.",)


def test_observed_contributions_are_the_mean_amounts_times_the_margin(tmp_path):
    money = '[value]\ncurrency = "GBP"\nper_period = "observed"\nmargin = 0.3\n'
    study = written(tmp_path, STUDY.replace('state = "state"', 'state = "state"\namount = "paid"') + money)
    rows = panel(PATHS).splitlines()
    (tmp_path / "panel.csv").write_text(
        "\n".join([rows[0] + ",paid", *(r + ",3" for r in rows[1:-1])]) + "\n"
    )
    done = run(study, upto="project")
    again = cf.value(
        done.fit, per_period="observed", margin=0.3, currency="GBP", start=done.tally.mix(),
        joiners=done.forecasts["all"].joiners.a_period(), level=done.study.level, rng=done.study.seed,
    )  # fmt: skip
    own, whole = again.to_frame(), done.tables["value"]
    pd.testing.assert_frame_equal(whole.head(len(own)), own)


# ---- layouts ----
COUNTS = """\
[study]
period = "month"
as_of = "2026-03-31"
horizon = 2
[input]
layout = "counts"
files = ["counts.csv"]
time = "month"
from = "was"
to = "is"
n = "customers"
[[state]]
name = "in"
[[state]]
name = "out"
role = "exit"
"""


def test_bare_counts_make_a_run_without_what_only_customers_can_tell(tmp_path):
    (tmp_path / "counts.csv").write_text(
        "month,was,is,customers\n2026-01,in,in,90\n2026-01,in,out,10\n2026-02,in,in,72\n2026-02,in,out,18\n"
    )
    (tmp_path / "bare.toml").write_text(COUNTS)
    done = run(tmp_path / "bare.toml", out=tmp_path / "out")
    assert done.fit.P[0].tolist() == [162 / 190, 28 / 190]  # (90 + 72) of (100 + 90) stayed
    live = done.tables["projection"].query("state == 'in'")["customers"].tolist()
    assert live == pytest.approx([72, 72 * 162 / 190, 72 * (162 / 190) ** 2])  # nobody joins
    assert {"cohorts"}.isdisjoint(done.tables) and done.tally.meta.definitions == done.study.digest()
    assert done.tables["accounting"].query("outcome == 'used' and file == 'all'")["rows"].item() == 4
    assert [finding.code for finding in done.findings if not finding.serious]  # no_buckets among them


@pytest.mark.parametrize(
    ("old", "new", "text"),
    [
        ('n = "customers"', 'n = "customers"\nsegments = ["town"]', "Bare counts are read without segments"),
    ],
)
def test_what_bare_counts_cannot_hold_is_refused(tmp_path, old, new, text):
    changed = COUNTS.replace(old, new)
    (tmp_path / "counts.csv").write_text("month,was,is,customers\n2026-01,in,in,90\n")
    (tmp_path / "bare.toml").write_text(changed)
    with pytest.raises(InputError, match=text):
        run(tmp_path / "bare.toml", upto="check")


# ---- steps ----
def test_model_options_reach_the_fit_and_those_of_other_models_do_not(tmp_path):
    text = STUDY + "[model]\nwindow = 1\nbands = [1, 3]\ntypes = 2\n"
    study = read_study(written(tmp_path, text))
    fitted = fit_study(study, cf.count(cf.read(study)))
    assert fitted.first == fitted.last  # one period of moves; the plain model takes neither bands nor types


def test_planned_joiners_are_those_of_the_file_and_of_the_segment(tmp_path):
    rows = [f"{p},joined,a,{n},{town}" for p in (6, 7, 8) for n, town in ((10, "+north"), (5, "south"))]
    text = STUDY + '[joiners]\nmethod = "planned"\nfile = "plan.csv"\n'
    path = written(tmp_path, text)
    (tmp_path / "plan.csv").write_text("\n".join(["period,kind,state,customers,segment", *rows]) + "\n")
    study = read_study(path)
    tally = cf.count(cf.read(study))
    assert joiners_study(study, tally).expected()[:, 0].tolist() == [15.0] * 3
    assert joiners_study(study, tally, "south").expected()[:, 0].tolist() == [5.0] * 3
    with pytest.raises(CallError, match='plan.csv has no planned joiners for the segment "east"; give rows'):
        joiners_study(study, tally, "east")


def test_run_is_a_record(made):
    assert repr(made) == f"<run of two states: {len(made.tables)} tables in {made.path}>"
    frame = made.to_frame()
    assert frame.loc[frame["table"] == "transitions", "columns"].item().startswith("segment, from, to, count")
    assert made.to_dict()["about"]["stage"] == "run" and isinstance(made.serious, tuple)


def test_no_data_at_all_is_refused_by_the_step_that_needs_it(tmp_path):
    study = written(tmp_path)
    (tmp_path / "panel.csv").write_text("customer,period,state,town\n1,0,a,south\n")
    with pytest.raises(NotIdentified):
        run(study, upto="fit")
