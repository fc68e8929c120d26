"""The outcomes of rows added up by file, with the customers they belong to: block by block, then as a table."""

from __future__ import annotations

from collections import Counter
from collections.abc import Sequence
from dataclasses import dataclass, field

import numpy as np

from cohortflow.history.columns import FAULTS

USED = 0
SET_ASIDE = {
    40: "ignored_event",
    41: "unknown_event",
    42: "before_log_start",
    43: "after_as_of",
    44: "incomplete_period",
    45: "after_exit",
    46: "outside_calendar",
    47: "blank_cell",
}
ASIDE = {reason: code for code, reason in SET_ASIDE.items()}
LISTED = (20, 21, 22, 45)  # outcomes whose rows are listed one by one
ANY = -1  # stands for "read": any outcome


def outcome_of(code: int) -> tuple[str, str]:
    """(outcome, reason) of an outcome code."""
    if code == USED:
        return "used", ""
    return FAULTS[code] if code in FAULTS else ("set_aside", SET_ASIDE[code])


@dataclass
class Accounts:
    """rows and customers by (outcome code, file), file -1 = all files; listed: (record, outcome) of chosen rows.

    Customers of blocks are disjoint, so their counts add up.
    """

    starts: np.ndarray
    rows: Counter[tuple[int, int]] = field(default_factory=Counter)
    customers: Counter[tuple[int, int]] = field(default_factory=Counter)
    listed: list[tuple[np.ndarray, np.ndarray]] = field(default_factory=list)

    @classmethod
    def of_files(cls, starts: Sequence[int]) -> Accounts:
        """`starts`: record number of the first row of each file."""
        return cls(np.asarray(starts, dtype=np.int64))

    def add(
        self, outcome: np.ndarray, record: np.ndarray, customer: np.ndarray, used: np.ndarray, size: int
    ) -> None:
        """Account for the rows of a block of `size` customers, each with a row; `used`: used rows by customer."""
        used = used[outcome[used] == USED]
        other = np.flatnonzero(outcome != USED)
        self.customers[ANY, -1] += size
        self.customers[USED, -1] += _runs(customer[used])
        self._count_all(outcome[other], customer[other], size, self.customers, -1)
        if len(self.starts) == 1:
            self.rows[USED, 0] += len(used)
            self.customers[USED, 0] += _runs(customer[used])
            self.customers[ANY, 0] += size
            self._count_all(outcome[other], customer[other], size, self.customers, 0)
            self._add_up(outcome[other].astype(np.int64), 1, self.rows)
        else:
            self._by_file(outcome, record, customer, size)
        chosen = other[np.isin(outcome[other], LISTED)]
        if len(chosen):
            self.listed.append((record[chosen], outcome[chosen]))

    def _by_file(self, outcome: np.ndarray, record: np.ndarray, customer: np.ndarray, size: int) -> None:
        files = len(self.starts)
        file = np.searchsorted(self.starts, record, side="right") - 1
        key = outcome.astype(np.int64) * files + file
        self._add_up(key, files, self.rows)
        self._add_up(np.unique(key * size + customer) // size, files, self.customers)
        self._add_up(np.unique(file * size + customer) // size + ANY * files, files, self.customers)

    def _count_all(
        self, outcome: np.ndarray, customer: np.ndarray, size: int, into: Counter[tuple[int, int]], file: int
    ) -> None:
        """Customers by outcome."""
        pairs = np.unique(outcome.astype(np.int64) * size + customer) // size
        for code, n in zip(*np.unique(pairs, return_counts=True), strict=True):
            into[int(code), file] += int(n)

    def _add_up(self, keys: np.ndarray, files: int, into: Counter[tuple[int, int]]) -> None:
        for key, n in zip(*np.unique(keys, return_counts=True), strict=True):
            into[divmod(int(key), files)] += int(n)

    def merge(self, other: Accounts) -> None:
        """Take over the counts of another worker."""
        self.rows.update(other.rows)
        self.customers.update(other.customers)
        self.listed += other.listed

    def listed_rows(self) -> tuple[np.ndarray, np.ndarray]:
        """(record, outcome) of the rows listed one by one, in the order of the extract."""
        if not self.listed:
            return np.empty(0, dtype=np.int64), np.empty(0, dtype=np.int64)
        record = np.concatenate([r for r, _ in self.listed])
        outcome = np.concatenate([o for _, o in self.listed]).astype(np.int64)
        order = np.argsort(record)
        return record[order], outcome[order]


def _runs(values: np.ndarray) -> int:
    """Number of runs of equal values."""
    return int((values[1:] != values[:-1]).sum()) + 1 if len(values) else 0
