"""Plain-text tables, CSV, JSON."""

import csv
import io
import json

import pandas as pd
import pytest
from hypothesis import given
from hypothesis import strategies as st

from cohortflow.errors import CallError
from cohortflow.report.table import WIDTH, Table, csv_text, json_text, plain_text
from cohortflow.report.text import width

NAMES = st.text(min_size=1, max_size=120)
CELLS = st.lists(
    st.tuples(NAMES, st.sampled_from(["1,234", "12.3%", "no data", "", "1,234 (1,100 to 1,400)"])), max_size=6
)


@given(NAMES, CELLS)
def test_a_printed_table_never_exceeds_its_columns(head, rows):
    table = Table("A table", (head, "figure", head), tuple((n, v, v) for n, v in rows))
    assert all(width(line) <= WIDTH for line in plain_text(table).split("\n"))


def test_figures_are_right_aligned_and_long_names_wrap():
    table = Table("", ("state", "n"), (("a name of a state that is long", "7"), ("short", "1,234")))
    assert plain_text(table, columns=20).split("\n") == [
        "state              n",
        "-------------  -----",
        "a name of a        7",
        "state that is",
        "long",
        "short          1,234",
    ]


def test_a_table_too_wide_is_cut_into_blocks_that_repeat_the_first_column():
    table = Table("", ("from", *[f"state{i}" for i in range(20)]), (("weekly", *["99.9%"] * 20),))
    blocks = plain_text(table).split("\n\n")
    assert len(blocks) == 3 and all(b.split("\n")[2].startswith("weekly") for b in blocks)
    assert sum(b.count("99.9%") for b in blocks) == 20


def test_escape_sequences_do_not_reach_the_terminal():
    assert "\x1b" not in plain_text(Table("t\x1b[2J", ("a",), (("\x1b[31mred",),), note="\x1b]0;x"))


def test_rows_must_match_the_headings():
    with pytest.raises(CallError, match='Row 2 of the table "t" has 1 cells for 2 headings'):
        Table("t", ("a", "b"), (("1", "2"), ("1",)))


def test_csv_keeps_full_precision_and_neutralises_text():
    frame = pd.DataFrame({"state": ["=A1", "weekly", "@x", None], "p": [0.1 + 0.2, 1e-300, float("inf"), float("nan")],
                          "n": [-1, 2, 3, 4], "ok": [True, False, True, True]})  # fmt: skip
    rows = list(csv.reader(io.StringIO(csv_text(frame))))
    assert rows == [
        ["state", "p", "n", "ok"], ["'=A1", "0.30000000000000004", "-1", "true"], ["weekly", "1e-300", "2", "false"],
        ["'@x", "inf", "3", "true"], ["", "", "4", "true"],
    ]  # fmt: skip


@given(st.lists(st.floats(allow_nan=False), min_size=1, max_size=5))
def test_csv_floats_come_back_as_they_were(values):
    back = csv_text(pd.DataFrame({"x": values})).split("\n")[1:-1]
    assert [float(b) for b in back] == values


def test_csv_of_an_empty_frame_has_its_header():
    assert csv_text(pd.DataFrame({"a": [], "b": []})) == "a,b\n"


def test_json_has_no_nan_and_says_what_it_is():
    told = json.loads(json_text(pd.DataFrame({"x": [float("nan"), float("inf")]}), kind="probe"))
    assert told == {"kind": "probe", "format_version": 1, "rows": [{"x": None}, {"x": "inf"}]}


def test_json_of_a_record():
    from cohortflow import Chain, States

    told = json.loads(json_text(Chain(States(["a", "b"]), [[0.5, 0.5], [0, 1]]), seed=7))
    assert told["kind"] == "chain" and told["seed"] == 7 and len(told["rows"]) == 4
