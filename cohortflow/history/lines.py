"""Line numbers of the file itself, for records that the engine only numbers.

Where every record is one line, line = record + header. Where fields hold line breaks, or blank lines stand
between records, the file is looked through for the beginnings of its records.
"""

from __future__ import annotations

import csv
import io
import zlib
from collections.abc import Sequence
from pathlib import Path

import numpy as np

from cohortflow.errors import InputError
from cohortflow.history.dialect import opened_bytes
from cohortflow.history.sources import Source

CHUNK = 1 << 24


class LineFinder:
    """Lines of the records of one source. Frames and Parquet have no lines: the record's number, from 1."""

    def __init__(self, source: Source) -> None:
        self.source = source
        self._starts: np.ndarray | None = None
        self._bad: np.ndarray | None = None

    def lines(self, kept: Sequence[int] | np.ndarray) -> np.ndarray:
        """Line of each kept record (0 = the first that the engine kept); InputError when the file is damaged."""
        try:
            return self._lines(kept)
        except (OSError, EOFError, zlib.error) as error:
            raise InputError(
                f"{self.source.name}: the packed file is damaged ({error}); pack the extract again."
            ) from None

    def _lines(self, kept: Sequence[int] | np.ndarray) -> np.ndarray:
        kept = np.asarray(kept, dtype=np.int64) // self.source.cells
        if self.source.dialect is None:
            return kept + 1
        bad = self.bad_lines()
        starts = self._record_starts()
        if starts is None:
            index = kept + np.searchsorted(bad - 2 - np.arange(len(bad)), kept, side="right")
            return index + 2
        good = starts[~np.isin(starts, bad)]
        if (
            len(good) != self.source.rows // self.source.cells
        ):  # not resolvable; better no line than a wrong one
            return np.full(len(kept), -1, dtype=np.int64)
        return good[kept]

    def bad_lines(self) -> np.ndarray:
        """Line of each record that the reader could not split, in order."""
        if self._bad is None:
            positions = [p for p, _ in self.source.bad]
            self._bad = (
                _lines_at(self._path(), self._packed(), positions) if positions else np.empty(0, np.int64)
            )
        return self._bad

    def _path(self) -> Path:
        assert self.source.text_path is not None
        return self.source.text_path

    def _packed(self) -> bool:
        dialect = self.source.dialect
        return bool(dialect and dialect.packed and dialect.as_is)

    def _record_starts(self) -> np.ndarray | None:
        """Lines at which records begin; None when they simply follow each other."""
        if self._starts is None:
            records = self.source.rows // self.source.cells + len(self.source.bad)
            if _count_lines(self._path(), self._packed()) == records + 1:
                return None
            starts = _starts_by_quotes(self._path(), self._packed())
            if len(starts) != records + 1:
                starts = _starts_by_csv(self._path(), self._packed(), self.source)
            self._starts = starts[1:]
        return self._starts


def _count_lines(path: Path, packed: bool) -> int:
    lines, last = 0, b"\n"
    with opened_bytes(path, packed) as file:
        while block := file.read(CHUNK):
            lines += block.count(b"\n")
            last = block[-1:]
    return lines + (last != b"\n")


def _lines_at(path: Path, packed: bool, positions: Sequence[int]) -> np.ndarray:
    """Line of the first byte at or after each position (ascending) that is no line break."""
    out: list[int] = []
    line, read, carried = 1, 0, False
    wanted = list(positions)
    with opened_bytes(path, packed) as file:
        while len(out) < len(wanted) and (block := file.read(CHUNK)):
            here = 0
            while len(out) < len(wanted) and (carried or wanted[len(out)] < read + len(block)):
                place = max(wanted[len(out)] - read, 0)
                line += block.count(b"\n", here, place) if place > here else 0
                here = max(here, place)
                while here < len(block) and block[here] in b"\r\n":
                    line += block[here] == 10
                    here += 1
                carried = here == len(block)
                if carried:
                    break
                out.append(line)
            line += block.count(b"\n", here)
            read += len(block)
    return np.array(out + [line] * (len(wanted) - len(out)), dtype=np.int64)


def _starts_by_quotes(path: Path, packed: bool) -> np.ndarray:
    """Lines of records, taking a line break as inside a field where an odd number of quotation marks precede it."""
    out, line, odd, open_line = [], 1, 0, True
    with opened_bytes(path, packed) as file:
        while block := file.read(CHUNK):
            data = np.frombuffer(block, dtype=np.uint8)
            breaks = np.flatnonzero(data == 10)
            inside = (np.cumsum(data == 34)[breaks] + odd) % 2 == 1
            ends = np.flatnonzero(~inside)
            starts = np.concatenate([[line] if open_line else [], line + ends + 1]).astype(np.int64)
            places = np.concatenate([[0] if open_line else [], breaks[ends] + 1]).astype(np.int64)
            open_line = bool(len(places)) and places[-1] == len(data)
            if open_line:
                starts, places = starts[:-1], places[:-1]
            blank = np.isin(data[places], (10, 13))
            out.append(starts[~blank])
            line += len(breaks)
            odd = (odd + int((data == 34).sum())) % 2
    return np.concatenate(out) if out else np.empty(0, np.int64)


def _starts_by_csv(path: Path, packed: bool, source: Source) -> np.ndarray:
    """The same by a reader of the standard library: slow, and right for stray quotation marks."""
    assert source.dialect is not None
    starts, before = [], 0
    with opened_bytes(path, packed) as file:
        reader = csv.reader(
            io.TextIOWrapper(file, encoding="utf-8", errors="replace", newline=""),
            delimiter=source.dialect.delimiter,
        )
        try:
            for record in reader:
                if record:
                    starts.append(before + 1)
                before = reader.line_num
        except csv.Error:
            pass
    return np.array(starts, dtype=np.int64)
