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

    def add(self, outcome: np.ndarray, record: np.ndarray, customer: np.ndarray) -> None:
        """Account for the rows of a block."""
        if len(outcome) == 0:
            return
        files = len(self.starts)
        file = np.zeros(len(record), dtype=np.int64)
        if files > 1:
            file = np.searchsorted(self.starts, record, side="right") - 1
        size = int(customer.max()) + 1
        both = (outcome.astype(np.int64) * files + file) * size + customer
        self._count(both // size, self.rows, files)
        self._count(np.unique(both) // size, self.customers, files)
        self._count(np.unique(outcome.astype(np.int64) * size + customer) // size, self.customers, 0)
        self._count(np.unique(file * size + customer) // size + ANY * files, self.customers, files)
        self.customers[ANY, -1] += len(np.unique(customer))
        chosen = np.isin(outcome, LISTED)
        if chosen.any():
            self.listed.append((record[chosen], outcome[chosen]))

    def _count(self, values: np.ndarray, into: Counter[tuple[int, int]], files: int) -> None:
        found, n = np.unique(values, return_counts=True)
        for value, count in zip(found.tolist(), n.tolist(), strict=True):
            into[divmod(value, files) if files else (value, -1)] += count

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
