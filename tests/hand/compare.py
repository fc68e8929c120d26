"""Reads the hand-written expectations of a folder and puts counted tables into the same shape."""

from __future__ import annotations

import csv
from collections import Counter
from pathlib import Path
from typing import Any

import pandas as pd

from cohortflow.projector.rollforward import rollforward_actual
from cohortflow.tally import ENDS, KINDS, MEMOS

HERE = Path(__file__).parent
INFLOWS = {"joined": "joined", "returned": "returned", "unknown": "unobserved_in"}


def rows_of(folder: str, name: str) -> list[dict[str, str]]:
    with open(HERE / folder / name, newline="", encoding="utf-8") as file:
        return list(csv.DictReader(file))


def labels(folder: str, calendar: Any) -> set[tuple[str, str, str, bool]]:
    """(customer, period, state, counted), from runs (first, last) or a grid with (uncounted) in brackets."""
    found = set()
    for row in rows_of(folder, "labels.csv"):
        customer = row.pop("customer")
        if "first" in row:
            for t in range(calendar.parse(row["first"]), calendar.parse(row["last"]) + 1):
                found.add((customer, calendar.label(t), row["state"], row["counted"] == "yes"))
        else:
            for period, cell in row.items():
                if cell:
                    found.add((customer, period, cell.strip("()"), not cell.startswith("(")))
    return found


def counts(folder: str, name: str) -> dict[tuple[str, ...], int]:
    """A CSV whose last column is a number, the others its key."""
    return {tuple(row.values())[:-1]: int(list(row.values())[-1]) for row in rows_of(folder, name)}


def moves(tables: Any, study: Any) -> Counter[tuple[str, str, str]]:
    """One-period moves by (period, from, to), and under the period "total" their sums."""
    names, found = study.states.names, Counter()
    for row in tables["moves"].itertuples():
        if row.next_state >= 0:
            assert row.gap == 1
            period = study.calendar.label(row.period)
            for key in (period, "total"):
                found[key, names[row.state], names[row.next_state]] += row.n
    return found


def starts(tables: Any, study: Any) -> Counter[tuple[str, str, str, str]]:
    """(period, kind, state, from_state), the memo lines included."""
    names, found = study.states.names, Counter()
    for row in tables["starts"].itertuples():
        origin = names[row.from_state] if row.from_state >= 0 else ""
        found[study.calendar.label(row.period), KINDS[row.kind], names[row.state], origin] += row.n
    for row in tables["memos"].itertuples():
        found[study.calendar.label(row.period), MEMOS[row.kind], names[row.state], ""] += row.n
    return found


def closing(tables: Any, study: Any) -> Counter[tuple[str, str]]:
    """Customers by (period, state) at period ends, exits left out; the state "all" is their sum."""
    found = Counter()
    for row in tables["moves"].itertuples():
        if ENDS[row.end] != "exit":
            for state in (study.states.names[row.state], "all"):
                found[study.calendar.label(row.period), state] += row.n
    return found


def rollforward(tables: Any, study: Any) -> dict[tuple[str, str], dict[str, int]]:
    """Every line of the roll-forward by (period, state), from the tables alone."""
    calendar, names, exits = study.calendar, study.states.names, study.states.exits
    held = closing(tables, study)
    lines: dict[tuple[str, str], Counter[str]] = {}

    def add(ordinal: int, state: str, line: str, n: int) -> None:
        for name in (state, "all"):
            if not (name == "all" and line.startswith("moved")):
                lines.setdefault((calendar.label(ordinal), name), Counter())[line] += n

    for row in tables["moves"].itertuples():
        if row.next_state < 0:
            continue
        origin, target, later = names[row.state], names[row.next_state], row.period + row.gap
        if target in exits:
            add(later, origin, "lost", row.n)
        elif target != origin:
            add(later, origin, "moved_out", row.n)
            add(later, target, "moved_in", row.n)
    for row in tables["starts"].itertuples():
        add(row.period, names[row.state], INFLOWS[KINDS[row.kind]], row.n)
    for period, state in list(held):
        lines.setdefault((period, state), Counter())
        after = calendar.parse(period) + 1
        if after <= max(calendar.parse(p) for p, _ in held):
            lines.setdefault((calendar.label(after), state), Counter())
    for period, state in lines:
        before = calendar.label(calendar.parse(period) - 1)
        lines[period, state]["opening"] = held[before, state]
        lines[period, state]["closing"] = held[period, state]
    return {key: dict(line) for key, line in lines.items()}


def check_rollforward(folder: str, tables: Any, study: Any) -> None:
    """The written lines, cell by cell; each written line also adds up by itself."""
    found = rollforward(tables, study)
    for row in rows_of(folder, "rollforward.csv"):
        key = row.pop("period"), row.pop("state")
        written = {line: int(n) for line, n in row.items()}
        inflow = written["joined"] + written["returned"] + written["unobserved_in"] + written["moved_in"]
        outflow = written["moved_out"] + written["lost"]
        assert written["opening"] + inflow - outflow == written["closing"], key
        counted = {line: found[key].get(line, 0) for line in written}
        assert counted == written, key


def check_printed_rollforward(folder: str, tally: Any) -> None:
    """The table `rollforward` that the program prints, from the second period on; "all" is a sum of ours."""
    frame = rollforward_actual(tally)
    frame = frame[~frame["line"].str.startswith("joined_and_left")]
    lines = frame.groupby(["period", "state", "line"])["customers"].sum()
    for row in rows_of(folder, "rollforward.csv"):
        period, state = row.pop("period"), row.pop("state")
        if state == "all" or tally.calendar.parse(period) == tally.meta.first:
            continue
        assert {line: int(lines[period, state, line]) for line in row} == {k: int(n) for k, n in row.items()}
        assert lines[period, state, "unobserved_out"] == 0


def check_tables(folder: str, tables: Any, study: Any) -> None:
    """Moves, starts, memos and roll-forward as written by hand."""
    written = counts(folder, "moves.csv")
    found = moves(tables, study)
    for key in found if _all_periods_written(written) else written:
        assert found[key] == written.get(key, 0), key
    totals = {key: n for key, n in found.items() if key[0] == "total"}
    assert totals == {key: n for key, n in written.items() if key[0] == "total"}
    assert starts(tables, study) == counts(folder, "starts.csv")
    check_rollforward(folder, tables, study)


def _all_periods_written(written: dict[tuple[str, ...], int]) -> bool:
    """Whether the hand-written moves name every period (then a period left out means no moves)."""
    parts = sum(n for key, n in written.items() if key[0] != "total")
    return parts == sum(n for key, n in written.items() if key[0] == "total")


def accounting(check: pd.DataFrame) -> dict[tuple[str, str], int]:
    """(outcome, reason) -> rows, without the rows of what was read."""
    kept = check[(check["outcome"] != "read") & (check["file"] == "all")]
    sums = kept.groupby(["outcome", "reason"])["rows"].sum()
    return {(str(outcome), str(reason or "")): int(n) for (outcome, reason), n in sums.items() if n}
