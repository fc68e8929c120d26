"""Block by block into the Tally: what all layouts share once rows lie in arrays. Blocks are shared among threads."""

from __future__ import annotations

import os
from collections import Counter
from collections.abc import Sequence
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass, field
from typing import Protocol

import numpy as np
import pandas as pd

from cohortflow.errors import NotIdentified, listed
from cohortflow.history.accounts import USED, Accounts
from cohortflow.history.cells import Columns
from cohortflow.history.columns import AMOUNT_SCALE, SEPARATOR, WEIGHT_SCALE
from cohortflow.history.fetch import Part, block_size, number_segments, parts
from cohortflow.history.findings import note_findings
from cohortflow.history.paths import PathSample
from cohortflow.history.reading import Reading
from cohortflow.history.silences import by_silence
from cohortflow.history.tabulate import Block, Tabulator
from cohortflow.tally import COARSE_BITS, CUSTOMERS_FINEST, FINEST_BITS, KEYS, Meta, Tally

FINEST_TRIED = 2 * CUSTOMERS_FINEST  # customers of a part up to which the finest buckets are tried
MOST_WORKERS = 4


@dataclass
class Labelled:
    """A labelled block: (T, B) arrays as in tabulate.Block, and what became of its rows.

    outcome : (rows,) code of each row;  first : (B,) each customer's first used row, -1 = none
    used : used rows (before any is set aside after an exit) in the order of customers and time
    notes : numbers that add up to findings
    """

    state: np.ndarray
    start: np.ndarray
    origin: np.ndarray
    tenure: np.ndarray
    memo: np.ndarray
    memo_state: np.ndarray
    outcome: np.ndarray
    first: np.ndarray
    used: np.ndarray
    any_exit: bool
    amount: np.ndarray | None = None
    silences: Columns | None = None
    notes: dict[str, int] = field(default_factory=dict)


class Layout(Protocol):
    """What a layout must tell: which columns it needs, and what a block of rows means."""

    columns: list[str]
    joins: str

    def label(self, rows: Columns, size: int) -> Labelled:
        """Outcomes and states of a block."""
        ...


def first_rows(used: np.ndarray, c: np.ndarray, size: int) -> np.ndarray:
    """(size,) first used row of each customer, -1 = none; `used` and `c` in the order of customers."""
    out = np.full(size, -1, dtype=np.int64)
    begins = np.flatnonzero(np.append(True, c[1:] != c[:-1]))[: len(c)]
    out[c[begins]] = used[begins]
    return out


class _Worker:
    """What one thread has added up."""

    def __init__(self, sweep: Sweep) -> None:
        reading = sweep.reading
        self.tabulator = Tabulator(reading.study.states, PathSample())
        self.accounts = Accounts.of_files([s.first for s in reading.loaded.sources])
        self.notes: Counter[str] = Counter()
        self.any_exit = False

    def merge(self, other: _Worker) -> None:
        self.tabulator.merge(other.tabulator)
        self.accounts.merge(other.accounts)
        busiest = max(self.notes["busiest"], other.notes["busiest"])
        self.notes.update(other.notes)
        self.notes["busiest"] = busiest
        self.any_exit |= other.any_exit


