"""The command line: its frame, exit codes, streams, and the library call that each command amounts to."""

import json
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import click
import pytest
from click.testing import CliRunner

import cohortflow as cf
from cohortflow.cli import faults
from cohortflow.cli.call import Call, call_of
from cohortflow.cli.console import Console
from cohortflow.cli.group import SUMMARY, cohortflow
from cohortflow.cli.run import default_folder
from cohortflow.errors import CallError, StudyError
from cohortflow.report import csv_text
from cohortflow.runs.folder import run

ROOT = Path(__file__).parents[1]
PANEL = "customer,period,state\n" + "".join(
    f"c{c},{t},{s}\n"
    for c, path in enumerate(["aab", "abb", "aax", "bbx", "abx", "bab", "aaa", "bbb", "abab", "baax"])
    for t, s in enumerate(path)
).replace("x", "left")
STUDY = """\
[study]
period = "step"
horizon = 3
[input]
layout = "history"
files = ["panel.csv"]
customer = "customer"
time = "period"
state = "state"
[[state]]
name = "a"
role = "entry"
[[state]]
name = "b"
[[state]]
name = "left"
role = "exit"
"""


@pytest.fixture
def study(tmp_path: Path) -> Path:
    (tmp_path / "panel.csv").write_text(PANEL)
    path = tmp_path / "panel.toml"
    path.write_text(STUDY)
    return path


def real(
    *arguments: str, env: dict[str, str] | None = None, **options: object
) -> subprocess.CompletedProcess[str]:
    """The command line as a process of its own."""
    command = [sys.executable, "-m", "cohortflow.cli", *arguments]
    options = {"capture_output": True, "text": True, "cwd": ROOT, **options}
    return subprocess.run(command, env={**os.environ, **(env or {})}, **options)  # type: ignore[call-overload]


def guarded(capsys: pytest.CaptureFixture[str], *arguments: str) -> tuple[int, str, str]:
    """Exit code, stdout and stderr within this process."""
    code = faults.guarded(cohortflow, arguments)
    out, err = capsys.readouterr()
    return code, out, err


# ---- the frame ----
def test_help_leads_with_examples_and_names_every_command():
    text = CliRunner().invoke(cohortflow, ["--help"]).output
    assert text.index("Examples:") < text.index("Usage:") < text.index("Exit codes: 0 done; 1 done, but with")
    assert all(f"  {name} " in text for name in SUMMARY)


@pytest.mark.parametrize("name", list(SUMMARY))
def test_each_command_has_help_that_leads_with_examples(name):
    result = CliRunner().invoke(cohortflow, [name, "--help"])
    assert result.exit_code == 0 and result.output.startswith("Examples:\n  cohortflow " + name)
    assert max(len(line) for line in result.output.splitlines()) <= 100


def test_help_loads_click_and_nothing_heavy():
    code = (
        "import sys\nsys.argv = ['cohortflow', '--help']\nfrom cohortflow.cli import main\n"
        "try:\n    main()\nexcept SystemExit:\n    pass\n"
        "heavy = ('numpy', 'pandas', 'scipy', 'duckdb', 'matplotlib', 'jinja2')\n"
        "print([m for m in heavy if m in sys.modules])"
    )
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT)
    assert done.stdout.splitlines()[-1] == "[]"


def test_help_starts_about_as_fast_as_click_itself():
    def fastest(*command: str) -> float:
        times = []
        for _ in range(4):
            start = time.perf_counter()
            subprocess.run([sys.executable, *command], capture_output=True, check=True, cwd=ROOT)
            times.append(time.perf_counter() - start)
        return min(times)

    assert fastest("-m", "cohortflow.cli", "--help") <= 3 * fastest("-c", "import click")


def test_the_version_is_printed():
    assert CliRunner().invoke(cohortflow, ["--version"]).output == f"cohortflow, version {cf.__version__}\n"


