"""The tables of a run as one workbook: a summary that foots, then one tidy sheet a table, in full precision.

Text is stored as text, so that no name can become a formula. The archive carries no clock: its dates are those
of SOURCE_DATE_EPOCH, or 1980-01-01, and the same tables give the same bytes.
"""

from __future__ import annotations

import importlib.util
import io
import math
import re
import zipfile
from collections.abc import Iterable, Mapping, Sequence
from datetime import UTC, datetime
from typing import Any

import numpy as np
import pandas as pd

from cohortflow.errors import OutputError
from cohortflow.report.text import clean
from cohortflow.states import ALL_LIVE

FIRST_DAY = datetime(1980, 1, 1)  # the earliest that an archive can hold
LONGEST = 1_048_576  # rows of a sheet
SHARES = {
    "share", "share_low", "share_high", "probability", "level", "observed", "observed_low", "observed_high", "model",
    "model_low", "model_high", "chance_best", "relative",
}  # fmt: skip
WHOLE, FRACTION, SHARE, PLAIN = "#,##0", "#,##0.00", "0.0%", "General"
TAKING = ("lost", "moved_out", "unobserved_out")
WIDEST = 60


def check_available() -> None:
    """OutputError when the writer of workbooks is not installed."""
    if importlib.util.find_spec("openpyxl") is None:
        raise OutputError(
            'A workbook needs openpyxl, which is not installed. Install it with pip install "cohortflow[excel]", or '
            "leave the workbook out: the tables are CSV files too."
        )


def workbook_bytes(
    title: str, facts: Mapping[str, Any], tables: Mapping[str, pd.DataFrame], *, epoch: int | None = None
) -> bytes:
    """The workbook as the bytes of an .xlsx file.

    facts : what the summary tells first (as of, model, level, seed ...)
    epoch : seconds for its dates, SOURCE_DATE_EPOCH;  OutputError when a table is too long for a sheet
    """
    check_available()
    from openpyxl import Workbook

    _refuse_long(tables)
    book = Workbook(write_only=True)
    _summary(book.create_sheet("summary"), title, facts, tables)
    for name, frame in tables.items():
        _sheet(book.create_sheet(name), frame)
    stamp = (
        FIRST_DAY
        if epoch is None
        else max(datetime.fromtimestamp(epoch, UTC).replace(tzinfo=None), FIRST_DAY)
    )
    book.properties.creator, book.properties.title = "cohortflow", clean(title)
    book.properties.created = stamp
    raw = io.BytesIO()
    book.save(raw)
    return _without_clock(raw.getvalue(), stamp)


def _refuse_long(tables: Mapping[str, pd.DataFrame]) -> None:
    for name, frame in tables.items():
        if len(frame) >= LONGEST:
            raise OutputError(
                f'The table "{name}" has {len(frame):,} rows, more than a sheet can hold ({LONGEST - 1:,}). Leave '
                "the workbook out; the tables are CSV files too."
            )


def _sheet(sheet: Any, frame: pd.DataFrame) -> None:
    """Header, frozen and with filters; a row a record; widths by content."""
    columns = [str(c) for c in frame.columns]
    formats = [_format(frame.iloc[:, i], name) for i, name in enumerate(columns)]
    _widths(sheet, [_width(name, frame.iloc[:, i]) for i, name in enumerate(columns)])
    sheet.freeze_panes = "A2"
    sheet.auto_filter.ref = f"A1:{_letter(len(columns))}{len(frame) + 1}"
    sheet.append([_cell(sheet, name, bold=True) for name in columns])
    values = [frame.iloc[:, i].tolist() for i in range(len(columns))]
    for row in zip(*values, strict=True):
        sheet.append([_cell(sheet, v, form) for v, form in zip(row, formats, strict=True)])


def _summary(sheet: Any, title: str, facts: Mapping[str, Any], tables: Mapping[str, pd.DataFrame]) -> None:
    _widths(sheet, [34, *[16] * 40])
    sheet.append([_cell(sheet, title, bold=True)])
    for name, value in facts.items():
        sheet.append([_cell(sheet, name), _cell(sheet, value)])
    if "rollforward" in tables:
        sheet.append([])
        _rollforward(sheet, tables["rollforward"], at=len(facts) + 3)