class Sweep:
    """Counts a reading; `tally` makes the Tally of it.

    first, last : ordinals of the counted window;  periods : periods that are labelled (the warm-up's too)
    """

    def __init__(self, reading: Reading, *, first: int, last: int, periods: int) -> None:
        self.reading, self.first, self.last, self.periods = reading, first, last, periods
        self.bits = FINEST_BITS
        self.buckets: list[np.ndarray] = []
        self.segments: list[str] = []
        self.result = _Worker(self)

    @property
    def accounts(self) -> Accounts:
        """What became of the rows."""
        return self.result.accounts

    @property
    def seen(self) -> int:
        """Customers with used rows."""
        return self.result.accounts.customers[USED, -1]

    def run(self, layout: Layout) -> None:
        """Label and count all rows; a second time with the finest buckets if few of many ids had rows to use."""
        self._all(layout)
        if self.bits == COARSE_BITS and self.seen <= CUSTOMERS_FINEST:
            self.bits, self.buckets, self.result = FINEST_BITS, [], _Worker(self)
            self._all(layout)
        note_findings(self.reading, self.result.notes, self.result.tabulator)
        self._refuse_without_exits()

    def _all(self, layout: Layout) -> None:
        has, reading = self.reading.loaded.has, self.reading
        columns, joins = list(layout.columns), layout.joins
        if "seg" in has:
            self.segments = number_segments(reading.engine)
            columns.append("coalesce(s, -1) AS s")
            joins += " LEFT JOIN segment_numbers USING (seg)"
        columns += ["weight"] if "weight" in has else []
        rows, block, done = reading.loaded.rows, block_size(self.periods), 0
        for part in parts(reading.engine, rows=rows, block=block, columns=columns, joins=joins):
            if not self.buckets and self.bits == FINEST_BITS and part.size > FINEST_TRIED and not done:
                self.bits = COARSE_BITS
            done += len(part.columns["c"])
            self._part(part, layout)
            reading.progress("labelling", done / max(rows, 1))

    def _part(self, part: Part, layout: Layout) -> None:
        bucket = (part.high >> np.uint64(64 - self.bits)).astype(np.int64)
        found, place = np.unique(bucket, return_inverse=True)
        who = _Customers(place + sum(len(b) for b in self.buckets), leading_zeros(part.low))
        self.buckets.append(found)
        workers = min(os.cpu_count() or 1, MOST_WORKERS, part.blocks)
        made = [_Worker(self) for _ in range(workers)]

        def work(w: int) -> None:
            for k in range(w, part.blocks, workers):
                self._block(part, k, layout, who, made[w])

        with ThreadPoolExecutor(workers) as pool:
            list(pool.map(work, range(workers)))
        for worker in made:
            self.result.merge(worker)

    def _block(self, part: Part, k: int, layout: Layout, who: _Customers, worker: _Worker) -> None:
        begin, size, rows = part.rows(k)
        done = layout.label(rows, size)
        worker.any_exit |= done.any_exit
        worker.notes.update(done.notes)
        worker.accounts.add(done.outcome, rows["r"], rows["c"], done.used, size)
        worker.notes["busiest"] = max(worker.notes["busiest"], int(np.bincount(rows["c"]).max(initial=0)))
        segment, weight = self._first_values(rows, done, worker)
        block = Block(
            self.first,
            done.state,
            done.start,
            done.origin,
            done.tenure,
            done.memo,
            done.memo_state,
            bucket=who.bucket[begin : begin + size],
            segment=segment,
            level=who.level[begin : begin + size],
            weight=weight,
            amount=done.amount,
        )
        worker.tabulator.add(block)
        if silences := dict(done.silences or {}):
            worker.tabulator.adders["silences"].add({"segment": segment[silences.pop("c")], **silences})

    def _first_values(
        self, rows: Columns, done: Labelled, worker: _Worker
    ) -> tuple[np.ndarray, np.ndarray | None]:
        """Segment and weight of each customer, those of the first used row."""
        there = done.first >= 0
        segment = np.zeros(len(there), dtype=np.int64)
        if "s" in rows:
            segment[there] = rows["s"][done.first[there]]
            other = rows["s"][done.used] != segment[rows["c"][done.used]]
            worker.notes["segment_changes"] += len(np.unique(rows["c"][done.used][other]))
        if "weight" not in rows:
            return segment, None
        weight = np.zeros(len(there), dtype=np.int64)
        weight[there] = rows["weight"][done.first[there]]
        return segment, weight

    def _refuse_without_exits(self) -> None:
        """NotIdentified when exits are declared and nobody ever reached one."""
        exits = self.reading.study.states.exits
        if exits and not self.result.any_exit and self.reading.whole is None:
            raise NotIdentified(
                f"No customer ever reached an exit ({listed(exits)}), so how many leave cannot be estimated. "
                "The extract may hold only today's customers: take it from all who ever were customers. In a "
                'history of states, on_absent = "EXIT" says that who stops appearing has left.'
            )

    def tally(self) -> Tally:
        """The Tally of all parts; its conservation is checked."""
        reading, study = self.reading, self.reading.study
        level, paths = self.result.tabulator.paths.table()
        tables = self.result.tabulator.tables()
        if paths is not None:
            tables["paths"] = paths
        columns = reading.loaded.segment_columns
        values, code = _segment_values(self.segments, bool(columns), tables)
        bits = self.bits if self.seen <= CUSTOMERS_FINEST else COARSE_BITS
        buckets = np.concatenate(self.buckets) if self.buckets else np.empty(0, dtype=np.int64)
        buckets = buckets >> (self.bits - bits)
        weighted = "weight" in reading.loaded.has
        missing = {"spells"} | (set() if "amount" in reading.loaded.has else {"amounts"})
        missing |= set() if by_silence(study) else {"silences"}
        meta = Meta(
            states=study.states,
            calendar=study.calendar,
            first=self.first,
            last=self.last,
            customers=self.seen,
            definitions=study.digest(),
            gap_rule=study.input.on_gap,
            segment_columns=columns,
            segments=values,
            bucket_bits=bits,
            sample_level=level,
            weighted=weighted,
            weight_scale=WEIGHT_SCALE if weighted else 1,
            amount_scale=AMOUNT_SCALE,
            tables=tuple(name for name in KEYS if name not in missing),
        )
        tally = Tally.build(meta, {name: _recoded(table, buckets, code) for name, table in tables.items()})
        tally.check_conservation()
        return tally


@dataclass(frozen=True)
class _Customers:
    """Place in the list of buckets, and level of the sampling hash, of the customers of a part."""

    bucket: np.ndarray
    level: np.ndarray


def leading_zeros(low: np.ndarray) -> np.ndarray:
    """Leading zero bits of unsigned 64-bit numbers: of each level half as many customers as of the one before.

    >>> leading_zeros(np.array([2**63, 2**62 + 5, 1, 0], dtype=np.uint64)).tolist()
    [0, 1, 63, 64]
    """
    out = np.full(len(low), 64, dtype=np.int64)
    known = low == 0
    for level in range(64):
        top = (low >= np.uint64(1) << np.uint64(63 - level)) & ~known
        out[top] = level
        known = known | top
        if known.all():
            break
    return out


def _segment_values(
    names: Sequence[str], there: bool, tables: dict[str, pd.DataFrame]
) -> tuple[tuple[tuple[str, ...], ...], np.ndarray]:
    """(values of the segments that were counted, sorted; new code of each old one)."""
    if not there:
        return ((),), np.zeros(1, dtype=np.int64)
    present = {int(s) for table in tables.values() for s in table["segment"].unique()}
    named = {code: tuple(names[code].split(SEPARATOR)) for code in present}
    ordered = sorted(set(named.values()))
    codes = np.full(max(len(names), 1), -1, dtype=np.int64)
    for code, values in named.items():
        codes[code] = ordered.index(values)
    return tuple(ordered), codes


def _recoded(table: pd.DataFrame, buckets: np.ndarray, segment: np.ndarray) -> pd.DataFrame:
    """Places in lists back into buckets and sorted segments."""
    changed = {"segment": segment[table["segment"].to_numpy()]}
    if "bucket" in table:
        changed["bucket"] = buckets[table["bucket"].to_numpy()]
    return table.assign(**changed)
