"""What the layouts share: a reading in progress, its outcomes by row, and the History that comes of it."""

from __future__ import annotations

from collections import Counter
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.errors import InputError
from cohortflow.history.accounts import ANY, SET_ASIDE, Accounts, outcome_of
from cohortflow.history.check import TOTAL, Check, Finding, balanced, check_balance
from cohortflow.history.columns import FAULT_OF
from cohortflow.history.engine import Engine
from cohortflow.history.lines import LineFinder
from cohortflow.history.load import Loaded, Progress
from cohortflow.history.whole import Whole
from cohortflow.periods import Calendar
from cohortflow.record import Record
from cohortflow.states import States
from cohortflow.study import Study
from cohortflow.tally import Tally

MOST_MISSING = 0.05
LINES_SHOWN = 5


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
    """A reading in progress on one engine: table `rows` is filled, findings gather.

    whole : what must be known of the whole extract when this is a part of it (see distribute.py), else None
    """

    engine: Engine
    study: Study
    loaded: Loaded
    progress: Progress
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
    def accounting(self, accounts: Accounts) -> Check:
        """The accounting of all rows; RuntimeError when it does not balance."""
        lines = [(*outcome_of(o), f, n, accounts.customers[o, f]) for (o, f), n in accounts.rows.items()]
        lines += [("rejected", "id_missing", f, n, 0) for f, n in self._without_id()]
        bad = Counter((k, why) for k, s in enumerate(self.loaded.sources) for _, why in s.bad)
        lines += [("rejected", why, k, n, 0) for (k, why), n in bad.items()]
        names = [s.name for s in self.loaded.sources]
        known = {(*outcome_of(o), f): n for (o, f), n in accounts.customers.items() if o != ANY}
        known |= {("read", "", f): n for (o, f), n in accounts.customers.items() if o == ANY}
        frame = balanced(
            [(outcome, reason, names[f], n, c) for outcome, reason, f, n, c in lines],
            {(o, r, TOTAL if f < 0 else names[f]): n for (o, r, f), n in known.items()},
            files=names,
        )
        read = {s.name: s.rows + len(s.bad) for s in self.loaded.sources}
        check_balance(frame, {**read, TOTAL: sum(read.values())})
        return Check(frame, tuple(self.findings))

    def _without_id(self) -> list[tuple[int, int]]:
        """(file, rows) without an id."""
        starts = [s.first for s in self.loaded.sources]
        file = step_case("rowid", starts[1:])
        return [
            (int(f), int(n))
            for f, n in self.engine.rows(f"SELECT {file} AS f, count(*) FROM rows WHERE fault = 1 GROUP BY 1")
        ]

    # ---- the rows themselves ----
    def rejected(self, accounts: Accounts) -> pd.DataFrame:
        """file, line, column, reason[, value] of rows rejected, dropped, or set aside after an exit."""
        keep_values = "bad" in self.loaded.has
        found = self.engine.arrays(
            f"SELECT rowid AS r, fault::INTEGER AS o{', bad AS v' if keep_values else ''} FROM rows WHERE fault > 0"
        )
        record, outcome = accounts.listed_rows()
        fresh = np.isin(outcome, [*SET_ASIDE, FAULT_OF["identical"]]) | ~np.isin(record, found["r"])
        record, outcome = record[fresh], outcome[fresh]
        file, line = self.place(np.concatenate([found["r"], record]))
        codes = np.concatenate([found["o"], outcome])
        values = [*(found["v"] if keep_values else [""] * len(found["r"])), *([""] * len(record))]
        table = pd.DataFrame({"f": file, "line": line, "o": codes, "value": pd.Series(values, dtype=object)})
        reasons = {code: outcome_of(code)[1] for code in np.unique(codes).tolist()}
        table["reason"] = table["o"].map(reasons)
        parts = [table]
        for k, source in enumerate(self.loaded.sources):
            if source.bad:
                why = [reason for _, reason in source.bad]
                parts.append(
                    pd.DataFrame({"f": k, "line": self.finder(k).bad_lines(), "reason": why, "value": ""})
                )
        whole = pd.concat(parts, ignore_index=True).sort_values(
            ["f", "line"], kind="stable", ignore_index=True
        )
        return self._shown_rows(whole, keep_values)

    def _shown_rows(self, table: pd.DataFrame, keep_values: bool) -> pd.DataFrame:
        names = {k: s.name for k, s in enumerate(self.loaded.sources)}
        columns = self._columns_of_reasons()
        out = pd.DataFrame(
            {
                "file": table["f"].map(names).astype(object),
                "line": table["line"].astype("int64"),
                "column": table["reason"].map(columns).fillna("").astype(object),
                "reason": table["reason"].astype(object),
            }
        )
        return out.assign(value=table["value"].fillna("")) if keep_values else out

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
