"""Hostile names and files: nothing a study or an extract says is run, written elsewhere, or taken for markup."""

from __future__ import annotations

import csv
import html
import sqlite3
from html.parser import HTMLParser
from pathlib import Path

import duckdb
import pandas as pd
import pytest

import cohortflow as cf
from cohortflow.errors import CohortflowError, StudyError
from cohortflow.history.warehouse import counting_sql
from cohortflow.report.table import csv_text
from cohortflow.runs.folder import run

DROP = 'a"; drop table x; --'
LONG = "long " + "w" * 295
RIGHT_TO_LEFT = "\u0645\u063a\u0644\u0642 \u202eabc"
LIVE = {
    "script": "<script>alert(1)</script>",
    "long": LONG,
    "emoji": "\U0001f966\U0001f468\u200d\U0001f33e box",
    "template": "{{ 7*191 }}{% raw %}",
    "maths": "$\\badtex{$ ^_",
    "formula": '=HYPERLINK("http://x")',
}
EXITS = {"sql": DROP, "rtl": RIGHT_TO_LEFT}
NAMES = [*LIVE.values(), *EXITS.values()]
TITLE = "../../evil\\..\\<img src=x onerror=alert(2)>{{ 7*191 }}"
FORMULA = ("=", "+", "-", "@", "\t", "\r")


def toml(text: str) -> str:
    return '"' + text.replace("\\", "\\\\").replace('"', '\\"') + '"'


def rows() -> pd.DataFrame:
    """80 customers through the states in turn; every third leaves."""
    out, live, exits = [], list(LIVE.values()), list(EXITS.values())
    for c in range(80):
        for t in range(1, 9):
            left = c % 3 == 0 and t == 4 + c % 5
            state = exits[c % 2] if left else live[(c + t * (1 + c % 2)) % len(live)]
            out.append((f"@c{c}", t, state, ("=1+1", "<i>web</i>")[c % 2]))
            if left:
                break
    return pd.DataFrame(out, columns=["customer", DROP, "state", "=cmd"])


def write_study(folder: Path, extra: str = "") -> Path:
    rows().to_csv(folder / "panel.csv", index=False)
    states = "".join(
        f"[[state]]\nname = {toml(n)}\n" + 'role = "exit"\n' * (n in EXITS.values()) for n in NAMES
    )
    path = folder / "study.toml"
    path.write_text(
        f'[study]\ntitle = {toml(TITLE)}\nperiod = "step"\nhorizon = 3\n{extra}[input]\nlayout = "history"\n'
        f'files = ["panel.csv"]\ncustomer = "customer"\ntime = {toml(DROP)}\nstate = "state"\n'
        f'segments = ["=cmd"]\n{states}[people]\nprepared_by = "=2+3 <b>me</b>"\n',
        encoding="utf-8",
    )
    return path


@pytest.fixture(scope="module")
def whole(tmp_path_factory):
    """(folder that holds all, run folder, the run)."""
    home = tmp_path_factory.mktemp("home") / "deep" / "er"
    home.mkdir(parents=True)
    done = run(write_study(home), out=home / "out", also=("workbook",))
    return home.parent.parent, home / "out", done


def risky(cell: str) -> bool:
    """Whether a spreadsheet would take a cell for a formula; figures may begin with a minus."""
    try:
        float(cell)
    except ValueError:
        return cell.startswith(FORMULA)
    return False


def test_every_csv_of_a_run_is_free_of_formulas_and_keeps_the_names(whole):
    _, out, _ = whole
    files = sorted(out.rglob("*.csv"))
    assert len(files) > 8
    cells = {c for f in files for row in csv.reader(f.open(encoding="utf-8", newline="")) for c in row}
    assert [c for c in cells if risky(c)] == []
    assert {"'" + LIVE["formula"], LIVE["script"], DROP, LONG} <= cells


def test_printed_csv_and_rejected_values_are_neutralised_too():
    frame = pd.DataFrame({"=head": ["=1", "+2", "-x", "@y", "\tz", "\rq", "plain", -3.5]})
    cells = [c for row in csv.reader(csv_text(frame).splitlines()) for c in row]
    assert [c for c in cells if risky(c)] == [] and "plain" in cells and "-3.5" in cells


