"""At least 10,000 malformed files: each is read with a balanced accounting, or refused by name; nothing hangs.

Reading costs about a tenth of a second whatever the size, so each file is looked at and loaded alone, and those that
load are then read many at a time, as the files of one extract; a refused batch is halved until the refusal has its
file. FUZZ_FILES changes the number.
"""

from __future__ import annotations

import gzip
import os
import signal
import tempfile
from collections import Counter
from contextlib import contextmanager
from dataclasses import replace
from datetime import date
from pathlib import Path
from random import Random

import pandas as pd
import pytest
from hypothesis import HealthCheck, Phase, given, settings
from hypothesis import strategies as st

import cohortflow as cf
from cohortflow.errors import CohortflowError
from cohortflow.history.engine import opened
from cohortflow.history.load import load
from cohortflow.history.sources import file_source
from cohortflow.runs.folder import run
from cohortflow.study import Condition, EventSpec, InputSpec, StateRule, Study
from tests.malformed import spoil, table

FILES = int(os.environ.get("FUZZ_FILES", "10000"))
TOGETHER = 125
PATIENCE = 180  # seconds a batch may take on a loaded machine
COLUMNS = ("who", "at", "what")
STEADY = "".join(f"m{i},2026-0{1 + i % 5}-1{i % 10},in\n" for i in range(3000))
LEAVERS = "".join(f"z{i},2026-01-03,in\nz{i},2026-03-03,out\n" for i in range(50))
BALLAST = STEADY + LEAVERS  # good rows, and exits, so that no batch is refused for want of them
SPEC = {"layout": "events", "customer": "who", "time": "at", "event": "what"}
TOLD: Counter[str] = Counter()


def study_of(files: tuple[str, ...], folder: Path, **more) -> Study:
    left = Condition("last_event", ("out",), ("in", "out"))
    rules = (StateRule("left", "exit", ((left,),)), StateRule("here"))
    return Study(
        cf.States(["left", "here"], exits=["left"]), rules=rules, as_of=date(2026, 6, 30), path=folder / "study.toml",
        input=InputSpec(files=files, **{**SPEC, **more}), events=EventSpec(others="reject"),
    )  # fmt: skip


@contextmanager
def in_time():
    """A hang becomes a failure."""

    def too_long(number, frame):
        raise TimeoutError(f"reading took more than {PATIENCE} s")

    before = signal.signal(signal.SIGALRM, too_long)
    signal.alarm(PATIENCE)
    try:
        yield
    finally:
        signal.alarm(0)
        signal.signal(signal.SIGALRM, before)


def balanced(accounting: pd.DataFrame) -> None:
    """read = used + rejected + duplicate + set aside, for each file and in total."""
    for file, mine in accounting.groupby("file"):
        rows = mine.groupby("outcome")["rows"].sum()
        assert rows["read"] == rows.drop("read").sum(), file
    whole = accounting[accounting["outcome"] == "read"].set_index("file")["rows"]
    assert whole["all"] == whole.drop("all").sum()


def plain_records(data: bytes) -> int | None:
    """Records under the header, where every reader must agree on them: lines of plain text without quotes."""
    if not data.isascii() or any(
        sign in data for sign in (b'"', b"\r", b"\x00", b"\x0b", b"\x0c", b"\x1a", b"\x1f\x8b")
    ):
        return None
    lines = [line for line in data.split(b"\n") if line]
    return len(lines) - 1 if all(len(line) < 10_000 for line in lines) else None


def stage_of_refusal(path: Path, engine, study: Study) -> str:
    """Where a file is refused: at its header, on loading, or "" when it loads."""
    try:
        source = file_source(engine, path.name, path, 0, fingerprint=False)
        for name in COLUMNS:
            source.column(name, name)
    except CohortflowError as error:
        assert str(error).strip()
        return "refused at the header"
    try:
        load(engine, study, [source], lambda stage, share: None)
    except CohortflowError as error:
        assert path.name in str(error)
        return "refused on loading"
    finally:
        engine.drop("rows", "bad_0", "scan_0")
    return ""


