"""Two run folders compared: what is refused, what is written, and the command."""

import json
import subprocess
import sys
from dataclasses import replace
from pathlib import Path

import pytest

import cohortflow as cf
from cohortflow.errors import CallError, DefinitionsDiffer, OutputError
from cohortflow.runs.comparison import Comparison, comparison_json, settings
from cohortflow.runs.opened import open_run
from tests.comparison_cases import PLAIN, STUDY, folder, opened, tally

ROOT = Path(__file__).parents[1]
PATHS = {"hhg": 6, "hhhhh": 9, "hahhh@north": 4, "1.hhgh": 3, "2.hhh@north": 2, "haahg": 2, "3.hh": 2}


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Path:
    home = tmp_path_factory.mktemp("compared")
    for name, last in (("q1", 2), ("q2", 3), ("q3", 4)):
        folder(home, name, PATHS, last=last)
    return home


@pytest.fixture(scope="module")
def made(home: Path) -> Comparison:
    return cf.compare(home / "q2", home / "q3", past=[home / "q1"], out=home / "compared")


def contents(path: Path) -> dict[str, bytes]:
    return {str(p.relative_to(path)): p.read_bytes() for p in sorted(path.rglob("*")) if p.is_file()}


def test_what_it_says(made):
    assert repr(made).startswith("<all_live of 6: ") and made.about()["notes"] == []
    assert (made.earlier, made.later, made.first, made.last, made.period) == ("q2", "q3", "3", "4", "6")
    frame = made.to_frame()
    assert list(frame.columns) == ["quantity", "period", "part", "amount"]
    assert {"here", "away", "all_live", "known", "contribution"} == set(frame["quantity"])
    assert set(made.tables["outcome"]["run"]) == {"q1", "q2"}
    table = made.tables["calibration"]
    whole = table[table["periods_ahead"].isna() & (table["quantity"] == "all_live")]
    assert whole["forecasts"].tolist() == [3]  # q1 is caught up with for two periods, q2 for one


def test_the_parts_add_up(made):
    wide = made.to_frame().pivot(index=["quantity", "period"], columns="part", values="amount")
    parts = wide.drop(columns=["last_forecast", "this_forecast"]).sum(axis=1)
    assert (wide["this_forecast"] - wide["last_forecast"] - parts).abs().max() < 1e-9


def test_folders_and_runs_in_memory_give_the_same(made, home):
    again = cf.compare(open_run(home / "q2"), home / "q3", past=[home / "q1"])
    assert again.to_frame().equals(made.to_frame())


def test_the_folder_holds_tables_charts_and_page(made):
    names = set(contents(made.path))
    assert names == {"compare.json", "comparison.html", "charts/bridge_all_live.svg", "charts/actual.svg"} | {
        f"tables/{name}.csv" for name in made.tables
    }
    record = json.loads((made.path / "compare.json").read_text())
    assert record["kind"] == "comparison" and record["format_version"] == 1
    assert record["tables"]["bridge"]["rows"] == len(made.to_frame())


def test_the_same_bytes_again_and_elsewhere(made, home, tmp_path):
    cf.compare(home / "q2", home / "q3", past=[home / "q1"], out=tmp_path / "deeper" / "again")
    assert contents(tmp_path / "deeper" / "again") == contents(made.path)


def test_an_earlier_comparison_is_replaced_only_with_force(made, home):
    with pytest.raises(OutputError, match="exists already; choose another name, or add --force"):
        cf.compare(home / "q2", home / "q3", out=home / "compared")
    with pytest.raises(OutputError, match="was not written by this program"):
        cf.compare(home / "q2", home / "q3", out=home / "q1", force=True)  # a run is no comparison
    before = contents(made.path)
    cf.compare(home / "q2", home / "q3", past=[home / "q1"], out=home / "compared", force=True)
    assert contents(made.path) == before


def test_a_common_period_can_be_asked_for(home):
    assert cf.compare(home / "q2", home / "q3", period="5").period == "5"
    with pytest.raises(CallError, match='Period "9" is not in both forecasts.*they share "4", "5", "6"'):
        cf.compare(home / "q2", home / "q3", period="9")


