"""Tables for people and for machines: plain text that fits a terminal, CSV and JSON.

`Table` is what the page and the terminal show: headings and cells that are already words. CSV and JSON are
written from full-precision frames and records instead; text cells are neutralised here and nowhere else.
"""

from __future__ import annotations

import csv
import io
import json
from collections.abc import Iterable, Sequence
from dataclasses import dataclass, replace
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.errors import CallError
from cohortflow.record import Record, plain
from cohortflow.report.text import clean, neutral, width, wrap

WIDTH = 80
GAP = "  "
NARROWEST, TALLEST, HEAD_ROOM = 8, 3, 14
PAPER = 120


@dataclass(frozen=True)
class Table:
    """A table to read: `numbers` says which columns hold figures (right-aligned, never broken).

    >>> print(plain_text(Table("Moves", ("state", "left"), (("weekly", "1.2%"), ("quiet", "14.0%")))))
    Moves
    state    left
    ------  -----
    weekly   1.2%
    quiet   14.0%
    """

    caption: str
    heads: tuple[str, ...]
    rows: tuple[tuple[str, ...], ...]
    texts: tuple[int, ...] = (0,)
    note: str = ""
    strong: tuple[int, ...] = ()

    def __post_init__(self) -> None:
        off = [i for i, row in enumerate(self.rows) if len(row) != len(self.heads)]
        if off:
            raise CallError(
                f'Row {off[0] + 1} of the table "{self.caption}" has {len(self.rows[off[0]])} cells for '
                f"{len(self.heads)} headings."
            )


def split(table: Table, *, room: int = PAPER) -> list[Table]:
    """The table in parts that fit a printed page (about `room` signs across), each led by the first column.

    >>> wide = Table("Rates", ("from", *"abcdef"), (("weekly", *["12.3%"] * 6),))
    >>> [part.heads for part in split(wide, room=30)]
    [('from', 'a', 'b', 'c'), ('from', 'd', 'e', 'f')]
    """
    cells = [table.heads, *table.rows]
    wide = [_across(cells, i, i in table.texts) for i in range(len(table.heads))]
    parts = _columns_within(wide, room)
    for less in range(room - 1, 0, -1):  # as many parts, but of like widths
        closer = _columns_within(wide, less)
        if len(closer) > len(parts):
            break
        parts = closer
    return [_part(table, columns) for columns in parts]


def _columns_within(wide: Sequence[int], room: int) -> list[list[int]]:
    parts, current = [], [0]
    for i in range(1, len(wide)):
        if sum(wide[j] for j in [*current, i]) > room and len(current) > 1:
            parts.append(current)
            current = [0]
        current.append(i)
    return [*parts, current]


def _across(cells: Sequence[Sequence[str]], column: int, is_text: bool) -> int:
    body = max((width(clean(row[column])) for row in cells[1:]), default=0)
    head = max((width(word) for word in clean(cells[0][column]).split()), default=0)
    return min(max(body, min(head, HEAD_ROOM)), 24 if is_text else 40) + len(GAP)


def _part(table: Table, columns: list[int]) -> Table:
    texts = tuple(k for k, i in enumerate(columns) if i in table.texts)
    heads = tuple(table.heads[i] for i in columns)
    rows = tuple(tuple(row[i] for i in columns) for row in table.rows)
    return replace(table, heads=heads, rows=rows, texts=texts)


def plain_text(table: Table, *, columns: int = WIDTH) -> str:
    """The table as aligned text of at most `columns` columns.

    Text columns are wrapped first; when the figures alone are too wide, the table is cut into blocks that
    repeat the first column.
    """
    cells = [[clean(c) for c in row] for row in (table.heads, *table.rows)]
    blocks = _blocks(cells, table.texts, columns)
    parts = ["\n".join(_block_lines(cells, block, table.texts, columns)) for block in blocks]
    head = "\n".join(wrap(clean(table.caption), columns)) if table.caption else ""
    body = "\n\n".join(parts)
    note = "\n".join(wrap(clean(table.note), columns)) if table.note else ""
    return "\n".join(p for p in (head, body, note) if p)


