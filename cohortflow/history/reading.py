"""What the layouts share: a reading in progress, its outcomes by row, and the History that comes of it."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.errors import InputError
from cohortflow.history.check import TOTAL, Check, Finding, balanced, check_balance
from cohortflow.history.columns import FAULTS, id_missing_sql
from cohortflow.history.engine import Engine
from cohortflow.history.lines import LineFinder
from cohortflow.history.load import Loaded, Progress
from cohortflow.history.whole import Whole
from cohortflow.periods import Calendar
from cohortflow.record import Record
from cohortflow.states import States
from cohortflow.study import Study
from cohortflow.tally import Tally

SET_ASIDE = {
    40: "ignored_event",
    41: "unknown_event",
    42: "before_log_start",
    43: "after_as_of",
    44: "incomplete_period",
    45: "after_exit",
    46: "before_calendar",
}
ASIDE_OF = {reason: code for code, reason in SET_ASIDE.items()}
MOST_MISSING = 0.05
LINES_SHOWN = 5
LISTED = ("rejected", "duplicate", "after_exit")


@dataclass(frozen=True)
class InputFile:
    """Fingerprint of one input, for the run record."""

    name: str
    bytes: int
    sha256: str
    rows: int
    read_as: str


@dataclass(frozen=True, repr=False, eq=False)
class History(Record):
    """A history that was read, labelled and accounted for; customers themselves are no longer in it.

    check : the accounting and the findings
    rejected : file, line, column, reason (and value, if asked for): rows rejected, dropped as duplicates, or set
        aside after an exit, in the order of the extract
    inputs : fingerprints of the files
    """

    states: States
    calendar: Calendar
    check: Check
    rejected: pd.DataFrame
    inputs: tuple[InputFile, ...]
    tally: Tally
    kind: ClassVar[str] = "history"

    def to_frame(self) -> pd.DataFrame:
        """The accounting."""
        return self.check.to_frame()

    def headline(self) -> str:
        return (
            f"history of {self.tally.meta.customers:,} customers, {self.check.rows('used'):,} rows used of "
            f"{self.check.rows('read'):,}"
        )

    def about(self) -> Mapping[str, Any]:
        return {"findings": [f.to_dict() for f in self.check.findings]}


@dataclass
class Reading:
    """A reading in progress on one engine.

    outcome : SQL giving the outcome code of a row of `rows`: 0 used, else FAULTS or SET_ASIDE
    whole : what must be known of the whole extract when this is a part of it (see distribute.py), else None
    Table `aside_rows` (r) holds the record numbers of rows set aside while labelling.
    """

    engine: Engine
    study: Study
    loaded: Loaded
    progress: Progress
    outcome: str = "fault"
    findings: list[Finding] = field(default_factory=list)
    whole: Whole | None = None

    def found(
        self, code: str, *, rows: int = 0, customers: int = 0, serious: bool = True, **detail: Any
    ) -> None:
        """Note a finding if there is anything to it."""
        lines = detail.pop("lines", ())
        self.findings.append(Finding(code, rows, customers, serious, tuple(lines), detail))

    def refuse_missing_ids(self) -> None:
        """InputError when too many rows have no id: the extract is not what it should be."""
        if self.whole is None:
            missing = int(self.engine.one("SELECT count(*) FROM rows WHERE fault = 1"))
            check_missing(missing, self.loaded.rows, self.study.input.customer)

    def file_of(self, row: str = "rowid") -> str:
        """SQL for the number of the file that a row came from."""
        starts = [s.first for s in self.loaded.sources]
        return step_case(row, starts[1:])

    # ---- line numbers ----
    def place(self, rowids: Sequence[int] | np.ndarray) -> tuple[np.ndarray, np.ndarray]:
        """(number of the file, line in it) of rows."""
        rowids = np.asarray(rowids, dtype=np.int64)
        starts = np.array([s.first for s in self.loaded.sources])
        file = np.searchsorted(starts, rowids, side="right") - 1
        lines = np.zeros(len(rowids), dtype=np.int64)
        for k in np.unique(file):
            mine = file == k
            lines[mine] = self.finder(int(k)).lines(rowids[mine] - starts[k])
        return file, lines

    def finder(self, k: int) -> LineFinder:
        """Line numbers of the k-th source."""
        finders: dict[int, LineFinder] = self.__dict__.setdefault("_finders", {})
        if k not in finders:
            finders[k] = LineFinder(self.loaded.sources[k])
        return finders[k]

    def examples(self, where: str) -> tuple[tuple[str, int], ...]:
        """(file, line) of the first rows of `rows` for which a condition holds."""
        found = self.engine.rows(f"SELECT rowid FROM rows WHERE {where} ORDER BY rowid LIMIT {LINES_SHOWN}")
        return tuple(self.shown(np.array([r[0] for r in found], dtype=np.int64)))

    def shown(self, rowids: np.ndarray) -> list[tuple[str, int]]:
        """(file, line) of the first of some rows."""
        file, lines = self.place(np.sort(rowids)[:LINES_SHOWN])
        return [(self.loaded.sources[f].name, int(n)) for f, n in zip(file, lines, strict=True)]

    # ---- the accounting ----
    def accounting(self, used_customers: int) -> Check:
        """The accounting of all rows; RuntimeError when it does not balance."""
        names = [s.name for s in self.loaded.sources]
        lines = self._counted(names, used_customers)
        bad = pd.Series([(s.name, reason) for s in self.loaded.sources for _, reason in s.bad], dtype=object)
        lines += [
            ("rejected", why, name, int(n), 0) for (name, why), n in bad.value_counts(sort=False).items()
        ]
        frame = balanced(lines, self._customers(names, used_customers))
        read = {s.name: s.rows + len(s.bad) for s in self.loaded.sources}
        check_balance(frame, {**read, TOTAL: sum(read.values())})
        return Check(frame, tuple(self.findings))

    def _counted(self, names: list[str], used_customers: int) -> list[tuple[str, str, str, int, int]]:
        who = f"count(DISTINCT CASE WHEN NOT {id_missing_sql('customer')} THEN customer END)"
        found = self.engine.rows(
            f"SELECT {self.file_of()} AS f, {self.outcome} AS o, count(*), {who} FROM rows WHERE {self.outcome} <> 0 "
            "GROUP BY 1, 2"
        )
        found += [(f, ASIDE_OF["after_exit"], n, c) for f, n, c in self._after_exit()]
        aside = {f: n for f, o, n, _ in found if o == ASIDE_OF["after_exit"]}
        lines = [(*outcome_of(o), names[f], int(n), int(c)) for f, o, n, c in found]
        used = self.engine.rows(
            f"SELECT {self.file_of()} AS f, count(*) FROM rows WHERE {self.outcome} = 0 GROUP BY 1"
        )
        left = {f: int(n) - aside.get(f, 0) for f, n in used}
        return [
            *lines,
            *(("used", "", names[f], n, used_customers) for f, n in left.items() if n or len(names) == 1),
        ]

    def _after_exit(self) -> list[tuple[int, int, int]]:
        return self.engine.rows(
            f"SELECT {self.file_of('rows.rowid')} AS f, count(*), count(DISTINCT customer) FROM rows "
            "JOIN aside_rows ON rows.rowid = aside_rows.r GROUP BY 1"
        )

    def _customers(self, names: list[str], used_customers: int) -> dict[tuple[str, str, str], int]:
        """Counts of customers that do not add up over outcomes or files."""
        there = f"NOT {id_missing_sql('customer')}"
        out = {("used", "", TOTAL): used_customers}
        out[("read", "", TOTAL)] = int(
            self.engine.one(f"SELECT count(DISTINCT customer) FROM rows WHERE {there}")
        )
        if len(names) == 1:
            out[("read", "", names[0])] = out[("read", "", TOTAL)]
            out[("used", "", names[0])] = used_customers
            return out
        file = self.file_of()
        for f, n in self.engine.rows(
            f"SELECT {file}, count(DISTINCT customer) FROM rows WHERE {there} GROUP BY 1"
        ):
            out[("read", "", names[f])] = int(n)
        used = f"{self.outcome} = 0 AND rowid NOT IN (SELECT r FROM aside_rows)"
        for f, n in self.engine.rows(
            f"SELECT {file}, count(DISTINCT customer) FROM rows WHERE {used} GROUP BY 1"
        ):
            out[("used", "", names[f])] = int(n)
        who = f"count(DISTINCT CASE WHEN {there} THEN customer END)"
        for o, n in self.engine.rows(
            f"SELECT {self.outcome} AS o, {who} FROM rows WHERE {self.outcome} <> 0 GROUP BY 1"
        ):
            out[(*outcome_of(o), TOTAL)] = int(n)
        after = "SELECT count(DISTINCT customer) FROM rows JOIN aside_rows ON rows.rowid = aside_rows.r"
        out[("set_aside", "after_exit", TOTAL)] = int(self.engine.one(after))
        return out

    # ---- the rows themselves ----
    def rejected(self, *, keep_values: bool = False) -> pd.DataFrame:
        """file, line, column, reason[, value] of rows rejected, dropped, or set aside after an exit."""
        found = self.engine.connection.execute(
            f"SELECT rowid AS r, fault::INTEGER AS o, {'bad' if keep_values else 'NULL'} AS v FROM rows WHERE fault > 0 "
            f"UNION ALL SELECT r, {ASIDE_OF['after_exit']}, NULL FROM aside_rows ORDER BY 1"
        ).df()
        file, line = self.place(found["r"].to_numpy())
        named = self._columns_of_reasons()
        reasons = [outcome_of(o)[1] for o in found["o"]]
        parts = [pd.DataFrame({"f": file, "line": line, "reason": reasons, "value": found["v"].to_numpy()})]
        for k, source in enumerate(self.loaded.sources):
            if source.bad:
                bad = self.finder(k).bad_lines()
                parts.append(pd.DataFrame({"f": k, "line": bad, "reason": [why for _, why in source.bad]}))
        whole = pd.concat(parts, ignore_index=True).sort_values(
            ["f", "line"], kind="stable", ignore_index=True
        )
        out = pd.DataFrame(
            {
                "file": [self.loaded.sources[int(f)].name for f in whole["f"]],
                "line": whole["line"].astype("int64"),
                "column": [named.get(r, "") for r in whole["reason"]],
                "reason": whole["reason"].astype(object),
            }
        )
        return out.assign(value=whole["value"].fillna("")) if keep_values else out

    def _columns_of_reasons(self) -> dict[str, str]:
        spec = self.study.input
        named = {
            "id_missing": spec.customer,
            "time_unreadable": spec.time,
            "outside_calendar": spec.time,
            "unknown_event": spec.event,
            "unknown_state": spec.state,
            "amount_unreadable": spec.amount,
            "valid_until_unreadable": spec.valid_until,
            "weight_unreadable": spec.weight,
            "end_unreadable": spec.end,
            "end_before_start": spec.end,
            "superseded": spec.event_id,
        }
        return {reason: name for reason, name in named.items() if name}

    def inputs(self) -> tuple[InputFile, ...]:
        """Fingerprints of the sources."""
        return tuple(
            InputFile(s.name, s.size, s.sha256, s.rows + len(s.bad), s.shown) for s in self.loaded.sources
        )


def check_missing(missing: int, rows: int, column: str | None) -> None:
    """InputError when more than 5 % of the rows have no id."""
    if missing > MOST_MISSING * rows:
        raise InputError(
            f'The column "{column}" is blank or a placeholder in {missing:,} of {rows:,} rows '
            f"({100 * missing / rows:.1f} %); at most {100 * MOST_MISSING:.0f} % are tolerated. See whether "
            "it is the right column (`customer` in [input]), or repair the extract."
        )


def outcome_of(code: int) -> tuple[str, str]:
    """(outcome, reason) of an outcome code."""
    return FAULTS[code] if code in FAULTS else ("set_aside", SET_ASIDE[code])


def step_case(value: str, starts: Sequence[int]) -> str:
    """SQL for how many of the ascending `starts` are at most `value`, by nested choices.

    >>> step_case("x", [10])
    'CASE WHEN x < 10 THEN 0 ELSE 1 END'
    """

    def between(low: int, high: int) -> str:
        if low == high:
            return str(low)
        middle = (low + high) // 2
        return f"CASE WHEN {value} < {starts[middle]} THEN {between(low, middle)} ELSE {between(middle + 1, high)} END"

    return between(0, len(starts))
