"""The columns of an extract as SQL: ids as text, money in whole minor units, names as codes, the fault of a row."""

from __future__ import annotations

import re
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from typing import Any

from cohortflow.errors import InputError
from cohortflow.history.engine import quoted, texts
from cohortflow.history.sources import Source

PLACEHOLDERS = ("", "0", "-1", "unknown", "test")
AMOUNT_SCALE, WEIGHT_SCALE = 100, 1_000_000
IGNORED, UNKNOWN, BLANK = -1, -2, -3  # codes of rows that are set aside, never counted
SEPARATOR = "\x1f"  # between the values of several segment columns

# Fault codes in the order in which the columns of a row are looked at.
FAULTS = {
    1: ("rejected", "id_missing"),
    2: ("rejected", "time_unreadable"),
    3: ("rejected", "unknown_event"),
    4: ("rejected", "amount_unreadable"),
    5: ("rejected", "valid_until_unreadable"),
    6: ("rejected", "weight_unreadable"),
    7: ("rejected", "unknown_state"),
    8: ("rejected", "end_unreadable"),
    9: ("rejected", "end_before_start"),
    10: ("rejected", "outside_calendar"),
    20: ("duplicate", "identical"),
    21: ("duplicate", "superseded"),
    22: ("duplicate", "overlap"),
}
FAULT_OF = {reason: code for code, (_, reason) in FAULTS.items()}


@dataclass(frozen=True)
class Field:
    """One column of a source: its expression and the engine's type."""

    sql: str
    type: str
    name: str

    @property
    def is_text(self) -> bool:
        return self.type == "VARCHAR"

    @property
    def text(self) -> str:
        """The value as text; whole floats without their ".0" (ids that went through a table with blanks)."""
        if self.is_text:
            return self.sql
        if self.type in ("DOUBLE", "FLOAT"):
            whole = f"{self.sql} = trunc({self.sql}) AND abs({self.sql}) < 1e15"
            return f"(CASE WHEN {whole} THEN ({self.sql}::BIGINT)::VARCHAR ELSE {self.sql}::VARCHAR END)"
        return f"{self.sql}::VARCHAR"


def field_of(source: Source, wanted: str, key: str) -> Field:
    """The column that a key of [input] names; InputError when it is not there."""
    place = source.column(wanted, key)
    return Field(f"c{place}", source.types[place], source.columns[place])


def id_missing_sql(text: str) -> str:
    """Whether an id is blank or a placeholder."""
    longest = max(map(len, PLACEHOLDERS))
    return (
        f"(CASE WHEN length({text}) > {longest} AND {text} >= '!' THEN false "
        f"ELSE {text} IS NULL OR lower(trim({text})) IN {texts(PLACEHOLDERS)} END)"
    )


def code_sql(text: str, codes: Mapping[str, int], other: str = "NULL") -> str:
    """The code of a name; `codes` holds every accepted spelling."""
    by_code: dict[int, list[str]] = {}
    for spelling, code in codes.items():
        by_code.setdefault(code, []).append(spelling)
    if not by_code:
        return f"({other})::SMALLINT"
    whens = " ".join(f"WHEN {quoted(name)} THEN {code}" for code, names in by_code.items() for name in names)
    return f"(CASE {text} {whens} ELSE {other} END)::SMALLINT"


@dataclass(frozen=True)
class Money:
    """How amounts are written: the decimal mark and the mark between groups of digits."""

    decimal: str = "."
    group: str = ""


def money_style(samples: Sequence[str], delimiter: str | None, given: str | None) -> Money:
    """From values such as "1,50" or "1.234,50"; `given` is the `decimal` of the study.

    >>> money_style(["12,50", "1.234,00"], ";", None)
    Money(decimal=',', group='.')
    >>> money_style(["12.50", "3"], ",", None)
    Money(decimal='.', group='')
    """
    values = [v.strip() for v in samples if v and v.strip()]
    with_comma = sum("," in v for v in values)
    if given is None:
        comma_last = sum(bool(re.fullmatch(r"[-+]?[\d.]*,\d{1,2}", v)) for v in values)
        dot_last = sum(bool(re.fullmatch(r"[-+]?[\d,]*\.\d+", v)) for v in values)
        decimal = "," if comma_last > dot_last else "."
    else:
        decimal = given
    group = "." if decimal == "," else ","
    grouped = any(re.fullmatch(rf"[-+]?\d{{1,3}}(\{group}\d{{3}})+(\{decimal}\d+)?", v) for v in values)
    return Money(decimal, group if grouped and (with_comma or decimal == ",") else "")


def amount_sql(field: Field, style: Money) -> tuple[str, str]:
    """(whole minor units or NULL, whether the value is there but unreadable)."""
    if field.is_text:
        text = f"trim({field.sql})"
        if style.group:
            text = f"replace({text}, {quoted(style.group)}, '')"
        if style.decimal != ".":
            text = f"replace({text}, {quoted(style.decimal)}, '.')"
        there = f"({field.sql} IS NOT NULL AND trim({field.sql}) <> '')"
    else:
        text, there = field.sql, f"({field.sql} IS NOT NULL AND NOT isnan({field.sql}::DOUBLE))"
    units = f"(try_cast({text} AS DECIMAL(18, 2)) * {AMOUNT_SCALE})::BIGINT"
    return f"CASE WHEN {there} THEN {units} END", f"({there} AND try_cast({text} AS DECIMAL(18, 2)) IS NULL)"


def weight_sql(field: Field) -> tuple[str, str]:
    """(weight in millionths, whether it is missing, negative or unreadable)."""
    number = f"try_cast({field.sql} AS DOUBLE)"
    good = f"coalesce({number} >= 0 AND {number} < 1e9, false)"
    return f"CASE WHEN {good} THEN round({number} * {WEIGHT_SCALE})::BIGINT ELSE 0 END", f"NOT {good}"


def joined_text(fields: Sequence[Field]) -> str:
    """The values of several columns in one text."""
    parts = [f"coalesce({f.text}, '')" for f in fields]
    return f" || {quoted(SEPARATOR)} || ".join(parts)


def row_hash(source: Source) -> str:
    """64 bits of all columns, to find identical rows."""
    return f"hash({', '.join(f'c{i}' for i in range(len(source.columns)))})"


def fault_sql(checks: Sequence[tuple[str, str]]) -> str:
    """The code of the first fault of a row, 0 for none; checks are (reason, condition) in order."""
    whens = " ".join(f"WHEN {condition} THEN {FAULT_OF[reason]}" for reason, condition in checks)
    return f"(CASE {whens} ELSE 0 END)::UTINYINT"


def check_amounts_fit(largest: Any) -> None:
    """InputError when a customer's sum of one period is too large for exact squares."""
    if largest is not None and int(largest) > 2_000_000_000:
        raise InputError(
            f"One customer's amounts in one period add up to {int(largest) / AMOUNT_SCALE:,.2f}; sums above "
            "20,000,000.00 cannot be squared exactly. Give amounts in larger units (thousands), or leave "
            "`amount` out of [input]."
        )
