"""Intervals: the table of moves with counts, rates, limits and what they rest on."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, ClassVar

import numpy as np
import pandas as pd

from cohortflow.estimator.covariance import Covariance, covariance, design_effects
from cohortflow.estimator.interval import check_level, method_name, row_limits
from cohortflow.estimator.rows import RowCounts
from cohortflow.record import Record
from cohortflow.states import States

COLUMNS = (
    "segment", "from", "to", "count", "at_risk", "probability", "low", "high", "level", "method",
    "std_error", "design_effect", "note",
)  # fmt: skip


@dataclass(frozen=True, repr=False, eq=False)
class Intervals(Record):
    """Rates with their limits: one row a (segment, from, to).

    `note` of a row is empty or one of: exit (absorbing by declaration), structural_zero (declared
    impossible),
    no_data (nothing departed: rate missing, limits 0 and 1), sampling_zero (possible, not seen: the upper
    limit is what is known), undeclared_absorbing (never left, though not declared an exit).
    """

    table: pd.DataFrame
    level: float
    method: str
    clustered: str
    kind: ClassVar[str] = "transitions"

    def to_frame(self) -> pd.DataFrame:
        """segment, from, to, count, at_risk, probability, low, high, level, method, std_error ..., note."""
        return self.table.copy()

    def headline(self) -> str:
        n = int(self.table.drop_duplicates(["segment", "from"])["at_risk"].sum())
        return f"intervals of {len(self.table)} rates, {self.level:.0%} {self.method}, {n:,} moves"

    def about(self) -> Mapping[str, Any]:
        return {"level": self.level, "method": self.method, "clustered": self.clustered}


def intervals(
    rates: RowCounts, states: States, *, level: float, method: str, robust: Covariance | None, segment: str
) -> pd.DataFrame:
    """The table of one segment; with `robust`, limits from the effective numbers that it implies.

    The effective number of a cell is n / design effect (n already Kish's number under weights), the count
    p n / design effect. A whole-row method uses the row's mean design effect, weighted by 1 - p.
    """
    check_level(level)
    name = method_name(method)
    n = np.broadcast_to(rates.effective[:, None], rates.shape)
    p = np.nan_to_num(rates.P)
    effects = None if robust is None else np.nan_to_num(design_effects(rates, robust), nan=1.0)
    if effects is not None and robust is not None:
        low, high = _effective_limits(p, n, effects, rates, name, robust.level_for(level))
    else:
        low, high = row_limits(p * n, method=name, level=level, allowed=rates.allowed)
    error = (robust or covariance(rates, "multinomial")).std_error
    return _table(rates, states, (low, high), error, effects, level, name, segment)


def _effective_limits(
    p: np.ndarray, n: np.ndarray, effects: np.ndarray, rates: RowCounts, name: str, level: float
) -> tuple[np.ndarray, np.ndarray]:
    if name in ("goodman", "quesenberry-hurst"):
        weights = np.where(rates.allowed, 1 - p, 0.0)
        mean = (effects * weights).sum(axis=1) / np.maximum(weights.sum(axis=1), 1e-300)
        effects = np.where(weights.sum(axis=1) > 0, mean, 1.0)[:, None] + 0 * effects
        return row_limits(p * n / effects, method=name, level=level, allowed=rates.allowed)
    low, high = np.zeros(p.shape), np.zeros(p.shape)
    for j in range(p.shape[1]):  # each cell has its own effective number
        x, size = p[:, j] * n[:, j] / effects[:, j], n[:, j] / effects[:, j]
        pair = row_limits(np.stack([x, size - x], axis=1).clip(0), method=name, level=level)
        low[:, j], high[:, j] = pair[0][:, 0], pair[1][:, 0]
    return np.where(rates.allowed, low, 0.0), np.where(rates.allowed, high, 0.0)


def _table(
    rates: RowCounts,
    states: States,
    limits: tuple[np.ndarray, np.ndarray],
    error: np.ndarray,
    effects: np.ndarray | None,
    level: float,
    name: str,
    segment: str,
) -> pd.DataFrame:
    size = len(states)
    names = np.array(states.names, dtype=object)
    exits = np.repeat(states.exit_mask, size)
    p = np.where(exits.reshape(size, size), np.eye(size), rates.P)
    low, high = (np.where(exits, p.ravel(), side.ravel()) for side in limits)
    raw = rates.sums(rates.n)
    effect = np.full(size * size, np.nan) if effects is None else effects.ravel()
    settled = exits | ~rates.allowed.ravel()
    return pd.DataFrame(
        {
            "segment": segment,
            "from": np.repeat(names, size),
            "to": np.tile(names, size),
            "count": _whole(raw.ravel()),
            "at_risk": _whole(np.repeat(raw.sum(axis=1), size)),
            "probability": p.ravel(),
            "low": low,
            "high": high,
            "level": level,
            "method": name,
            "std_error": np.where(settled & ~np.isnan(p.ravel()), 0.0, error.ravel()),
            "design_effect": np.where(settled, np.nan, effect),
            "note": cell_notes(rates, states).ravel(),
        },
        columns=list(COLUMNS),
    )


def cell_notes(rates: RowCounts, states: States) -> np.ndarray:
    """(K, K) text code of each cell; see Intervals."""
    note = np.full(rates.shape, "", dtype=object)
    note[rates.allowed & (rates.N == 0) & (rates.at_risk > 0)[:, None]] = "sampling_zero"
    for i in undeclared_absorbing(rates, states):
        note[i, i] = "undeclared_absorbing"
    note[rates.at_risk == 0] = "no_data"
    note[~rates.allowed] = "structural_zero"
    note[states.exit_mask] = "exit"
    return note


def undeclared_absorbing(rates: RowCounts, states: States) -> list[int]:
    """Positions of states that were left in no observed move, though they are not declared exits."""
    stayed = (rates.at_risk > 0) & (np.diag(rates.N) == rates.at_risk)
    return np.flatnonzero(stayed & ~states.exit_mask).tolist()


def _whole(values: np.ndarray) -> np.ndarray:
    """Integers where the counts are whole (they are, unless bare counts came as fractions)."""
    rounded = np.rint(values)
    return rounded.astype(np.int64) if np.allclose(values, rounded, atol=1e-9) else values
