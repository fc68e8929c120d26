"""The wheel holds the demo: built, installed outside the tree, and run there."""

import os
import subprocess
import sys
import zipfile
from pathlib import Path

import pytest

ROOT = Path(__file__).parents[1]


@pytest.fixture(scope="module")
def wheel(tmp_path_factory) -> Path:
    out = tmp_path_factory.mktemp("wheel")
    build = [sys.executable, "-m", "build", "--wheel", "--no-isolation", "--outdir", str(out), str(ROOT)]
    subprocess.run(build, check=True, capture_output=True)
    return next(out.glob("*.whl"))


def test_the_wheel_holds_demo_templates_and_type_marker(wheel):
    names = zipfile.ZipFile(wheel).namelist()
    assert "cohortflow/py.typed" in names
    assert any(n.startswith("cohortflow/demo_data/") and n.endswith(".toml") for n in names)
    assert any(n.startswith("cohortflow/report/template/") for n in names)
    assert not any(n.startswith("tests/") for n in names)


def test_the_demo_is_written_from_the_wheel_outside_the_tree(wheel, tmp_path):
    zipfile.ZipFile(wheel).extractall(tmp_path / "site")
    env = {**os.environ, "PYTHONPATH": str(tmp_path / "site")}
    command = [sys.executable, "-c", "from cohortflow.cli import main; main()", "demo", str(tmp_path / "demo")]
    done = subprocess.run(command, cwd=tmp_path, env=env, capture_output=True, text=True)
    assert done.returncode == 0, done.stderr
    assert (tmp_path / "demo" / "veg_box.toml").exists()
    where = [sys.executable, "-c", "import cohortflow; print(cohortflow.__file__)"]
    assert str(tmp_path) in subprocess.run(where, cwd=tmp_path, env=env, capture_output=True, text=True).stdout