def _blocks(cells: list[list[str]], texts: Sequence[int], columns: int) -> list[list[int]]:
    """Column numbers of each block; the first column leads every block."""
    least = [_least(cells, i, i in texts) for i in range(len(cells[0]))]
    blocks, current = [], [0]
    for i in range(1, len(least)):
        used = sum(least[j] for j in [*current, i]) + len(GAP) * len(current)
        if used > columns and len(current) > 1:
            blocks.append(current)
            current = [0]
        current.append(i)
    return [*blocks, current]


def _least(cells: list[list[str]], column: int, is_text: bool) -> int:
    natural = max(width(row[column]) for row in cells)
    body = max((width(row[column]) for row in cells[1:]), default=0)
    head = max((width(word) for word in cells[0][column].split()), default=0)
    return min(natural, NARROWEST) if is_text else max(body, min(head, HEAD_ROOM))


def _block_lines(cells: list[list[str]], block: list[int], texts: Sequence[int], columns: int) -> list[str]:
    widths = _widths(cells, block, texts, columns)
    lines: list[str] = []
    for number, row in enumerate(cells):
        lines += _row_lines([row[i] for i in block], widths, [i in texts for i in block])
        if number == 0:
            lines.append(GAP.join("-" * w for w in widths))
    return lines


def _widths(cells: list[list[str]], block: list[int], texts: Sequence[int], columns: int) -> list[int]:
    """Natural widths, taken back to the least ones, widest first, until the block fits."""
    least = [_least(cells, i, i in texts) for i in block]
    widths = [min(max(width(row[i]) for row in cells), columns) for i in block]
    room = columns - len(GAP) * (len(block) - 1)
    while sum(widths) > room:
        spare = [w - m for w, m in zip(widths, least, strict=True)]
        most = int(np.argmax(spare))
        if spare[most] <= 0:
            break
        widths[most] -= 1
    return widths


def _row_lines(row: list[str], widths: list[int], is_text: list[bool]) -> list[str]:
    wrapped = [wrap(cell, max(w, 1), TALLEST) for cell, w in zip(row, widths, strict=True)]
    height = max(len(lines) for lines in wrapped)
    out = []
    for k in range(height):
        pieces = [
            _padded(lines[k] if k < len(lines) else "", w, left)
            for lines, w, left in zip(wrapped, widths, is_text, strict=True)
        ]
        out.append(GAP.join(pieces).rstrip())
    return out


def _padded(text: str, columns: int, left: bool) -> str:
    fill = " " * max(columns - width(text), 0)
    return text + fill if left else fill + text


def csv_text(frame: pd.DataFrame) -> str:
    """The frame as CSV: full precision, "\\n" line ends, missing values empty, text cells neutralised.

    >>> print(csv_text(pd.DataFrame({"state": ["=cmd"], "share": [0.1], "low": [float("nan")]})), end="")
    state,share,low
    '=cmd,0.1,
    """
    out = io.StringIO()
    writer = csv.writer(out, lineterminator="\n")
    writer.writerow([neutral(str(c)) for c in frame.columns])
    columns = [list(_csv_cells(frame.iloc[:, i])) for i in range(frame.shape[1])]
    writer.writerows(zip(*columns, strict=True))
    return out.getvalue()


def _csv_cells(column: pd.Series) -> Iterable[Any]:
    for value in column:
        if value is None or value is pd.NA or value is pd.NaT or value != value:
            yield ""
        elif isinstance(value, (bool, np.bool_)):
            yield "true" if value else "false"
        elif isinstance(value, (float, np.floating)):
            yield repr(float(value))
        elif isinstance(value, (int, np.integer)):
            yield int(value)
        else:
            yield neutral(str(value))


def json_text(result: Record | pd.DataFrame, **about: Any) -> str:
    """A record, or the rows of a frame, as JSON text with kind and format version; no NaN inside.

    >>> json_text(pd.DataFrame({"n": [1]}), kind="counts")[:42]
    '{\\n  "kind": "counts",\\n  "format_version": '
    """
    if isinstance(result, Record):
        content = {**result.to_dict(), **plain(about)}
    else:
        rows = plain(result.to_dict(orient="records"))
        content = {"kind": "table", "format_version": Record.format_version, **plain(about), "rows": rows}
    return json.dumps(content, indent=2, ensure_ascii=False, allow_nan=False) + "\n"