@pytest.mark.parametrize(
    ("arguments", "text"),
    [
        (["chekc", "x"], 'There is no command "chekc" (did you mean "check"?). Commands: "demo", "draft", "check"'),
        (["check"], "Missing argument 'STUDY'. See `cohortflow check --help`."),
        (["check", "none.toml"], "study: none.toml: cannot read the study file: No such file"),
        (["check", "none.csv"], "input: none.csv: cannot read the data file"),
        (["fit", "x.toml", "--level", "high"], "'high' is not a valid float"),
        (["fit", "x.toml", "--set", "level"], '--set "level" needs table.key=value'),
        (["fit", "x.toml", "--levle", "1"], "No such option '--levle'"),
        (["fit", "x.toml", "--format", "xml"], "'xml' is not one of 'table', 'csv', 'json'"),
    ],
)
def test_what_is_refused_is_told_in_one_line_on_stderr_with_code_2(capsys, arguments, text):
    code, out, err = guarded(capsys, *arguments)
    assert code == 2 and out == "" and text in err and len(err.splitlines()) == 1


def test_a_study_that_is_not_valid_is_refused_with_its_line(capsys, study):
    study.write_text(STUDY.replace("horizon = 3", "horizon = 0"))
    code, _, err = guarded(capsys, "check", str(study))
    assert code == 2 and err.startswith(
        "cohortflow: study: panel.toml, line 3: [study] horizon: needs a whole"
    )


def test_settings_come_from_option_environment_and_file_in_this_order(study, monkeypatch):
    seen: list[Call] = []

    def keep(call: Call) -> int:
        seen.append(call)
        return 0

    from cohortflow.cli.options import study_command

    command = study_command("check", "cohortflow check x")(keep)
    monkeypatch.setenv("COHORTFLOW_LEVEL", "0.5")
    monkeypatch.setenv("COHORTFLOW_HORIZON", "7")
    monkeypatch.setenv("COHORTFLOW_QUIET", "1")
    CliRunner().invoke(
        command, [str(study), "--level", "0.8", "--set", "study.seed=4", "--set", "study.title=T"]
    )
    assert dict(seen[0].set_by) == {
        "study.seed": "option",
        "study.title": "option",
        "study.level": "option",
        "study.horizon": "environment",
    }
    opened = seen[0].study()
    assert (opened.level, opened.horizon, opened.seed, opened.title) == (0.8, 7, 4, "T") and seen[0].quiet
    assert opened.origin_of["study.horizon"] == "environment"


def test_exit_is_for_data_files_and_by_for_segments(study):
    given = dict(
        settings=(),
        as_of=None,
        level=None,
        horizon=None,
        model=None,
        seed=None,
        out=None,
        force=False,
        form="table",
        keep_values=False,
        strict=False,
        quiet=False,
        dry_run=False,
    )
    call = call_of("fit", {**given, "study": str(study), "exits": ("left",), "by": None}, lambda name: None)
    with pytest.raises(CallError, match="--exit is for a data file"):
        call.study()
    call = call_of("fit", {**given, "study": str(study), "exits": (), "by": "town"}, lambda name: None)
    with pytest.raises(CallError, match='--by "town" is no segment of the study.*name no column'):
        call.study()
    data = call_of(
        "fit",
        {**given, "study": str(study.with_name("panel.csv")), "exits": ("left",), "by": "town"},
        lambda name: None,
    )
    assert data.study().input.segments == ("town",) and data.study().states.exits == ("left",)


# ---- what goes wrong ----
def failing(error: BaseException) -> click.Command:
    @click.command()
    def command() -> None:
        raise error

    return command


@pytest.mark.parametrize(
    ("error", "code", "text"),
    [
        (StudyError("x.toml: bad"), 2, "cohortflow: study: x.toml: bad"),
        (MemoryError(), 2, "not enough memory"),
        (KeyboardInterrupt(), 130, "cohortflow: stopped; nothing half-written is left."),
        (click.ClickException("odd"), 2, "cohortflow: call: odd"),
    ],
)
def test_every_way_to_end_has_its_code_and_one_line(capsys, error, code, text):
    assert faults.guarded(failing(error), []) == code  # type: ignore[arg-type]
    assert text in capsys.readouterr().err


