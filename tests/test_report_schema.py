"""What `--format json` prints keeps to its schema (checked by the jsonschema library)."""

import json
from pathlib import Path

import jsonschema
import pytest
from click.testing import CliRunner

from cohortflow.cli.group import cohortflow
from cohortflow.errors import CallError
from cohortflow.report.schema import kinds, schema
from tests.comparison_cases import STUDY, rows

PATHS = {"hhg": 6, "hhhhh": 9, "hahhh@north": 4, "1.hhgh": 3, "2.hhh@north": 2, "haahg": 2, "3.hh": 2}


@pytest.fixture(scope="module")
def home(tmp_path_factory: pytest.TempPathFactory) -> Path:
    home = tmp_path_factory.mktemp("json")
    rows(PATHS, last=4).to_csv(home / "panel.csv", index=False)
    (home / "small.toml").write_text(STUDY)
    return home


def said(*words: str) -> dict:
    done = CliRunner().invoke(cohortflow, [*words, "--format", "json"], catch_exceptions=False)
    return json.loads(done.stdout, parse_constant=pytest.fail)


def holds(data: dict, kind: str) -> None:
    jsonschema.Draft202012Validator(schema(kind)).validate(data)


@pytest.mark.parametrize("command", ["check", "fit", "project", "backtest"])
def test_commands_on_a_study(home, command):
    data = said(command, str(home / "small.toml"), "--quiet")
    holds(data, "run")
    assert data["stage"] == command


def test_run_and_compare(home):
    data = said("run", str(home / "small.toml"), "--out", str(home / "one"), "--quiet")
    holds(data, "run")
    holds(said("compare", str(home / "one"), str(home / "one")), "comparison")
    kept = json.loads((home / "one" / "run.json").read_text())  # the same record, with the size of each table
    assert {k: v for k, v in kept.items() if k != "tables"} == {
        k: v for k, v in data.items() if k != "tables"
    }
    assert {n: t["rows"] for n, t in kept["tables"].items()} == {n: len(t) for n, t in data["tables"].items()}


def test_sql_and_demo(home):
    data = said("sql", str(home / "small.toml"), "--dialect", "sqlite")
    holds(data, "sql")
    assert data["dialect"] == "sqlite" and "SELECT" in data["statement"].upper()
    data = said("demo", str(home / "veg"), "--quiet")
    holds(data, "demo")
    assert Path(data["study"]).exists()


def test_a_schema_can_fail():
    with pytest.raises(jsonschema.ValidationError):
        holds({"kind": "sql", "format_version": 1, "dialect": "sqlite", "table": "t"}, "sql")
    with pytest.raises(jsonschema.ValidationError):
        holds({"kind": "demo", "format_version": 2, "folder": "a", "study": "b"}, "demo")


def test_every_schema_is_a_schema_and_an_unknown_kind_is_refused():
    for kind in kinds():
        jsonschema.Draft202012Validator.check_schema(schema(kind))
    with pytest.raises(CallError, match='There is no output of kind "runs" \\(did you mean "run"\\?\\)'):
        schema("runs")
