"""Malformed extracts: bytes of a small event log, spoilt in ways that exports are spoilt, and in ways they are not."""

from __future__ import annotations

import gzip
from random import Random

HEADER = b"who,at,what"
DATES = (
    "2026-01-02",
    "2026-02-03 10:15",
    "2026-03-04 10:15:59",
    "2026-02-30",
    "0000-00-00",
    "9999-12-31",
    "infinity",
    "-infinity",
    "epoch",
    "now",
    "today",
    "20260101",
    "2026-01-01T00:00:00.123456789",
    "2026-01-01 24:00",
    "1E400",
    "2026-13-01",
    "",
    " ",
    "NULL",
    "nan",
    "03/04/2026",
    "\u0662\u0660\u0662\u0666-01-01",
    "2026-01-02 foo",
    "-2026-01-01",
)
IDS = (
    "a",
    "b",
    "007",
    "NA",
    "null",
    "1E5",
    "12345678901234567890",
    "-1",
    "0",
    "",
    " ",
    "=1+1",
    "\u202ecba",
    "\U0001f966",
    "x" * 300,
)
EVENTS = (
    "in",
    "out",
    "In ",
    "OUT",
    "",
    "=cmd()",
    "o'ut",
    'a"; drop table rows; --',
    "\u0645\u0631\u062d\u0628\u0627",
    "in\tout",
)
HEADERS = (
    b"",
    b",,",
    b"who,at",
    b"who,who,what",
    b"who,at,what,",
    b'"who","at","what"',
    b'who,"at,what',
    b"WHO , At,WHAT",
    b'who,at,what,"a""; drop table rows; --"',
    b"who;at;what",
    b"who\tat\twhat",
    b"1,2,3",
    b"who,at,what," + b"x" * 5000,
    b"\xff\xfe\xff",
    b"who,at,what,what ",
    b"rowid,c0,fault",
    b"who,at,what,c0,h,fault",
)


def table(rng: Random, rows: int) -> bytes:
    """A small log whose values are often odd."""
    lines = [HEADER]
    for _ in range(rows):
        good = rng.random() < 0.6
        who = rng.choice("abcd") if good else rng.choice(IDS)
        at = f"2026-0{rng.randint(1, 5)}-1{rng.randint(0, 9)}" if good else rng.choice(DATES)
        what = rng.choice(("in", "out")) if good else rng.choice(EVENTS)
        lines.append(",".join((who, at, _field(what))).encode())
    return b"\n".join(lines) + b"\n"


def _field(text: str) -> str:
    return '"' + text.replace('"', '""') + '"' if '"' in text else text


def spoil(data: bytes, rng: Random) -> bytes:
    """One of the ways to spoil a file, or several."""
    for _ in range(rng.choice((1, 1, 1, 2, 3))):
        data = rng.choice(WAYS)(data, rng)
    return data


def _at(data: bytes, rng: Random) -> int:
    return rng.randint(0, len(data))


def _insert(*pieces: bytes):
    def way(data: bytes, rng: Random) -> bytes:
        for _ in range(rng.randint(1, 4)):
            i = _at(data, rng)
            data = data[:i] + rng.choice(pieces) + data[i:]
        return data

    return way


def _cut(data: bytes, rng: Random) -> bytes:
    i, j = sorted((_at(data, rng), _at(data, rng)))
    return data[:i] + data[j:] if rng.random() < 0.5 else data[:i]


def _repeat(data: bytes, rng: Random) -> bytes:
    i, j = sorted((_at(data, rng), _at(data, rng)))
    return data[:j] + data[i:j] * rng.randint(1, 3) + data[j:]


def _noise(data: bytes, rng: Random) -> bytes:
    changed = bytearray(data)
    for _ in range(rng.randint(1, 6)):
        if changed:
            changed[rng.randrange(len(changed))] = rng.randrange(256)
    return bytes(changed)


def _ragged(data: bytes, rng: Random) -> bytes:
    lines = data.split(b"\n")
    for _ in range(rng.randint(1, 4)):
        k = rng.randrange(len(lines))
        lines[k] = lines[k] + b"," * rng.randint(1, 5) if rng.random() < 0.5 else lines[k].rpartition(b",")[0]
    return b"\n".join(lines)


def _header(data: bytes, rng: Random) -> bytes:
    return rng.choice(HEADERS) + b"\n" + data.partition(b"\n")[2]


def _newlines(data: bytes, rng: Random) -> bytes:
    ends = (b"\r\n",) if rng.random() < 0.3 else (b"\n", b"\r\n", b"\r", b"\n\n", b" \n", b"\n\r\n")
    return b"".join(line + rng.choice(ends) for line in data.split(b"\n"))


def _encoded(data: bytes, rng: Random) -> bytes:
    text = data.decode("utf-8", "replace")
    name = rng.choice(
        ("utf-16", "utf-16-le", "utf-16-be", "utf-32", "cp1252", "utf-8-sig", "latin-1", "cp037", "utf-7")
    )
    return text.encode(name, "replace")


def _delimiter(data: bytes, rng: Random) -> bytes:
    mark = rng.choice((b";", b"\t", b"|", b" ", b"::", b"\x1f"))
    return data.replace(b",", mark) if rng.random() < 0.6 else data.replace(b",", mark, rng.randint(1, 9))


def _huge(data: bytes, rng: Random) -> bytes:
    i = _at(data, rng)
    return (
        data[:i]
        + rng.choice((b"x", b"9", b'"', b",", b"\n", b"\xc3\xa9")) * rng.choice((300, 5000, 140_000))
        + data[i:]
    )


def _packed(data: bytes, rng: Random) -> bytes:
    packed = gzip.compress(data, mtime=0)
    return packed if rng.random() < 0.3 else _cut(packed, rng) if rng.random() < 0.5 else _noise(packed, rng)


def _nothing(data: bytes, rng: Random) -> bytes:
    return rng.choice(
        (b"", b"\n", b"\x00", b"\xef\xbb\xbf", b"who,at,what", b"who,at,what\n", b"\xff" * 40, b"PAR1")
    )


WAYS = (
    _insert(b'"'),
    _insert(b'"', b'""', b'"\n', b',"'),
    _insert(b"\x00"),
    _insert(b"\x1a", b"\x7f", b"\x0b", b"\x0c"),
    _insert(b"\xff", b"\xc3", b"\xe2\x80", b"\xed\xa0\x80", b"\xf4\x90\x80\x80"),
    _insert("\u2028\u202e\ufeff".encode()),
    _insert(b"\\", b"\\n", b"'", b"#", b"--", b"%"),
    _cut,
    _repeat,
    _noise,
    _ragged,
    _header,
    _newlines,
    _encoded,
    _delimiter,
    _packed,
    _nothing,
    _huge,
)
