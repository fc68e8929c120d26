"""Rows that say the same thing twice: found by sorting 64-bit hashes, settled on the few rows that meet.

identical   equal in every column: dropped when the instants carry clock times or the row has an event id;
            otherwise (two sales on one day may be equal) kept and listed
superseded  same event id, other content: the version loaded last counts (else the last in the extract)
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from cohortflow.history.columns import FAULT_OF
from cohortflow.history.engine import Engine

SORTED_AT_ONCE = 8_000_000  # hashes in memory at a time


@dataclass(frozen=True)
class Repeats:
    """Record numbers (rowid) of the rows dropped, and how many equal rows were kept because nothing tells them apart."""

    identical: np.ndarray
    superseded: np.ndarray
    kept: np.ndarray


def find_repeats(
    engine: Engine, *, rows: int, clocked: bool, has_event_id: bool, has_loaded: bool
) -> Repeats:
    """Repeated rows among the good ones. `clocked`: the column of instants holds clock times."""
    identical, kept = _identical(engine, rows, clocked, has_event_id)
    superseded = np.empty(0, dtype=np.int64)
    if has_event_id:
        superseded = _superseded(engine, rows, identical, has_loaded)
    return Repeats(identical, superseded, kept)


def mark(engine: Engine, rowids: np.ndarray, reason: str) -> None:
    """Give rows a fault; they take no further part."""
    if len(rowids) == 0:
        return
    engine.register("marked", pd.DataFrame({"r": np.sort(rowids)}))
    engine.run(f"UPDATE rows SET fault = {FAULT_OF[reason]} FROM marked WHERE rows.rowid = marked.r")
    engine.connection.unregister("marked")


def _identical(engine: Engine, rows: int, clocked: bool, has_id: bool) -> tuple[np.ndarray, np.ndarray]:
    met = _meeting(engine, "h", "fault = 0", rows)
    if len(met) == 0:
        return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64)
    engine.register("met", pd.DataFrame({"h": met}))
    has_clock = "clock" if clocked else "false"
    has_own_id = "event_id IS NOT NULL" if has_id else "false"
    found = engine.connection.execute(
        f"SELECT rows.rowid AS r, customer, code, h, ({has_clock} OR {has_own_id}) AS certain "
        "FROM rows JOIN met USING (h) WHERE fault = 0 ORDER BY r"
    ).df()
    engine.connection.unregister("met")
    repeated = found.duplicated(subset=["h", "customer", "code"], keep="first").to_numpy()
    certain = found["certain"].to_numpy(dtype=bool)
    number = found["r"].to_numpy(dtype=np.int64)
    return number[repeated & certain], number[repeated & ~certain]


def _superseded(engine: Engine, rows: int, dropped: np.ndarray, has_loaded: bool) -> np.ndarray:
    met = _meeting(engine, "hash(event_id)", "fault = 0 AND event_id IS NOT NULL", rows)
    if len(met) == 0:
        return np.empty(0, dtype=np.int64)
    engine.register("met", pd.DataFrame({"g": met}))
    loaded = "loaded" if has_loaded else "''"
    found = engine.connection.execute(
        f"SELECT rows.rowid AS r, event_id, {loaded} AS loaded FROM rows JOIN met ON hash(event_id) = g "
        "WHERE fault = 0 AND event_id IS NOT NULL ORDER BY event_id, loaded, r"
    ).df()
    engine.connection.unregister("met")
    found = found[~found["r"].isin(dropped)]
    older = found.duplicated(subset=["event_id"], keep="last").to_numpy()
    return found["r"].to_numpy(dtype=np.int64)[older]


def _meeting(engine: Engine, value: str, where: str, rows: int) -> np.ndarray:
    """Hash values that occur more than once, looked for in slices of the hash range."""
    slices = 1
    while rows / slices > SORTED_AT_ONCE:
        slices *= 2
    out = []
    for k in range(slices):
        part = "" if slices == 1 else f" AND ({value} >> 40) % {slices} = {k}"
        hashes = np.sort(engine.arrays(f"SELECT {value} AS v FROM rows WHERE {where}{part}")["v"])
        again = hashes[1:][hashes[1:] == hashes[:-1]]
        out.append(np.unique(again))
    return np.concatenate(out)
