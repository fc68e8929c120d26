"""How a text file is written: encoding, delimiter, header. Decided once, from its beginning, and shown.

Anything but UTF-8 is rewritten as UTF-8 into the work folder before the engine reads it.
"""

from __future__ import annotations

import codecs
import contextlib
import csv
import gzip
import io
import zlib
from dataclasses import dataclass
from pathlib import Path
from typing import IO

from cohortflow.errors import InputError, listed

HEAD_BYTES = 262_144
DELIMITERS = (",", ";", "\t", "|")
NAMES = {"\t": "tab", ",": "comma", ";": "semicolon", "|": "bar"}
_MARKS = (
    (codecs.BOM_UTF8, "utf-8-sig"),
    (codecs.BOM_UTF32_LE, "utf-32"),
    (codecs.BOM_UTF16_LE, "utf-16"),
    (codecs.BOM_UTF16_BE, "utf-16"),
)
_READ_AS_IS = ("utf-8", "utf-8-sig", "utf_8", "utf8", "ascii")
SAMPLED_ROWS = 2000
MOST_COLUMNS = 10_000  # more are a sign of a wrong delimiter, and take minutes to look at


@dataclass(frozen=True)
class Dialect:
    """`sample`: the first records as lists of text; `guessed`: encoding or delimiter were not given.
    `blank_lines`: empty lines before the header, which the engine would take for the header."""

    encoding: str
    delimiter: str
    header: tuple[str, ...]
    sample: tuple[tuple[str, ...], ...]
    newline_only_cr: bool = False
    packed: bool = False
    guessed: tuple[str, ...] = ()
    blank_lines: int = 0

    @property
    def as_is(self) -> bool:
        """Whether the engine can read the file itself."""
        return self.encoding in _READ_AS_IS and not self.newline_only_cr

    def shown(self) -> str:
        """For the accounting: `utf-8, semicolon`."""
        return f"{self.encoding}, {NAMES.get(self.delimiter, repr(self.delimiter))}"


def detect(path: Path, *, encoding: str | None = None, delimiter: str | None = None) -> Dialect:
    """The dialect of a file; InputError says what is unclear, shows the beginning and names the option."""
    packed = is_packed(path)
    raw = _head(path, packed)
    if not raw.strip(b"\x00\xff\xfe\xef\xbb\xbf \r\n\t"):
        raise InputError(f"{path.name}: the file is empty; it needs a line of column names and rows.")
    found = _encoding(path, raw, encoding)
    text = _decoded(path, raw, found)
    only_cr = "\n" not in text and "\r" in text
    lines = text.replace("\r\n", "\n").replace("\r", "\n")
    separator, records = _records(path, lines, delimiter, complete=len(raw) < HEAD_BYTES)
    header = _header(path, records[0])
    guessed = (*(() if encoding else ("encoding",)), *(() if delimiter else ("delimiter",)))
    sample = tuple(tuple(r) for r in records[1 : SAMPLED_ROWS + 1])
    blank = len(lines) - len(lines.lstrip("\n"))
    return Dialect(found, separator, header, sample, only_cr, packed, guessed, blank)


def is_packed(path: Path) -> bool:
    """Whether the file is gzip, by its first bytes."""
    with path.open("rb") as file:
        return file.read(2) == b"\x1f\x8b"


def opened_bytes(path: Path, packed: bool) -> IO[bytes]:
    """The file, unpacked."""
    return gzip.open(path, "rb") if packed else path.open("rb")  # type: ignore[return-value]


def transcoded(path: Path, dialect: Dialect, folder: Path, number: int) -> Path:
    """A copy in UTF-8 with ordinary line ends; InputError names the line that is not in the encoding."""
    target = folder / f"text-{number}.csv"
    line = 1
    with opened_bytes(path, dialect.packed) as raw, target.open("w", encoding="utf-8", newline="") as out:
        reader = io.TextIOWrapper(raw, encoding=dialect.encoding, errors="strict", newline="")
        try:
            while block := reader.read(1 << 20):
                line += block.count("\n")
                out.write(block.replace("\r", "\n") if dialect.newline_only_cr else block)
        except (UnicodeDecodeError, UnicodeError) as error:
            raise InputError(
                f"{path.name}: after about line {line} the text is not {dialect.encoding} ({error}). "
                'Set `encoding` in [input], for instance encoding = "cp1252".'
            ) from None
        except (OSError, EOFError, zlib.error) as error:
            raise InputError(f"{path.name}: cannot unpack the file: {error}.") from None
    return target


