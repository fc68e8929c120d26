"""The demo scenario is copied whole."""

import pytest

from cohortflow.errors import OutputError
from cohortflow.runs import demo


def test_the_demo_holds_study_data_and_generator(tmp_path):
    folder = demo.write_demo(tmp_path / "veg")
    names = {p.name for p in folder.iterdir()}
    assert {"veg_box.toml", "events-2023.csv.gz", "budget.csv", "generate.py"} <= names
    assert "__pycache__" not in names
    source = demo.demo_source()
    assert all((folder / name).read_bytes() == (source / name).read_bytes() for name in names)


def test_the_demo_is_not_written_twice_without_force(tmp_path):
    demo.write_demo(tmp_path / "veg")
    with pytest.raises(OutputError, match="exists already"):
        demo.write_demo(tmp_path / "veg")
    (tmp_path / "veg" / "budget.csv").unlink()
    assert (demo.write_demo(tmp_path / "veg", force=True) / "budget.csv").exists()


def test_an_installation_without_the_demo_says_so(tmp_path, monkeypatch):
    monkeypatch.setattr(demo, "PACKAGE", tmp_path / "site" / "cohortflow")
    with pytest.raises(OutputError, match="The demo is not part of this installation"):
        demo.demo_source()