def _rollforward(sheet: Any, table: pd.DataFrame, *, at: int) -> None:
    """The live base ahead, one column a period; what takes away is negative, and a formula shows that it foots.

    at : the row of the sheet that the heading goes to
    """
    own = table[(table["segment"] == "all") & (table["kind"] == "forecast") & (table["state"] == ALL_LIVE)]
    periods = list(pd.unique(own["period"]))
    lines = [key for key in dict.fromkeys(zip(own["line"], own["exit"], strict=True)) if key[0] != "closing"]
    found = {(p, line, leaving): float(n) for p, line, leaving, n in
             zip(own["period"], own["line"], own["exit"], own["customers"], strict=True)}  # fmt: skip
    sheet.append([_cell(sheet, "Live base ahead", bold=True), *(_cell(sheet, p, bold=True) for p in periods)])
    for line, leaving in lines:
        sign = -1.0 if line in TAKING else 1.0
        words = f"{line}: {leaving}" if leaving else line
        values = [sign * found.get((p, line, leaving), math.nan) for p in periods]
        sheet.append([_cell(sheet, words), *(_cell(sheet, v, FRACTION) for v in values)])
    closing = [found.get((p, "closing", ""), math.nan) for p in periods]
    sheet.append(
        [_cell(sheet, "closing", bold=True), *(_cell(sheet, v, FRACTION, bold=True) for v in closing)]
    )
    last = at + len(lines)
    checks = [
        f"=ROUND(SUM({c}{at + 1}:{c}{last})-{c}{last + 1},6)"
        for c in map(_letter, range(2, len(periods) + 2))
    ]
    sheet.append([_cell(sheet, "check: the lines less the closing"), *checks])


def _cell(sheet: Any, value: Any, form: str = PLAIN, *, bold: bool = False) -> Any:
    """A cell that is a number, a flag, text or empty; text never becomes a formula."""
    from openpyxl.cell import WriteOnlyCell
    from openpyxl.styles import Font

    if value is None or value is pd.NA or value is pd.NaT or (isinstance(value, float) and math.isnan(value)):
        return None
    if isinstance(value, (float, np.floating)) and math.isinf(value):
        value = "inf" if value > 0 else "-inf"
    text = not isinstance(value, (bool, int, float, np.bool_, np.integer, np.floating))
    cell = WriteOnlyCell(sheet, value=clean(value) if text else value)
    if text:
        cell.data_type = "s"
        cell.quotePrefix = True
    else:
        cell.number_format = form
    if bold:
        cell.font = Font(bold=True)
    return cell


def _format(column: pd.Series, name: str) -> str:
    if name in SHARES:
        return SHARE
    if not pd.api.types.is_numeric_dtype(column):
        return PLAIN
    known = column.dropna().astype(float)
    known = known[np.isfinite(known)]
    if (known == known.round()).all():
        return WHOLE
    return FRACTION if float(known.abs().max()) >= 1 else PLAIN


def _width(name: str, column: pd.Series) -> int:
    texts = [] if pd.api.types.is_numeric_dtype(column) else [len(str(v)) for v in column.head(200)]
    return min(max([len(name) + 4, 10, *(n + 2 for n in texts)]), WIDEST)


def _widths(sheet: Any, widths: Sequence[int]) -> None:
    for number, width in enumerate(widths, start=1):
        sheet.column_dimensions[_letter(number)].width = width


def _letter(number: int) -> str:
    from openpyxl.utils import get_column_letter

    return str(get_column_letter(max(number, 1)))


def _without_clock(raw: bytes, stamp: datetime) -> bytes:
    """The same archive with every date set to `stamp`."""
    out = io.BytesIO()
    when = stamp.replace(microsecond=0)
    date = (when.year, when.month, when.day, when.hour, when.minute, when.second // 2 * 2)
    with zipfile.ZipFile(io.BytesIO(raw)) as old, zipfile.ZipFile(out, "w") as new:
        for entry in _sorted(old.infolist()):
            info = zipfile.ZipInfo(entry.filename, date_time=date)
            info.compress_type, info.create_system, info.external_attr = zipfile.ZIP_DEFLATED, 3, 0o644 << 16
            data = old.read(entry.filename)
            new.writestr(
                info, _stamped(data, when) if entry.filename == "docProps/core.xml" else data, compresslevel=6
            )
    return out.getvalue()


def _sorted(entries: Iterable[zipfile.ZipInfo]) -> list[zipfile.ZipInfo]:
    """The list of contents first, as readers expect it, then by name."""
    return sorted(entries, key=lambda e: (e.filename != "[Content_Types].xml", e.filename))


def _stamped(core: bytes, when: datetime) -> bytes:
    text = when.strftime("%Y-%m-%dT%H:%M:%SZ").encode()
    return re.sub(rb"(<dcterms:(created|modified)[^>]*>)[^<]*", rb"\g<1>" + text, core)
