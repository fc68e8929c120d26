"""Every command and code block of the README, run as written in a folder with the demo."""

import os
import re
import shlex
import subprocess
import sys
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]
README = (ROOT / "README.md").read_text(encoding="utf-8")
SHELL = [block for block in re.findall(r"```sh\n(.*?)```", README, re.S) if "venv" not in block]
PYTHON = re.findall(r"```python\n(.*?)```", README, re.S)
COMMANDS = [line for block in SHELL for line in block.strip().splitlines()]


@pytest.fixture(scope="module")
def workplace(tmp_path_factory) -> Path:
    folder = tmp_path_factory.mktemp("readme")
    call("cohortflow demo veg_box", folder)
    (folder / "panel.csv").write_text("customer,period,state\na,1,steady\na,2,steady\nb,1,steady\nb,2,left\n")
    return folder


def call(command: str, folder: Path) -> None:
    words = shlex.split(command)
    assert words[0] == "cohortflow", command
    done = subprocess.run(
        [sys.executable, "-c", "from cohortflow.cli import main; main()", *words[1:]],
        cwd=folder, env={**os.environ, "PYTHONPATH": str(ROOT)}, capture_output=True, text=True,
    )  # fmt: skip
    assert done.returncode == 0, f"{command}\n{done.stdout[-2000:]}\n{done.stderr[-2000:]}"


@pytest.mark.slow
def test_every_command_runs_in_order(workplace):
    assert len(COMMANDS) >= 5
    for command in COMMANDS:
        call(command, workplace)
    assert (workplace / "forecasts" / "2026Q3" / "report.html").exists()


@pytest.mark.slow
@pytest.mark.parametrize("block", PYTHON)
def test_every_python_block_runs(block, workplace):
    subprocess.run(
        [sys.executable, "-c", block], check=True, cwd=workplace, env={**os.environ, "PYTHONPATH": str(ROOT)}
    )


def test_the_two_set_up_commands_stand_first_and_ci_calls_the_second():
    first, second = re.findall(r"```sh\n(.*?)```", README, re.S)[:2]
    assert "cohortflow run" in first and "pytest" in second
    assert "grep -m1 -E '^python3? -m venv .*pytest' README.md" in (ROOT / ".ci" / "run").read_text()
    assert len(first.strip().splitlines()) == len(second.strip().splitlines()) == 1


def test_the_commands_named_in_the_readme_exist():
    from cohortflow.cli.group import SUMMARY

    assert set(re.findall(r"`cohortflow ([a-z]+)", README)) <= set(SUMMARY)
