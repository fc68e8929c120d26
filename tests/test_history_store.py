"""The Tally on disk, the balance of the accounting, and what bare counts and calls refuse."""

import numpy as np
import pandas as pd
import pytest

import cohortflow as cf
from cohortflow.errors import CallError, DefinitionsDiffer, InputError
from cohortflow.history import load_tally, save_tally
from cohortflow.history.adder import added_up
from cohortflow.history.check import balanced, check_balance
from cohortflow.history.lines import LineFinder
from cohortflow.history.paths import PathSample
from cohortflow.history.sweep import leading_zeros
from cohortflow.tally import KEYS

STATES = cf.States(["fresh", "steady", "left"], exits=["left"], entries=["fresh"])
ROWS = pd.DataFrame(
    {
        "customer": ["a", "a", "a", "b", "b", "c"],
        "period": [1, 2, 3, 1, 2, 2],
        "state": ["fresh", "steady", "left", "fresh", "steady", "fresh"],
        "town": ["x", "x", "x", "y", "y", "x"],
        "w": [1.5, 1.5, 1.5, 1.0, 1.0, 2.0],
    }
)


def test_a_saved_tally_comes_back_and_its_bytes_repeat(tmp_path):
    tally = cf.read_history(ROWS, STATES, segments=["town"], weight="w").tally
    for name in ("one", "two"):
        save_tally(tally, tmp_path / name)
    again = load_tally(tmp_path / "one")
    assert again.meta == tally.meta
    for name in KEYS:
        pd.testing.assert_frame_equal(again.tables[name], tally.tables[name])
    for path in sorted((tmp_path / "one").iterdir()):
        assert path.read_bytes() == (tmp_path / "two" / path.name).read_bytes(), path.name


def test_weights_are_those_of_the_first_row_and_scaled():
    tally = cf.read_history(ROWS, STATES, weight="w").tally
    assert tally.counts(weighted=True)[0].tolist() == [0.0, 2.5, 0.0]  # a 1.5 + b 1.0 from fresh to steady
    assert tally.meta.weighted and tally.meta.weight_scale == 1_000_000


def test_damaged_counts_are_refused(tmp_path):
    tally = cf.read_history(ROWS, STATES).tally
    save_tally(tally, tmp_path)
    meta = tmp_path / "meta.json"
    text = meta.read_text()
    meta.write_text(text.replace('"format_version": 1', '"format_version": 99'))
    with pytest.raises(DefinitionsDiffer, match="have format 99"):
        load_tally(tmp_path)
    meta.write_text("{")
    with pytest.raises(InputError, match="cannot read the saved counts"):
        load_tally(tmp_path)
    meta.write_text(text)
    (tmp_path / "moves.parquet").write_bytes(b"no")
    with pytest.raises(InputError, match="moves.parquet: cannot read the saved counts"):
        load_tally(tmp_path)


def test_an_accounting_that_does_not_balance_is_a_fault_of_the_program():
    frame = balanced([("used", "", "a.csv", 9, 4)], {})
    check_balance(frame, {"a.csv": 9, "all": 9})
    with pytest.raises(
        RuntimeError, match="the accounting of a.csv does not balance: 10 rows read, 9 accounted"
    ):
        check_balance(frame, {"a.csv": 10})


@pytest.mark.parametrize(
    ("row", "match"),
    [
        ((1, "left", "steady", 2), 'a move out of the exit "left"'),
        ((1, "fresh", "steady", -2), "n is a whole number"),
        ((1, "fresh", "steady", 1.5), "n is a whole number"),
        (("2026-13", "fresh", "steady", 1), 'has the period "2026-13"'),
        ((1, "fresh", "steady", 0), "The counts are all zero"),
    ],
)
def test_bare_counts_that_cannot_be_used_are_refused(row, match):
    with pytest.raises(InputError, match=match):
        cf.read_counts([row], STATES)


def test_bare_counts_of_an_impossible_move_are_refused():
    states = cf.States(["fresh", "steady"], impossible=[("steady", "fresh")])
    with pytest.raises(InputError, match="declared impossible"):
        cf.read_counts([(1, "steady", "fresh", 3)], states)


@pytest.mark.parametrize(
    ("call", "match"),
    [
        (lambda: cf.count(3), "count takes the History"),
        (lambda: cf.read_history(ROWS, STATES, on_absent="steady"), "on_absent must be an exit"),
        (lambda: cf.read_history(ROWS, STATES, colour="red"), 'Unknown options "colour"'),
        (lambda: cf.read_history(ROWS, STATES, as_of="soon", calendar="month"), "as_of is a date like"),
        (lambda: cf.read_history([1, 2], STATES, calendar="step"), "Data must be a path, a DataFrame"),
        (lambda: cf.read_events(ROWS, [{"name": "on"}], time="period", event="state"), "holds numbers"),
    ],
)
def test_calls_that_cannot_be_met_are_refused(call, match):
    with pytest.raises((CallError, InputError), match=match):
        call()


def test_equal_keys_are_added_up_also_when_their_ranges_need_more_than_one_number():
    wide = {"a": np.array([2**62, 0, 2**62]), "b": np.array([1, 2**62, 1])}
    assert {k: v.tolist() for k, v in added_up(wide, {}).items()} == {
        "a": [0, 2**62],
        "b": [2**62, 1],
        "n": [1, 2],
    }


def test_paths_are_runs_of_states_with_gaps():
    sample = PathSample()
    state = np.array([[1, -1], [1, 0], [-1, 0], [2, -1]], dtype=np.int8)
    sample.add(10, state, np.zeros(2, dtype=int), leading_zeros(np.array([2**63, 1], dtype=np.uint64)))
    level, table = sample.table()
    assert level == 0 and table["path"].tolist() == ["10 1*2 -*1 2*1", "11 0*2"]
    assert table["level"].tolist() == [0, 63]


def test_lines_of_a_frame_are_record_numbers(tmp_path):
    frame = pd.concat([ROWS.assign(customer=[f"m{i}{c}" for c in ROWS["customer"]]) for i in range(5)])
    history = cf.read_history(pd.concat([frame, ROWS.iloc[[0]].assign(customer="")]), STATES)
    assert history.rejected[["line", "reason"]].to_numpy().tolist() == [[31, "id_missing"]]
    assert LineFinder.lines.__doc__