def test_a_fault_of_the_program_is_one_line_with_the_traceback_in_a_file(capsys, tmp_path, monkeypatch):
    monkeypatch.setattr(faults.tempfile, "tempdir", str(tmp_path))
    assert faults.guarded(failing(ZeroDivisionError("by\nzero")), []) == 3  # type: ignore[arg-type]
    err = capsys.readouterr().err
    assert err.startswith(
        "cohortflow: fault: a fault of the program, not of your input (ZeroDivisionError: by zero)."
    )
    assert len(err.splitlines()) == 1 and "Traceback" not in err
    assert "ZeroDivisionError" in Path(err.split("Details: ")[1].strip()).read_text()


def test_messages_are_quiet_when_asked_and_progress_is_for_terminals_only(capsys, monkeypatch):
    Console(quiet=True).say("message")
    Console().progress()("reading")
    assert capsys.readouterr().err == ""
    monkeypatch.setattr(sys.stderr, "isatty", lambda: True)
    Console(quiet=True).progress()("reading")
    tell = Console().progress()
    for what in ("reading", "reading", "counting"):
        tell(what)
    assert capsys.readouterr().err == "reading ...\ncounting ...\n"


# ---- demo ----
def test_demo_writes_the_scenario_and_prints_where(tmp_path):
    done = real("demo", str(tmp_path / "veg"))
    assert (done.returncode, done.stdout) == (0, f"{tmp_path / 'veg' / 'veg_box.toml'}\n")
    assert done.stderr.startswith("Next: cohortflow run ")
    again = real("demo", str(tmp_path / "veg"), "--quiet")
    assert again.returncode == 2 and "exists already" in again.stderr


# ---- each command and its library call ----
def output_of(capsys: pytest.CaptureFixture[str], *arguments: str) -> str:
    code, out, err = guarded(capsys, *arguments)
    assert code == 0, err
    return out


def test_check_is_run_up_to_check(capsys, study):
    """`cohortflow check STUDY` = cf.run(study, upto="check"), whose table is cf.read(study).check."""
    text = output_of(capsys, "check", str(study), "--format", "csv")
    assert text == csv_text(cf.read(cf.read_study(study)).check.to_frame())
    assert "What became of the rows" in output_of(capsys, "check", str(study))


def test_fit_is_run_up_to_fit(capsys, study):
    """`cohortflow fit STUDY --level 0.8` = cf.fit(cf.count(cf.read(study))).interval(0.8, clustered=True)."""
    text = output_of(capsys, "fit", str(study), "--level", "0.8", "--format", "csv")
    fit = cf.fit(cf.count(cf.read(cf.read_study(study))))
    assert text == csv_text(fit.interval(0.8, clustered=True).to_frame())
    assert "Intervals at 80%, " in output_of(capsys, "fit", str(study), "--level", "0.8")


def test_project_is_run_up_to_project(capsys, study):
    """`cohortflow project STUDY --seed 5` = cf.project(fit, periods=..., joiners=..., rng=5), and more."""
    text = output_of(
        capsys, "project", str(study), "--seed", "5", "--set", "joiners.method=none", "--format", "json"
    )
    told = json.loads(text)
    fit = cf.fit(cf.count(cf.read(cf.read_study(study))))
    ahead = cf.project(
        fit, periods=3, joiners=cf.projector.joiner_forecast(fit.tally, 3, method="none"), rng=5
    )
    assert told["tables"]["projection"] == ahead.to_dict()["rows"] and told["seed"] == 5
    assert (told["kind"], told["format_version"], told["stage"]) == ("run", 1, "project")
    words = output_of(capsys, "project", str(study))
    assert "Customers at the end of each period" in words and max(map(len, words.splitlines())) <= 80


def test_run_is_run(capsys, study, tmp_path):
    """`cohortflow run STUDY --out OUT` = cf.run(study, out=OUT)."""
    words = output_of(capsys, "run", str(study), "--out", str(tmp_path / "a"))
    run(str(study), out=tmp_path / "b")
    first, second = ({p.name: p.read_bytes() for p in (tmp_path / x).rglob("*.csv")} for x in "ab")
    assert first == second and len(first) > 8 and "Customers by state" in words
    code, out, err = guarded(capsys, "run", str(study), "--out", str(tmp_path / "a"))
    assert code == 2 and out == "" and "exists already; choose another name, or add --force" in err


