"""Wide tables and spells, worked by hand; Arrow streams and own calendars."""

from datetime import date

import numpy as np
import pandas as pd
import polars as pl
import pytest

import cohortflow as cf
from cohortflow.errors import CallError, InputError, NotIdentified
from cohortflow.history import read_spells, read_wide
from cohortflow.tally import KINDS, MEMOS

STATES = cf.States(["left", "paused", "on"], exits=["left"], away=["paused"])
WIDE = pd.DataFrame(
    {
        "customer": ["a", "b", "c", "d"],
        "2026-01": ["on", "on", None, None],
        "2026-02": ["paused", "left", "on", None],
        "2026-03": ["on", None, "on", "left"],
    }
)


def reasons(history):
    frame = history.check.to_frame()
    frame = frame[frame["file"] == "all"]
    return {(o, r): int(n) for o, r, n in zip(frame["outcome"], frame["reason"], frame["rows"], strict=True)}


def test_wide_cells_are_rows_and_blank_ones_are_set_aside():
    history = read_wide(WIDE, STATES)
    # 4 customers x 3 months = 12 cells; blank: b in March, c in January, d in January and February.
    assert reasons(history) == {("read", ""): 12, ("used", ""): 8, ("set_aside", "blank_cell"): 4}
    # a: on-paused, paused-on; b: on-left; c joins in February: on-on; d is first seen having left: a memo.
    assert history.tally.counts().tolist() == [[0, 0, 0], [0, 0, 1], [1, 1, 1]]
    memos = history.tally.tables["memos"]
    assert memos[["kind", "n"]].to_numpy().tolist() == [[MEMOS.index("joined_and_left"), 1]]


def test_wide_is_the_history_it_unfolds_to():
    long = WIDE.melt("customer", var_name="period", value_name="state").dropna()
    one, two = read_wide(WIDE, STATES), cf.read_history(long, STATES)
    for name, table in one.tally.tables.items():
        pd.testing.assert_frame_equal(table, two.tally.tables[name])


def test_wide_lines_are_those_of_the_file(tmp_path):
    path = tmp_path / "wide.csv"
    path.write_text("customer,2026-01,2026-02\na,on,left\nb,on,gone\nc,on,left\n")
    with pytest.raises(InputError, match='states that the study does not name: "gone" 1 times'):
        read_wide(path, STATES)
    path.write_text(
        "customer,2026-01,2026-02\n"
        + "a,on,left\n" * 2
        + ",on,on\n"
        + "".join(f"b{i},on,left\n" for i in range(30))
    )
    rejected = read_wide(path, STATES).rejected
    # Two cells of line 4 have no id; line 2 is said again in line 3 (the last of equal rows counts).
    assert rejected["line"].tolist() == [2, 2, 4, 4]
    assert rejected["reason"].tolist() == ["identical", "identical", "id_missing", "id_missing"]


def test_wide_without_period_columns_is_refused():
    with pytest.raises(InputError, match="no column is named for a month"):
        read_wide(pd.DataFrame({"customer": ["a"], "jan": ["on"]}), STATES)


SPELLS = pd.DataFrame(
    [
        ("a", "2026-01-05", "2026-02-10", "on", "left"),
        ("b", "2026-01-31", "2026-02-28", "on", ""),
        ("b", "2026-03-01", "", "paused", ""),
        ("c", "2026-02-03", "2026-02-20", "on", "left"),
        ("d", "2026-01-01", "9999-12-31", "on", ""),
        ("e", "2026-02-10", "2026-02-01", "on", ""),
        ("f", "2026-02-10", "soon", "on", ""),
    ],
    columns=["customer", "start", "end", "state", "why"],
)


def test_spells_by_hand():
    history = read_spells(SPELLS, STATES, as_of="2026-03-31", end_reason="why", log_start="2026-01-01")
    # a: on at the end of January, left in February. b: on in January and February, paused in March.
    # c joins and leaves within February: a memo. d: on throughout. e ends before it starts, f has no last day.
    assert history.tally.counts().tolist() == [[0, 0, 0], [0, 0, 0], [1, 1, 3]]
    assert reasons(history) == {
        ("read", ""): 7,
        ("used", ""): 5,
        ("rejected", "end_before_start"): 1,
        ("rejected", "end_unreadable"): 1,
    }
    starts = history.tally.tables["starts"].groupby(["period", "kind"])["n"].sum()
    january = cf.Calendar("month").parse("2026-01")
    assert starts.to_dict() == {(january, KINDS.index("joined")): 3}
    assert history.tally.tables["memos"]["n"].tolist() == [1]
    assert history.tally.mix().to_dict() == {"left": 0, "paused": 1, "on": 1}


