"""The small CSV files that a study file names: own calendar, planned joiners, budget."""

from __future__ import annotations

import csv
import math
from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from datetime import date
from pathlib import Path

from cohortflow.errors import CohortflowError, StudyError, listed, nearest
from cohortflow.periods import Calendar
from cohortflow.study.source import Table


@dataclass(frozen=True)
class Row:
    """One row of a side file with its place."""

    file: str
    line: int
    values: Mapping[str, str]

    def refuse(self, column: str, text: str) -> StudyError:
        """The error to raise for one cell."""
        return StudyError(f"{self.file}, line {self.line}, column {column}: {text}")

    def number(self, column: str) -> float:
        """A finite number."""
        try:
            value = float(self.values[column])
        except ValueError:
            value = math.nan
        if not math.isfinite(value):
            raise self.refuse(column, f'needs a number, got "{self.values[column]}".')
        return value

    def day(self, column: str) -> date:
        """A date written year-month-day."""
        try:
            return date.fromisoformat(self.values[column])
        except ValueError:
            raise self.refuse(column, f'"{self.values[column]}" is not a date like "2026-09-30".') from None

    def period(self, column: str, calendar: Calendar) -> int:
        """Ordinal of a period's label."""
        try:
            return calendar.parse(self.values[column])
        except CohortflowError as error:
            raise self.refuse(column, str(error)) from None

    def one_of(self, column: str, known: tuple[str, ...]) -> str:
        """A known name."""
        value = self.values[column]
        if value not in known:
            raise self.refuse(column, f'unknown "{value}"{nearest(value, known)}. Known: {listed(known)}.')
        return value


def read_rows(
    table: Table, key: str, folder: Path, file: str, needed: tuple[str, ...], optional: tuple[str, ...]
) -> Iterator[Row]:
    """Rows of a CSV file with the needed columns; StudyError names the key that asked for it, or the line."""
    try:
        text = (folder / file).read_text(encoding="utf-8-sig")
    except (OSError, ValueError) as error:  # ValueError: no UTF-8, or a zero byte in the name
        reason = error.strerror if isinstance(error, OSError) else "it is not UTF-8 text"
        raise table.refuse(
            key, f'cannot read "{file}": {reason}. Names start from the folder of the study file.'
        ) from None
    longest = csv.field_size_limit()
    if any(len(line) > longest for line in text.splitlines()):
        raise table.refuse(
            key, f'"{file}" has a line of more than {longest:,} characters; is it the right file?'
        )
    reader = csv.DictReader(text.splitlines())
    names = [name.strip() for name in reader.fieldnames or []]
    reader.fieldnames = names
    absent = [name for name in needed if name not in names]
    unknown = [name for name in names if name not in (*needed, *optional)]
    if absent or unknown:
        wrong = f"lacks {listed(absent)}" if absent else f"has the unknown column {listed(unknown)}"
        raise table.refuse(
            key,
            f'the header of "{file}" {wrong}; it needs {listed((*needed, *optional))}'
            f"{' (' + listed(optional) + ' may be left out)' if optional else ''}.",
        )
    for raw in reader:
        row = Row(file, reader.line_num, {name: (raw.get(name) or "").strip() for name in names})
        if None in raw or any(raw.get(name) is None for name in names):
            raise row.refuse(names[-1], f"the row does not have {len(names)} cells like the header.")
        yield row


def read_calendar(table: Table, key: str, folder: Path, file: str) -> tuple[tuple[str, date, date], ...]:
    """(label, first day, last day) rows of an own calendar."""
    rows = read_rows(table, key, folder, file, ("label", "start", "end"), ())
    return tuple((row.values["label"], row.day("start"), row.day("end")) for row in rows)
