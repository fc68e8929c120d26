"""Customers of a reading as whole numbers: buckets and sample levels from the MD5 of the id, segments, weights."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from cohortflow.errors import InputError
from cohortflow.history.cells import ROWID_BITS
from cohortflow.history.columns import SEPARATOR
from cohortflow.history.engine import Engine

MOST_SEGMENTS = 20_000


@dataclass
class Customers:
    """Customer i of the table `customers` (its column c): high and low half of the hash, segment, weight."""

    high: np.ndarray
    low: np.ndarray
    segment: np.ndarray
    weight: np.ndarray | None = None

    def __len__(self) -> int:
        return len(self.high)

    @property
    def level(self) -> np.ndarray:
        """Leading zero bits of the low half: of each level, half as many customers as of the one before."""
        return leading_zeros(self.low)

    def buckets(self, bits: int) -> tuple[np.ndarray, np.ndarray]:
        """(list of buckets, ascending; place in it of each customer)."""
        values = (self.high >> np.uint64(64 - bits)).astype(np.int64)
        return np.unique(values, return_inverse=True)


def leading_zeros(low: np.ndarray) -> np.ndarray:
    """Leading zero bits of unsigned 64-bit numbers.

    >>> leading_zeros(np.array([2**63, 2**62 + 5, 1, 0], dtype=np.uint64)).tolist()
    [0, 1, 63, 64]
    """
    out = np.full(len(low), 64, dtype=np.int64)
    rest = low.astype(np.uint64).copy()
    known = rest == 0
    for level in range(64):
        top = (rest >= np.uint64(1) << np.uint64(63)) & ~known
        out[top] = level
        known |= top
        if known.all():
            break
        rest = rest << np.uint64(1)
    return out


def make_customers(engine: Engine, *, weighted: bool, segmented: bool, segments: dict[str, int]) -> Customers:
    """Fill `customers` (customer, c) from `cells`, in the order of the hash; new segments get the next numbers."""
    engine.drop("customers")
    first = ", min(origin) AS origin" if weighted or segmented else ""
    kept = ", origin" if first else ""
    engine.run(
        "CREATE TABLE customers AS SELECT customer, row_number() OVER (ORDER BY high, low, customer) - 1 AS c, "
        f"high, low{kept} FROM (SELECT customer, ('0x' || substr(h, 1, 16))::UBIGINT AS high, "
        f"('0x' || substr(h, 17, 16))::UBIGINT AS low{kept} FROM (SELECT customer, md5(customer) AS h{kept} "
        f"FROM (SELECT customer{first} FROM cells GROUP BY 1)))"
    )
    found = engine.arrays("SELECT high, low FROM customers ORDER BY c")
    size = len(found["high"])
    segment, weight = np.zeros(size, dtype=np.int64), None
    if first:
        segment, weight = _first_values(engine, size, weighted, segmented, segments)
    return Customers(found["high"].astype(np.uint64), found["low"].astype(np.uint64), segment, weight)


def _first_values(
    engine: Engine, size: int, weighted: bool, segmented: bool, segments: dict[str, int]
) -> tuple[np.ndarray, np.ndarray | None]:
    """Segment and weight on each customer's first row."""
    columns = [*(["seg"] if segmented else []), *(["weight"] if weighted else [])]
    engine.drop("first_rows")
    engine.run(
        f"CREATE TABLE first_rows AS SELECT c, {', '.join(columns)} FROM rows JOIN (SELECT c, "
        f"(origin % {1 << ROWID_BITS} + {1 << ROWID_BITS}) % {1 << ROWID_BITS} AS r FROM customers) AS o "
        "ON rows.rowid = o.r"
    )
    segment, weight = np.zeros(size, dtype=np.int64), None
    if segmented:
        names = [r[0] for r in engine.rows("SELECT DISTINCT seg FROM first_rows ORDER BY 1 LIMIT 20001")]
        for name in names:
            segments.setdefault(name, len(segments))
        _check_number(len(segments))
        found = engine.connection.execute("SELECT c, seg FROM first_rows").df()
        segment[found["c"].to_numpy()] = found["seg"].map(segments).to_numpy(dtype=np.int64)
    if weighted:
        given = engine.arrays("SELECT c, weight FROM first_rows")
        weight = np.zeros(size, dtype=np.int64)
        weight[given["c"]] = given["weight"]
    engine.drop("first_rows")
    return segment, weight


def _check_number(found: int) -> None:
    if found > MOST_SEGMENTS:
        raise InputError(
            f"The segment columns have more than {MOST_SEGMENTS:,} different combinations of values; they are for "
            "a few groups. Leave out columns with many values, or band them (ages, amounts) in the extract."
        )


def segment_values(
    segments: dict[str, int], columns: int, present: np.ndarray
) -> tuple[tuple[tuple[str, ...], ...], np.ndarray]:
    """(sorted tuples of the values of the segments present, new code of each old one; -1 = not present)."""
    if columns == 0:
        return ((),), np.zeros(1, dtype=np.int64)
    there = set(present.tolist())
    named = {code: tuple(text.split(SEPARATOR)) for text, code in segments.items() if code in there}
    ordered = sorted(set(named.values()))
    place = {values: i for i, values in enumerate(ordered)}
    codes = np.full(len(segments), -1, dtype=np.int64)
    for code, values in named.items():
        codes[code] = place[values]
    return tuple(ordered), codes
