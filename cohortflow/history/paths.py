"""Run-length state paths of a sample of customers, chosen by the hash of their ids.

The sample is the lowest hash level that holds at most PATHS_SAMPLED customers; adding tallies keeps that rule.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
import pandas as pd

from cohortflow.tally import PATHS_SAMPLED


class PathSample:
    """Paths as they come, coded; thinned whenever more than twice the sample is held, written out at the end."""

    def __init__(self) -> None:
        self.least = self.held = 0
        self.parts: list[_Coded] = []

    def add(self, first: int, state: np.ndarray, segment: np.ndarray, level: np.ndarray) -> None:
        """The paths of a block: state (T, B), -1 = no row."""
        chosen = np.flatnonzero((level >= self.least) & (state >= 0).any(axis=0))
        if len(chosen) == 0:
            return
        states = np.ascontiguousarray(state[:, chosen].T)
        self.parts.append(_coded(first, states, segment[chosen], level[chosen]))
        self.held += len(chosen)
        while self.held > 2 * PATHS_SAMPLED:
            self._thin()

    def merge(self, other: PathSample) -> None:
        """Take over the paths of another worker."""
        self.least = max(self.least, other.least)
        self.parts = [p.from_level(self.least) for p in (*self.parts, *other.parts)]
        self.held = sum(len(p.level) for p in self.parts)
        while self.held > 2 * PATHS_SAMPLED:
            self._thin()

    def _thin(self) -> None:
        self.least += 1
        self.parts = [p.from_level(self.least) for p in self.parts]
        self.held = sum(len(p.level) for p in self.parts)

    def table(self) -> tuple[int, pd.DataFrame | None]:
        """(sample level, table of paths)."""
        while self.held > PATHS_SAMPLED:
            self._thin()
        parts = [p for p in self.parts if len(p.level)]
        if not parts:
            return self.least, None
        frames = [p.frame() for p in parts]
        return self.least, pd.concat(frames, ignore_index=True)


@dataclass
class _Coded:
    """N paths: segment, level and first period of each, its number of runs, and the runs of all in a row."""

    segment: np.ndarray
    level: np.ndarray
    first: np.ndarray
    many: np.ndarray
    state: np.ndarray
    length: np.ndarray

    def from_level(self, least: int) -> _Coded:
        keep = self.level >= least
        runs = np.repeat(keep, self.many)
        return _Coded(
            self.segment[keep],
            self.level[keep],
            self.first[keep],
            self.many[keep],
            self.state[runs],
            self.length[runs],
        )

    def frame(self) -> pd.DataFrame:
        base = int(self.length.max()) + 1
        found, place = np.unique((self.state + 1) * base + self.length, return_inverse=True)
        names = [f"{s - 1 if s else '-'}*{n}" for s, n in (divmod(v, base) for v in found.tolist())]
        runs = [names[i] for i in place.tolist()]
        ends = np.cumsum(self.many).tolist()
        begins = [0, *ends[:-1]]
        firsts = self.first.tolist()
        texts = [f"{f} {' '.join(runs[a:b])}" for f, a, b in zip(firsts, begins, ends, strict=True)]
        return pd.DataFrame({"segment": self.segment, "level": self.level, "path": texts, "n": 1})


def _coded(first: int, states: np.ndarray, segment: np.ndarray, level: np.ndarray) -> _Coded:
    """Runs of equal states of each row of `states` (N, T), from its first to its last row."""
    periods = states.shape[1]
    seen = states >= 0
    begin = seen.argmax(axis=1)
    end = periods - seen[:, ::-1].argmax(axis=1)
    at = np.arange(periods)
    edge = (at >= begin[:, None]) & (at < end[:, None])
    edge[:, 1:] &= (states[:, 1:] != states[:, :-1]) | (at[1:] == begin[:, None])
    who, start = np.nonzero(edge)
    last = np.append(who[1:] != who[:-1], True)
    until = np.where(last, end[who], np.append(start[1:], 0))
    many = np.bincount(who, minlength=len(states))
    return _Coded(segment, level, begin + first, many, states[who, start].astype(np.int64), until - start)
