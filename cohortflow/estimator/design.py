"""The rows of x behind a logit of moves: attributes as 0/1 columns, series as they are, and each state's counts."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass

import numpy as np
import pandas as pd
from numpy.typing import NDArray

from cohortflow.errors import CallError
from cohortflow.estimator.logit import Logit, fit_logit
from cohortflow.tally import Tally

Array = NDArray[np.float64]


@dataclass(frozen=True, eq=False)
class Design:
    """How a row of x is made: columns (covariate, value), value None for a series; the constant comes first.

    values : attribute -> its values, the baseline first;  series : (T,) values by name, first its first ordinal
    """

    values: Mapping[str, tuple[str, ...]]
    series: Mapping[str, Mapping[int, float]]

    @property
    def columns(self) -> list[tuple[str, str | None]]:
        """(covariate, value) of each column, the constant first."""
        levels = [(name, value) for name, values in self.values.items() for value in values[1:]]
        return [("", None), *levels, *((name, None) for name in self.series)]

    def row(self, attributes: Mapping[str, str], period: Mapping[str, float]) -> Array:
        """x of one combination of attribute values and series values."""
        levels = [float(attributes[name] == v) for name, values in self.values.items() for v in values[1:]]
        return np.array([1.0, *levels, *(period[name] for name in self.series)])


@dataclass(frozen=True, eq=False)
class StateLogit:
    """One state's model: outcomes (J,) destinations; keys: combinations seen; X (G, p), weight (G,) moves."""

    logit: Logit
    outcomes: NDArray[np.int64]
    keys: tuple[tuple[dict[str, str], dict[str, float]], ...]
    X: Array
    weight: Array


def values_of(
    moves: pd.DataFrame, names: list[str], labels: list[tuple[str, ...]]
) -> dict[str, tuple[str, ...]]:
    """Values of each attribute that moves have, the commonest first."""
    n = moves.groupby("segment")["n"].sum()
    out = {}
    for k, name in enumerate(names):
        total: dict[str, int] = {}
        for segment, count in n.items():
            value = labels[int(segment)][k]  # type: ignore[call-overload]
            total[value] = total.get(value, 0) + int(count)
        out[name] = tuple(sorted(total, key=lambda v: (-total[v], v)))
    return out


def series_of(series: pd.DataFrame | None, tally: Tally, moves: pd.DataFrame) -> dict[str, dict[int, float]]:
    """Values by the ordinal of the period in which a move is made."""
    if series is None:
        return {}
    keys = [tally.calendar.parse(k) if isinstance(k, str) else int(k) for k in series.index]
    needed = {int(p) + 1 for p in moves["period"].unique()}
    out = {}
    for name in series.columns:
        values = dict(zip(keys, series[name].astype(float), strict=True))
        missing = sorted(p for p in needed if not np.isfinite(values.get(p, np.nan)))
        if missing:
            raise CallError(
                f'The series "{name}" has no value for {tally.calendar.label(missing[0])}'
                f"{f' and {len(missing) - 1} more periods' if missing[1:] else ''}; give every period of the window."
            )
        out[str(name)] = values
    return out


def state_logit(
    rows: pd.DataFrame, design: Design, names: list[str], labels: list[tuple[str, ...]]
) -> StateLogit:
    """Counts of one state's moves by combination of covariates, outcome and bucket, fitted."""
    group = np.array([sorted(set(labels)).index(label) for label in labels])[rows["segment"].to_numpy()]
    period = rows["period"].to_numpy() + 1 if design.series else np.zeros(len(rows), dtype=int)
    outcomes, where = np.unique(rows["next_state"], return_inverse=True)
    key, index = np.unique(np.stack([group, period], axis=1), axis=0, return_inverse=True)
    pairs, cell = np.unique(
        np.stack([index.reshape(-1), rows["bucket"].to_numpy()], axis=1), axis=0, return_inverse=True
    )
    Y = np.zeros((len(pairs), len(outcomes)))
    np.add.at(Y, (cell.reshape(-1), where.reshape(-1)), rows["n"].to_numpy())
    kinds = sorted(set(labels))
    keys = tuple(
        (dict(zip(names, kinds[g], strict=True)), {s: v[int(t)] for s, v in design.series.items()})
        for g, t in key
    )
    X = np.array([design.row(*k) for k in keys])
    logit = fit_logit(X[pairs[:, 0]], Y, pairs[:, 1])
    weight = np.bincount(pairs[:, 0], Y.sum(axis=1)).astype(float)
    return StateLogit(logit, outcomes, keys, X, weight)
