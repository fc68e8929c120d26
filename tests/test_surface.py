"""The public surface: what is exported exists, is documented, and loading it is light."""

import subprocess
import sys
import tomllib
from pathlib import Path

import pytest

import cohortflow as cf

ROOT = Path(__file__).parents[1]
TOP_LEVEL = {"README.md", "DEVELOPERS.md", "pyproject.toml", "cohortflow", "tests", "demo_data", "LICENSE"}
NAMES = [n for n in cf.__all__ if not n.startswith("__")]


@pytest.mark.parametrize("name", NAMES)
def test_each_public_name_loads_and_has_a_docstring_with_an_example(name):
    thing = getattr(cf, name)
    assert thing.__doc__, f"cf.{name} has no docstring"
    if callable(thing) and not (isinstance(thing, type) and issubclass(thing, Exception)):
        assert ">>>" in thing.__doc__, f"cf.{name} has no example"


def test_an_unknown_name_is_an_attribute_error():
    with pytest.raises(AttributeError, match="no attribute 'fitt'"):
        cf.fitt  # noqa: B018


def test_importing_loads_neither_matplotlib_nor_statsmodels():
    code = "import sys, cohortflow; print([m for m in ('matplotlib', 'statsmodels', 'duckdb') if m in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True, cwd=ROOT)
    assert done.stdout.strip() == "[]"


def test_the_top_level_holds_what_the_design_card_names_and_nothing_else():
    listed = subprocess.run(["git", "ls-files"], capture_output=True, text=True, check=True, cwd=ROOT).stdout.split()
    assert {p.split("/")[0] for p in listed if not p.startswith(".")} == TOP_LEVEL


def test_the_version_stands_in_one_way_in_two_places():
    project = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
    assert project["version"] == cf.__version__