def test_the_workbook_holds_no_formula_but_its_own_sums(whole):
    openpyxl = pytest.importorskip("openpyxl", reason="the workbook is an extra; CI installs it")
    book = openpyxl.load_workbook(whole[1] / "workbook.xlsx")
    formulas = [c.value for s in book for row in s.iter_rows() for c in row if c.data_type == "f"]
    assert all("HYPERLINK" not in f and "1+1" not in f and "2+3" not in f for f in map(str, formulas))
    texts = {c.value for s in book for row in s.iter_rows() for c in row if c.data_type in ("s", "inlineStr")}
    assert "'" + LIVE["formula"] in texts or LIVE["formula"] in texts  # as text, never as a formula


class Page(HTMLParser):
    """Elements that a hostile name could have made, and the text that is shown."""

    def __init__(self) -> None:
        super().__init__(convert_charrefs=True)
        self.scripts: list[str] = []
        self.handlers: list[tuple[str, str]] = []
        self.text: list[str] = []
        self.inside = ""

    def handle_starttag(self, tag, attrs):
        inert = ("type", "application/json") in attrs  # data for the panel: never run
        self.inside = "data" if inert else tag if tag in ("script", "style") else self.inside
        self.handlers += [(tag, a) for a, _ in attrs if a.startswith("on")]
        self.handlers += [
            (tag, v) for a, v in attrs if a in ("href", "src") and "javascript" in (v or "").casefold()
        ]

    def handle_endtag(self, tag):
        self.inside = "" if tag in ("script", "style") else self.inside

    def handle_data(self, data):
        (self.scripts if self.inside == "script" else self.text).append(data)


def test_names_stand_on_the_page_as_text_and_templates_are_inert(whole):
    page = (whole[1] / "report.html").read_text(encoding="utf-8")
    found = Page()
    found.feed(page)
    assert found.handlers == [] and not any("alert(" in s for s in found.scripts)
    shown = " ".join(" ".join(found.text).split())
    assert LIVE["script"] in shown and "{{ 7*191 }}" in shown and "1337" not in shown
    assert DROP in shown and "\U0001f966" in shown and "\u0645\u063a\u0644\u0642" in shown
    assert "<script>alert" not in page and "<img src=x" not in page and html.escape(LIVE["script"]) in page


def test_charts_are_drawn_with_such_names_and_hold_no_markup_of_theirs(whole):
    charts = sorted((whole[1] / "charts").glob("*.svg"))
    assert charts
    for chart in charts:
        text = chart.read_text(encoding="utf-8")
        assert "<script" not in text and "onerror" not in text.replace("onerror=alert(2)&gt;", "")


def test_a_run_writes_inside_its_folder_only(whole):
    home, out, _ = whole
    outside = sorted(p.name for p in home.rglob("*") if p.is_file() and out not in p.parents)
    assert outside == ["panel.csv", "study.toml"]


BUDGET, PLANNED = (
    '[budget]\nfile = "../../made.csv"\n',
    '[joiners]\nmethod = "planned"\nfile = "/tmp/../made.csv"\n',
)


@pytest.mark.parametrize("change", ['calendar = "../../made.csv"\n', BUDGET, PLANNED])
def test_paths_in_a_study_are_read_never_written(tmp_path, change):
    home = tmp_path / "a" / "b"
    home.mkdir(parents=True)
    path = write_study(home, change if change.startswith("cal") else "")
    if not change.startswith("cal"):
        path.write_text(path.read_text(encoding="utf-8") + change, encoding="utf-8")
    before = {p: p.stat().st_mtime_ns for p in tmp_path.rglob("*")}
    with pytest.raises(CohortflowError):
        run(path, upto="check", out=home / "out")
    assert not (home / "out").exists()
    assert {p: p.stat().st_mtime_ns for p in tmp_path.rglob("*") if p.is_file()} == {
        p: t for p, t in before.items() if p.is_file()
    }


NO_TOML = (
    "import os\nos.system('touch pwned')\n",
    "!!python/object/apply:os.system ['touch pwned']\n",
    '{"study": {}}',
)


@pytest.mark.parametrize("text", [*NO_TOML, "[study\n", "\x00", ""])
def test_a_study_that_is_no_toml_is_refused_and_nothing_of_it_runs(tmp_path, monkeypatch, text):
    monkeypatch.chdir(tmp_path)
    (tmp_path / "study.toml").write_text(text)
    with pytest.raises(StudyError, match=r"study\.toml"):
        cf.read_study(tmp_path / "study.toml")
    assert [p.name for p in tmp_path.iterdir()] == ["study.toml"]


