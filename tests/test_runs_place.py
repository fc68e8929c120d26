"""Folders appear whole or not at all, one writer at a time, and never over somebody's work."""

import multiprocessing
import os
import signal
import subprocess
import sys
import time
from pathlib import Path

import pytest

import cohortflow as cf
from cohortflow.errors import OutputError
from cohortflow.runs import place
from cohortflow.runs.place import MARK, check_free, whole_folder, write_text
from tests.comparison_cases import STUDY, rows

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


@pytest.mark.parametrize("exchange", [True, False], ids=["one step", "two renames"])
def test_the_new_folder_replaces_the_old_one_with_and_without_the_system_s_help(
    tmp_path, monkeypatch, exchange
):
    target = filled(tmp_path / "run")
    if not exchange:
        monkeypatch.setattr(place, "_exchanged", lambda part, target: False)
    with whole_folder(target, force=True) as part:
        write_text(part / MARK, "2")
    assert everything(tmp_path) == ["run", "run/run.json"] and (target / MARK).read_text() == "2"


@pytest.mark.skipif(not sys.platform.startswith("linux"), reason="other systems need two renames")
def test_folders_are_exchanged_in_one_step(tmp_path):
    a, b = filled(tmp_path / "a", "1"), filled(tmp_path / "b", "2")
    assert place._exchanged(a, b)
    assert (a / MARK).read_text() == "2" and (b / MARK).read_text() == "1"
    assert not place._exchanged(a, tmp_path / "none")


BUSY = """
import sys
from pathlib import Path
from cohortflow.runs.place import whole_folder, write_text
print("ready", flush=True)
for turn in range(10_000):
    with whole_folder(Path(sys.argv[1]), force=True) as part:
        for name in "abcdefgh":
            write_text(part / f"{name}.csv", str(turn) * 2000)
        write_text(part / "run.json", str(turn))
"""


@pytest.mark.parametrize("milliseconds", [3, 8, 21, 34, 55, 89, 144])
def test_killed_at_any_moment_one_whole_run_is_there(tmp_path, milliseconds):
    target = filled(tmp_path / "run", "0")
    child = subprocess.Popen([sys.executable, "-c", BUSY, str(target)], stdout=subprocess.PIPE, cwd=ROOT)
    assert child.stdout.readline() == b"ready\n"
    time.sleep(milliseconds / 1000)
    os.kill(child.pid, signal.SIGKILL)
    child.wait()
    turn = (target / MARK).read_text()  # there at once, before any later run has put things right
    files = {p.name for p in target.glob("*.csv")}
    if files:
        assert files == {f"{name}.csv" for name in "abcdefgh"}
        assert all((target / name).read_text() == turn * 2000 for name in files)
    with whole_folder(target, force=True) as part:
        write_text(part / MARK, "last")
    assert everything(tmp_path) == ["run", "run/run.json"]


RUN = """
import sys
import cohortflow as cf
cf.run(sys.argv[1], out=sys.argv[2], force=True, progress=lambda what: print(what, flush=True))
"""


@pytest.mark.slow
@pytest.mark.parametrize("stage", ["reading", "fitting", "projecting", "writing"])
def test_a_whole_run_killed_at_a_stage_leaves_the_earlier_run_byte_for_byte(tmp_path, stage):
    rows({"hhg": 6, "hhhhh": 9, "hahhh": 4, "1.hhgh": 3}, last=4).to_csv(tmp_path / "panel.csv", index=False)
    (tmp_path / "small.toml").write_text(STUDY)
    target = cf.run(tmp_path / "small.toml", upto="project", out=tmp_path / "run").path
    before = {p: p.read_bytes() for p in target.rglob("*") if p.is_file()}
    call = [sys.executable, "-c", RUN, str(tmp_path / "small.toml"), str(target)]
    child = subprocess.Popen(call, stdout=subprocess.PIPE, stderr=subprocess.DEVNULL, cwd=ROOT, text=True)
    for line in child.stdout:
        if line.strip() == stage:
            os.kill(child.pid, signal.SIGKILL)
            break
    else:
        pytest.fail(f"the run never said that it was {stage}")
    child.wait()
    assert {p: p.read_bytes() for p in target.rglob("*") if p.is_file()} == before
    again = cf.run(tmp_path / "small.toml", upto="fit", out=target, force=True)
    assert again.path == target and {p.name for p in tmp_path.iterdir()} == {"panel.csv", "small.toml", "run"}
