"""Block by block into the Tally: what all layouts share once customers have states."""

from __future__ import annotations

import numpy as np
import pandas as pd

from cohortflow.errors import NotIdentified, listed
from cohortflow.history.columns import AMOUNT_SCALE, WEIGHT_SCALE
from cohortflow.history.customers import Customers, segment_values
from cohortflow.history.paths import PathSample
from cohortflow.history.reading import Reading
from cohortflow.history.tabulate import Block, Tabulator
from cohortflow.tally import COARSE_BITS, CUSTOMERS_FINEST, FINEST_BITS, KEYS, Meta, Tally

CELLS_IN_BLOCK = 1 << 19


def block_size(periods: int) -> int:
    """Customers of a block: some thousand, fewer when there are very many periods."""
    return int(np.clip(CELLS_IN_BLOCK // max(periods, 1), 256, 8192))


def by_block(c: np.ndarray, size: int, customers: int) -> tuple[np.ndarray, np.ndarray]:
    """(where each block begins, order of the cells by block)."""
    blocks = max(1, -(-customers // size))
    number = (c // size).astype(np.uint16 if blocks < 2**16 else np.int64)
    order = np.argsort(number, kind="stable")
    cuts = np.concatenate([[0], np.cumsum(np.bincount(number, minlength=blocks))])
    return cuts, order


class Sweep:
    """Gathers the counts of a reading; `tally` makes the Tally of them.

    first, last : ordinals of the counted window;  segments : text of the segment columns -> number
    """

    def __init__(self, reading: Reading, *, first: int, last: int) -> None:
        self.reading, self.first, self.last = reading, first, last
        self.segments: dict[str, int] = {}
        self.seen = 0
        self.paths = PathSample()
        self.tabulator = Tabulator(reading.study.states, self.paths)
        self.bits = FINEST_BITS
        self.buckets: list[np.ndarray] = []
        self._customers: Customers | None = None
        self._bucket = self._level = np.empty(0, dtype=np.int64)

    def expect(self, parts: int, used: str) -> None:
        """Choose the buckets before the first part: the finest while there are few customers."""
        if parts == 1:
            return
        sample = f"SELECT customer FROM rows WHERE {used} LIMIT 1000000"
        for source in (sample, f"SELECT customer FROM rows WHERE {used}"):
            many = int(self.reading.engine.one(f"SELECT count(DISTINCT customer) FROM ({source})"))
            if many > CUSTOMERS_FINEST:
                self.bits = COARSE_BITS
                return

    def begin(self, customers: Customers) -> None:
        """The customers of the next part."""
        if self.seen == 0 and len(customers) > CUSTOMERS_FINEST:
            self.bits = COARSE_BITS
        found, place = customers.buckets(self.bits)
        self._bucket = place + sum(len(b) for b in self.buckets)
        self._level = customers.level
        self.buckets.append(found)
        self.seen += len(customers)
        self._customers = customers

    def block(
        self,
        state: np.ndarray,
        start: np.ndarray,
        origin: np.ndarray,
        tenure: np.ndarray,
        memo: np.ndarray,
        memo_state: np.ndarray,
        *,
        begin: int,
        end: int,
        amount: np.ndarray | None = None,
        gaps: bool = False,
    ) -> Block:
        """The block of the customers begin .. end-1 of the part."""
        assert self._customers is not None
        weight = self._customers.weight
        return Block(
            self.first,
            state,
            start,
            origin,
            tenure,
            memo,
            memo_state,
            bucket=self._bucket[begin:end],
            segment=self._customers.segment[begin:end],
            level=self._level[begin:end],
            weight=None if weight is None else weight[begin:end],
            amount=amount,
            gaps=gaps,
        )

    def tabulate(self, block: Block) -> None:
        """Count a block."""
        self.tabulator.add(block)

    def refuse_without_exits(self, any_exit: bool) -> None:
        """NotIdentified when exits are declared and nobody ever reached one."""
        exits = self.reading.study.states.exits
        if exits and not any_exit and self.reading.whole is None:
            raise NotIdentified(
                f"No customer ever reached an exit ({listed(exits)}), so how many leave cannot be estimated. The "
                "extract may hold only today's customers: take it from all who ever were customers. In a history of "
                'states, on_absent = "EXIT" says that who stops appearing has left.'
            )

    def tally(self) -> Tally:
        """The Tally of all parts; its conservation is checked."""
        reading, study = self.reading, self.reading.study
        columns = reading.loaded.segment_columns
        level, paths = self.paths.table()
        tables = self.tabulator.tables()
        present = [np.unique(table["segment"]) for table in tables.values()]
        values, code = segment_values(self.segments, len(columns), np.unique(np.concatenate(present or [np.empty(0, np.int64)])))
        if paths is not None:
            tables["paths"] = paths
        buckets = np.concatenate(self.buckets) if self.buckets else np.empty(0, dtype=np.int64)
        tables = {name: _recoded(table, buckets, code) for name, table in tables.items()}
        weighted = "weight" in reading.loaded.has
        missing = {"spells"} | (set() if "amount" in reading.loaded.has else {"amounts"})
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
            bucket_bits=self.bits,
            sample_level=level,
            weighted=weighted,
            weight_scale=WEIGHT_SCALE if weighted else 1,
            amount_scale=AMOUNT_SCALE,
            tables=tuple(name for name in KEYS if name not in missing),
        )
        tally = Tally.build(meta, tables)
        tally.check_conservation()
        return tally


def _recoded(table: pd.DataFrame, buckets: np.ndarray, segment: np.ndarray) -> pd.DataFrame:
    """Places in lists back into buckets and sorted segments."""
    changed = {"segment": segment[table["segment"].to_numpy()]}
    if "bucket" in table:
        changed["bucket"] = buckets[table["bucket"].to_numpy()]
    return table.assign(**changed)