def test_other_states_are_refused_whatever_one_allows(home, tmp_path):
    text = STUDY.replace('name = "away"', 'name = "off"').replace('["here", "away"]', '["here", "off"]')
    other = folder(tmp_path, "other", {k.replace("a", "h"): n for k, n in PATHS.items()}, last=4, text=text)
    with pytest.raises(
        DefinitionsDiffer, match='The states differ: "q2" has "here", "away", "gone", "other" has'
    ):
        cf.compare(home / "q2", other, allow_restated=True)


def test_other_periods_are_refused():
    months = replace(PLAIN, horizon=2)
    counts = tally({"hg": 2, "hhg": 4, "hhh": 4}, last=2)
    later = opened(counts, months)
    moved = replace(later, tally=replace(counts, meta=replace(counts.meta, calendar=cf.Calendar("month"))))
    with pytest.raises(DefinitionsDiffer, match='The periods differ: "run" counts by step, "run" by month'):
        cf.compare(later, moved)


def test_the_later_run_comes_second(home):
    with pytest.raises(
        CallError, match='"q3" is counted up to 4, later than "q2" \\(3\\); give the earlier run first'
    ):
        cf.compare(home / "q3", home / "q2")


def test_other_definitions_are_refused_unless_allowed(home, tmp_path):
    carried = STUDY.replace('[[state]]\nname = "here"', 'on_gap = "carry"\n[[state]]\nname = "here"')
    other = folder(tmp_path, "other", PATHS, last=4, text=carried)
    with pytest.raises(
        DefinitionsDiffer, match=r'under different definitions \("input.on_gap"\).*--allow-restated'
    ):
        cf.compare(home / "q2", other)
    made = cf.compare(home / "q2", other, allow_restated=True)
    assert made.restated and made.about()["restated"]


def test_settings_that_differ_are_listed(home):
    a = open_run(home / "q2")
    b = replace(
        a, record={**a.record, "study": {**a.record["study"], "level": 0.8, "rules": [{"name": "x"}]}}
    )
    rows = settings(a, b).set_index("setting")
    assert rows.loc["level"].tolist() == ["setting", "0.9", "0.8"]
    assert (rows.drop("level")["kind"] == "definition").all()


def test_json_holds_every_row(made):
    data = json.loads(comparison_json(made))
    assert set(data) == {"kind", "format_version", "program", "about", "tables"}
    assert len(data["tables"]["bridge_details"]) == len(made.tables["bridge_details"])


# ---- the command ----
def command(*words: str, at: Path) -> subprocess.CompletedProcess[str]:
    call = [sys.executable, "-m", "cohortflow.cli", "compare", *words]
    return subprocess.run(
        call, capture_output=True, text=True, cwd=at, env={"PYTHONPATH": str(ROOT), "PATH": ""}
    )


def test_the_command_is_one_library_call(home, made):
    done = command("q2", "q3", "--past", "q1", "--format", "csv", at=home)
    assert done.returncode == 0 and done.stderr == ""
    assert done.stdout == (made.path / "tables" / "bridge.csv").read_text()
    shown = command("q2", "q3", "--past", "q1", "--out", "printed", at=home)
    assert shown.returncode == 0 and "Why the forecast for 6 changed" in shown.stdout
    assert "How often the bands held" in shown.stdout and shown.stderr == "Written to printed\n"
    assert max(map(len, shown.stdout.splitlines())) <= 80


def test_the_command_refuses_with_code_2(home):
    done = command("q3", "q2", at=home)
    assert done.returncode == 2 and done.stderr.startswith("cohortflow: call: ") and done.stdout == ""


def test_strict_tells_of_definitions_that_differ(home, tmp_path):
    carried = STUDY.replace('[[state]]\nname = "here"', 'on_gap = "carry"\n[[state]]\nname = "here"')
    other = folder(tmp_path, "other", PATHS, last=4, text=carried)
    assert (
        command("q2", str(other), "--allow-restated", "--strict", "--format", "json", at=home).returncode == 1
    )
