"""Rows of a table added up by key as blocks come in, in bounded memory."""

from __future__ import annotations

from collections.abc import Mapping

import numpy as np
import pandas as pd

from cohortflow.errors import InputError
from cohortflow.tally import KEYS, VALUES

MERGE_AT = 4_000_000  # rows waiting before they are added up again
DENSE = 1 << 21  # keys up to this many are counted in an array rather than sorted
MOST_SQUARES = 9.0e18

Columns = dict[str, np.ndarray]


class Adder:
    """The rows of one Tally table so far."""

    def __init__(self, name: str) -> None:
        self.keys, self.values = KEYS[name], VALUES[name]
        self.parts: list[Columns] = []
        self.waiting = 0

    def add(self, keys: Mapping[str, np.ndarray | int], values: Columns | None = None) -> None:
        """Add rows by key; each counts 1 unless `values` has an `n`."""
        size = max((len(v) for v in keys.values() if isinstance(v, np.ndarray)), default=1)
        if size == 0:
            return
        whole = {k: np.broadcast_to(np.asarray(v), (size,)) for k, v in keys.items()}
        self.parts.append(added_up(whole, values or {}))
        self.waiting += len(self.parts[-1]["n"])
        if self.waiting > MERGE_AT and len(self.parts) > 1:
            self.merge()

    def take_over(self, other: Adder) -> None:
        """The parts of another one, too."""
        self.parts += other.parts
        self.waiting += other.waiting
        if self.waiting > MERGE_AT and len(self.parts) > 1:
            self.merge()

    def merge(self) -> None:
        """Add up what waits."""
        whole = {c: np.concatenate([p[c] for p in self.parts]) for c in self.parts[0]}
        self.parts = [
            added_up({k: whole[k] for k in self.keys}, {v: whole[v] for v in whole if v not in self.keys})
        ]
        self.waiting = 0

    def frame(self) -> pd.DataFrame | None:
        """The table so far; None when it is empty."""
        if not self.parts:
            return None
        if len(self.parts) > 1:
            self.merge()
        part = self.parts[0]
        if "weight" in self.values and "weight" not in part:
            part = {**part, "weight": part["n"]}
        return pd.DataFrame({c: part[c].astype(np.int64) for c in (*self.keys, *self.values)})


def added_up(keys: Columns, values: Columns) -> Columns:
    """Equal keys once: `n` = how many (or the sum of `values["n"]`), and the sums of the other values.

    >>> added_up({"a": np.array([3, 1, 3])}, {"n": np.array([1, 1, 5])})
    {'a': array([1, 3]), 'n': array([1, 6])}
    """
    columns = list(keys.values())
    lows = [int(c.min()) for c in columns]
    sizes = [int(c.max()) - low + 1 for c, low in zip(columns, lows, strict=True)]
    room = 1
    for size in sizes:
        room *= size
    if room >= 2**62:
        return _by_sorting(keys, values)
    code = np.zeros(len(columns[0]), dtype=np.int64)
    for column, low, size in zip(columns, lows, sizes, strict=True):
        code *= size
        code += column
        code -= low
    if not values:
        found, n = _counted(code, room)
        return {**_unpacked(found, list(keys), sizes, lows), "n": n}
    order = np.argsort(code, kind="stable")
    ordered = code[order]
    begins = np.flatnonzero(np.concatenate([[True], ordered[1:] != ordered[:-1]]))
    return {**_unpacked(ordered[begins], list(keys), sizes, lows), **_sums(values, order, begins)}


def _counted(code: np.ndarray, room: int) -> tuple[np.ndarray, np.ndarray]:
    if room <= max(DENSE, len(code)):
        counts = np.bincount(code, minlength=room)
        found = np.flatnonzero(counts)
        return found, counts[found]
    ordered = np.sort(code)
    begins = np.flatnonzero(np.concatenate([[True], ordered[1:] != ordered[:-1]]))
    return ordered[begins], np.diff(np.append(begins, len(ordered)))


def _by_sorting(keys: Columns, values: Columns) -> Columns:
    """For keys whose ranges do not fit one whole number."""
    order = np.lexsort(list(reversed(list(keys.values()))))
    changed = np.zeros(len(order), dtype=bool)
    changed[0] = True
    for column in keys.values():
        ordered = column[order]
        changed[1:] |= ordered[1:] != ordered[:-1]
    begins = np.flatnonzero(changed)
    return {**{k: v[order][begins] for k, v in keys.items()}, **_sums(values, order, begins)}


def _sums(values: Columns, order: np.ndarray, begins: np.ndarray) -> Columns:
    sums = {k: np.add.reduceat(v[order], begins) for k, v in values.items()}
    if "n" not in sums:
        sums["n"] = np.diff(np.append(begins, len(order)))
    if "squares" in sums:
        rough = np.add.reduceat(values["squares"][order].astype(float), begins)
        if rough.max(initial=0) > MOST_SQUARES:
            raise InputError(
                "The squares of the amounts do not fit a whole number of 63 bits. Give amounts in larger units "
                "(thousands), or leave `amount` out of [input]."
            )
    return sums


def _unpacked(code: np.ndarray, names: list[str], sizes: list[int], lows: list[int]) -> Columns:
    out: Columns = {}
    for name, size, low in zip(reversed(names), reversed(sizes), reversed(lows), strict=True):
        code, rest = np.divmod(code, size)
        out[name] = rest + low
    return {name: out[name] for name in names}
