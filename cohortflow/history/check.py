"""What became of every row: the accounting that must balance, and named findings with line numbers.

Outcomes: read = used + rejected + duplicate + set_aside, for each file and in total, on every run.
Findings carry codes and numbers; the report puts them into words.
"""

from __future__ import annotations

from collections.abc import Iterable, Mapping
from dataclasses import dataclass, field
from typing import Any, ClassVar

import pandas as pd

from cohortflow.record import Record

OUTCOMES = ("read", "used", "rejected", "duplicate", "set_aside")
COLUMNS = ("stage", "outcome", "reason", "file", "rows", "customers")
TOTAL = "all"


@dataclass(frozen=True)
class Finding:
    """Something to look at. `code` names it; `serious`: with --strict it stands in the way.

    lines : (file, line) of the first cases;  detail : numbers and names that belong to it
    """

    code: str
    rows: int = 0
    customers: int = 0
    serious: bool = True
    lines: tuple[tuple[str, int], ...] = ()
    detail: Mapping[str, Any] = field(default_factory=dict)

    def to_dict(self) -> dict[str, Any]:
        """For the run record."""
        return {
            "code": self.code,
            "rows": self.rows,
            "customers": self.customers,
            "serious": self.serious,
            "lines": [list(line) for line in self.lines],
            "detail": dict(self.detail),
        }


@dataclass(frozen=True, repr=False, eq=False)
class Check(Record):
    """The accounting of a reading and its findings.

    >>> check = Check(balanced([("used", "", "a.csv", 9, 4), ("rejected", "id_missing", "a.csv", 1, 0)], {}), ())
    >>> check.rows("read"), check.rows("used"), check.reasons()
    (10, 9, {'id_missing': 1})
    """

    accounting: pd.DataFrame
    findings: tuple[Finding, ...]
    kind: ClassVar[str] = "check"

    def to_frame(self) -> pd.DataFrame:
        """stage, outcome, reason, file, rows, customers; file "all" is the total."""
        return self.accounting.copy()

    def rows(self, outcome: str) -> int:
        """Rows of an outcome over all files."""
        a = self.accounting
        return int(a.loc[(a["outcome"] == outcome) & (a["file"] == TOTAL), "rows"].sum())

    def reasons(self) -> dict[str, int]:
        """Rows by reason, over all files."""
        a = self.accounting
        chosen = a[(a["file"] == TOTAL) & (a["reason"] != "")]
        return {str(r): int(n) for r, n in zip(chosen["reason"], chosen["rows"], strict=True)}

    def finding(self, code: str) -> Finding | None:
        """The finding of that name, if it stands."""
        return next((f for f in self.findings if f.code == code), None)

    @property
    def serious(self) -> tuple[Finding, ...]:
        """Findings that matter under --strict."""
        return tuple(f for f in self.findings if f.serious)

    def headline(self) -> str:
        return (
            f"check: {self.rows('read'):,} rows read, {self.rows('used'):,} used, "
            f"{len(self.findings)} findings"
        )

    def about(self) -> Mapping[str, Any]:
        return {"findings": [f.to_dict() for f in self.findings]}


Line = tuple[str, str, str, int, int]


def balanced(
    lines: Iterable[Line], customers: Mapping[tuple[str, str, str], int], files: Iterable[str] = ()
) -> pd.DataFrame:
    """The accounting table from (outcome, reason, file, rows, customers) of each file.

    Lines of one outcome and reason add up to the file "all"; `customers[outcome, reason, file]` replaces
    counts of customers that do not add up (the total of several files, or of all rows read). `files`: their
    order; every one of them gets a line, also without rows.
    """
    lines = list(lines)
    named = list(dict.fromkeys([*files, *(line[2] for line in lines)]))
    sums: dict[tuple[str, str, str], list[int]] = {("read", "", f): [0, 0] for f in (*named, TOTAL)}
    for outcome, reason, file, rows, who in lines:
        for key in ((outcome, reason), ("read", "")):
            for place in (file, TOTAL):
                line = sums.setdefault((*key, place), [0, 0])
                line[0] += rows
                line[1] += who
    order = {name: i for i, name in enumerate([*named, TOTAL])}
    found = sorted(sums, key=lambda k: (order[k[2]], OUTCOMES.index(k[0]), k[1]))
    rows_ = [
        (
            "labelling" if o == "used" or r == "after_exit" else "reading",
            o,
            r,
            f,
            *_counts(sums, customers, (o, r, f)),
        )
        for o, r, f in found
    ]
    return pd.DataFrame(rows_, columns=list(COLUMNS)).astype({"rows": "int64", "customers": "int64"})


def _counts(
    sums: Mapping[tuple[str, str, str], list[int]],
    customers: Mapping[tuple[str, str, str], int],
    key: tuple[str, str, str],
) -> tuple[int, int]:
    rows, who = sums[key]
    return rows, customers.get(key, who)


def check_balance(accounting: pd.DataFrame, read: Mapping[str, int]) -> None:
    """RuntimeError (a fault of the program) unless every row read from each file has one outcome."""
    for name, rows in read.items():
        mine = accounting[accounting["file"] == name]
        given = int(mine.loc[mine["outcome"] != "read", "rows"].sum())
        if given != rows:
            raise RuntimeError(
                f"the accounting of {name} does not balance: {rows} rows read, {given} accounted for; please "
                "report this fault of the program"
            )