def test_spells_that_begin_the_extract_are_of_unknown_history_without_log_start():
    tally = read_spells(SPELLS, STATES, as_of="2026-03-31", end_reason="why").tally
    assert set(tally.tables["starts"]["kind"]) == {KINDS.index("unknown")}


def test_spells_end_on_the_last_day_or_on_the_day_after():
    rows = pd.DataFrame(
        {"customer": ["a"], "start": ["2026-01-01"], "end": ["2026-03-01"], "state": ["on"], "why": ["left"]}
    )
    ends = {}
    for end_is in ("last_day", "day_after"):
        tally = read_spells(rows, STATES, as_of="2026-04-30", end_reason="why", end_is=end_is).tally
        moves = tally.tables["moves"]
        ends[end_is] = tally.calendar.label(moves.loc[moves["state"] == 0, "period"].item())
    # The day after the last day is 2 March, or 1 March: the exit is reached in March either way ...
    assert ends == {"last_day": "2026-03", "day_after": "2026-03"}
    rows["end"] = "2026-02-28"  # ... but a last day at the end of February is still live in February
    by = {
        e: int(read_spells(rows, STATES, as_of="2026-04-30", end_reason="why", end_is=e).tally.counts()[2, 2])
        for e in ("last_day", "day_after")
    }
    assert by == {"last_day": 1, "day_after": 0}


def test_overlapping_spells_are_noted_and_the_later_one_counts():
    rows = pd.DataFrame(
        {
            "customer": ["a", "a", "b"],
            "start": ["2026-01-01", "2026-02-15", "2026-01-01"],
            "end": ["2026-03-31", "", "2026-01-20"],
            "state": ["on", "paused", "on"],
            "why": ["", "", "left"],
        }
    )
    history = read_spells(rows, STATES, as_of="2026-03-31", end_reason="why", log_start="2026-01-01")
    assert history.check.finding("overlapping_spells").rows == 2  # February and March of a
    assert history.tally.counts().tolist() == [[0, 0, 0], [0, 1, 0], [0, 1, 0]]


def test_spells_without_as_of_are_refused():
    with pytest.raises(CallError, match="Spells need as_of"):
        read_spells(SPELLS, STATES, end_reason="why")


def test_spells_after_the_window_are_refused():
    with pytest.raises(InputError, match="there is nothing to count"):
        read_spells(SPELLS, STATES, as_of="2025-12-31", end_reason="why")


def test_spells_without_any_exit_are_refused():
    with pytest.raises(NotIdentified, match="No customer ever reached an exit"):
        read_spells(SPELLS.drop(columns="why"), STATES, as_of="2026-03-31")


@pytest.mark.parametrize("make", [lambda f: f, pl.from_pandas, lambda f: pl.from_pandas(f).to_arrow()])
def test_frames_of_other_libraries_give_the_same_tally(make):
    long = WIDE.melt("customer", var_name="period", value_name="state").dropna()
    table = make(long.reset_index(drop=True))
    assert cf.count(cf.read_history(table, STATES)).counts().tolist() == [[0, 0, 0], [0, 0, 1], [1, 1, 1]]


def test_a_stream_that_can_be_read_once_is_read():
    import pyarrow as pa

    long = WIDE.melt("customer", var_name="period", value_name="state").dropna().reset_index(drop=True)
    stream = pa.RecordBatchReader.from_batches(
        pa.Table.from_pandas(long).schema, pa.Table.from_pandas(long).to_batches()
    )
    assert cf.count(cf.read_history(stream, STATES)).counts().tolist() == [[0, 0, 0], [0, 0, 1], [1, 1, 1]]


def test_an_own_calendar_of_4_4_5_weeks():
    own = cf.Calendar(
        "own",
        own=(
            ("P1", date(2026, 1, 5), date(2026, 2, 1)),
            ("P2", date(2026, 2, 2), date(2026, 3, 1)),
            ("P3", date(2026, 3, 2), date(2026, 4, 5)),
        ),
    )
    log = pd.DataFrame(
        {
            "customer": ["a", "a", "b", "b"],
            "time": ["2026-02-01 23:59", "2026-02-02 00:00", "2026-01-10 09:00", "2026-03-02 10:00"],
            "event": ["buy", "buy", "buy", "stop"],
        }
    )
    rules = [{"name": "left", "role": "exit", "when": {"last_event": ["stop"]}}, {"name": "on"}]
    tally = cf.read_events(log, rules, as_of="2026-04-05", calendar=own, returns=["buy"]).tally
    # a: P1-P2, P2-P3 on; b: P1-P2 on, leaves in P3.
    assert tally.counts().tolist() == [[0, 0], [1, 3]]
    assert np.array_equal(tally.origins(), [0, 1])
