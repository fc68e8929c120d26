"""Folders appear whole or not at all, one writer at a time, and never over somebody's work."""

import multiprocessing
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

from cohortflow.errors import OutputError
from cohortflow.runs.place import MARK, check_free, whole_folder, write_text

ROOT = Path(__file__).parents[1]
SLOW = """
import sys, time
from pathlib import Path
from cohortflow.runs.place import whole_folder
with whole_folder(Path(sys.argv[1]), force=True) as part:
    (part / "run.json").write_text("half")
    print("writing", flush=True)
    time.sleep(30)
"""


def filled(folder: Path, text: str = "1") -> Path:
    with whole_folder(folder) as part:
        write_text(part / "tables" / "a.csv", "a\n")
        write_text(part / MARK, text)
    return folder


def everything(folder: Path) -> list[str]:
    return sorted(str(p.relative_to(folder)) for p in folder.rglob("*"))


def slow_writer(folder: Path) -> subprocess.Popen:
    child = subprocess.Popen([sys.executable, "-c", SLOW, str(folder)], stdout=subprocess.PIPE, cwd=ROOT)
    assert child.stdout.readline() == b"writing\n"
    return child


def test_a_folder_is_written_and_nothing_is_left_beside_it(tmp_path):
    filled(tmp_path / "new" / "run")
    assert everything(tmp_path / "new") == ["run", "run/run.json", "run/tables", "run/tables/a.csv"]


def test_nothing_is_left_when_the_writing_fails(tmp_path):
    with pytest.raises(ZeroDivisionError), whole_folder(tmp_path / "run") as part:
        write_text(part / MARK, "half")
        raise ZeroDivisionError
    assert everything(tmp_path) == []


def test_an_earlier_run_is_replaced_only_with_force(tmp_path):
    target = filled(tmp_path / "run")
    with pytest.raises(OutputError, match="exists already; choose another name, or add --force"):
        filled(target)
    with whole_folder(target, force=True) as part:
        write_text(part / MARK, "2")
    assert everything(target) == [MARK] and (target / MARK).read_text() == "2"


def test_the_earlier_run_stays_when_its_replacement_fails(tmp_path):
    target = filled(tmp_path / "run")
    with pytest.raises(ZeroDivisionError), whole_folder(target, force=True):
        raise ZeroDivisionError
    assert (target / MARK).read_text() == "1" and everything(tmp_path)[0] == "run"


def test_what_this_program_did_not_write_is_never_replaced(tmp_path):
    (tmp_path / "notes").mkdir()
    (tmp_path / "notes" / "thesis.txt").write_text("years of work")
    with pytest.raises(OutputError, match=r"was not written by this program \(it has no run.json\)"):
        check_free(tmp_path / "notes", force=True)
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="is a file; --out needs the name of a folder"):
        check_free(tmp_path / "file", force=True)


def test_an_empty_folder_is_filled(tmp_path):
    (tmp_path / "run").mkdir()
    assert MARK in everything(filled(tmp_path / "run"))


def test_what_the_disk_refuses_is_said(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(OutputError, match="cannot be written: "):
        filled(tmp_path / "file" / "run")


def test_two_runs_into_one_folder_one_is_refused(tmp_path):
    child = slow_writer(tmp_path / "run")
    try:
        with pytest.raises(OutputError, match="another run is writing .* now; wait for it"):
            filled(tmp_path / "run")
    finally:
        child.kill()
        child.wait()


def test_killed_at_work_the_earlier_run_is_intact_and_the_next_run_clears_up(tmp_path):
    target = filled(tmp_path / "run")
    child = slow_writer(target)
    os.kill(child.pid, signal.SIGKILL)
    child.wait()
    assert (target / MARK).read_text() == "1" and everything(target) == [MARK, "tables", "tables/a.csv"]
    with whole_folder(target, force=True) as part:
        write_text(part / MARK, "2")
    assert everything(tmp_path) == ["run", "run/run.json"]


def test_killed_between_the_two_renames_the_earlier_run_comes_back(tmp_path):
    filled(tmp_path / "run").rename(tmp_path / ".run.old")
    with pytest.raises(OutputError, match="exists already"):
        filled(tmp_path / "run")
    assert (tmp_path / "run" / MARK).read_text() == "1"


def _write_one(folder: Path, name: str, results: "multiprocessing.Queue[str]") -> None:
    try:
        with whole_folder(folder) as part:
            write_text(part / MARK, name)
            time.sleep(0.05)
        results.put("won")
    except OutputError:
        results.put("refused")


def test_of_many_at_once_exactly_one_wins(tmp_path):
    context = multiprocessing.get_context("fork")
    results = context.Queue()
    crowd = [context.Process(target=_write_one, args=(tmp_path / "run", str(i), results)) for i in range(8)]
    for process in crowd:
        process.start()
    for process in crowd:
        process.join()
    assert sorted(results.get(timeout=5) for _ in crowd) == ["refused"] * 7 + ["won"]
    assert everything(tmp_path) == ["run", "run/run.json"]