def _head(path: Path, packed: bool) -> bytes:
    try:
        with opened_bytes(path, packed) as file:
            return file.read(HEAD_BYTES)
    except (OSError, EOFError, zlib.error) as error:
        raise InputError(f"{path.name}: cannot read the file: {error}.") from None


def _encoding(path: Path, raw: bytes, given: str | None) -> str:
    if given:
        return "utf-8-sig" if given.lower().replace("_", "-") in ("utf-8", "utf8") else given.lower()
    for mark, name in _MARKS:
        if raw.startswith(mark):
            return name
    zeros = raw.count(b"\x00")
    if zeros:
        if zeros > len(raw) // 4:
            return "utf-16-le" if raw[1::2].count(0) > raw[0::2].count(0) else "utf-16-be"
        raise InputError(
            f"{path.name}: this is not a text file (it begins {raw[:16]!r}). Allowed: text with delimiters, "
            "plain or gzip, and Parquet; save it as CSV."
        )
    try:
        codecs.getincrementaldecoder("utf-8")().decode(raw)
        return "utf-8"
    except UnicodeDecodeError:
        pass
    if any(byte in raw for byte in (0x81, 0x8D, 0x8F, 0x90, 0x9D)):
        raise InputError(
            f"{path.name}: the text is neither UTF-8 nor Windows-1252 (it begins {raw[:24]!r}). "
            "Set `encoding` in [input]."
        )
    return "cp1252"


def _decoded(path: Path, raw: bytes, encoding: str) -> str:
    try:
        return codecs.getincrementaldecoder(encoding)("strict").decode(raw).lstrip("\ufeff")
    except (UnicodeDecodeError, UnicodeError) as error:
        raise InputError(
            f"{path.name}: the text is not {encoding} ({error}); set another `encoding` in [input]."
        ) from None


def _records(path: Path, text: str, delimiter: str | None, *, complete: bool) -> tuple[str, list[list[str]]]:
    """The delimiter and the records of the beginning, the last one dropped if it may be cut."""
    candidates = (delimiter,) if delimiter else DELIMITERS
    parsed = {d: _parsed(text, d, complete) for d in candidates}
    if delimiter:
        return delimiter, parsed[delimiter]

    def fit(d: str) -> tuple[float, int]:
        wide = len(parsed[d][0])
        same = sum(len(r) == wide for r in parsed[d]) / len(parsed[d])
        return (round(same, 1), wide) if wide > 1 else (0.0, 0)

    best = max(candidates, key=fit)
    if fit(best)[0] < 0.5:
        raise InputError(
            f"{path.name}: cannot tell what separates the columns; the file begins {text[:60]!r}. "
            f"Tried {listed(NAMES[d] for d in DELIMITERS)}. Set `delimiter` in [input]."
        )
    return best, parsed[best]


def _parsed(text: str, delimiter: str, complete: bool) -> list[list[str]]:
    reader = csv.reader(io.StringIO(text, newline=""), delimiter=delimiter)
    records: list[list[str]] = []
    with contextlib.suppress(csv.Error):
        for record in reader:
            if record:
                records.append(record)
    if not complete and len(records) > 1:
        records.pop()
    return records or [[text[:40]]]


def _header(path: Path, names: list[str]) -> tuple[str, ...]:
    header = tuple(name.strip() for name in names)
    if len(header) > MOST_COLUMNS:
        raise InputError(
            f"{path.name}: the header line has {len(header):,} columns; at most {MOST_COLUMNS:,} are read. See that "
            "it ends in a line break, and that `delimiter` in [input] is right."
        )
    repeated = sorted({n for n in header if n and header.count(n) > 1})
    if repeated:
        raise InputError(
            f"{path.name}: the columns {listed(repeated)} stand more than once in the header line; "
            "give each column its own name."
        )
    return header
