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
from cohortflow.errors import CallError, StudyError

ROOT = Path(__file__).parents[1]
PANEL = "customer,period,state\n" + "".join(
    f"{c},{t},{s}\n"
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


def real(*arguments: str, env: dict[str, str] | None = None, **options: object) -> subprocess.CompletedProcess[str]:
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
        "print([m for m in ('numpy', 'pandas', 'scipy', 'duckdb', 'matplotlib', 'jinja2') if m in sys.modules])"
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
        (["chekc", "x"], 'There is no command "chekc" (did you mean "check"?). Commands: "demo", "check"'),
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
    assert code == 2 and err.startswith("cohortflow: study: panel.toml, line 3: [study] horizon: needs a whole")


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
    CliRunner().invoke(command, [str(study), "--level", "0.8", "--set", "study.seed=4", "--set", "study.title=T"])
    assert dict(seen[0].set_by) == {
        "study.seed": "option", "study.title": "option", "study.level": "option", "study.horizon": "environment",
    }  # fmt: skip
    opened = seen[0].study()
    assert (opened.level, opened.horizon, opened.seed, opened.title) == (0.8, 7, 4, "T") and seen[0].quiet
    assert opened.origin_of["study.horizon"] == "environment"


def test_exit_is_for_data_files_and_by_for_segments(study):
    given = dict(settings=(), as_of=None, level=None, horizon=None, model=None, seed=None, out=None, force=False,
                 form="table", strict=False, quiet=False, dry_run=False)  # fmt: skip
    call = call_of("fit", {**given, "study": str(study), "exits": ("left",), "by": None}, lambda name: None)
    with pytest.raises(CallError, match="--exit is for a data file"):
        call.study()
    call = call_of("fit", {**given, "study": str(study), "exits": (), "by": "town"}, lambda name: None)
    with pytest.raises(CallError, match='--by "town" is no segment of the study.*name no column'):
        call.study()
    data = call_of("fit", {**given, "study": str(study.with_name("panel.csv")), "exits": ("left",), "by": "town"},
                   lambda name: None)  # fmt: skip
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
    assert err.startswith("cohortflow: fault: a fault of the program, not of your input (ZeroDivisionError: by zero).")
    assert len(err.splitlines()) == 1 and "Traceback" not in err
    assert "ZeroDivisionError" in Path(err.split("Details: ")[1].strip()).read_text()


def test_messages_are_quiet_when_asked_and_progress_is_for_terminals_only(capsys):
    Console(quiet=True).say("message")
    Console().progress("reading")
    assert capsys.readouterr().err == ""
    Console().say("message")
    Console()._step("reading")
    assert capsys.readouterr().err == "message\nreading ...\n"


# ---- demo ----
def test_demo_writes_the_scenario_and_prints_where(tmp_path):
    done = real("demo", str(tmp_path / "veg"))
    assert (done.returncode, done.stdout) == (0, f"{tmp_path / 'veg' / 'veg_box.toml'}\n")
    assert done.stderr.startswith("Next: cohortflow run ")
    again = real("demo", str(tmp_path / "veg"), "--quiet")
    assert again.returncode == 2 and "exists already" in again.stderr