def test_strings_of_a_study_are_not_expanded(tmp_path, monkeypatch):
    monkeypatch.setenv("HOME", str(tmp_path))
    (tmp_path / "secret.csv").write_text("customer,period,state\n")
    path = write_study(tmp_path)
    for name in ("~/secret.csv", "$HOME/secret.csv", "${HOME}/secret.csv", "`ls`", "$(ls)"):
        text = path.read_text(encoding="utf-8").replace('"panel.csv"', toml(name))
        (tmp_path / "other.toml").write_text(text, encoding="utf-8")
        with pytest.raises(CohortflowError, match="No file matches"):
            run(tmp_path / "other.toml", upto="check")


def test_a_side_file_with_a_huge_field_is_refused_not_a_fault(tmp_path):
    (tmp_path / "budget.csv").write_text("period,total,amount\n1,all_live," + "9" * 200_000 + "\n")
    path = write_study(tmp_path)
    path.write_text(path.read_text(encoding="utf-8") + '[budget]\nfile = "budget.csv"\n', encoding="utf-8")
    with pytest.raises(StudyError, match=r"budget\.csv"):
        cf.read_study(path)


@pytest.mark.parametrize(
    "name", ["x" * 5000 + ".csv", "a\\u0000b.csv", "\\u0000*.csv", "a/" * 3000 + "*.csv"]
)
def test_names_that_no_file_can_have_are_refused_not_a_fault(tmp_path, name):
    path = write_study(tmp_path)
    text = path.read_text(encoding="utf-8")
    path.write_text(text.replace('"panel.csv"', f'"{name}"'), encoding="utf-8")
    with pytest.raises(CohortflowError, match="No file matches"):
        run(path, upto="check")
    path.write_text(f'{text}[budget]\nfile = "{name}"\n', encoding="utf-8")
    with pytest.raises(StudyError, match="cannot read"):
        cf.read_study(path)


@pytest.mark.parametrize("kind", ["csv", "parquet", "frame"])
def test_columns_and_states_may_be_called_like_statements(tmp_path, kind):
    """The same counts whatever the names; 27 of the 80 customers leave (c = 0, 3, .. 78)."""
    data = rows()
    if kind == "csv":
        data.to_csv(tmp_path / "p.csv", index=False)
    elif kind == "parquet":
        data.to_parquet(tmp_path / "p.parquet")
    given = data if kind == "frame" else tmp_path / f"p.{kind}"
    states = cf.States(NAMES, exits=list(EXITS.values()))
    tally = cf.count(cf.read_history(given, states, period=DROP, segments=["=cmd"], calendar="step"))
    assert tally.counts()[:, [NAMES.index(e) for e in EXITS.values()]].sum() == 27
    assert tally.segment_values("=cmd") == ["<i>web</i>", "=1+1"]


def test_events_may_be_called_like_statements():
    log = pd.DataFrame({"customer": ["a", "a", "b"], "time": ["2026-01-03", "2026-02-05", "2026-01-09"],
                        "event": ["it's", DROP, "it's"]})  # fmt: skip
    rules = [
        {"name": DROP, "role": "exit", "when": {"last_event": [DROP], "among": [DROP, "it's"]}},
        {"name": "it's"},
    ]
    tally = cf.count(
        cf.read_events(log, rules, as_of="2026-03-31", joins=["it's"], events={"map": {"it's": ["its''"]}})
    )
    assert tally.counts()[1, 0] == 1


def test_the_statement_for_a_warehouse_quotes_names_in_two_engines():
    states = cf.States(["it's", DROP], exits=[DROP])
    sql = counting_sql(
        states, table='t"x', customer=DROP, period="p''q", state='s"', on_absent=DROP, dialect="sqlite"
    )
    data = [("a", 1, "it's"), ("a", 2, DROP), ("b", 1, "it's"), ("b", 2, "it's"), ("x", 1, "it's")]
    quoted = '"a""; drop table x; --"', "\"p''q\"", '"s"""'
    for engine in (sqlite3.connect(":memory:"), duckdb.connect()):
        engine.execute("CREATE TABLE x (kept INTEGER)")
        engine.execute(f'CREATE TABLE "t""x" ({quoted[0]} VARCHAR, {quoted[1]} INTEGER, {quoted[2]} VARCHAR)')
        engine.executemany('INSERT INTO "t""x" VALUES (?, ?, ?)', data)
        found = engine.execute(sql).fetchall()
        assert sum(row[-1] for row in found) == 3  # a leaves, b stays, x is absent in 2
        assert engine.execute("SELECT count(*) FROM x").fetchone() == (0,)
