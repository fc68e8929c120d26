"""Typed rows out of the engine as arrays, a part of the customers at a time, cut into blocks.

A part holds every row with an id of its customers, also rows with a fault, so that the accounting is made where
the rows are. Parts bound the memory; blocks are what one worker labels at a time.
"""

from __future__ import annotations

from collections.abc import Iterator, Sequence
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from cohortflow.errors import InputError
from cohortflow.history.cells import Columns
from cohortflow.history.engine import Engine

ROWS_AT_ONCE = 12_500_000
CELLS_IN_BLOCK = 1 << 18
MOST_SEGMENTS = 20_000


@dataclass
class Part:
    """Customers 0 .. size-1 in the order of their hash, and their rows.

    high, low : halves of the MD5 of the id;  columns : of the rows: c, r (record number), and what was asked for
    """

    high: np.ndarray
    low: np.ndarray
    columns: Columns
    block: int

    @property
    def size(self) -> int:
        """Customers."""
        return len(self.high)

    @cached_property
    def _order(self) -> tuple[np.ndarray, np.ndarray]:
        """(where each block begins, rows in the order of blocks)."""
        blocks = max(1, -(-self.size // self.block))
        number = (self.columns["c"] // self.block).astype(np.uint16 if blocks < 2**16 else np.int64)
        cuts = np.concatenate([[0], np.cumsum(np.bincount(number, minlength=blocks))])
        return cuts, np.argsort(number, kind="stable")

    @property
    def blocks(self) -> int:
        """Number of blocks."""
        return len(self._order[0]) - 1

    def rows(self, k: int) -> tuple[int, int, Columns]:
        """(first customer, customers, rows) of the k-th block; c counts from 0 within it."""
        cuts, order = self._order
        mine = order[cuts[k] : cuts[k + 1]]
        begin = k * self.block
        rows = {name: values[mine] for name, values in self.columns.items()}
        rows["c"] = rows["c"] - np.int32(begin)
        return begin, min(self.block, self.size - begin), rows


def block_size(periods: int) -> int:
    """Customers of a block: some thousand, fewer when there are very many periods."""
    return int(np.clip(CELLS_IN_BLOCK // max(periods, 1), 128, 8192))


def parts(
    engine: Engine, *, rows: int, block: int, columns: Sequence[str], joins: str = ""
) -> Iterator[Part]:
    """All rows with an id in parts. `columns`: expressions over `rows`, named;  `joins`: of small tables."""
    many = max(1, -(-rows // ROWS_AT_ONCE))
    for k in range(many):
        mine = "fault <> 1" + ("" if many == 1 else f" AND (hash(customer) >> 8) % {many} = {k}")
        engine.drop("customers")
        engine.run(
            "CREATE TABLE customers AS SELECT customer, row_number() OVER (ORDER BY high, low, customer) - 1 AS c, "
            "high, low FROM (SELECT customer, ('0x' || substr(h, 1, 16))::UBIGINT AS high, "
            "('0x' || substr(h, 17, 16))::UBIGINT AS low FROM (SELECT customer, md5(customer) AS h FROM "
            f"(SELECT customer FROM rows WHERE {mine} GROUP BY 1)))"
        )
        who = engine.arrays("SELECT high, low FROM customers ORDER BY c")
        found = engine.arrays(
            f"SELECT c::INTEGER AS c, rows.rowid AS r, fault, {', '.join(columns)} FROM rows "
            f"JOIN customers USING (customer) {joins} WHERE {mine}"
        )
        if len(who["high"]):  # few customers with very many rows may leave a part empty
            yield Part(who["high"].astype(np.uint64), who["low"].astype(np.uint64), found, block)
    engine.drop("customers")


def number_segments(engine: Engine) -> list[str]:
    """Fill `segment_numbers` (seg, s) with the combinations of segment values of the good rows, sorted."""
    names = [
        r[0]
        for r in engine.rows(
            f"SELECT DISTINCT seg FROM rows WHERE fault = 0 ORDER BY 1 LIMIT {MOST_SEGMENTS + 1}"
        )
    ]
    if len(names) > MOST_SEGMENTS:
        raise InputError(
            f"The segment columns have more than {MOST_SEGMENTS:,} different combinations of values; they are "
            "for a few groups. Leave out columns with many values, or band them (ages, amounts) in the extract."
        )
    engine.run(
        "CREATE TABLE segment_numbers AS SELECT seg, (row_number() OVER (ORDER BY seg) - 1)::INTEGER AS s "
        "FROM (SELECT DISTINCT seg FROM rows WHERE fault = 0)"
    )
    return names


def ordered(keys: Sequence[np.ndarray], record: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    """(order of rows by keys, first key first, then by record number; places in it whose keys equal the next one's).

    The keys are packed into one number where 63 bits hold their ranges; only rows that tie are looked at again.
    """
    if len(record) == 0:
        return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64)
    lows = [int(k.min()) for k in keys]
    sizes = [int(k.max()) - low + 1 for k, low in zip(keys, lows, strict=True)]
    room = 1
    for size in sizes:
        room *= size
    if room >= 2**63:
        return _by_lexsort(keys, record)
    packed = keys[0].astype(np.int64)
    packed -= lows[0]
    for key, low, size in zip(keys[1:], lows[1:], sizes[1:], strict=True):
        packed *= size
        packed += key
        packed -= low
    order = np.argsort(packed)
    packed = packed[order]
    tied = np.flatnonzero(packed[1:] == packed[:-1])
    if len(tied):
        crowd = np.union1d(tied, tied + 1)
        order[crowd] = order[crowd][np.lexsort([record[order[crowd]], packed[crowd]])]
    return order, tied


def _by_lexsort(keys: Sequence[np.ndarray], record: np.ndarray) -> tuple[np.ndarray, np.ndarray]:
    order = np.lexsort([record, *reversed(keys)])
    same = np.ones(len(order) - 1, dtype=bool)
    for key in keys:
        same &= key[order[1:]] == key[order[:-1]]
    return order, np.flatnonzero(same)
