"""The counting statement against the history room itself, on SQLite and the embedded engine."""

import sqlite3

import duckdb
import pandas as pd
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

import cohortflow as cf
from cohortflow.errors import CallError, CohortflowError
from cohortflow.history.warehouse import counting_sql

STATES = cf.States(["fresh", "it's steady", "left"], exits=["left"], entries=["fresh"],
                   impossible=[("it's steady", "fresh")])  # fmt: skip
HOSTILE = 'a"; drop table x; --'


def on_sqlite(rows: pd.DataFrame, sql: str, table: str) -> pd.DataFrame:
    with sqlite3.connect(":memory:") as connection:
        rows.to_sql(table, connection, index=False)
        return pd.read_sql_query(sql, connection)


def on_the_embedded_engine(rows: pd.DataFrame, sql: str, table: str) -> pd.DataFrame:
    with duckdb.connect() as connection:
        quoted = table.replace('"', '""')
        connection.register("given", rows)
        connection.execute(f'CREATE TABLE "{quoted}" AS SELECT * FROM given')
        return connection.execute(sql).df()


ENGINES = {"sqlite": on_sqlite, "duckdb": on_the_embedded_engine}


@pytest.mark.parametrize("dialect", ENGINES)
def test_six_rows_counted_on_paper(dialect):
    rows = pd.DataFrame(
        [("a", 1, "fresh"), ("a", 2, "it's steady"), ("b", 1, "fresh"), ("b", 3, "it's steady"), ("c", 2, "fresh"),
         ("c", 3, "left")],
        columns=["customer", "period", "state"],
    )  # fmt: skip
    sql = counting_sql(STATES, table=HOSTILE, on_absent="left", dialect=dialect)
    # a moves fresh -> steady in 1 and is gone after 2, while 3 has rows: steady -> left in 2;
    # b skips period 2, so no one-period move; c leaves in 2
    expected = [[1, "fresh", "it's steady", 1], [2, "fresh", "left", 1], [2, "it's steady", "left", 1]]
    assert ENGINES[dialect](rows, sql, HOSTILE).to_numpy().tolist() == expected


histories = st.lists(
    st.lists(st.sampled_from(["", "fresh", "it's steady", "left"]), min_size=1, max_size=6),
    min_size=1,
    max_size=8,
)


@settings(max_examples=40, deadline=None)
@given(histories, st.booleans())
def test_the_statement_counts_what_the_history_room_counts(paths, absent):
    rows = pd.DataFrame(
        [(f"c{i}", t, s) for i, path in enumerate(paths) for t, s in enumerate(path, start=1) if s],
        columns=["customer", "period", "state"],
    )
    on_absent = "left" if absent else None
    sql = counting_sql(STATES, table="t", on_absent=on_absent, dialect="sqlite")
    counted = on_sqlite(rows, sql, "t") if len(rows) else pd.DataFrame()
    try:
        tally = cf.count(cf.read_history(rows, STATES, on_absent=on_absent))
    except CohortflowError:
        return  # empty, or without any exit: refused for what it is
    expected = tally.to_frame()[["period", "from", "to", "n"]].assign(
        period=lambda f: f["period"].astype(int)
    )
    assert sorted(counted.to_numpy().tolist()) == sorted(expected.to_numpy().tolist())
    if len(counted):
        assert (cf.read_counts(counted, STATES).counts() == tally.counts()).all()


def test_refusals_say_what_is_known():
    with pytest.raises(CallError, match='Unknown dialect "mysequel"'):
        counting_sql(STATES, table="t", dialect="mysequel")
    with pytest.raises(CallError, match='on_absent must be an exit, got "fresh"'):
        counting_sql(STATES, table="t", on_absent="fresh")
    with pytest.raises(CallError, match="cannot be the name of a table"):
        counting_sql(STATES, table="t", customer="")
