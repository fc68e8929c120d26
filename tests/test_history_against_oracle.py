"""The history room against the oracle: random logs, both layouts, and the laws of counting."""

from __future__ import annotations

import os
import tempfile
from dataclasses import replace
from datetime import date
from pathlib import Path
from unittest.mock import patch

import pandas as pd
from hypothesis import HealthCheck, given, reject, settings
from hypothesis import strategies as st

import cohortflow as cf
from cohortflow.errors import InputError, NotIdentified
from cohortflow.states import States
from cohortflow.study import Condition, InputSpec, StateRule, Study
from cohortflow.tally import ENDS, KEYS, VALUES
from tests.oracle import PLACEHOLDERS, tell
from tests.random_logs import FIRST_DAY, histories, logs, studies, write

COMPARED = ("moves", "starts", "memos", "contexts", "ages", "steps", "amounts", "paths")
SETTINGS = settings(
    max_examples=int(os.environ.get("ORACLE_EXAMPLES", "20")),
    deadline=None,
    suppress_health_check=[
        HealthCheck.too_slow,
        HealthCheck.data_too_large,
        HealthCheck.large_base_example,
        HealthCheck.filter_too_much,
    ],
)


@st.composite
def cases(draw):
    study = draw(studies())
    return study, draw(logs(study))


def read(study, rows):
    with tempfile.TemporaryDirectory() as folder:
        write(rows, Path(folder) / "log.csv")
        try:
            history = cf.read(replace(study, path=Path(folder) / "study.toml"))
        except (NotIdentified, InputError) as refusal:
            assert is_right(str(refusal), study, rows), refusal
            reject()
        return history, cf.count(history)


def is_right(refusal, study, rows):
    """Whether the oracle sees the reason for which an extract was refused."""
    told = tell(study, rows)
    if refusal.startswith("No customer ever reached an exit"):
        return not any(state in study.states.exits for _, _, state, _ in told.labels)
    if refusal.startswith("No row of the"):
        return ("used", "") not in told.accounting()
    blank = sum(row["who"].strip().lower() in PLACEHOLDERS for row in rows)
    return refusal.startswith('The column "who" is blank') and blank > 0.05 * len(rows)


def accounting(history):
    frame = history.check.to_frame()
    frame = frame[(frame["file"] != "all") & (frame["outcome"] != "read")]
    sums = frame.groupby(["outcome", "reason"], dropna=False)["rows"].sum()
    return {(o, r or ""): n for (o, r), n in sums.items() if n}


def by_value(table, segments):
    """A table sorted by its keys, segments by value instead of code."""
    named = table.assign(segment=[" / ".join(segments[code]) for code in table["segment"]])
    return named.sort_values(list(named.columns)).reset_index(drop=True)


def same_tables(tally, told):
    expected = told.tables()
    for name in COMPARED:
        if name not in tally.meta.tables:
            assert name == "amounts"  # no column of money
            continue
        columns = [*KEYS[name], *VALUES[name]]
        found = tally.table(name)[columns]
        written = expected[name][columns].astype(found.dtypes.to_dict())
        found, written = by_value(found, tally.meta.segments), by_value(written, told.segments)
        pd.testing.assert_frame_equal(found, written, obj=name)


@SETTINGS
@given(cases())
def test_random_logs_give_the_same_tables_and_accounting(case):
    study, rows = case
    told = tell(study, rows)
    history, tally = read(study, rows)
    assert accounting(history) == told.accounting()
    tally.check_conservation()
    same_tables(tally, told)


@SETTINGS
@given(histories())
def test_random_state_histories_give_the_same_tables_and_accounting(case):
    study, rows = case
    told = tell(study, rows)
    history, tally = read(study, rows)
    assert accounting(history) == told.accounting()
    tally.check_conservation()
    same_tables(tally, told)


@SETTINGS
@given(cases(), st.integers(0, 2**16))
def test_any_split_of_the_customers_adds_up_to_the_same_tally(case, cut):
    study, rows = case
    log_start = study.input.log_start or FIRST_DAY  # a default would be taken from each part by itself
    study = replace(study, input=replace(study.input, log_start=log_start))
    names = sorted({row["who"] for row in rows})
    left = {name for place, name in enumerate(names) if cut >> place & 1}
    parts = [[r for r in rows if (r["who"] in left) == side] for side in (True, False)]
    whole = read(study, rows)[1]
    if all(parts):
        added = read(study, parts[0])[1] + read(study, parts[1])[1]
        assert added.meta.customers == whole.meta.customers
        for name in KEYS:
            pd.testing.assert_frame_equal(added.tables[name], whole.tables[name], obj=name)


@SETTINGS
@given(cases())
def test_every_row_read_has_exactly_one_outcome(case):
    study, rows = case
    history, _ = read(study, rows)
    frame = history.check.to_frame()
    for _, lines in frame.groupby("file"):
        by_outcome = lines.groupby("outcome")["rows"].sum()
        assert by_outcome["read"] == by_outcome.drop("read").sum() == len(rows)