def read_all(folder: Path, names: list[str]) -> None:
    """Read files as one extract; on a refusal halve it until single files are refused by name."""
    try:
        with in_time():
            history = cf.read(study_of(("ballast.csv", *names), folder), threads=1)
    except CohortflowError as error:
        assert str(error).strip()
        if len(names) == 1:
            TOLD["refused"] += 1
            return
        half = len(names) // 2
        read_all(folder, names[:half])
        read_all(folder, names[half:])
        return
    TOLD["read"] += len(names)
    accounting = history.check.to_frame()
    balanced(accounting)
    read = accounting[accounting["outcome"] == "read"].set_index("file")["rows"]
    for name in names:
        known = plain_records((folder / name).read_bytes())
        if known is not None:
            TOLD["counted"] += 1
            assert read[name] == known, (folder / name).read_bytes()
    lines = history.rejected["line"]
    assert len(lines) == history.check.rows("rejected") + history.check.rows("duplicate") + sum(
        n for reason, n in history.check.reasons().items() if reason == "after_exit"
    )


@settings(
    max_examples=max(1, -(-FILES // TOGETHER)),
    phases=(Phase.explicit, Phase.generate),  # shrinking a batch of files takes minutes and tells little
    deadline=None, database=None,
    suppress_health_check=[HealthCheck.too_slow, HealthCheck.data_too_large],
)  # fmt: skip
@given(st.randoms(use_true_random=False), st.binary(max_size=200))
def spoilt_files(rng, salt):
    rng = Random(rng.getrandbits(64))
    with tempfile.TemporaryDirectory() as home:
        folder, names = Path(home), []
        (folder / "ballast.csv").write_text("who,at,what\n" + BALLAST)
        study = study_of((), folder)
        with opened(threads=1) as engine, in_time():
            for k in range(TOGETHER):
                data = spoil(table(rng, rng.choice((1, 4, 9))), rng)
                if k % 25 == 0:  # bytes that hypothesis chose
                    i = rng.randint(0, len(data))
                    data = data[:i] + salt + data[i:] if k else salt
                path = folder / f"f{k}.csv"
                path.write_bytes(data)
                TOLD["files"] += 1
                if stage := stage_of_refusal(path, engine, study):
                    TOLD[stage] += 1
                else:
                    names.append(path.name)
        if names:
            read_all(folder, names)


def test_ten_thousand_malformed_files_are_read_or_refused(capsys):
    TOLD.clear()
    spoilt_files()
    with capsys.disabled():
        print(f"\nmalformed files: {dict(TOLD)}")
    assert TOLD["files"] >= FILES
    assert sum(n for told, n in TOLD.items() if told.startswith(("read", "refused"))) == TOLD["files"]
    assert TOLD["read"] > TOLD["files"] / 5 and TOLD["counted"] > 0


@settings(max_examples=30, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(st.integers(0, 2**32), st.sampled_from(["events", "history"]))
def test_single_files_through_check_in_two_layouts(seed, layout):
    """As `cohortflow check` does it, with values kept; a history has states where the log has events."""
    rng = Random(seed)
    with tempfile.TemporaryDirectory() as home:
        folder = Path(home)
        (folder / "f.csv").write_bytes(spoil(table(rng, 12), rng))
        more = {} if layout == "events" else {"layout": "history", "event": None, "state": "what"}
        study = study_of(("f.csv",), folder, **more)
        if layout == "history":
            study = replace(study, states=cf.States(["out", "in"], exits=["out"]), rules=())
        try:
            with in_time():
                done = run(study, upto="check", keep_values=True)
        except CohortflowError as error:
            assert str(error).strip()
        else:
            balanced(done.tables["accounting"])


CELLS = st.one_of(
    st.none(), st.text(max_size=8), st.integers(-(2**70), 2**70), st.floats(), st.booleans(), st.binary(max_size=4),
    st.dates(), st.datetimes(), st.sampled_from(["2026-01-05", "2026-02-06", "in", "out", "a", "b"]), st.just(pd.NaT),
)  # fmt: skip
FRAMES = st.lists(st.tuples(CELLS, CELLS, CELLS), max_size=8).map(
    lambda r: pd.DataFrame(r, columns=list(COLUMNS))
)


@settings(max_examples=40, deadline=None, suppress_health_check=[HealthCheck.too_slow])
@given(FRAMES, st.booleans())
def test_frames_of_anything_are_read_or_refused(frame, as_objects):
    frame = frame.astype(object) if as_objects else frame
    before = frame.copy()
    rules = [
        {"name": "left", "role": "exit", "when": {"last_event": ["out"], "among": ["in", "out"]}},
        {"name": "here"},
    ]
    options = {
        "customer": "who",
        "time": "at",
        "event": "what",
        "events": {"others": "reject"},
        "as_of": "2026-06-30",
    }
    try:
        with in_time():
            history = cf.read_events(frame, rules, **options)
    except CohortflowError as error:
        assert str(error).strip()
    else:
        balanced(history.check.to_frame())
        assert history.check.rows("read") == len(frame)
    pd.testing.assert_frame_equal(frame, before)


def test_a_header_of_very_many_columns_is_refused_at_once(tmp_path):
    """Found by the fuzz: 140,000 columns took most of a minute to look at."""
    (tmp_path / "f.csv").write_text("who,at,what" + "," * 140_000 + "\na,2026-01-02,in\n")
    with pytest.raises(CohortflowError, match="the header line has 140,003 columns; at most 10,000 are read"):
        cf.read(study_of(("f.csv",), tmp_path))


@pytest.mark.parametrize("lead", [b"\n", b"\n" * 60, b"\r\n\r\n"])
def test_blank_lines_before_the_header_are_no_header(tmp_path, lead):
    """Found by the fuzz: the header was taken for a row (or the engine's own error came out)."""
    (tmp_path / "ballast.csv").write_text("who,at,what\n" + BALLAST)
    end = b"\r\n" if b"\r" in lead else b"\n"
    (tmp_path / "f.csv").write_bytes(
        lead + end.join((b"who,at,what", b"c,2026-03-14,in", b"d,2026-99-14,in", b""))
    )
    history = cf.read(study_of(("ballast.csv", "f.csv"), tmp_path))
    accounting = history.check.to_frame().query("file == 'f.csv'").set_index("outcome")["rows"]
    assert accounting["read"] == 2 and accounting["used"] == 1
    assert history.rejected["line"].tolist() == [lead.count(b"\n") + 3]


def test_a_packed_file_with_a_wrong_checksum_is_refused_where_lines_are_needed(tmp_path):
    """Found by the fuzz: the engine unpacks it without looking; looking for a line met the wrong checksum."""
    long = (
        "who,at,what\n" + STEADY * 8 + LEAVERS + "d,2026-99-14,in\nshort\n"
    )  # longer than what is looked at first
    packed = bytearray(gzip.compress(long.encode(), mtime=0))
    packed[-6] ^= 255
    (tmp_path / "f.csv.gz").write_bytes(bytes(packed))
    with pytest.raises(CohortflowError, match="f.csv.gz: the packed file is damaged"):
        cf.read(study_of(("f.csv.gz",), tmp_path))


def test_the_engines_own_refusal_while_looking_for_day_and_month_is_one_of_ours(tmp_path):
    """Found by the fuzz: mixed line ends around an unclosed field, met before the rows are loaded."""
    (tmp_path / "f.csv").write_bytes(
        b'who,at,what\r\na,03/04/2026,in\r\nb,"03/05/2026,in\r\r\n\nc,04/04/2026,in\n'
    )
    with pytest.raises(CohortflowError):
        cf.read(study_of(("f.csv",), tmp_path))


def test_the_balance_check_sees_a_lost_row():
    rows = [("read", "", "f", 3), ("used", "", "f", 2), ("read", "", "all", 3), ("used", "", "all", 2)]
    with pytest.raises(AssertionError):
        balanced(pd.DataFrame(rows, columns=["outcome", "reason", "file", "rows"]))
    assert plain_records(b"a,b\n1,2\n\n3,4\n") == 2 and plain_records(b'a,b\n"1",2\n') is None
