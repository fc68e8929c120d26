"""Rows that say the same thing twice.

identical   equal in every column (64-bit hash of the row; customer, time and event compared in full): dropped when
            the instants carry clock times or the row has an event id; otherwise kept and counted, since two equal
            sales on one day may both be true
superseded  same event id, other content: the version loaded last counts, else the last in the extract
"""

from __future__ import annotations

import numpy as np

from cohortflow.history.cells import Columns
from cohortflow.history.columns import FAULT_OF
from cohortflow.history.engine import Engine


def repeated(order: np.ndarray, tied: np.ndarray, rows: Columns) -> np.ndarray:
    """Rows that equal an earlier one in every column.

    order : good rows by customer, instant, event, record number;  tied : places in it that agree with the next one
    in the first three
    """
    if len(tied) == 0:
        return tied
    crowd = np.union1d(tied, tied + 1)
    run = np.cumsum(np.append(True, ~np.isin(crowd[:-1], tied)))
    row = order[crowd]
    by = np.lexsort([rows["r"][row], rows["h"][row], run])
    row, run, h = row[by], run[by], rows["h"][row[by]]
    return row[1:][(run[1:] == run[:-1]) & (h[1:] == h[:-1])]


def mark_superseded(engine: Engine, *, has_loaded: bool) -> int:
    """Give older versions of an event id a fault; how many. Rows equal in every column are left alone."""
    fault = FAULT_OF["superseded"]
    loaded = "loaded" if has_loaded else "''"
    engine.run(
        "CREATE TABLE versions AS SELECT rowid AS r, event_id, h, "
        + loaded
        + " AS loaded FROM rows WHERE fault = 0 "
        "AND event_id IN (SELECT event_id FROM rows WHERE fault = 0 AND event_id IS NOT NULL GROUP BY 1 "
        "HAVING min(h) <> max(h))"
    )
    engine.run(
        f"UPDATE rows SET fault = {fault} FROM (SELECT r FROM (SELECT v.r, v.h, first_value(v.h) OVER "
        "(PARTITION BY event_id ORDER BY loaded DESC, r DESC) AS kept FROM versions AS v) WHERE h <> kept) AS old "
        "WHERE rows.rowid = old.r"
    )
    engine.drop("versions")
    return int(engine.one(f"SELECT count(*) FROM rows WHERE fault = {fault}"))