@SETTINGS
@given(cases())
def test_blocks_of_two_customers_give_the_same_tally(case):
    """However the customers are cut into blocks and parts inside, the counts are those of one block."""
    study, rows = case
    whole = read(study, rows)[1]
    small = patch("cohortflow.history.sweep.block_size", lambda periods: 2)
    parts = patch("cohortflow.history.fetch.ROWS_AT_ONCE", 20)
    with small, parts:
        cut = read(study, rows)[1]
    for name in KEYS:
        pd.testing.assert_frame_equal(cut.tables[name], whole.tables[name], obj=name)


@SETTINGS
@given(cases(), st.sampled_from(["log.csv.gz", "log.tsv", "log.parquet"]))
def test_other_files_with_the_same_rows_give_the_same_tally(case, name):
    study, rows = case
    csv = read(study, rows)
    frame = pd.DataFrame(rows)
    with tempfile.TemporaryDirectory() as folder:
        path = Path(folder) / name
        if name.endswith(".parquet"):
            frame.to_parquet(path)
        else:
            frame.to_csv(path, index=False, sep="\t" if name.endswith(".tsv") else ",")
        spec = replace(study.input, files=(name,))
        history = cf.read(replace(study, input=spec, path=Path(folder) / "study.toml"))
    assert history.check.reasons() == csv[0].check.reasons()
    for table in KEYS:
        pd.testing.assert_frame_equal(cf.count(history).tables[table], csv[1].tables[table], obj=table)


@SETTINGS
@given(cases())
def test_a_frame_with_typed_columns_gives_the_same_tally(case):
    """Instants as datetime64, money as numbers, ids as text: what a notebook holds."""
    study, rows = case
    rows = [row for row in rows if row["at"] not in ("", "soon")]
    spec = study.input
    whole = read(study, rows)[1]
    frame = pd.DataFrame(rows)
    frame["money"] = pd.to_numeric(frame["money"])
    if len(rows[0]["at"]) > 10:  # with a clock; bare days stay text, a datetime64 would carry one
        frame["at"] = pd.to_datetime(frame["at"])
    history = cf.read_events(
        frame,
        study.rules,
        as_of=study.as_of,
        calendar=study.calendar,
        customer="who",
        time="at",
        event="what",
        joins=spec.joins,
        returns=spec.returns,
        log_start=spec.log_start,
        impossible=study.states.impossible,
        events={"map": dict(study.events.map), "ignore": study.events.ignore, "others": study.events.others},
        amount="money",
        valid_until="until",
        segments=spec.segments,
        event_id=spec.event_id,
        loaded_at=spec.loaded_at,
        tie_order=spec.tie_order,
    )
    for table in KEYS:
        pd.testing.assert_frame_equal(cf.count(history).tables[table], whole.tables[table], obj=table)


def test_instants_with_offsets_fall_into_local_months():
    """London is one hour ahead of UTC from 30 March to 26 October 2025, worked by hand:

    a  2025-03-31 23:30 UTC is 00:30 on 1 April in London: April;  b  2025-10-31 23:30 UTC: October
    c  2025-05-31 20:30 in New York (-04:00) is 00:30 UTC, 01:30 in London: June
    Leaving: 2025-07-31 22:59:59 UTC is 23:59:59 in London: July (a); 23:00:00 UTC is 1 August (c).
    """
    rules = (
        StateRule("gone", "exit", ((Condition("last_event", ("stop",), ("join", "stop")),),)),
        StateRule("here"),
    )
    spec = InputSpec(
        files=("log.csv",),
        customer="who",
        time="at",
        event="what",
        joins=("join",),
        timezone="Europe/London",
        log_start=date(2025, 1, 1),
    )
    study = Study(States(["gone", "here"], exits=["gone"]), as_of=date(2025, 11, 30), rules=rules, input=spec)
    rows = [
        {"who": who, "at": at, "what": what}
        for who, at, what in [
            ("a", "2025-03-31T23:30:00+00:00", "join"),
            ("b", "2025-10-31T23:30:00Z", "join"),
            ("c", "2025-05-31T20:30:00-04:00", "join"),
            ("a", "2025-07-31T22:59:59Z", "stop"),
            ("c", "2025-07-31T23:00:00Z", "stop"),
        ]
    ]
    told = tell(study, rows)
    _, tally = read(study, rows)
    same_tables(tally, told)
    label = tally.calendar.label
    starts, moves = tally.table("starts"), tally.table("moves")
    assert [label(t) for t in starts["period"].sort_values()] == ["2025-04", "2025-06", "2025-10"]
    exits = moves[moves["end"] == ENDS.index("exit")]
    assert [label(t) for t in exits["period"].sort_values()] == ["2025-07", "2025-08"]


def test_parts_without_customers_are_passed_over():
    """One customer with more rows than a part holds: the other parts are empty."""
    rules = (
        StateRule("gone", "exit", ((Condition("silent_for", ("buy",), k=1),),)),
        StateRule("here"),
    )
    spec = InputSpec(files=("log.csv",), customer="who", time="at", event="what", joins=("buy",))
    study = Study(States(["gone", "here"], exits=["gone"]), as_of=date(2025, 3, 31), rules=rules, input=spec)
    rows = [{"who": "a", "at": f"2025-01-{day:02d}", "what": "buy"} for day in range(1, 29)]
    with patch("cohortflow.history.fetch.ROWS_AT_ONCE", 4):
        tally = read(study, rows)[1]
    assert tally.counts().tolist() == [[0, 0], [1, 0]]  # January here, February gone