def test_run_names_its_folder_after_study_and_period(tmp_path):
    text = STUDY.replace('period = "step"', 'period = "month"\nas_of = "2026-09-30"')
    path = tmp_path / "club.toml"
    path.write_text(text)
    assert default_folder(cf.read_study(path)) == Path("forecasts/club-2026-09")
    path.write_text(STUDY)
    assert default_folder(cf.read_study(path)) == Path("forecasts/club")


def test_a_dry_run_tells_what_it_would_do_and_does_nothing(capsys, study, tmp_path):
    before = sorted(tmp_path.iterdir())
    out = output_of(capsys, "run", str(study), "--dry-run", "--level", "0.8", "--out", str(tmp_path / "x"))
    assert "read panel.csv" in out and "set study.level by option" in out and f"write {tmp_path / 'x'}" in out
    assert sorted(tmp_path.iterdir()) == before
    assert "write nothing but the result on stdout" in output_of(capsys, "check", str(study), "--dry-run")


def test_strict_ends_with_1_when_a_serious_finding_stands(capsys, study):
    study.with_name("panel.csv").write_text(PANEL + "c0,2,a\n")  # c0 is in b at 2 as well
    code, out, err = guarded(capsys, "check", str(study), "--strict", "--format", "csv")
    assert code == 1 and out.startswith("stage,outcome") and "finding: " in err
    assert guarded(capsys, "check", str(study), "--format", "csv", "--quiet")[::2] == (0, "")


def test_a_bare_data_file_is_a_study(capsys, study):
    panel = str(study.with_name("panel.csv"))
    text = output_of(capsys, "fit", panel, "--exit", "left", "--format", "csv", "--level", "0.9")
    assert text.count("\nall,") == 9  # three states, each to three: a, b and the unit row of the exit


def test_the_output_folder_of_check_holds_the_accounting_and_the_rejected_rows(capsys, study, tmp_path):
    output_of(capsys, "check", str(study), "--out", str(tmp_path / "checked"))
    names = {
        str(p.relative_to(tmp_path / "checked")) for p in (tmp_path / "checked").rglob("*") if p.is_file()
    }
    assert names == {"run.json", "rejected.csv", "tables/accounting.csv"}


# ---- as a process ----
def test_results_on_stdout_messages_on_stderr_and_no_colour(study):
    done = real(
        "project", str(study), "--set", "joiners.method=none", env={"FORCE_COLOR": "1", "NO_COLOR": ""}
    )
    assert done.returncode == 0 and "\x1b" not in done.stdout + done.stderr
    assert "Customers by state" in done.stdout and done.stderr == ""


def test_a_reader_that_stops_early_is_no_error(study):
    command = f"{sys.executable} -m cohortflow.cli fit {study} --format json | head -c 10"
    done = subprocess.run(["bash", "-o", "pipefail", "-c", command], capture_output=True, text=True, cwd=ROOT)
    assert (done.returncode, done.stderr) == (0, "")


def test_signs_that_the_terminal_lacks_are_no_fault(study):
    study.write_text(STUDY.replace('name = "b"', 'name = "ł"'), encoding="utf-8")
    study.with_name("panel.csv").write_text(PANEL.replace(",b\n", ",ł\n"), encoding="utf-8")
    done = real("fit", str(study), "--format", "csv", env={"PYTHONIOENCODING": "latin-1"})
    assert done.returncode == 0 and "\\u0142" in done.stdout


@pytest.mark.parametrize("how", [signal.SIGINT, signal.SIGTERM])
def test_interrupted_it_leaves_nothing_half_written(study, tmp_path, how):
    command = [
        sys.executable,
        "-m",
        "cohortflow.cli",
        "run",
        str(study),
        "--out",
        str(tmp_path / "out" / "run"),
    ]
    child = subprocess.Popen(command, cwd=ROOT, stdout=subprocess.PIPE, stderr=subprocess.PIPE, text=True)
    while not (tmp_path / "out" / ".run.part").exists():
        time.sleep(0.01)
    os.kill(child.pid, how)
    out, err = child.communicate(timeout=60)
    assert (child.returncode, out) == (130, "")
    assert err.strip() == "cohortflow: stopped; nothing half-written is left."
    assert list((tmp_path / "out").iterdir()) == []
